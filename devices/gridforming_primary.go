package devices

import (
	"math"

	"islet/solvers/facet"
)

// PrimaryControl is the primary control of a grid-forming inverter, which
// orders frequency and voltage: [Droop], [VirtualMachine] or [Oscillator].
type PrimaryControl interface {
	// check notes what is wrong with the parameters.
	check(to *faults)
	// build returns the control as a part of an inverter.
	build(r rated) primary
}

// rated holds what a primary control needs of the inverter's ratings.
type rated struct {
	power float64 // S_r, VA
	omega float64 // omega_0, rad/s
	volts float64 // V_0, V peak
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

// lawGradient holds the partial derivatives of a primary control's quasi-steady
// law with respect to the stimulus, in the order p, q, i.d, i.q, and to V.
type lawGradient struct {
	omegaS, voltS [4]float64
	omegaV, voltV float64
}

// response tells how the stimulus depends on the voltage V while all else at the
// inverter stands: p + jq = s2 V^2 + s1 V + s0, i = i1 V + i0.
type response struct {
	s2, s1, s0, i1, i0 complex128
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
	// act is voltage, speed and rates in one.
	act(dst, z []float64, u orders, s stimulus) (omega, v float64)
	// gradients writes the partial derivatives into d.
	gradients(d *primaryGradient, z []float64, u orders, s stimulus)
	// drift writes the change of dz/dt with the setpoints moving at du into
	// dst and returns the changes of omega and V.
	drift(dst, z []float64, u, du orders, s stimulus) (omega, v float64)
	// settle writes the z of a steady state with stimulus s and voltage v at the
	// given speed into z.
	settle(z []float64, u orders, s stimulus, v, speed float64)
	// seen returns the powers the control acts on.
	seen(z []float64, s stimulus) (p, q float64)
	// slip returns p~, which is zero at omega_0.
	slip(u orders, s stimulus, v float64) float64

	// phases tells whether there is a quasi-steady law: the one that is left when
	// all of z is at its quasi-steady state.
	phases() bool
	// law returns the speed the control orders at stimulus s and voltage v, and a
	// voltage that equals v where v is at its quasi-steady value.
	law(u orders, s stimulus, v float64) (speed, voltage float64)
	// lawGradients writes the partial derivatives of law into d.
	lawGradients(d *lawGradient, u orders, s stimulus, v float64)
	// lawDrift returns the change of law with the setpoints moving at du.
	lawDrift(u, du orders, s stimulus, v float64) (speed, voltage float64)
	// magnitude solves voltage = v for the V that a voltage with dynamics settles
	// at. It returns false if there is none.
	magnitude(u orders, r response) (v float64, ok bool)
}

// rotation turns the power pair by psi to suit the network's impedance:
//
//	p~ = sin(psi) p - cos(psi) q        q~ = cos(psi) p + sin(psi) q
type rotation struct{ sin, cos float64 }

// rotate returns the rotation by psi, rad.
func rotate(psi float64) rotation {
	s, c := math.Sincos(psi)
	if psi == math.Pi/2 {
		c = 0 // exact, so that patterns have no entries of size 1e-17
	}
	return rotation{s, c}
}

// active returns p~.
func (r rotation) active(p, q float64) float64 { return r.sin*p - r.cos*q }

// reactive returns q~.
func (r rotation) reactive(p, q float64) float64 { return r.cos*p + r.sin*q }

// factor returns e^{j psi}.
func (r rotation) factor() complex128 { return complex(r.cos, r.sin) }

// linearLaw is the quasi-steady law of [Droop] and [VirtualMachine]:
//
//	omega = omega_0 - m p~        V = V_0 - n q~
type linearLaw struct {
	m, n float64 // rad/s per W, V per var
	rotation
}

func (l *linearLaw) slip(u orders, s stimulus, _ float64) float64 {
	return l.active(s.p-u.p, s.q-u.q)
}

func (l *linearLaw) law(u orders, s stimulus, _ float64) (speed, voltage float64) {
	p, q := s.p-u.p, s.q-u.q
	return u.omega - l.m*l.active(p, q), u.v - l.n*l.reactive(p, q)
}

func (l *linearLaw) lawGradients(d *lawGradient, _ orders, _ stimulus, _ float64) {
	d.omegaS[0], d.omegaS[1] = -l.m*l.sin, l.m*l.cos
	d.voltS[0], d.voltS[1] = -l.n*l.cos, -l.n*l.sin
}

func (l *linearLaw) lawDrift(_, du orders, _ stimulus, _ float64) (speed, voltage float64) {
	return du.omega + l.m*l.active(du.p, du.q), du.v + l.n*l.reactive(du.p, du.q)
}

// magnitude solves V = V_0 - n q~(V), with q~ = a2 V^2 + a1 V + a0 a quadratic
// equation. Of its roots that with a positive slope of V - V_0 + n q~ is where the
// power filter or a delay settles, and the one that n -> 0 leads to V_0.
func (l *linearLaw) magnitude(u orders, r response) (v float64, ok bool) {
	a := l.n * l.reactive(real(r.s2), imag(r.s2))
	b := 1 + l.n*l.reactive(real(r.s1), imag(r.s1))
	c := l.n*l.reactive(real(r.s0)-u.p, imag(r.s0)-u.q) - u.v
	disc := b*b - 4*a*c
	if !(disc >= 0) {
		return 0, false
	}
	if root := math.Sqrt(disc); b >= 0 {
		v = -2 * c / (b + root)
	} else {
		v = (root - b) / (2 * a)
	}
	return v, !math.IsNaN(v) && !math.IsInf(v, 0)
}
