package devices

import (
	"math"

	"islet/solvers/facet"
)

// VirtualMachine orders the frequency by a swing equation and the voltage by a
// reactive droop behind a delay:
//
//	(2 H S_r / omega_0) domega/dt = -p~ - D (omega - omega_0)
//	T_v dV/dt = V_0 - n q~ - V
//	p~ = sin(psi) (P - P*) - cos(psi) (Q - Q*)     dP/dt = w_c (p - P)
//	q~ = cos(psi) (P - P*) + sin(psi) (Q - Q*)     dQ/dt = w_c (q - Q)
//
// with p + jq = (3/2) v_c i_g* the power at the filter capacitor. In steady state
// it is a [Droop] of m = 1/D. Without the power filter (w_c infinite: P = p and
// Q = q) it is a droop in transients too, of w_c = 1/T_v = D omega_0/(2 H S_r);
// this equivalence was published by S. D'Arco, J. A. Suul, "Equivalence of virtual
// synchronous machines and frequency-droops for converter-based microgrids", IEEE
// Trans. Smart Grid 5(1), 2014 (citation from memory).
//
// Own unknowns: P (W) and Q (var) if w_c is finite; domega (rad/s), what omega is
// beyond the omega_0 of the parameters (a moved setpoint "frequency" doesn't shift
// it); V (V) if T_v > 0.
type VirtualMachine struct {
	H      float64 // H, inertia constant, s, > 0, on the inverter's rating
	D      float64 // D, damping, W s/rad, >= 0; 0 leaves the frequency to the network alone, and has no detail "phase only"
	N      float64 // n, V peak phase-to-neutral per var, >= 0
	Tv     float64 // T_v, s, >= 0; 0: V = V_0 - n q~
	OmegaC float64 // w_c, corner of the power filter, rad/s, > 0; +Inf for none, which takes T_v > 0
	Psi    float64 // psi, rad, 0 to pi/2
}

func (m VirtualMachine) check(to *faults) {
	to.positive("VirtualMachine.H", m.H, "s")
	to.notNegative("VirtualMachine.D", m.D, "W s/rad")
	to.notNegative("VirtualMachine.N", m.N, "V/var")
	to.notNegative("VirtualMachine.Tv", m.Tv, "s")
	if math.IsInf(m.OmegaC, 1) {
		if m.Tv == 0 {
			to.add("VirtualMachine.Tv = 0 s and VirtualMachine.OmegaC = +Inf rad/s: " +
				"want Tv > 0 or a finite OmegaC, or the voltage answers reactive power at once")
		}
	} else {
		to.positive("VirtualMachine.OmegaC", m.OmegaC, "rad/s")
	}
	to.within("VirtualMachine.Psi", m.Psi, 0, math.Pi/2, "rad")
}

func (m VirtualMachine) build(r rated) primary {
	b := &machine{
		linearLaw: linearLaw{m: ratio(1, m.D, 0), n: m.N, rotation: rotate(m.Psi)},
		inertia:   2 * m.H * r.power / r.omega,
		damping:   m.D,
		delay:     m.Tv,
		wc:        m.OmegaC,
		base:      r,
		voltAt:    -1,
	}
	if b.filtered = !math.IsInf(m.OmegaC, 1); b.filtered {
		b.speedAt = 2
	}
	if m.Tv > 0 {
		b.voltAt = b.speedAt + 1
	}
	return b
}

// machine is the running form of [VirtualMachine].
type machine struct {
	linearLaw
	inertia, damping float64 // 2 H S_r/omega_0, W s^2/rad; D, W s/rad
	delay, wc        float64
	base             rated
	filtered         bool
	speedAt, voltAt  int // places of domega and V in z; -1 for none
}

func (m *machine) unknowns() []facet.Unknown {
	var u []facet.Unknown
	if m.filtered {
		u = powerUnknowns(m.base.power)
	}
	// A hundredth of the nominal speed: what droop spans.
	u = append(u, facet.Unknown{Name: "domega", Unit: "rad/s", Base: 0.01 * m.base.omega, Dynamics: dynPrimary})
	if m.voltAt >= 0 {
		u = append(u, facet.Unknown{Name: "V", Unit: "V", Base: m.base.volts, Dynamics: dynPrimary})
	}
	return u
}

// errors returns the control errors P - P* and Q - Q*.
func (m *machine) errors(z []float64, u orders, s stimulus) (p, q float64) {
	if m.filtered {
		return z[0] - u.p, z[1] - u.q
	}
	return s.p - u.p, s.q - u.q
}

func (m *machine) voltage(z []float64, u orders) float64 {
	if m.voltAt >= 0 {
		return z[m.voltAt]
	}
	return u.v - m.n*m.reactive(z[0]-u.p, z[1]-u.q)
}

func (m *machine) speed(z []float64, _ orders, _ stimulus) float64 {
	return m.base.omega + z[m.speedAt]
}

func (m *machine) rates(dst, z []float64, u orders, s stimulus) {
	p, q := m.errors(z, u, s)
	if m.filtered {
		dst[0] = m.wc * (s.p - z[0])
		dst[1] = m.wc * (s.q - z[1])
	}
	k := m.speedAt
	dst[k] = (-m.active(p, q) - m.damping*(m.base.omega+z[k]-u.omega)) / m.inertia
	if l := m.voltAt; l >= 0 {
		dst[l] = (u.v - m.n*m.reactive(p, q) - z[l]) / m.delay
	}
}

func (m *machine) act(dst, z []float64, u orders, s stimulus) (omega, v float64) {
	m.rates(dst, z, u, s)
	return m.speed(z, u, s), m.voltage(z, u)
}

func (m *machine) gradients(g *primaryGradient, _ []float64, _ orders, _ stimulus) {
	k, l := m.speedAt, m.voltAt
	g.omegaZ[k] = 1
	swing, droop := &g.rateS[k], &g.rateS[max(l, 0)]
	if m.filtered {
		g.rateZ[0][0], g.rateZ[1][1] = -m.wc, -m.wc
		g.rateS[0][0], g.rateS[1][1] = m.wc, m.wc
		swing, droop = &g.rateZ[k], &g.rateZ[max(l, 0)]
	}
	swing[0], swing[1] = -m.sin/m.inertia, m.cos/m.inertia
	g.rateZ[k][k] = -m.damping / m.inertia
	if l < 0 {
		g.vZ[0], g.vZ[1] = -m.n*m.cos, -m.n*m.sin
		return
	}
	droop[0], droop[1] = -m.n*m.cos/m.delay, -m.n*m.sin/m.delay
	g.rateZ[l][l] = -1 / m.delay
	g.vZ[l] = 1
}

func (m *machine) drift(dst, _ []float64, _, du orders, _ stimulus) (omega, v float64) {
	clear(dst)
	dst[m.speedAt] = (m.active(du.p, du.q) + m.damping*du.omega) / m.inertia
	dv := du.v + m.n*m.reactive(du.p, du.q)
	if m.voltAt < 0 {
		return 0, dv
	}
	dst[m.voltAt] = dv / m.delay
	return 0, 0
}

func (m *machine) settle(z []float64, _ orders, s stimulus, v, speed float64) {
	if m.filtered {
		z[0], z[1] = s.p, s.q
	}
	z[m.speedAt] = speed - m.base.omega
	if m.voltAt >= 0 {
		z[m.voltAt] = v
	}
}

func (m *machine) seen(z []float64, s stimulus) (p, q float64) {
	if m.filtered {
		return z[0], z[1]
	}
	return s.p, s.q
}

func (m *machine) phases() bool { return m.damping > 0 }
