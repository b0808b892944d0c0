package devices

import (
	"math"

	"islet/solvers/facet"
)

// Oscillator is the dispatchable virtual oscillator (Andronov-Hopf oscillator). Its
// complex voltage u_n in the network frame, i_n the grid-side current there, obeys
//
//	du_n/dt + j omega_f u_n = j omega_0 u_n + eta [ e^{j psi} (sigma u_n - i_n) + alpha (1 - |u_n|^2/V*^2) u_n ]
//	sigma = (2/3) (P* - j Q*)/V*^2
//
// with V* the setpoint "voltage". It acts on the instantaneous current, has no
// power filter, and meets P* and Q* at u, that is behind the virtual impedance.
//
// Magnitude and angle. With u_n = u e^{j delta}, u real, and i = e^{-j delta} i_n
// the current in the own frame, du_n/dt = (du/dt + j u d delta/dt) e^{j delta}.
// Divided by e^{j delta} the equation reads
//
//	du/dt + j u (d delta/dt + omega_f - omega_0) = eta [ e^{j psi} (sigma u - i) + alpha (1 - u^2/V*^2) u ]
//
// whose real part, and imaginary part over u, are, with omega = d delta/dt + omega_f,
//
//	du/dt = eta [ Re(e^{j psi} (sigma u - i)) + alpha (1 - u^2/V*^2) u ]
//	omega = omega_0 + eta Im(e^{j psi} (sigma u - i))/u
//
// so that omega = Im(du_n/dt / u_n) in a frame at rest, V = u, and the own frame
// lies on u_n. In omega, 1/u is taken as u/max(u^2, u_min^2) with u_min a thousandth
// of the rated voltage, which is odd in u as 1/u is: the start from a small voltage
// is exact above u_min and regular below. No voltage grows from u = 0 with no
// current, as in the complex equation.
//
// Steady state: with i = (2/3)(P - jQ)/u the real part gives u and the imaginary
// part the frequency; at psi = pi/2
//
//	omega = omega_0 + (2/3) eta (P*/V*^2 - P/u^2)
//	0     = (2/3) (Q*/V*^2 - Q/u^2) + alpha (1 - u^2/V*^2)
//
// Sources: M. Colombino, D. Gross, J.-S. Brouillon, F. Dorfler, "Global phase and
// magnitude synchronization of coupled oscillators with application to the control
// of grid-forming power inverters", IEEE Trans. Automatic Control 64(11), 2019; G.-S.
// Seo et al., "Dispatchable virtual oscillator control for decentralized
// inverter-dominated power systems", APEC 2019; M. Lu, S. Dutta, V. Purba, S.
// Dhople, B. Johnson, "A grid-compatible virtual oscillator controller: analysis
// and design", ECCE 2019 (citations from memory).
//
// [OscillatorOfDroop] and [OscillatorOfRange] give eta and alpha from trade
// quantities. The oscillator of Lu et al., with voltage and current scalings k_v
// and k_i, capacitance C and speed xi, has eta = k_v k_i/C and alpha = 2 xi V*^2
// C/(k_v^3 k_i), V* rms there.
//
// Own unknown: u (V).
type Oscillator struct {
	Eta   float64 // eta, ohm rad/s, > 0
	Alpha float64 // alpha, S, > 0
	Psi   float64 // psi, rad, 0 to pi/2
}

// OscillatorOfDroop returns the oscillator that behaves at psi = pi/2 and V = V*
// like a [Droop] of m (rad/s per W, > 0) and n (V per var, > 0) at the rated
// voltage v0 (V peak, > 0): the slopes d omega/dP = -(2/3) eta/V*^2 and, at
// Q = Q* = 0, dV/dQ = -1/(3 alpha V*) there give
//
//	eta = (3/2) m V*^2        alpha = 1/(3 n V*)
//
// Away from V* both slopes change: the characteristics touch at V*. Values out of
// range give an oscillator that Validate refuses.
func OscillatorOfDroop(m, n, v0, psi float64) Oscillator {
	return Oscillator{Eta: 1.5 * m * v0 * v0, Alpha: 1 / (3 * n * v0), Psi: psi}
}

