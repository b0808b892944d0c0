package devices

import (
	"encoding"
	"errors"

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
	Primary PrimaryControl // [Droop]
	Rv, Xv  float64        // virtual impedance Z_v = R_v + j X_v, ohm (X_v at nominal frequency)

	Kpv  float64 // K_pv of the voltage loop, A/V, >= 0
	Kiv  float64 // K_iv, A/(V s), >= 0
	F    float64 // feed-forward of i_g to the current reference, 0 to 1
	Kaw  float64 // K_aw, anti-windup of the voltage loop, V/A, >= 0; 1/K_pv is the common choice
	Kpc  float64 // K_pc of the current loop, V/A, > 0
	Kic  float64 // K_ic, V/(A s), >= 0
	IMax float64 // largest |i_ref|, A peak, > 0; +Inf for no limit

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
		f.add("Primary is missing: want a Droop")
	} else {
		p.Primary.check(f)
	}
	f.finite("Rv", p.Rv, "ohm")
	f.finite("Xv", p.Xv, "ohm")
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
	p.Filter.check(f, false)
	return f.err()
}

// setpointReach bounds setpoints of power, as a multiple of the rating: wide
// enough for overload studies, narrow enough to catch a wrong unit.
const setpointReach = 2

// GridForming is a grid-forming inverter: a bridge, averaged over a switching
// period, with an LCL filter, a current and a voltage loop in cascade, an
// optional virtual impedance and a primary control that orders frequency and
// voltage. Its own frame turns at omega, and x = x_d + j x_q in that frame is
// e^{-j delta} times the network-frame value:
//
//	d delta/dt  = omega - omega_f
//	voltage     dphi/dt   = v_ref - v_c + K_aw (i_ref' - i_ref)        v_ref = V - Z_v i_g
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
// the current limit and the virtual impedance added. omega and V come from the
// primary control, see [Droop].
//
// i_ref' is i_ref limited in magnitude to I_max, its angle kept. While the
// limit acts, K_aw draws phi back: K_iv phi then loses the excess current with
// the time constant 1/(K_iv K_aw), K_pv/K_iv for K_aw = 1/K_pv (tracking time =
// reset time). A steady state with the limit acting has v_c = v_ref -
// K_aw (1/s - 1) i_ref', s = |i_ref'|/|i_ref|: the limit then works as an added
// virtual resistance that holds |i_f| at I_max.
//
// Own unknowns, in this order: delta (rad), the unknowns of the primary control
// (P in W and Q in var for droop), phi (V s), gamma (A s), i_f (A), v_c (V), each
// a d, q pair in the own frame, and i_g (A), a network-frame pair, the current
// out of the inverter. The flow into the block is -i_g.
//
// Detail "primary only" keeps delta and the primary control. Everything else is
// at its quasi-steady state, with the reactance of L_g at the frame's speed:
//
//	(Z_v + R_g + j omega_f L_g) i_g = V - e^{-j delta} v_bus      v_c = V - Z_v i_g
//
// It has no current limit, since the current is not held by a loop; the channel
// "limiting" tells by how much a limit would have to act.
//
// A GridForming is no use to two goroutines at once.
type GridForming struct {
	par     GridFormingParams
	detail  string
	primary primary
	nz      int // unknowns of the primary control

	pRef, qRef, vRef, wRef input
	frame                  float64 // omega_f, rad/s

	vBase, iBase float64
	sparsity     *sparsity
	gradient     primaryGradient
	drift        [maxPrimary]float64 // scratch of TimeDerivative
}

var (
	_ solvers.Block              = (*GridForming)(nil)
	_ solvers.Differentiable     = (*GridForming)(nil)
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
		par:   p,
		pRef:  constant(p.P),
		qRef:  constant(p.Q),
		vRef:  constant(p.V0),
		wRef:  constant(p.Omega0),
		vBase: p.V0,
		iBase: p.Rating / (1.5 * p.V0),
	}
	g.setDetail(Full)
	return g, nil
}

