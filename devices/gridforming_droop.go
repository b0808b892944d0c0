package devices

import (
	"math"

	"islet/solvers/facet"
)

// Droop lowers frequency and voltage in proportion to power behind a
// first-order filter:
//
//	dP/dt = w_c (p - P)        p~ = sin(psi) (P - P*) - cos(psi) (Q - Q*)
//	dQ/dt = w_c (q - Q)        q~ = cos(psi) (P - P*) + sin(psi) (Q - Q*)
//	omega = omega_0 - m p~     V  = V_0 - n q~
//
// with p + jq = (3/2) v_c i_g* the power at the filter capacitor. The rotation
// by the network's impedance angle psi (pi/2 inductive, 0 resistive) is that of
// K. De Brabandere et al., "A voltage and frequency droop control method for
// parallel inverters", IEEE Trans. Power Electronics 22(4), 2007 (citation from
// memory).
//
// Own unknowns: P (W) and Q (var).
type Droop struct {
	M      float64 // m, rad/s per W, >= 0
	N      float64 // n, V peak phase-to-neutral per var, >= 0
	OmegaC float64 // w_c, corner of the power filter, rad/s, > 0
	Psi    float64 // psi, rad, 0 to pi/2
}

func (d Droop) check(to *faults) {
	to.notNegative("Droop.M", d.M, "rad/s/W")
	to.notNegative("Droop.N", d.N, "V/var")
	to.positive("Droop.OmegaC", d.OmegaC, "rad/s")
	to.within("Droop.Psi", d.Psi, 0, math.Pi/2, "rad")
}

func (d Droop) build(r rated) primary {
	return &droop{linearLaw: linearLaw{m: d.M, n: d.N, rotation: rotate(d.Psi)}, wc: d.OmegaC, power: r.power}
}

// droop is the running form of [Droop]. Its unknowns are P and Q.
type droop struct {
	linearLaw
	wc    float64
	power float64 // base of P and Q, VA
}

// powerUnknowns describes the unknowns of a power filter.
func powerUnknowns(power float64) []facet.Unknown {
	return []facet.Unknown{
		{Name: "P", Unit: "W", Base: power, Dynamics: dynPower},
		{Name: "Q", Unit: "var", Base: power, Dynamics: dynPower},
	}
}

func (d *droop) unknowns() []facet.Unknown { return powerUnknowns(d.power) }

func (d *droop) voltage(z []float64, u orders) float64 {
	return u.v - d.n*d.reactive(z[0]-u.p, z[1]-u.q)
}

func (d *droop) speed(z []float64, u orders, _ stimulus) float64 {
	return u.omega - d.m*d.active(z[0]-u.p, z[1]-u.q)
}

func (d *droop) rates(dst, z []float64, _ orders, s stimulus) {
	dst[0] = d.wc * (s.p - z[0])
	dst[1] = d.wc * (s.q - z[1])
}

func (d *droop) act(dst, z []float64, u orders, s stimulus) (omega, v float64) {
	d.rates(dst, z, u, s)
	return d.speed(z, u, s), d.voltage(z, u)
}

func (d *droop) gradients(g *primaryGradient, _ []float64, _ orders, _ stimulus) {
	g.omegaZ[0], g.omegaZ[1] = -d.m*d.sin, d.m*d.cos
	g.vZ[0], g.vZ[1] = -d.n*d.cos, -d.n*d.sin
	g.rateZ[0][0], g.rateZ[1][1] = -d.wc, -d.wc
	g.rateS[0][0], g.rateS[1][1] = d.wc, d.wc
}

func (d *droop) drift(dst, _ []float64, _, du orders, _ stimulus) (omega, v float64) {
	dst[0], dst[1] = 0, 0
	return du.omega + d.m*d.active(du.p, du.q), du.v + d.n*d.reactive(du.p, du.q)
}

func (d *droop) settle(z []float64, _ orders, s stimulus, _, _ float64) { z[0], z[1] = s.p, s.q }

func (d *droop) seen(z []float64, _ stimulus) (p, q float64) { return z[0], z[1] }

func (d *droop) phases() bool { return true }
