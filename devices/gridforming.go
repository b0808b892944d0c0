package devices

import (
	"encoding"
	"errors"
	"fmt"
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// GridFormingParams holds every symbol of a [GridForming] inverter, in SI and
// amplitude-invariant dq quantities. [GridFormingNameplate.Params] fills it
// from a nameplate.
//
// A parameter set published in power-invariant quantities (d axis = line-line
// rms volts, S = v i*) keeps its filter, gains and m; its voltages, currents
// and n are multiplied by sqrt(2/3).
type GridFormingParams struct {
	Rating  float64        // S_r, VA, > 0: base of powers and currents
	Omega0  float64        // omega_0, rad/s, > 0: nominal speed, first value of setpoint "frequency"
	V0      float64        // V_0, V peak phase-to-neutral, > 0: first value of setpoint "voltage"
	P, Q    float64        // P*, Q*, W and var generated: first values of setpoints "p" and "q"
	Primary PrimaryControl // [Droop], [VirtualMachine] or [Oscillator]
	Rv, Xv  float64        // virtual impedance Z_v = R_v + j X_v, ohm (X_v at nominal frequency)

	// LimitImpedance is added to Z_v at large currents; the zero value adds nothing.
	LimitImpedance LimitImpedance

	Kpv  float64 // K_pv of the voltage loop, A/V, >= 0
	Kiv  float64 // K_iv, A/(V s), >= 0
	F    float64 // feed-forward of i_g to the current reference, 0 to 1
	Kaw  float64 // K_aw, anti-windup of the voltage loop, V/A, >= 0; 1/K_pv is the common choice
	Kpc  float64 // K_pc of the current loop, V/A, > 0
	Kic  float64 // K_ic, V/(A s), >= 0
	IMax float64 // largest |i_ref|, A peak, > 0; +Inf for no limit

	// Priority tells which part of i_ref gives way to IMax; "" is [AngleKept].
	Priority LimitPriority

	// OwnSpeed puts the own speed omega for omega_n in the decoupling terms,
	// which hold Omega0 otherwise.
	OwnSpeed bool

	Filter LCL
}

// Validate returns all faults joined, or nil.
func (p GridFormingParams) Validate() error {
	f := &faults{device: "grid-forming inverter"}
	rated := f.positive("Rating", p.Rating, "VA")
	f.positive("Omega0", p.Omega0, "rad/s")
	f.positive("V0", p.V0, "V")
	if rated {
		f.within("P", p.P, -setpointReach*p.Rating, setpointReach*p.Rating, "W")
		f.within("Q", p.Q, -setpointReach*p.Rating, setpointReach*p.Rating, "var")
	}
	if p.Primary == nil {
		f.add("Primary is missing: want a Droop, a VirtualMachine or an Oscillator")
	} else {
		p.Primary.check(f)
	}
	f.finite("Rv", p.Rv, "ohm")
	f.finite("Xv", p.Xv, "ohm")
	p.LimitImpedance.check(f)
	f.notNegative("Kpv", p.Kpv, "A/V")
	f.notNegative("Kiv", p.Kiv, "A/(V s)")
	if p.Kpv == 0 && p.Kiv == 0 {
		f.add("Kpv and Kiv are both 0: the voltage loop needs one of them > 0")
	}
	f.within("F", p.F, 0, 1, "")
	f.notNegative("Kaw", p.Kaw, "V/A")
	f.positive("Kpc", p.Kpc, "V/A")
	f.notNegative("Kic", p.Kic, "V/(A s)")
	checkLimit(f, "IMax", p.IMax, "A")
	p.Priority.check(f)
	p.Filter.check(f, false)
	return f.err()
}

// setpointReach bounds setpoints of power, as a multiple of the rating: wide
// enough for overload studies, narrow enough to catch a wrong unit.
const setpointReach = 2

// LimitImpedance is the virtual-impedance limiter, which lowers v_ref by an
// impedance that grows with the current beyond a threshold:
//
//	Z_l = k max(0, |i_g| - I_t) (1 + j X/R)
//
// Source: A. D. Paquette, D. M. Divan, "Virtual impedance current limiting for
// inverters in microgrids with synchronous generators", IEEE Trans. Industry
// Applications 51(2), 2015 (form and citation from memory). It holds the current
// in steady state; while the voltage loop settles only I_max does.
type LimitImpedance struct {
	Threshold float64 // I_t, A peak, >= 0
	Gain      float64 // k, ohm/A, >= 0; 0: no limiter
	XR        float64 // X/R of Z_l, >= 0
}

func (l LimitImpedance) check(to *faults) {
	to.notNegative("LimitImpedance.Threshold", l.Threshold, "A")
	to.notNegative("LimitImpedance.Gain", l.Gain, "ohm/A")
	to.notNegative("LimitImpedance.XR", l.XR, "")
}

// at returns Z_l at a current of magnitude m, and its derivative in m.
func (l *LimitImpedance) at(m float64) (z, slope complex128) {
	if !(m > l.Threshold) {
		return 0, 0
	}
	slope = complex(l.Gain, l.Gain*l.XR)
	return times(m-l.Threshold, slope), slope
}

// GridForming is a grid-forming inverter: a bridge, averaged over a switching
// period, with an LCL filter, a current and a voltage loop in cascade, an
// optional virtual impedance and a primary control that orders frequency and
// voltage. Its own frame turns at omega, and x = x_d + j x_q in that frame is
// e^{-j delta} times the network-frame value:
//
//	d delta/dt  = omega - omega_f
//	voltage     dphi/dt   = v_ref - v_c + K_aw (i_ref' - i_ref)        v_ref = V - (Z_v + Z_l) i_g
//	            i_ref     = K_pv (v_ref - v_c) + K_iv phi + F i_g + j omega_n C_f v_c
//	current     dgamma/dt = i_ref' - i_f
//	            v_i       = K_pc (i_ref' - i_f) + K_ic gamma + j omega_n L_f i_f
//	filter      L_f di_f/dt = v_i - v_c - (R_f + j omega L_f) i_f
//	            C_f dv_c/dt = i_f - i_g - j omega C_f v_c
//	network frame
//	            L_g di_g/dt = e^{j delta} v_c - v_bus - (R_g + j omega_f L_g) i_g
//
// The structure of the loops is that of N. Pogaku, M. Prodanovic, T. C. Green,
// "Modeling, analysis and testing of autonomous operation of an inverter-based
// microgrid", IEEE Trans. Power Electronics 22(2), 2007, with the anti-windup,
// the current limits and the virtual impedance added. omega and V come from the
// primary control, see [Droop], [VirtualMachine] and [Oscillator]; Z_l is that of
// [LimitImpedance].
//
// i_ref' is i_ref limited in magnitude to I_max by one of three priorities
// ([AngleKept], [DFirst], [QFirst]). While the limit acts, K_aw draws phi back: K_iv
// phi then loses the excess current with the time constant 1/(K_iv K_aw), K_pv/K_iv
// for K_aw = 1/K_pv (tracking time = reset time). A steady state with the limit
// acting has v_c = v_ref + K_aw (i_ref' - i_ref), with the angle kept v_ref -
// K_aw (1/s - 1) i_ref', s = |i_ref'|/|i_ref|: the limit then works as an added
// virtual resistance that holds |i_f| at I_max.
//
// Own unknowns, in this order: delta (rad), the unknowns of the primary control
// (P in W and Q in var for droop), phi (V s), gamma (A s), i_f (A), v_c (V), each
// a d, q pair in the own frame, and i_g (A), a network-frame pair, the current
// out of the inverter. The flow into the block is -i_g.
//
// # Detail
//
// Each level drops the derivatives of a further group, solved in closed form:
//
//	current loop gone   without gamma, i_f:  i_f = i_ref'
//	inner loops gone    without phi, v_c:    v_c = v_ref       i_f = i_g + j omega C_f v_c
//	primary only        without i_g:         (Z_v + R_g + j omega_f L_g) i_g = V - e^{-j delta} v_bus
//	phase only          without the primary control's unknowns: delta alone, with
//	                    V and omega from the control's law at instantaneous powers
//
// With a [LimitImpedance] the equation for i_g has no closed form; at the two
// coarsest levels i_g stays as an algebraic unknown then, and V is found in closed
// form with it given. At "phase only" V solves a quadratic equation with droop and
// the virtual machine, omega = omega_0 - p~/D for the latter, and a cubic one with
// the oscillator. Where there is no solution (a terminal voltage far from any the
// control could stand) the equations return an error that wraps
// [solvers.ErrReject].
//
// I_max acts at "full" and "current loop gone" alone: below, no loop holds the
// current, and the channel "limiting" tells by how much a limit would have to act.
// The LimitImpedance acts at every level. Where K_ic is 0 there is no level
// "current loop gone", and where K_iv is 0 none of those below: the loops then
// settle elsewhere than at their references. Where D is 0 there is no "phase only".
//
// A GridForming is no use to two goroutines at once.
type GridForming struct {
	par     GridFormingParams
	limiter limiter
	detail  string
	layout  formingLayout
	own     int // unknowns
	primary primary
	nz      int // unknowns of the primary control that the level keeps

	pRef, qRef, vRef, wRef input
	frame                  float64 // omega_f, rad/s

	vBase, iBase float64
	sparsity     *sparsity
	gradient     primaryGradient
	slopes       lawGradient
	column       []float64           // scratch of fillReduced and TimeDerivative
	drift        [maxPrimary]float64 // scratch of TimeDerivative
}

// formingLayout tells which unknowns a level of detail keeps, and where in x they
// are: places of the first of each pair, -1 for those left out. z starts at 1.
type formingLayout struct {
	phi, gamma, iF, vC, iG int
	phase                  bool // z is left out, and V follows the law
	static                 bool // i_g has no mass
}

var (
	_ solvers.Block              = (*GridForming)(nil)
	_ solvers.Differentiable     = (*GridForming)(nil)
	_ solvers.JacobianFiller     = (*GridForming)(nil)
	_ solvers.TimeDependent      = (*GridForming)(nil)
	_ facet.Described            = (*GridForming)(nil)
	_ facet.Framed               = (*GridForming)(nil)
	_ facet.Measurer             = (*GridForming)(nil)
	_ facet.Accountable          = (*GridForming)(nil)
	_ facet.Adjustable           = (*GridForming)(nil)
	_ facet.Former               = (*GridForming)(nil)
	_ facet.Starter              = (*GridForming)(nil)
	_ facet.Detailed             = (*GridForming)(nil)
	_ facet.Sized                = (*GridForming)(nil)
	_ facet.Kinked               = (*GridForming)(nil)
	_ encoding.BinaryAppender    = (*GridForming)(nil)
	_ encoding.BinaryUnmarshaler = (*GridForming)(nil)
)

// NewGridForming returns an inverter of the given parameters at detail "full".
// The error joins all faults of the parameters.
func NewGridForming(p GridFormingParams) (*GridForming, error) {
	if err := p.Validate(); err != nil {
		return nil, err
	}
	g := &GridForming{
		par:     p,
		limiter: limiter{max: p.IMax, priority: p.Priority},
		pRef:    constant(p.P),
		qRef:    constant(p.Q),
		vRef:    constant(p.V0),
		wRef:    constant(p.Omega0),
		vBase:   p.V0,
		iBase:   p.Rating / (1.5 * p.V0),
	}
	g.setDetail(Full)
	return g, nil
}

// setDetail builds what depends on the level of detail.
func (g *GridForming) setDetail(level string) {
	g.detail = level
	g.primary = g.par.Primary.build(rated{g.par.Rating, g.par.Omega0, g.par.V0})
	g.gradient, g.slopes = primaryGradient{}, lawGradient{}
	l := formingLayout{phi: -1, gamma: -1, iF: -1, vC: -1, iG: -1}
	l.phase = level == PhaseOnly
	l.static = level == PrimaryOnly || level == PhaseOnly
	g.nz = len(g.primary.unknowns())
	if l.phase {
		g.nz = 0
	}
	next := 1 + g.nz
	place := func(at *int, kept bool) {
		if kept {
			*at = next
			next += 2
		}
	}
	loop := level == Full || level == CurrentLoopGone
	place(&l.phi, loop)
	place(&l.gamma, level == Full)
	place(&l.iF, level == Full)
	place(&l.vC, loop)
	place(&l.iG, !l.static || g.par.LimitImpedance.Gain > 0)
	g.layout, g.own = l, next
	g.column = make([]float64, 2+next)

	unknowns := g.Describe().Unknowns
	var (
		rnd  = scatter(1)
		v, x = make([]float64, 2), make([]float64, next)
	)
	frame := g.frame
	g.sparsity = newSparsity(2 + next)
	g.sparsity.find(func(k int) {
		size := patternScale(k)
		for i := range v {
			v[i] = size * g.vBase * rnd.next()
		}
		for i := range x {
			x[i] = size * unknowns[i].Base * rnd.next()
		}
		g.frame = g.par.Omega0 * (1 + 0.1*rnd.next())
		g.fill(orders{
			p:     g.par.Rating * rnd.next(),
			q:     g.par.Rating * rnd.next(),
			v:     g.vBase * (1 + 0.1*rnd.next()),
			omega: g.par.Omega0 * (1 + 0.1*rnd.next()),
		}, v, x)
	})
	g.frame = frame
}

// full tells whether all unknowns are present.
func (g *GridForming) full() bool { return g.layout.gamma >= 0 }

// looped tells whether the voltage loop and the filter's capacitor are present.
func (g *GridForming) looped() bool { return g.layout.phi >= 0 }

// Params returns the parameters the inverter was built with; setpoints moved
// since then don't show in them.
func (g *GridForming) Params() GridFormingParams { return g.par }

// Dims returns 2 port components and the number of unknowns: with nz unknowns of
// the primary control (droop 2, oscillator 1, virtual machine 1 to 4), 11 + nz at
// detail "full", 7 + nz, 3 + nz, 1 + nz and 1 at the others, the last two with 2
// more where there is a [LimitImpedance].
func (g *GridForming) Dims() (ports, own int) { return 2, g.own }

// Mass writes no mass at the terminal, L_f, C_f and L_g for the filter, and 0 for
// an algebraic i_g.
func (g *GridForming) Mass(port, own []float64) {
	clear(port)
	for i := range own {
		own[i] = 1
	}
	l, f := &g.layout, &g.par.Filter
	put := func(at int, m float64) {
		if at >= 0 {
			own[at], own[at+1] = m, m
		}
	}
	put(l.iF, f.Lf)
	put(l.vC, f.Cf)
	if put(l.iG, f.Lg); l.static {
		put(l.iG, 0)
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (g *GridForming) SetFrame(speed float64) { g.frame = speed }

// Describe describes the terminal and the unknowns.
func (g *GridForming) Describe() facet.Description {
	u := []facet.Unknown{{Name: "delta", Unit: "rad", Base: 1, Frame: facet.Angle, Dynamics: dynAngle}}
	l := &g.layout
	if !l.phase {
		u = append(u, g.primary.unknowns()...)
	}
	add := func(at int, p [2]facet.Unknown) {
		if at >= 0 {
			u = append(u, p[:]...)
		}
	}
	add(l.phi, statePair("phi", "V s", ratio(g.iBase, g.par.Kiv, g.vBase/g.par.Omega0), false, dynVoltage))
	add(l.gamma, statePair("gamma", "A s", ratio(g.vBase, g.par.Kic, g.iBase/g.par.Omega0), false, dynCurrent))
	add(l.iF, statePair("i_f", "A", g.iBase, false, dynCurrent))
	add(l.vC, statePair("v_c", "V", g.vBase, false, dynFilter))
	add(l.iG, statePair("i_g", "A", g.iBase, true, dynNetwork))
	flow := facet.FlowState
	if l.static {
		flow = facet.FlowHeld
	}
	return facet.Description{
		Kind:      "grid-forming inverter",
		Terminals: []facet.Terminal{{Name: "ac", Flow: flow}},
		Unknowns:  u,
	}
}

// orders returns the setpoints at time t.
func (g *GridForming) orders(t float64) orders {
	return orders{p: g.pRef.value(t), q: g.qRef.value(t), v: g.vRef.value(t), omega: g.wRef.value(t)}
}

// formingPoint is the inverter at one point: everything its equations, its
// Jacobian and its channels have in common. Own frame unless said otherwise.
type formingPoint struct {
	e          complex128 // e^{j delta}
	phi, gamma complex128
	iF, vC, iG complex128
	iNet       complex128 // i_g in the network frame
	w          complex128 // v_bus, where i_g is no unknown
	z          complex128 // Z_v + Z_l
	zSlope     complex128 // dZ_l/d|i_g|
	s          stimulus
	omega, v   float64    // ordered by the primary control
	omegaN     float64    // of the decoupling terms
	err        complex128 // v_ref - v_c
	iRef       complex128
	lim        saturation // of i_ref
	vI         complex128
	solved     bool // whether V is found, at detail "phase only"
}

// at computes the point. z are the unknowns of the primary control.
func (g *GridForming) at(pt *formingPoint, u orders, v, x []float64) (z []float64) {
	p, l := &g.par, &g.layout
	z = x[1 : 1+g.nz]
	pt.e = rotor(x[0])
	pt.z = complex(p.Rv, p.Xv)
	pt.solved = true
	if l.iG >= 0 {
		pt.iNet = pair(x, l.iG)
		pt.iG = conj(pt.e) * pt.iNet
		if p.LimitImpedance.Gain > 0 {
			var zl complex128
			zl, pt.zSlope = p.LimitImpedance.at(abs(pt.iG))
			pt.z += zl
		}
		if l.phase {
			s1, s0 := 1.5*conj(pt.iG), -1.5*pt.z*complex(dot(pt.iG, pt.iG), 0)
			pt.v, pt.solved = g.primary.magnitude(u, response{s1: s1, s0: s0, i0: pt.iG})
		} else {
			pt.v = g.primary.voltage(z, u)
		}
	} else {
		pt.w = conj(pt.e) * pair(v, 0)
		y := 1 / (pt.z + g.gridImpedance())
		if l.phase {
			// v_c = c V + d w with c = Z_g y, d = Z_v y; i_g = y (V - w)
			c, d := g.gridImpedance()*y, pt.z*y
			pt.v, pt.solved = g.primary.magnitude(u, response{
				s2: 1.5 * c * conj(y),
				s1: 1.5 * conj(y) * (d*pt.w - c*conj(pt.w)),
				s0: -1.5 * conj(y) * d * complex(dot(pt.w, pt.w), 0),
				i1: y,
				i0: -y * pt.w,
			})
		} else {
			pt.v = g.primary.voltage(z, u)
		}
		pt.iG = (complex(pt.v, 0) - pt.w) * y
		pt.iNet = pt.e * pt.iG
	}
	ref := complex(pt.v, 0) - pt.z*pt.iG
	pt.vC = ref
	if l.vC >= 0 {
		pt.vC = pair(x, l.vC)
	}
	sC := pt.vC * conj(pt.iG)
	pt.s = stimulus{p: 1.5 * real(sC), q: 1.5 * imag(sC), i: pt.iG}
	if l.phase {
		pt.omega, _ = g.primary.law(u, pt.s, pt.v)
	} else {
		pt.omega = g.primary.speed(z, u, pt.s)
	}
	if !g.looped() {
		return z
	}
	pt.omegaN = p.Omega0
	if p.OwnSpeed {
		pt.omegaN = pt.omega
	}
	pt.phi = pair(x, l.phi)
	pt.err = ref - pt.vC
	pt.iRef = times(p.Kpv, pt.err) + times(p.Kiv, pt.phi) + times(p.F, pt.iG) + jtimes(pt.omegaN*p.Filter.Cf, pt.vC)
	pt.lim = g.limiter.apply(pt.iRef)
	if l.gamma < 0 {
		pt.iF = pt.lim.out
		return z
	}
	pt.gamma, pt.iF = pair(x, l.gamma), pair(x, l.iF)
	pt.vI = times(p.Kpc, pt.lim.out-pt.iF) + times(p.Kic, pt.gamma) + jtimes(pt.omegaN*p.Filter.Lf, pt.iF)
	return z
}

// gridImpedance is R_g + j omega_f L_g.
func (g *GridForming) gridImpedance() complex128 {
	return complex(g.par.Filter.Rg, g.frame*g.par.Filter.Lg)
}

// errNoVoltage is what Eval returns at detail "phase only" where no V meets the
// law of the primary control.
var errNoVoltage = fmt.Errorf("devices: grid-forming inverter: no voltage meets the primary control's law "+
	"at this angle and terminal voltage: %w", solvers.ErrReject)

// Eval writes the current into the terminal and the right-hand sides.
func (g *GridForming) Eval(flow, rate []float64, t float64, v, x []float64) error {
	if g.full() && g.par.LimitImpedance.Gain == 0 {
		g.evalFull(flow, rate, t, v, x)
		return nil
	}
	return g.evalGeneral(flow, rate, t, v, x)
}

// evalGeneral is Eval at any detail.
func (g *GridForming) evalGeneral(flow, rate []float64, t float64, v, x []float64) error {
	var pt formingPoint
	u := g.orders(t)
	z := g.at(&pt, u, v, x)
	l := &g.layout
	if l.iG < 0 && g.gridImpedance()+complex(g.par.Rv, g.par.Xv) == 0 {
		return errors.New("devices: grid-forming inverter: nothing between v_c and the terminal: " +
			"Rg + Rv = 0, and Xv + omega_f Lg = 0 at this speed of the frame")
	}
	if !pt.solved {
		return errNoVoltage
	}
	flow[0], flow[1] = -real(pt.iNet), -imag(pt.iNet)
	rate[0] = pt.omega - g.frame
	if !l.phase {
		g.primary.rates(rate[1:1+g.nz], z, u, pt.s)
	}
	p, f := &g.par, &g.par.Filter
	if l.phi >= 0 {
		setPair(rate, l.phi, pt.err+times(p.Kaw, pt.lim.out-pt.iRef))
		setPair(rate, l.vC, pt.iF-pt.iG-jtimes(pt.omega*f.Cf, pt.vC))
	}
	if l.gamma >= 0 {
		setPair(rate, l.gamma, pt.lim.out-pt.iF)
		setPair(rate, l.iF, pt.vI-pt.vC-complex(f.Rf, pt.omega*f.Lf)*pt.iF)
	}
	if l.iG >= 0 {
		setPair(rate, l.iG, pt.e*pt.vC-pair(v, 0)-g.gridImpedance()*pt.iNet)
	}
	return nil
}

// evalFull is Eval at detail "full" without a [LimitImpedance], written out in
// real numbers: it is where simulations spend their time, and takes half of what
// the general way takes.
func (g *GridForming) evalFull(flow, rate []float64, t float64, v, x []float64) {
	p, f := &g.par, &g.par.Filter
	n := 1 + g.nz
	y, r := x[n:][:10], rate[n:][:10]
	phiD, phiQ, gammaD, gammaQ, iFD, iFQ, vCD, vCQ, iND, iNQ := y[0], y[1], y[2], y[3], y[4], y[5], y[6], y[7], y[8], y[9]
	sin, cos := sincos(x[0])
	iGD, iGQ := cos*iND+sin*iNQ, cos*iNQ-sin*iND

	s := stimulus{p: 1.5 * (vCD*iGD + vCQ*iGQ), q: 1.5 * (vCQ*iGD - vCD*iGQ), i: complex(iGD, iGQ)}
	omega, volts := g.primary.act(rate[1:n], x[1:n], g.orders(t), s)
	omegaN := p.Omega0
	if p.OwnSpeed {
		omegaN = omega
	}

	errD := volts - (p.Rv*iGD - p.Xv*iGQ) - vCD
	errQ := -(p.Rv*iGQ + p.Xv*iGD) - vCQ
	b := omegaN * f.Cf
	refD := p.Kpv*errD + p.Kiv*phiD + p.F*iGD - b*vCQ
	refQ := p.Kpv*errQ + p.Kiv*phiQ + p.F*iGQ + b*vCD
	limD, limQ := refD, refQ
	if !(math.Sqrt(refD*refD+refQ*refQ) <= g.limiter.max) {
		lim := g.limiter.apply(complex(refD, refQ))
		limD, limQ = real(lim.out), imag(lim.out)
	}
	missD, missQ := limD-iFD, limQ-iFQ

	flow[0], flow[1] = -iND, -iNQ
	rate[0] = omega - g.frame
	r[0], r[1] = errD+p.Kaw*(limD-refD), errQ+p.Kaw*(limQ-refQ)
	r[2], r[3] = missD, missQ
	// (omega_n - omega) L_f: what the decoupling leaves
	a := (omegaN - omega) * f.Lf
	r[4] = p.Kpc*missD + p.Kic*gammaD - a*iFQ - vCD - f.Rf*iFD
	r[5] = p.Kpc*missQ + p.Kic*gammaQ + a*iFD - vCQ - f.Rf*iFQ
	c := omega * f.Cf
	r[6] = iFD - iGD + c*vCQ
	r[7] = iFQ - iGQ - c*vCD
	l := g.frame * f.Lg
	r[8] = cos*vCD - sin*vCQ - v[0] - f.Rg*iND + l*iNQ
	r[9] = sin*vCD + cos*vCQ - v[1] - f.Rg*iNQ - l*iND
}

// Pattern lists the entries of the Jacobian. With a finite I_max it holds those
// of a limiting inverter as well.
func (g *GridForming) Pattern() []solvers.Entry { return g.sparsity.entries }

// Jacobian writes the exact Jacobian. At the kink of a limit it is that of the
// side that doesn't limit.
func (g *GridForming) Jacobian(jac []float64, t float64, v, x []float64) {
	g.sparsity.begin(nil)
	g.fill(g.orders(t), v, x)
	g.sparsity.store(jac)
}

// FillJacobian is Jacobian, and writes zeros outside the pattern too.
func (g *GridForming) FillJacobian(jac []float64, t float64, v, x []float64) {
	g.sparsity.begin(jac)
	g.fill(g.orders(t), v, x)
}

// fill computes the Jacobian into the work matrix.
func (g *GridForming) fill(u orders, v, x []float64) {
	var pt formingPoint
	z := g.at(&pt, u, v, x)
	if g.layout.phase {
		g.primary.lawGradients(&g.slopes, u, pt.s, pt.v)
	} else {
		g.primary.gradients(&g.gradient, z, u, pt.s)
	}
	if g.full() {
		g.fillFull(&pt)
	} else {
		g.fillReduced(&pt)
	}
}

// impedanceSlope returns the change of (Z_v + Z_l) i_g for a change d of i_g.
func (pt *formingPoint) impedanceSlope(d complex128) complex128 {
	change := pt.z * d
	if pt.zSlope != 0 {
		change += times(dot(d, pt.iG)/abs(pt.iG), pt.zSlope) * pt.iG
	}
	return change
}

// fillFull computes the Jacobian of the full equations. A column is the
// derivative of the complex equations in the direction of its unknown; those
// unknowns that reach the current reference go through reference.
func (g *GridForming) fillFull(pt *formingPoint) {
	var (
		p, f = &g.par, &g.par.Filter
		d    = &g.gradient
		w    = g.sparsity.work
		n    = g.sparsity.order
		nz   = g.nz
		ei   = conj(pt.e)

		// rows and columns, after the two of the terminal
		rDelta, rZ, rPhi      = 2, 3, 3 + nz
		rGamma, rIF, rVC, rIG = 5 + nz, 7 + nz, 9 + nz, 11 + nz

		// d i_ref / d omega, and what omega does to the filter directly
		refW = complex128(0)
		iFW  = jtimes(-f.Lf, pt.iF)
		vCW  = jtimes(-f.Cf, pt.vC)
	)
	if p.OwnSpeed {
		refW = -vCW
		iFW = 0
	}

	// delta: turns i_g
	dG := jtimes(-1, pt.iG)
	dw := g.respond(rDelta, pt.vC*conj(dG), dG)
	dErr := -pt.impedanceSlope(dG)
	g.reference(pt, rDelta, dErr, times(p.Kpv, dErr)+times(p.F, dG)+times(dw, refW), times(dw, iFW))
	column(w, n, rVC, rDelta, times(dw, vCW)-dG)
	column(w, n, rIG, rDelta, jtimes(1, pt.e*pt.vC))

	// z: moves omega and V
	for k := range nz {
		c := rZ + k
		dw, dv := d.omegaZ[k], d.vZ[k]
		w[rDelta*n+c] = dw
		for r := range nz {
			w[(rZ+r)*n+c] = d.rateZ[r][k]
		}
		g.reference(pt, c, complex(dv, 0), complex(p.Kpv*dv, 0)+times(dw, refW), times(dw, iFW))
		column(w, n, rVC, c, times(dw, vCW))
	}

	iFF := complex(-f.Rf-p.Kpc, (pt.omegaN-pt.omega)*f.Lf)
	refC := complex(-p.Kpv, pt.omegaN*f.Cf)
	for q := range 2 {
		u := unit(q)

		// phi
		g.reference(pt, rPhi+q, 0, times(p.Kiv, u), 0)

		// v_c: in the power, the voltage error and the decoupling
		c := rVC + q
		dw := g.respond(c, u*conj(pt.iG), 0)
		g.reference(pt, c, -u, refC*u+times(dw, refW), times(dw, iFW)-u)
		column(w, n, rVC, c, times(dw, vCW)-jtimes(pt.omega*f.Cf, u))

		// i_g: in the power, the virtual impedance and the feed-forward
		c = rIG + q
		dG := ei * u
		dw = g.respond(c, pt.vC*conj(dG), dG)
		dErr := -pt.impedanceSlope(dG)
		g.reference(pt, c, dErr, times(p.Kpv, dErr)+times(p.F, dG)+times(dw, refW), times(dw, iFW))
		column(w, n, rVC, c, times(dw, vCW)-dG)
	}
	// gamma and i_f reach nothing else
	block(w, n, rIF, rGamma, complex(p.Kic, 0))
	block(w, n, rGamma, rIF, -1)
	block(w, n, rIF, rIF, iFF)
	block(w, n, rVC, rIF, 1)
	// the grid side, network frame
	block(w, n, 0, rIG, -1)
	block(w, n, rIG, 0, -1)
	block(w, n, rIG, rVC, pt.e)
	block(w, n, rIG, rIG, -g.gridImpedance())
}

// respond writes the rows of delta and of the primary control in column c, for
// the change dS of v_c i_g* and dG of i_g, and returns the change of omega.
func (g *GridForming) respond(c int, dS, dG complex128) float64 {
	d, w, n := &g.gradient, g.sparsity.work, g.sparsity.order
	p, q := 1.5*real(dS), 1.5*imag(dS)
	id, iq := real(dG), imag(dG)
	dw := d.omegaS[0]*p + d.omegaS[1]*q + d.omegaS[2]*id + d.omegaS[3]*iq
	k := 2*n + c
	w[k] = dw
	for r := range d.rateS[:g.nz] {
		s := &d.rateS[r]
		k += n
		w[k] = s[0]*p + s[1]*q + s[2]*id + s[3]*iq
	}
	return dw
}

// reference writes the rows of phi, gamma and i_f in column c for the change
// dErr of the voltage error and dRef of the unlimited current reference; rest is
// what reaches the row of i_f by other ways.
func (g *GridForming) reference(pt *formingPoint, c int, dErr, dRef, rest complex128) {
	n := g.sparsity.order
	dLim := pt.lim.slope(dRef)
	w := g.sparsity.work[(3+g.nz)*n+c:]
	kaw, kpc := g.par.Kaw, g.par.Kpc
	w[0] = real(dErr) + kaw*(real(dLim)-real(dRef))
	w[n] = imag(dErr) + kaw*(imag(dLim)-imag(dRef))
	w[2*n], w[3*n] = real(dLim), imag(dLim)
	w[4*n], w[5*n] = kpc*real(dLim)+real(rest), kpc*imag(dLim)+imag(rest)
}

// unit returns 1 for k = 0 and j for k = 1.
func unit(k int) complex128 {
	if k == 0 {
		return 1
	}
	return 1i
}

// formingDirection is a direction in the space of an inverter's arguments.
type formingDirection struct {
	bus   complex128 // v_bus, network frame; where i_g is no unknown
	delta float64
	z     int // the unknown of the primary control that moves, -1 for none
	vC    complex128
	iNet  complex128
	omega float64 // of the orders alone: change of omega,
	volts float64 // of V, or of the law's voltage at detail "phase only"
}

// tangent writes the derivative of [flow | rate] in direction d into dst, at any
// level but "full".
func (g *GridForming) tangent(dst []float64, pt *formingPoint, d *formingDirection) {
	var (
		p, f, l = &g.par, &g.par.Filter, &g.layout
		dG      complex128 // of i_g while V stands
		gV      complex128 // di_g/dV
		dC      = d.vC     // of v_c while V stands
		cV      complex128 // dv_c/dV
		dV      float64
	)
	if l.iG >= 0 {
		dG = conj(pt.e)*d.iNet - jtimes(d.delta, pt.iG)
	} else {
		gV = 1 / (pt.z + g.gridImpedance())
		dG = -gV * (conj(pt.e)*d.bus - jtimes(d.delta, pt.w))
	}
	if l.vC < 0 {
		dC = -pt.impedanceSlope(dG)
		cV = 1 - pt.z*gV
	}
	stimulated := func(dC, dG complex128) [4]float64 {
		dS := dC*conj(pt.iG) + pt.vC*conj(dG)
		return [4]float64{1.5 * real(dS), 1.5 * imag(dS), real(dG), imag(dG)}
	}
	dw := d.omega
	var in [4]float64
	if l.phase {
		// law(V) - V = 0
		law := &g.slopes
		still, moved := stimulated(dC, dG), stimulated(cV, gV)
		up, down := d.volts, law.voltV-1
		for i, a := range law.voltS {
			up += a * still[i]
			down += a * moved[i]
		}
		dV = -up / down
		dw += law.omegaV * dV
		for i, a := range law.omegaS {
			in[i] = still[i] + dV*moved[i]
			dw += a * in[i]
		}
		dG += times(dV, gV)
		dC += times(dV, cV)
	} else {
		a := &g.gradient
		dV = d.volts
		if d.z >= 0 {
			dV += a.vZ[d.z]
			dw += a.omegaZ[d.z]
		}
		dG += times(dV, gV)
		dC += times(dV, cV)
		in = stimulated(dC, dG)
		for i, b := range a.omegaS {
			dw += b * in[i]
		}
		for r := range g.nz {
			sum := 0.0
			for i, b := range a.rateS[r] {
				sum += b * in[i]
			}
			if d.z >= 0 {
				sum += a.rateZ[r][d.z]
			}
			dst[3+r] = sum
		}
	}
	dst[2] = dw
	dNet := d.iNet
	if l.iG < 0 {
		dNet = pt.e * (dG + jtimes(d.delta, pt.iG))
	} else {
		setPair(dst, 2+l.iG, pt.e*(dC+jtimes(d.delta, pt.vC))-g.gridImpedance()*d.iNet)
	}
	setPair(dst, 0, -dNet)
	if l.phi < 0 {
		return
	}
	dErr := complex(dV, 0) - pt.impedanceSlope(dG) - dC
	dRef := times(p.Kpv, dErr) + times(p.F, dG) + jtimes(pt.omegaN*f.Cf, dC)
	if p.OwnSpeed {
		dRef += jtimes(dw*f.Cf, pt.vC)
	}
	dLim := pt.lim.slope(dRef)
	setPair(dst, 2+l.phi, dErr+times(p.Kaw, dLim-dRef))
	setPair(dst, 2+l.vC, dLim-dG-jtimes(pt.omega*f.Cf, dC)-jtimes(dw*f.Cf, pt.vC))
}

// fillReduced computes the Jacobian of the levels below "full", column by column.
func (g *GridForming) fillReduced(pt *formingPoint) {
	l, n := &g.layout, g.sparsity.order
	fill := func(c int, d formingDirection) {
		g.tangent(g.column, pt, &d)
		w := g.sparsity.work[c:]
		for r, a := range g.column {
			w[r*n] = a
		}
	}
	fill(2, formingDirection{delta: 1, z: -1})
	for k := range g.nz {
		fill(3+k, formingDirection{z: k})
	}
	w := g.sparsity.work
	if l.iG >= 0 {
		block(w, n, 2+l.iG, 0, -1) // v_bus reaches nothing else
	}
	for q := range 2 {
		u := unit(q)
		if l.iG >= 0 {
			fill(2+l.iG+q, formingDirection{iNet: u, z: -1})
		} else {
			fill(q, formingDirection{bus: u, z: -1})
		}
		if l.phi >= 0 {
			fill(2+l.vC+q, formingDirection{vC: u, z: -1})
			// phi moves the current reference alone
			dRef := times(g.par.Kiv, u)
			dLim := pt.lim.slope(dRef)
			column(w, n, 2+l.phi, 2+l.phi+q, times(g.par.Kaw, dLim-dRef))
			column(w, n, 2+l.vC, 2+l.phi+q, dLim)
		}
	}
}