// setDetail builds what depends on the level of detail.
func (g *GridForming) setDetail(level string) {
	g.detail = level
	g.primary = g.par.Primary.build(g.par.Rating)
	g.nz = len(g.primary.unknowns())
	g.gradient = primaryGradient{}
	_, own := g.Dims()
	unknowns := g.Describe().Unknowns
	var (
		rnd  = scatter(1)
		v, x = make([]float64, 2), make([]float64, own)
	)
	frame := g.frame
	g.sparsity = newSparsity(2 + own)
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
func (g *GridForming) full() bool { return g.detail == Full }

// Params returns the parameters the inverter was built with; setpoints moved
// since then don't show in them.
func (g *GridForming) Params() GridFormingParams { return g.par }

// Dims returns 2 port components and the number of unknowns: 13 with droop, 3
// at detail "primary only".
func (g *GridForming) Dims() (ports, own int) {
	if g.full() {
		return 2, 11 + g.nz
	}
	return 2, 1 + g.nz
}

// Mass writes no mass at the terminal, and L_f, C_f and L_g for the filter.
func (g *GridForming) Mass(port, own []float64) {
	clear(port)
	for i := range own {
		own[i] = 1
	}
	if g.full() {
		k := 5 + g.nz
		f := &g.par.Filter
		own[k], own[k+1] = f.Lf, f.Lf
		own[k+2], own[k+3] = f.Cf, f.Cf
		own[k+4], own[k+5] = f.Lg, f.Lg
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (g *GridForming) SetFrame(speed float64) { g.frame = speed }

// Describe describes the terminal and the unknowns.
func (g *GridForming) Describe() facet.Description {
	u := []facet.Unknown{{Name: "delta", Unit: "rad", Base: 1, Frame: facet.Angle, Dynamics: "primary control"}}
	u = append(u, g.primary.unknowns()...)
	d := facet.Description{Kind: "grid-forming inverter"}
	if !g.full() {
		d.Terminals = []facet.Terminal{{Name: "ac", Flow: facet.FlowHeld}}
		d.Unknowns = u
		return d
	}
	add := func(p [2]facet.Unknown) { u = append(u, p[:]...) }
	add(statePair("phi", "V s", ratio(g.iBase, g.par.Kiv, g.vBase/g.par.Omega0), false, "voltage loop"))
	add(statePair("gamma", "A s", ratio(g.vBase, g.par.Kic, g.iBase/g.par.Omega0), false, "current loop"))
	add(statePair("i_f", "A", g.iBase, false, "filter"))
	add(statePair("v_c", "V", g.vBase, false, "filter"))
	add(statePair("i_g", "A", g.iBase, true, "network"))
	d.Terminals = []facet.Terminal{{Name: "ac", Flow: facet.FlowState}}
	d.Unknowns = u
	return d
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
	s          stimulus
	omega, v   float64    // ordered by the primary control
	omegaN     float64    // of the decoupling terms
	err        complex128 // v_ref - v_c
	iRef       complex128
	lim        saturation // of i_ref
	vI         complex128
}

// at computes the point. z are the unknowns of the primary control.
func (g *GridForming) at(pt *formingPoint, u orders, v, x []float64) (z []float64) {
	p := &g.par
	z = x[1 : 1+g.nz]
	pt.e = rotor(x[0])
	pt.v = g.primary.voltage(z, u)
	zv := complex(p.Rv, p.Xv)
	if !g.full() {
		ei := conj(pt.e)
		pt.iG = (complex(pt.v, 0) - ei*pair(v, 0)) / (zv + g.gridImpedance())
		pt.iNet = pt.e * pt.iG
		pt.vC = complex(pt.v, 0) - zv*pt.iG
		sC := pt.vC * conj(pt.iG)
		pt.s = stimulus{p: 1.5 * real(sC), q: 1.5 * imag(sC), i: pt.iG}
		pt.omega = g.primary.speed(z, u, pt.s)
		return z
	}
	k := 1 + g.nz
	y := x[k : k+10]
	pt.phi, pt.gamma = complex(y[0], y[1]), complex(y[2], y[3])
	pt.iF, pt.vC, pt.iNet = complex(y[4], y[5]), complex(y[6], y[7]), complex(y[8], y[9])
	pt.iG = conj(pt.e) * pt.iNet
	sC := pt.vC * conj(pt.iG)
	pt.s = stimulus{p: 1.5 * real(sC), q: 1.5 * imag(sC), i: pt.iG}
	pt.omega = g.primary.speed(z, u, pt.s)
	pt.omegaN = p.Omega0
	if p.OwnSpeed {
		pt.omegaN = pt.omega
	}
	pt.err = complex(pt.v, 0) - zv*pt.iG - pt.vC
	pt.iRef = times(p.Kpv, pt.err) + times(p.Kiv, pt.phi) + times(p.F, pt.iG) + jtimes(pt.omegaN*p.Filter.Cf, pt.vC)
	pt.lim = saturate(pt.iRef, p.IMax)
	pt.vI = times(p.Kpc, pt.lim.out-pt.iF) + times(p.Kic, pt.gamma) + jtimes(pt.omegaN*p.Filter.Lf, pt.iF)
	return z
}

// gridImpedance is R_g + j omega_f L_g.
func (g *GridForming) gridImpedance() complex128 {
	return complex(g.par.Filter.Rg, g.frame*g.par.Filter.Lg)
}

// Eval writes the current into the terminal and the right-hand sides.
func (g *GridForming) Eval(flow, rate []float64, t float64, v, x []float64) error {
	var pt formingPoint
	u := g.orders(t)
	z := g.at(&pt, u, v, x)
	if !g.full() && g.gridImpedance()+complex(g.par.Rv, g.par.Xv) == 0 {
		return errors.New("devices: grid-forming inverter: nothing between v_c and the terminal: " +
			"Rg + Rv = 0, and Xv + omega_f Lg = 0 at this speed of the frame")
	}
	flow[0], flow[1] = -real(pt.iNet), -imag(pt.iNet)
	rate[0] = pt.omega - g.frame
	g.primary.rates(rate[1:1+g.nz], z, u, pt.s)
	if !g.full() {
		return nil
	}
	p, f := &g.par, &g.par.Filter
	r := rate[1+g.nz:]
	r = r[:10]
	cut := pt.lim.out - pt.iRef
	setPair(r, 0, pt.err+times(p.Kaw, cut))
	setPair(r, 2, pt.lim.out-pt.iF)
	setPair(r, 4, pt.vI-pt.vC-complex(f.Rf, pt.omega*f.Lf)*pt.iF)
	setPair(r, 6, pt.iF-pt.iG-jtimes(pt.omega*f.Cf, pt.vC))
	setPair(r, 8, pt.e*pt.vC-pair(v, 0)-g.gridImpedance()*pt.iNet)
	return nil
}

// Pattern lists the entries of the Jacobian. With a finite I_max it holds those
// of a limiting inverter as well.
func (g *GridForming) Pattern() []solvers.Entry { return g.sparsity.entries }

// Jacobian writes the exact Jacobian. At the kink of the current limit it is
// that of the side that doesn't limit.
func (g *GridForming) Jacobian(jac []float64, t float64, v, x []float64) {
	g.fill(g.orders(t), v, x)
	g.sparsity.store(jac)
}

// fill computes the Jacobian into the work matrix.
func (g *GridForming) fill(u orders, v, x []float64) {
	var pt formingPoint
	z := g.at(&pt, u, v, x)
	g.primary.gradients(&g.gradient, z, u, pt.s)
	if g.full() {
		g.fillFull(&pt)
	} else {
		g.fillPrimary(&pt, v)
	}
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
		zv   = complex(p.Rv, p.Xv)
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
	dErr := -zv * dG
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
		dErr := -zv * dG
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

// fillPrimary computes the Jacobian of the equations of detail "primary only".
func (g *GridForming) fillPrimary(pt *formingPoint, v []float64) {
	var (
		d  = &g.gradient
		w  = g.sparsity.work
		n  = g.sparsity.order
		zv = complex(g.par.Rv, g.par.Xv)
		y  = 1 / (zv + g.gridImpedance())
		ei = conj(pt.e)
	)
	const rDelta, rZ = 2, 3
	for c := range n {
		var (
			dU     complex128 // of V - e^{-j delta} v_bus
			turn   complex128 // of i_g in the network frame, by the angle
			dw, dv float64
		)
		k := c - rZ
		switch {
		case c < rDelta:
			dU = -ei * unit(c)
		case c == rDelta:
			dU = jtimes(1, ei*pair(v, 0))
			turn = jtimes(1, pt.iNet)
		default:
			dw, dv = d.omegaZ[k], d.vZ[k]
			dU = complex(dv, 0)
		}
		dG := y * dU
		dC := complex(dv, 0) - zv*dG
		dS := dC*conj(pt.iG) + pt.vC*conj(dG)
		in := [4]float64{1.5 * real(dS), 1.5 * imag(dS), real(dG), imag(dG)}
		for i, a := range in {
			dw += d.omegaS[i] * a
		}
		w[rDelta*n+c] = dw
		for r := range g.nz {
			sum := 0.0
			for i, a := range in {
				sum += d.rateS[r][i] * a
			}
			if k >= 0 {
				sum += d.rateZ[r][k]
			}
			w[(rZ+r)*n+c] = sum
		}
		column(w, n, 0, c, -pt.e*dG-turn)
	}
}