// OscillatorOfRange is the published design (Lu et al., see [Oscillator]) at
// psi = pi/2, P* = Q* = 0: the frequency falls by drop (rad/s, > 0) at rated power
// (VA, > 0) and V = V*, and V falls to (1 - sag) V* exactly at the rated power in
// vars, 0 < sag < 1 - 1/sqrt(2), with v0 = V* in V peak:
//
//	eta = (3/2) drop V*^2/S_r        alpha = (2/3) (S_r/V*^2)/(x (1 - x)),  x = (1 - sag)^2
//
// (below x = 1/2 the steady state is the other one of two). Values out of range
// give an oscillator that Validate refuses.
func OscillatorOfRange(power, drop, sag, v0, psi float64) Oscillator {
	x := (1 - sag) * (1 - sag)
	if !(x > 0.5) {
		x = math.NaN()
	}
	return Oscillator{
		Eta:   1.5 * drop * v0 * v0 / power,
		Alpha: power / (1.5 * v0 * v0 * x * (1 - x)),
		Psi:   psi,
	}
}

func (o Oscillator) check(to *faults) {
	to.positive("Oscillator.Eta", o.Eta, "ohm rad/s")
	to.positive("Oscillator.Alpha", o.Alpha, "S")
	to.within("Oscillator.Psi", o.Psi, 0, math.Pi/2, "rad")
}

// oscillatorFloor is u_min over the rated voltage: far below any voltage an
// inverter works at, far above round-off.
const oscillatorFloor = 1e-3

func (o Oscillator) build(r rated) primary {
	return &oscillator{eta: o.Eta, alpha: o.Alpha, rotation: rotate(o.Psi), base: r, floor: oscillatorFloor * r.volts}
}

// oscillator is the running form of [Oscillator]. Its unknown is u.
type oscillator struct {
	eta, alpha float64
	rotation
	base  rated
	floor float64 // u_min, V
}

func (o *oscillator) unknowns() []facet.Unknown {
	return []facet.Unknown{{Name: "u", Unit: "V", Base: o.base.volts, Dynamics: dynPrimary}}
}

// dispatch returns e^{j psi} sigma.
func (o *oscillator) dispatch(u orders) complex128 {
	return o.factor() * complex(u.p/(1.5*u.v*u.v), -u.q/(1.5*u.v*u.v))
}

// dispatchSlope returns the change of dispatch with the setpoints moving at du.
func (o *oscillator) dispatchSlope(u, du orders) complex128 {
	return o.factor()*complex(du.p/(1.5*u.v*u.v), -du.q/(1.5*u.v*u.v)) - times(2*du.v/u.v, o.dispatch(u))
}

// inverse returns 1/v, kept regular near 0, and its derivative.
func (o *oscillator) inverse(v float64) (h, slope float64) {
	if f2 := o.floor * o.floor; v*v < f2 {
		return v / f2, 1 / f2
	}
	return 1 / v, -1 / (v * v)
}

// growth returns (du/dt)/eta and omega at voltage v.
func (o *oscillator) growth(u orders, s stimulus, v float64) (growth, omega float64) {
	pull := times(v, o.dispatch(u)) - o.factor()*s.i
	h, _ := o.inverse(v)
	return real(pull) + o.alpha*(1-v*v/(u.v*u.v))*v, u.omega + o.eta*h*imag(pull)
}

// growthSlopes returns the derivatives of growth's results in v.
func (o *oscillator) growthSlopes(u orders, s stimulus, v float64) (growth, omega float64) {
	k := o.dispatch(u)
	pull := times(v, k) - o.factor()*s.i
	h, slope := o.inverse(v)
	return real(k) + o.alpha*(1-3*v*v/(u.v*u.v)), o.eta * (h*imag(k) + slope*imag(pull))
}

func (o *oscillator) voltage(z []float64, _ orders) float64 { return z[0] }

func (o *oscillator) speed(z []float64, u orders, s stimulus) float64 {
	_, omega := o.growth(u, s, z[0])
	return omega
}

func (o *oscillator) rates(dst, z []float64, u orders, s stimulus) {
	growth, _ := o.growth(u, s, z[0])
	dst[0] = o.eta * growth
}

func (o *oscillator) act(dst, z []float64, u orders, s stimulus) (omega, v float64) {
	growth, omega := o.growth(u, s, z[0])
	dst[0] = o.eta * growth
	return omega, z[0]
}

