package devices

import (
	"math"

	"islet/solvers/facet"
)

// PrimaryControl is the primary control of a grid-forming inverter, which
// orders frequency and voltage: [Droop].
type PrimaryControl interface {
	// check notes what is wrong with the parameters.
	check(to *faults)
	// build returns the control as a part of an inverter with the given
	// power base, VA.
	build(power float64) primary
}

// orders are the setpoints at one time, or their slopes.
type orders struct {
	p, q  float64 // P*, Q*, W and var
	v     float64 // V_0, V peak
	omega float64 // omega_0, rad/s
}

// stimulus is what a primary control sees of the inverter.
type stimulus struct {
	p, q float64    // instantaneous power at the filter capacitor, W and var
	i    complex128 // i_g in the own frame, A
}

// maxPrimary is the largest number of unknowns of a primary control.
const maxPrimary = 4

// primaryGradient holds the partial derivatives of a primary control with
// respect to its unknowns z and to the stimulus in the order p, q, i.d, i.q.
// A control writes only what its equations hold; the rest is zero already.
type primaryGradient struct {
	omegaZ, vZ [maxPrimary]float64
	rateZ      [maxPrimary][maxPrimary]float64
	omegaS     [4]float64
	rateS      [maxPrimary][4]float64
}

// primary is a primary control inside an inverter, with own unknowns z.
type primary interface {
	// unknowns describes z.
	unknowns() []facet.Unknown
	// voltage returns V, V peak.
	voltage(z []float64, u orders) float64
	// speed returns omega, rad/s.
	speed(z []float64, u orders, s stimulus) float64
	// rates writes dz/dt into dst.
	rates(dst, z []float64, u orders, s stimulus)
	// gradients writes the partial derivatives into d.
	gradients(d *primaryGradient, z []float64, u orders, s stimulus)
	// drift writes the change of dz/dt with the setpoints moving at du into
	// dst and returns the changes of omega and V.
	drift(dst, z []float64, u, du orders, s stimulus) (omega, v float64)
	// settle writes the z of a steady state with stimulus s at the given
	// speed into z.
	settle(z []float64, u orders, s stimulus, speed float64)
	// seen returns the powers the control acts on.
	seen(z []float64, s stimulus) (p, q float64)
}

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

func (d Droop) build(power float64) primary {
	s, c := math.Sincos(d.Psi)
	if d.Psi == math.Pi/2 {
		c = 0 // exact, so that the pattern has no entries of size 1e-17
	}
	return &droop{m: d.M, n: d.N, wc: d.OmegaC, sin: s, cos: c, power: power}
}

// droop is the running form of [Droop]. Its unknowns are P and Q.
type droop struct {
	m, n, wc, sin, cos float64
	power              float64 // base of P and Q, VA
}

func (d *droop) unknowns() []facet.Unknown {
	return []facet.Unknown{
		{Name: "P", Unit: "W", Base: d.power, Dynamics: "power filter"},
		{Name: "Q", Unit: "var", Base: d.power, Dynamics: "power filter"},
	}
}

func (d *droop) voltage(z []float64, u orders) float64 {
	return u.v - d.n*(d.cos*(z[0]-u.p)+d.sin*(z[1]-u.q))
}

func (d *droop) speed(z []float64, u orders, _ stimulus) float64 {
	return u.omega - d.m*(d.sin*(z[0]-u.p)-d.cos*(z[1]-u.q))
}

func (d *droop) rates(dst, z []float64, _ orders, s stimulus) {
	dst[0] = d.wc * (s.p - z[0])
	dst[1] = d.wc * (s.q - z[1])
}

func (d *droop) gradients(g *primaryGradient, _ []float64, _ orders, _ stimulus) {
	g.omegaZ[0], g.omegaZ[1] = -d.m*d.sin, d.m*d.cos
	g.vZ[0], g.vZ[1] = -d.n*d.cos, -d.n*d.sin
	g.rateZ[0][0], g.rateZ[1][1] = -d.wc, -d.wc
	g.rateS[0][0], g.rateS[1][1] = d.wc, d.wc
}

func (d *droop) drift(dst, _ []float64, _, du orders, _ stimulus) (omega, v float64) {
	dst[0], dst[1] = 0, 0
	return du.omega + d.m*(d.sin*du.p-d.cos*du.q), du.v + d.n*(d.cos*du.p+d.sin*du.q)
}

func (d *droop) settle(z []float64, _ orders, s stimulus, _ float64) { z[0], z[1] = s.p, s.q }

func (d *droop) seen(z []float64, _ stimulus) (p, q float64) { return z[0], z[1] }
