package devices

import (
	"encoding"
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// GridFollowingParams holds every symbol of a [GridFollowing] inverter, in SI
// and amplitude-invariant dq quantities. [GridFollowingNameplate.Params] fills
// it from a nameplate.
type GridFollowingParams struct {
	Rating float64 // S_r, VA, > 0: base of powers and currents
	Omega0 float64 // omega_0, rad/s, > 0: nominal speed, used in the decoupling terms too
	V0     float64 // V_n, rated voltage, V peak phase-to-neutral, > 0
	P, Q   float64 // P*, Q*, W and var generated: first values of setpoints "p" and "q"

	// PLL. Kp and Ki act on v_mq relative to an amplitude, and so hold for
	// either choice at rated voltage: K_p = 2 zeta w_n, K_i = w_n^2. Divide by
	// V0 to compare with gains per volt.
	Kp             float64 // K_p, 1/s, > 0
	Ki             float64 // K_i, 1/s^2, >= 0
	FixedAmplitude bool    // v_mq relative to V0 instead of to the measured amplitude |v_m|
	SpeedLimit     float64 // largest |omega - omega_0|, rad/s, > 0; +Inf for no limit

	OmegaV float64 // w_v, corner of the filter of v_md, rad/s, > 0
	VFloor float64 // least value of v_md and |v_m| in a denominator, V peak, > 0

	// OmitCapacitor leaves the capacitor's current out of the reference, which
	// then adds its vars to Q. It says nothing for an L filter.
	OmitCapacitor bool

	Kpc  float64 // K_pc of the current loop, V/A, > 0
	Kic  float64 // K_ic, V/(A s), >= 0
	Kff  float64 // feed-forward of v_m to the bridge's voltage, 0 to 1
	IMax float64 // largest |i_ref|, A peak, > 0; +Inf for no limit

	// Priority tells which part of i_ref gives way to IMax; "" is [AngleKept]. The d
	// part is the active current.
	Priority LimitPriority

	Filter LCL // LCL, or L with Cf = Lg = Rg = 0
}

// Validate returns all faults joined, or nil.
func (p GridFollowingParams) Validate() error {
	f := &faults{device: "grid-following inverter"}
	rated := f.positive("Rating", p.Rating, "VA")
	f.positive("Omega0", p.Omega0, "rad/s")
	f.positive("V0", p.V0, "V")
	if rated {
		f.within("P", p.P, -setpointReach*p.Rating, setpointReach*p.Rating, "W")
		f.within("Q", p.Q, -setpointReach*p.Rating, setpointReach*p.Rating, "var")
	}
	f.positive("Kp", p.Kp, "1/s")
	f.notNegative("Ki", p.Ki, "1/s^2")
	checkLimit(f, "SpeedLimit", p.SpeedLimit, "rad/s")
	if p.OmegaV == 0 || math.IsInf(p.OmegaV, 1) {
		f.add("OmegaV = %v rad/s: want a finite value > 0; an unfiltered v_md makes a source of constant power, "+
			"whose current has two solutions or none", p.OmegaV)
	} else {
		f.positive("OmegaV", p.OmegaV, "rad/s")
	}
	f.check(p.VFloor > 0 && p.VFloor < p.V0, "VFloor", p.VFloor, "V", "a value > 0 and < V0")
	f.positive("Kpc", p.Kpc, "V/A")
	f.notNegative("Kic", p.Kic, "V/(A s)")
	f.within("Kff", p.Kff, 0, 1, "")
	checkLimit(f, "IMax", p.IMax, "A")
	p.Priority.check(f)
	p.Filter.check(f, true)
	return f.err()
}

// GridFollowing is a grid-following inverter: an averaged bridge with an L or
// LCL filter, a current loop, and a synchronous-reference-frame PLL on the
// measured voltage v_m (filter capacitor, or terminal with an L filter). Its own
// frame is the PLL's, and x = x_d + j x_q in it is e^{-j delta} times the
// network-frame value:
//
//	PLL        y = v_mq / max(|v_m|, floor)          (or v_mq / V_n)
//	           deps/dt = y + (dw - dw*)/K_p           dw* = K_p y + K_i eps,
//	           d delta/dt = omega - omega_f           omega = omega_0 + dw, dw = dw* kept within limits
//	reference  dv_md/dt = w_v (v_m.d - v_md)
//	           i_ref = (2/3) (P* - j Q*) / max(v_md, floor) + j omega_0 C_f v_c
//	current    dgamma/dt = i_ref' - i_f               |i_ref'| = min(|i_ref|, I_max) by a [LimitPriority]
//	           v_i = K_pc (i_ref' - i_f) + K_ic gamma + j omega_0 L_f i_f + K_ff v_m
//	filter     LCL as in [GridForming]; L, in the network frame:
//	           L_f di_g/dt = e^{j delta} v_i - v_bus - (R_f + j omega_f L_f) i_g,    i_f = e^{-j delta} i_g
//
// The last term of i_ref can be left out; without it Q is off by the
// capacitor's vars. P* and Q* are met where v_m is measured: with an LCL filter
// the terminal has less by the power in L_g and R_g. While the speed is limited
// the PI controller's integrator goes to the value that just gives the limit,
// with the time constant K_p/K_i.
//
// The PLL is that of S.-K. Chung, "A phase tracking system for three phase
// utility interface inverters", IEEE Trans. Power Electronics 15(3), 2000
// (citation from memory).
//
// Own unknowns, in this order: delta (rad), eps (s, integral of y), v_md (V),
// gamma (A s); with an LCL filter i_f (A) and v_c (V); all in the own frame; and
// i_g (A), a network-frame pair, the current out of the inverter. The flow into
// the block is -i_g.
//
// # Detail
//
// Each level drops the derivatives of a further group:
//
//	current loop gone   without gamma, i_f (with an L filter i_g):  i_f = i_ref'
//	primary only        without v_c, i_g: the PLL (delta, eps) and v_md
//	injection only      without the PLL's dynamics: v_md alone
//
// The names are those of [GridForming], the PLL being a follower's primary control;
// there is no voltage loop to drop. With an L filter "current loop gone" and
// "primary only" are the same equations. At "primary only" an LCL filter's v_c stays
// as an algebraic unknown, since the PLL reads it:
//
//	i_g = i_ref' - j omega C_f v_c        0 = v_c - e^{-j delta} v_bus - (R_g + j omega_f L_g) i_g
//
// At "injection only" the PLL is in lock: delta is the angle of v_m, v_mq = 0, omega
// = omega_f (zero order: the angle doesn't move in the network frame), eps is gone
// and with it the limit of the speed. What remains is a current in line with v_m and
// of the size that the filtered v_md gives:
//
//	i_g e^{-j delta} = (2/3) (P* - j Q*)/max(v_md, floor) + ...   limited    dv_md/dt = w_v (v_m.d - v_md)
//	0 = Im(e^{-j delta} v_bus)/max(|v_bus|, floor)                           L filter
//	0 = v_c.d - e^{-j delta} v_bus - (R_g + j omega_f L_g) i_g               LCL filter, v_c.q = 0
//
// with delta, and v_c.d of an LCL filter, as algebraic unknowns: they tell which of
// the two angles the lock is at, and a terminal voltage of zero has no angle, where
// the equation for delta is singular.
//
// At both coarsest levels (and with an L filter without its current loop) the flow is
// an injection: at nominal speed the capacitor's current cancels out of i_g, which
// then doesn't depend on the terminal voltage, or on its angle alone, and can't fix
// that of a bus of inductors. With OmitCapacitor a small admittance to ground
// remains, j omega C_f behind L_g. It is declared an injection all the same: the
// voltage it would fix, i/(omega C_f), is one no equipment survives.
//
// Where K_ic is 0 there is no level below "full" (the current then settles off its
// reference), and where K_i is 0 no "injection only".
//
// A GridFollowing is no use to two goroutines at once.
type GridFollowing struct {
	par     GridFollowingParams
	limiter limiter
	detail  string
	lcl     bool
	layout  followingLayout

	pRef, qRef input
	frame      float64 // omega_f, rad/s

	iBase    float64
	sparsity *sparsity
}

// followingLayout tells where in x the unknowns are that depend on the level of
// detail; -1 for those left out.
type followingLayout struct {
	eps, vMD, gamma, iF, vC, iG int
	own                         int
	locked                      bool // the PLL is in lock: no eps, v_c.d alone
}

var (
	_ solvers.Block              = (*GridFollowing)(nil)
	_ solvers.Differentiable     = (*GridFollowing)(nil)
	_ solvers.JacobianFiller     = (*GridFollowing)(nil)
	_ solvers.TimeDependent      = (*GridFollowing)(nil)
	_ facet.Described            = (*GridFollowing)(nil)
	_ facet.Framed               = (*GridFollowing)(nil)
	_ facet.Measurer             = (*GridFollowing)(nil)
	_ facet.Accountable          = (*GridFollowing)(nil)
	_ facet.Adjustable           = (*GridFollowing)(nil)
	_ facet.Starter              = (*GridFollowing)(nil)
	_ facet.Detailed             = (*GridFollowing)(nil)
	_ facet.Sized                = (*GridFollowing)(nil)
	_ facet.Kinked               = (*GridFollowing)(nil)
	_ encoding.BinaryAppender    = (*GridFollowing)(nil)
	_ encoding.BinaryUnmarshaler = (*GridFollowing)(nil)
)

// NewGridFollowing returns an inverter of the given parameters at detail
// "full". The error joins all faults of the parameters.
func NewGridFollowing(p GridFollowingParams) (*GridFollowing, error) {
	if err := p.Validate(); err != nil {
		return nil, err
	}
	g := &GridFollowing{
		par:     p,
		limiter: limiter{max: p.IMax, priority: p.Priority},
		lcl:     !p.Filter.isL(),
		pRef:    constant(p.P),
		qRef:    constant(p.Q),
		iBase:   p.Rating / (1.5 * p.V0),
	}
	g.setDetail(Full)
	return g, nil
}

// setDetail builds what depends on the level of detail.
func (g *GridFollowing) setDetail(level string) {
	g.detail = level
	l := followingLayout{eps: -1, gamma: -1, iF: -1, vC: -1, iG: -1, own: 1}
	l.locked = level == InjectionOnly
	place := func(at *int, kept bool, size int) {
		if kept {
			*at = l.own
			l.own += size
		}
	}
	full, wired := level == Full, level == Full || level == CurrentLoopGone && g.lcl
	place(&l.eps, !l.locked, 1)
	place(&l.vMD, true, 1)
	place(&l.gamma, full, 2)
	place(&l.iF, full && g.lcl, 2)
	if l.locked {
		place(&l.vC, g.lcl, 1)
	} else {
		place(&l.vC, g.lcl, 2)
	}
	place(&l.iG, wired, 2)
	g.layout = l
	own := l.own
	unknowns := g.Describe().Unknowns
	var (
		rnd   = scatter(2)
		v, x  = make([]float64, 2), make([]float64, own)
		frame = g.frame
	)
	g.sparsity = newSparsity(2 + own)
	g.sparsity.find(func(k int) {
		size := patternScale(k)
		for i := range v {
			v[i] = size * g.par.V0 * rnd.next()
		}
		for i := range x {
			x[i] = size * unknowns[i].Base * rnd.next()
		}
		g.frame = g.par.Omega0 * (1 + 0.1*rnd.next())
		g.fill(orders{p: g.par.Rating * rnd.next(), q: g.par.Rating * rnd.next()}, v, x)
	})
	g.frame = frame
}

// full tells whether all unknowns are present.
func (g *GridFollowing) full() bool { return g.layout.gamma >= 0 }

// wired tells whether i_g is an unknown.
func (g *GridFollowing) wired() bool { return g.layout.iG >= 0 }

// Params returns the parameters the inverter was built with; setpoints moved
// since then don't show in them.
func (g *GridFollowing) Params() GridFollowingParams { return g.par }

// Dims returns 2 port components and the number of unknowns: with an LCL filter 11,
// 7, 5 and 3 at the levels from fine to coarse, with an L filter 7, 3, 3 and 2.
func (g *GridFollowing) Dims() (ports, own int) { return 2, g.layout.own }

// Mass writes no mass at the terminal, L_f, C_f and L_g for the filter, and 0 for
// the algebraic unknowns of the two coarsest levels.
func (g *GridFollowing) Mass(port, own []float64) {
	clear(port)
	for i := range own {
		own[i] = 1
	}
	l, f := &g.layout, &g.par.Filter
	if l.iF >= 0 {
		own[l.iF], own[l.iF+1] = f.Lf, f.Lf
	}
	switch {
	case l.locked:
		own[0] = 0
		if l.vC >= 0 {
			own[l.vC] = 0
		}
	case l.vC >= 0:
		c := f.Cf
		if !g.wired() {
			c = 0
		}
		own[l.vC], own[l.vC+1] = c, c
	}
	if l.iG >= 0 {
		m := f.Lg
		if !g.lcl {
			m = f.Lf
		}
		own[l.iG], own[l.iG+1] = m, m
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (g *GridFollowing) SetFrame(speed float64) { g.frame = speed }

// Describe describes the terminal and the unknowns.
func (g *GridFollowing) Describe() facet.Description {
	p := &g.par
	// The integrator counts in terms of the speed it orders, to the limit.
	swing := min(p.SpeedLimit, 0.1*p.Omega0)
	l := &g.layout
	u := []facet.Unknown{{Name: "delta", Unit: "rad", Base: 1, Frame: facet.Angle, Dynamics: dynPLL}}
	if l.eps >= 0 {
		u = append(u, facet.Unknown{Name: "eps", Unit: "s", Base: ratio(swing, p.Ki, 1/p.Omega0), Dynamics: dynPLL})
	}
	u = append(u, facet.Unknown{Name: "v_md", Unit: "V", Base: p.V0, Dynamics: dynPrimary})
	add := func(at int, q [2]facet.Unknown) {
		if at >= 0 {
			u = append(u, q[:]...)
		}
	}
	add(l.gamma, statePair("gamma", "A s", ratio(p.V0, p.Kic, g.iBase/p.Omega0), false, dynCurrent))
	add(l.iF, statePair("i_f", "A", g.iBase, false, dynCurrent))
	vC := statePair("v_c", "V", p.V0, false, dynFilter)
	if l.locked && l.vC >= 0 {
		u = append(u, vC[0])
	} else {
		add(l.vC, vC)
	}
	wire := dynNetwork
	if !g.lcl {
		wire = dynCurrent
	}
	add(l.iG, statePair("i_g", "A", g.iBase, true, wire))
	flow := facet.FlowInjected
	if g.wired() {
		flow = facet.FlowState
	}
	return facet.Description{
		Kind:      "grid-following inverter",
		Terminals: []facet.Terminal{{Name: "ac", Flow: flow}},
		Unknowns:  u,
	}
}

// orders returns the setpoints at time t.
func (g *GridFollowing) orders(t float64) orders {
	return orders{p: g.pRef.value(t), q: g.qRef.value(t)}
}

// followingPoint is the inverter at one point, own frame unless said
// otherwise.
type followingPoint struct {
	e          complex128 // e^{j delta}
	gamma      complex128
	iF, vC, iG complex128
	iNet       complex128 // i_g in the network frame
	vM         complex128
	amplitude  float64 // denominator of y
	y          float64
	wanted     float64 // dw*
	omega      float64
	vD         float64 // max(v_md, floor)
	iRef       complex128
	lim        saturation // of i_ref
	vI         complex128
}

// at computes the point.
func (g *GridFollowing) at(pt *followingPoint, u orders, v, x []float64) {
	p, f := &g.par, &g.par.Filter
	pt.e = rotor(x[0])
	ei := conj(pt.e)
	l := &g.layout
	switch {
	case l.locked && g.lcl:
		pt.vC = complex(x[l.vC], 0)
		pt.vM = pt.vC
	case g.lcl:
		pt.vC = pair(x, l.vC)
		pt.vM = pt.vC
	default:
		pt.vM = ei * pair(v, 0)
	}
	if l.iG >= 0 {
		pt.iNet = pair(x, l.iG)
		pt.iG = ei * pt.iNet
	}

	if p.FixedAmplitude {
		pt.amplitude = p.V0
	} else {
		pt.amplitude = max(abs(pt.vM), p.VFloor)
	}
	pt.y = imag(pt.vM) / pt.amplitude
	if l.locked {
		pt.omega = g.frame
	} else {
		pt.wanted = p.Kp*pt.y + p.Ki*x[l.eps]
		pt.omega = p.Omega0 + min(max(pt.wanted, -p.SpeedLimit), p.SpeedLimit)
	}
	pt.vD = max(x[l.vMD], p.VFloor)
	pt.iRef = complex(u.p/(1.5*pt.vD), -u.q/(1.5*pt.vD)) + jtimes(g.compensation(), pt.vC)
	pt.lim = g.limiter.apply(pt.iRef)
	if l.gamma >= 0 {
		pt.gamma, pt.iF = pair(x, l.gamma), pt.iG
		if l.iF >= 0 {
			pt.iF = pair(x, l.iF)
		}
		pt.vI = times(p.Kpc, pt.lim.out-pt.iF) + times(p.Kic, pt.gamma) +
			jtimes(p.Omega0*f.Lf, pt.iF) + times(p.Kff, pt.vM)
		return
	}
	pt.iF = pt.lim.out
	if l.iG < 0 {
		pt.iG = pt.iF - jtimes(pt.omega*f.Cf, pt.vC)
		pt.iNet = pt.e * pt.iG
	}
}

// compensation is the admittance of the capacitor in i_ref.
func (g *GridFollowing) compensation() float64 {
	if g.par.OmitCapacitor {
		return 0
	}
	return g.par.Omega0 * g.par.Filter.Cf
}

// gridImpedance is R_g + j omega_f L_g.
func (g *GridFollowing) gridImpedance() complex128 {
	return complex(g.par.Filter.Rg, g.frame*g.par.Filter.Lg)
}

// Eval writes the current into the terminal and the right-hand sides.
func (g *GridFollowing) Eval(flow, rate []float64, t float64, v, x []float64) error {
	var pt followingPoint
	g.at(&pt, g.orders(t), v, x)
	p, f, l := &g.par, &g.par.Filter, &g.layout
	flow[0], flow[1] = -real(pt.iNet), -imag(pt.iNet)
	rate[l.vMD] = p.OmegaV * (real(pt.vM) - x[l.vMD])
	if l.locked {
		if rate[0] = pt.y; l.vC >= 0 {
			drop := pt.vC - conj(pt.e)*pair(v, 0) - g.gridImpedance()*pt.iG
			rate[0], rate[l.vC] = imag(drop)/p.V0, real(drop)
		}
		return nil
	}
	rate[0] = pt.omega - g.frame
	rate[l.eps] = pt.y + (pt.omega-p.Omega0-pt.wanted)/p.Kp
	if l.gamma >= 0 {
		setPair(rate, l.gamma, pt.lim.out-pt.iF)
	}
	switch {
	case l.iF >= 0:
		setPair(rate, l.iF, pt.vI-pt.vC-complex(f.Rf, pt.omega*f.Lf)*pt.iF)
	case l.iG >= 0 && !g.lcl:
		setPair(rate, l.iG, pt.e*pt.vI-pair(v, 0)-complex(f.Rf, g.frame*f.Lf)*pt.iNet)
	}
	switch {
	case l.iG >= 0 && g.lcl:
		setPair(rate, l.vC, pt.iF-pt.iG-jtimes(pt.omega*f.Cf, pt.vC))
		setPair(rate, l.iG, pt.e*pt.vC-pair(v, 0)-g.gridImpedance()*pt.iNet)
	case l.vC >= 0:
		setPair(rate, l.vC, pt.vC-conj(pt.e)*pair(v, 0)-g.gridImpedance()*pt.iG)
	}
	return nil
}

// Pattern lists the entries of the Jacobian. With a finite I_max it holds those
// of a limiting inverter as well.
func (g *GridFollowing) Pattern() []solvers.Entry { return g.sparsity.entries }

// Jacobian writes the exact Jacobian. At the kink of a limit or floor it is that
// of the side on which the limit doesn't act.
func (g *GridFollowing) Jacobian(jac []float64, t float64, v, x []float64) {
	g.sparsity.begin(nil)
	g.fill(g.orders(t), v, x)
	g.sparsity.store(jac)
}

// FillJacobian is Jacobian, and writes zeros outside the pattern too.
func (g *GridFollowing) FillJacobian(jac []float64, t float64, v, x []float64) {
	g.sparsity.begin(jac)
	g.fill(g.orders(t), v, x)
}

// followingSlopes are the slopes of what has limits or floors at one point.
type followingSlopes struct {
	y      complex128 // dy = Im(dv_m y*)
	inside float64    // d dw / d dw*: 1 within the speed limits, else 0
	ref    complex128 // d i_ref / d v_md
}

// fill computes the Jacobian into the work matrix. A column is the derivative of
// the complex equations in the direction of its unknown.
func (g *GridFollowing) fill(u orders, v, x []float64) {
	var pt followingPoint
	g.at(&pt, u, v, x)
	p := &g.par
	d := followingSlopes{y: complex(1/pt.amplitude, 0), inside: 1}
	if m := abs(pt.vM); !p.FixedAmplitude && m >= p.VFloor {
		// d(v_q/|v|) = Im(dv v*) v_d / |v|^3
		d.y = times(real(pt.vM)/(m*m*m), pt.vM)
	}
	if math.Abs(pt.wanted) > p.SpeedLimit {
		d.inside = 0
	}
	if x[g.layout.vMD] >= p.VFloor {
		d.ref = complex(-u.p/(1.5*pt.vD*pt.vD), u.q/(1.5*pt.vD*pt.vD))
	}
	switch {
	case g.full() && g.lcl:
		g.fillLCL(&pt, &d)
	case g.full():
		g.fillL(&pt, &d)
	case g.layout.locked:
		g.fillLocked(&pt, &d, v)
	case g.wired():
		g.fillWired(&pt, &d)
	default:
		g.fillPrimary(&pt, &d, v)
	}
}

// Rows and columns of the first unknowns, after the two of the terminal, where the
// PLL is present.
const (
	followDelta = 2
	followEps   = 3
	followVmd   = 4
	followNext  = 5
)

// lock writes the rows of the PLL and of the voltage filter in column c for the
// changes dM of v_m, dEps of eps and dVmd of v_md, and returns that of omega.
func (g *GridFollowing) lock(d *followingSlopes, c int, dM complex128, dEps, dVmd float64) float64 {
	p, w, n := &g.par, g.sparsity.work, g.sparsity.order
	dy := imag(dM)*real(d.y) - real(dM)*imag(d.y)
	wanted := p.Kp*dy + p.Ki*dEps
	dw := d.inside * wanted
	w[followDelta*n+c] = dw
	w[followEps*n+c] = dy + (dw-wanted)/p.Kp
	w[followVmd*n+c] = p.OmegaV * (real(dM) - dVmd)
	return dw
}

// fillLCL computes the Jacobian of the full equations with an LCL filter.
func (g *GridFollowing) fillLCL(pt *followingPoint, d *followingSlopes) {
	const rGamma, rIF, rVC, rIG = followNext, followNext + 2, followNext + 4, followNext + 6
	var (
		p, f = &g.par, &g.par.Filter
		w    = g.sparsity.work
		n    = g.sparsity.order
		ei   = conj(pt.e)
		iFW  = jtimes(-f.Lf, pt.iF) // d(row of i_f)/d omega
		vCW  = jtimes(-f.Cf, pt.vC)
	)
	// delta turns i_g
	column(w, n, rVC, followDelta, jtimes(1, pt.iG))
	column(w, n, rIG, followDelta, jtimes(1, pt.e*pt.vC))
	// eps
	dw := g.lock(d, followEps, 0, 1, 0)
	column(w, n, rIF, followEps, times(dw, iFW))
	column(w, n, rVC, followEps, times(dw, vCW))
	// v_md
	g.lock(d, followVmd, 0, 0, 1)
	dLim := pt.lim.slope(d.ref)
	column(w, n, rGamma, followVmd, dLim)
	column(w, n, rIF, followVmd, times(p.Kpc, dLim))
	// v_c
	for q := range 2 {
		u := unit(q)
		dw := g.lock(d, rVC+q, u, 0, 0)
		dLim := pt.lim.slope(jtimes(g.compensation(), u))
		column(w, n, rGamma, rVC+q, dLim)
		column(w, n, rIF, rVC+q, times(p.Kpc, dLim)+times(p.Kff-1, u)+times(dw, iFW))
		column(w, n, rVC, rVC+q, times(dw, vCW)-jtimes(pt.omega*f.Cf, u))
	}
	// gamma and i_f
	block(w, n, rIF, rGamma, complex(p.Kic, 0))
	block(w, n, rGamma, rIF, -1)
	block(w, n, rIF, rIF, complex(-p.Kpc-f.Rf, (p.Omega0-pt.omega)*f.Lf))
	block(w, n, rVC, rIF, 1)
	// the grid side, network frame
	block(w, n, rVC, rIG, -ei)
	block(w, n, rIG, rVC, pt.e)
	block(w, n, rIG, rIG, -g.gridImpedance())
	block(w, n, rIG, 0, -1)
	block(w, n, 0, rIG, -1)
}

// fillL computes the Jacobian of the full equations with an L filter.
func (g *GridFollowing) fillL(pt *followingPoint, d *followingSlopes) {
	const rGamma, rIG = followNext, followNext + 2
	var (
		p, f = &g.par, &g.par.Filter
		w    = g.sparsity.work
		n    = g.sparsity.order
		ei   = conj(pt.e)
		ownZ = complex(-p.Kpc, p.Omega0*f.Lf) // d v_i/d i_f
	)
	// delta turns i_f and v_m
	dF, dM := jtimes(-1, pt.iF), jtimes(-1, pt.vM)
	g.lock(d, followDelta, dM, 0, 0)
	column(w, n, rGamma, followDelta, -dF)
	column(w, n, rIG, followDelta, pt.e*(ownZ*dF+times(p.Kff, dM)+jtimes(1, pt.vI)))
	// eps
	g.lock(d, followEps, 0, 1, 0)
	// v_md
	g.lock(d, followVmd, 0, 0, 1)
	dLim := pt.lim.slope(d.ref)
	column(w, n, rGamma, followVmd, dLim)
	column(w, n, rIG, followVmd, pt.e*times(p.Kpc, dLim))
	// v_bus
	for q := range 2 {
		g.lock(d, q, ei*unit(q), 0, 0)
	}
	block(w, n, rIG, 0, complex(p.Kff-1, 0))
	// gamma, i_g
	block(w, n, rIG, rGamma, times(p.Kic, pt.e))
	block(w, n, rGamma, rIG, -ei)
	block(w, n, rIG, rIG, ownZ-complex(f.Rf, g.frame*f.Lf))
	block(w, n, 0, rIG, -1)
}

// fillWired computes the Jacobian of detail "current loop gone" with an LCL filter.
func (g *GridFollowing) fillWired(pt *followingPoint, d *followingSlopes) {
	const rVC, rIG = followNext, followNext + 2
	var (
		f   = &g.par.Filter
		w   = g.sparsity.work
		n   = g.sparsity.order
		vCW = jtimes(-f.Cf, pt.vC) // d(row of v_c)/d omega
	)
	// delta turns i_g
	column(w, n, rVC, followDelta, jtimes(1, pt.iG))
	column(w, n, rIG, followDelta, jtimes(1, pt.e*pt.vC))
	// eps, v_md
	column(w, n, rVC, followEps, times(g.lock(d, followEps, 0, 1, 0), vCW))
	g.lock(d, followVmd, 0, 0, 1)
	column(w, n, rVC, followVmd, pt.lim.slope(d.ref))
	// v_c
	for q := range 2 {
		u := unit(q)
		dw := g.lock(d, rVC+q, u, 0, 0)
		column(w, n, rVC, rVC+q, pt.lim.slope(jtimes(g.compensation(), u))+times(dw, vCW)-jtimes(pt.omega*f.Cf, u))
	}
	// the grid side, network frame
	block(w, n, rVC, rIG, -conj(pt.e))
	block(w, n, rIG, rVC, pt.e)
	block(w, n, rIG, rIG, -g.gridImpedance())
	block(w, n, rIG, 0, -1)
	block(w, n, 0, rIG, -1)
}

// fillLocked computes the Jacobian of detail "injection only". The columns are those
// of v_bus (2), delta, v_md and, with an LCL filter, v_c.d.
func (g *GridFollowing) fillLocked(pt *followingPoint, d *followingSlopes, v []float64) {
	const rDelta, rVmd, rVC = 2, 3, 4
	var (
		p, f = &g.par, &g.par.Filter
		w    = g.sparsity.work
		n    = g.sparsity.order
		ei   = conj(pt.e)
		zg   = g.gridImpedance()
	)
	for c := range n {
		var dV, dC, dRef complex128 // of v_bus and v_c, own frame, and of i_ref
		var turn, dVmd float64
		switch c {
		case rDelta:
			dV, turn = jtimes(-1, ei*pair(v, 0)), 1
		case rVmd:
			dVmd, dRef = 1, d.ref
		case rVC:
			dC = 1
		default:
			dV = ei * unit(c)
		}
		dG := pt.lim.slope(dRef+jtimes(g.compensation(), dC)) - jtimes(pt.omega*f.Cf, dC)
		dM := dC
		if g.lcl {
			drop := dC - dV - zg*dG
			w[rDelta*n+c], w[rVC*n+c] = imag(drop)/p.V0, real(drop)
		} else {
			dM = dV
			w[rDelta*n+c] = imag(dM)*real(d.y) - real(dM)*imag(d.y)
		}
		w[rVmd*n+c] = p.OmegaV * (real(dM) - dVmd)
		column(w, n, 0, c, -pt.e*(dG+jtimes(turn, pt.iG)))
	}
}

// fillPrimary computes the Jacobian of detail "primary only".
func (g *GridFollowing) fillPrimary(pt *followingPoint, d *followingSlopes, v []float64) {
	const rVC = followNext
	var (
		f  = &g.par.Filter
		w  = g.sparsity.work
		n  = g.sparsity.order
		ei = conj(pt.e)
		zg = g.gridImpedance()
	)
	for c := range n {
		var dV, dC complex128 // of v_bus and v_c, own frame
		var dEps, dVmd float64
		switch {
		case c < followDelta:
			dV = ei * unit(c)
		case c == followDelta:
			dV = jtimes(-1, ei*pair(v, 0))
		case c == followEps:
			dEps = 1
		case c == followVmd:
			dVmd = 1
		default:
			dC = unit(c - rVC)
		}
		dM := dC
		if !g.lcl {
			dM = dV
		}
		dw := g.lock(d, c, dM, dEps, dVmd)
		dLim := pt.lim.slope(times(dVmd, d.ref) + jtimes(g.compensation(), dC))
		dG := dLim - jtimes(pt.omega*f.Cf, dC) - jtimes(dw*f.Cf, pt.vC)
		if g.lcl {
			column(w, n, rVC, c, dC-dV-zg*dG)
		}
		dNet := pt.e * dG
		if c == followDelta {
			dNet += jtimes(1, pt.iNet)
		}
		column(w, n, 0, c, -dNet)
	}
}