func (o *oscillator) gradients(g *primaryGradient, z []float64, u orders, s stimulus) {
	growth, omega := o.growthSlopes(u, s, z[0])
	h, _ := o.inverse(z[0])
	g.vZ[0], g.omegaZ[0], g.rateZ[0][0] = 1, omega, o.eta*growth
	// -e^{j psi} i has the real part -cos i.d + sin i.q and the imaginary part
	// -sin i.d - cos i.q.
	g.rateS[0][2], g.rateS[0][3] = -o.eta*o.cos, o.eta*o.sin
	g.omegaS[2], g.omegaS[3] = -o.eta*h*o.sin, -o.eta*h*o.cos
}

func (o *oscillator) drift(dst, z []float64, u, du orders, _ stimulus) (omega, v float64) {
	growth, omega := o.growthDrift(u, du, z[0])
	dst[0] = o.eta * growth
	return omega, 0
}

// growthDrift returns the changes of growth's results with the setpoints.
func (o *oscillator) growthDrift(u, du orders, v float64) (growth, omega float64) {
	k := times(v, o.dispatchSlope(u, du))
	h, _ := o.inverse(v)
	return real(k) + 2*o.alpha*v*v*v*du.v/(u.v*u.v*u.v), du.omega + o.eta*h*imag(k)
}

func (o *oscillator) settle(z []float64, _ orders, _ stimulus, v, _ float64) { z[0] = v }

func (o *oscillator) seen(z []float64, s stimulus) (p, q float64) {
	return 1.5 * z[0] * real(s.i), -1.5 * z[0] * imag(s.i)
}

func (o *oscillator) slip(u orders, s stimulus, v float64) float64 {
	return o.active(1.5*v*real(s.i)-u.p, -1.5*v*imag(s.i)-u.q)
}

func (o *oscillator) phases() bool { return true }

// law's voltage is v + (du/dt)/(2 eta alpha), for small deviations the place
// where u settles.
func (o *oscillator) law(u orders, s stimulus, v float64) (speed, voltage float64) {
	growth, omega := o.growth(u, s, v)
	return omega, v + growth/(2*o.alpha)
}

func (o *oscillator) lawGradients(d *lawGradient, u orders, s stimulus, v float64) {
	growth, omega := o.growthSlopes(u, s, v)
	h, _ := o.inverse(v)
	d.omegaV, d.voltV = omega, 1+growth/(2*o.alpha)
	d.omegaS[2], d.omegaS[3] = -o.eta*h*o.sin, -o.eta*h*o.cos
	d.voltS[2], d.voltS[3] = -o.cos/(2*o.alpha), o.sin/(2*o.alpha)
}

func (o *oscillator) lawDrift(u, du orders, _ stimulus, v float64) (speed, voltage float64) {
	growth, omega := o.growthDrift(u, du, v)
	return omega, growth / (2 * o.alpha)
}

// magnitude solves du/dt = 0 with i = i1 u + i0, the cubic equation
//
//	u^3 - a u + b = 0    a = V*^2 (1 + Re(e^{j psi} (sigma - i1))/alpha)    b = V*^2 Re(e^{j psi} i0)/alpha
//
// for its largest root, at which du/dt falls with u.
func (o *oscillator) magnitude(u orders, r response) (v float64, ok bool) {
	square := u.v * u.v
	a := square * (1 + (real(o.dispatch(u))-real(o.factor()*r.i1))/o.alpha)
	b := square * real(o.factor()*r.i0) / o.alpha
	v = largestCubicRoot(-a, b)
	return v, v > 0 && !math.IsInf(v, 1)
}

// largestCubicRoot returns the largest real root of x^3 + p x + q by the formulas
// of Cardano and Viete, polished by Newton's method.
func largestCubicRoot(p, q float64) float64 {
	var x float64
	if disc := q*q/4 + p*p*p/27; disc > 0 {
		// The larger of the two cube roots; the other is -p/3 over it.
		c := math.Cbrt(-q/2 - math.Copysign(math.Sqrt(disc), q))
		x = c - p/(3*c)
	} else {
		m := 2 * math.Sqrt(-p/3)
		if m == 0 {
			return 0
		}
		x = m * math.Cos(math.Acos(max(-1, min(1, 3*q/(p*m))))/3)
	}
	for range 2 {
		if slope := 3*x*x + p; slope != 0 {
			x -= (x*(x*x+p) + q) / slope
		}
	}
	return x
}
