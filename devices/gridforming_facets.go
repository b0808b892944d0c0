package devices

import (
	"fmt"
	"math"
	"slices"

	"islet/solvers"
	"islet/solvers/facet"
)

// TimeDerivative adds the effect of setpoints on a ramp.
func (g *GridForming) TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool {
	du := orders{p: g.pRef.slope(t), q: g.qRef.slope(t), v: g.vRef.slope(t), omega: g.wRef.slope(t)}
	if du == (orders{}) {
		return false
	}
	var (
		pt   formingPoint
		u    = g.orders(t)
		z    = g.at(&pt, u, v, x)
		p, f = &g.par, &g.par.Filter
		dz   = g.drift[:g.nz]
	)
	if g.layout.phase {
		g.primary.lawGradients(&g.slopes, u, pt.s, pt.v)
		d := formingDirection{z: -1}
		d.omega, d.volts = g.primary.lawDrift(u, du, pt.s, pt.v)
		g.addTangent(flow, rate, &pt, &d)
		return true
	}
	dw, dv := g.primary.drift(dz, z, u, du, pt.s)
	for r, a := range dz {
		rate[1+r] += a
	}
	if !g.full() {
		g.primary.gradients(&g.gradient, z, u, pt.s)
		g.addTangent(flow, rate, &pt, &formingDirection{z: -1, omega: dw, volts: dv})
		return true
	}
	rate[0] += dw
	own := 0.0
	if p.OwnSpeed {
		own = dw
	}
	dRef := complex(p.Kpv*dv, 0) + jtimes(own*f.Cf, pt.vC)
	dLim := pt.lim.slope(dRef)
	l := &g.layout
	addPair(rate, l.phi, complex(dv, 0)+times(p.Kaw, dLim-dRef))
	addPair(rate, l.gamma, dLim)
	addPair(rate, l.iF, times(p.Kpc, dLim)+jtimes((own-dw)*f.Lf, pt.iF))
	addPair(rate, l.vC, jtimes(-dw*f.Cf, pt.vC))
	return true
}

// addTangent adds the derivative in direction d to flow and rate.
func (g *GridForming) addTangent(flow, rate []float64, pt *formingPoint, d *formingDirection) {
	g.tangent(g.column, pt, d)
	for k, a := range g.column[:2] {
		flow[k] += a
	}
	for k, a := range g.column[2:] {
		rate[k] += a
	}
}

// addPair adds the complex value z at x[k].
func addPair(x []float64, k int, z complex128) {
	x[k] += real(z)
	x[k+1] += imag(z)
}

// Channels lists the channels: power p and q at the terminal, current i there,
// frequency, voltage v_c of the filter capacitor, the powers the control acts
// on, the bridge's current i_converter, and limiting, the part by which the
// current limit cuts |i_ref| (0 when it doesn't act). With a [LimitImpedance]
// there is also its magnitude, z_limit.
func (g *GridForming) Channels() []facet.Channel {
	list := []facet.Channel{
		{Name: "p", Unit: "W generated", Doc: "active power at the terminal"},
		{Name: "q", Unit: "var generated", Doc: "reactive power at the terminal"},
		{Name: "i", Unit: "A rms", Doc: "current at the terminal"},
		{Name: "frequency", Unit: "Hz", Doc: "frequency ordered by the primary control"},
		{Name: "v_c", Unit: "V line-line rms", Doc: "voltage of the filter capacitor"},
		{Name: "p_control", Unit: "W generated", Doc: "active power the primary control acts on, at the filter capacitor (an oscillator: behind the virtual impedance)"},
		{Name: "q_control", Unit: "var generated", Doc: "reactive power the primary control acts on, at the filter capacitor (an oscillator: behind the virtual impedance)"},
		{Name: "i_converter", Unit: "A rms", Doc: "current of the bridge"},
		{Name: "limiting", Unit: "1", Doc: "part by which the limit cuts the current reference"},
	}
	if g.par.LimitImpedance.Gain > 0 {
		list = append(list, facet.Channel{Name: "z_limit", Unit: "ohm", Doc: "virtual impedance added to limit the current"})
	}
	return list
}

// Indices of channels.
const (
	formingTerminalCurrent  = 2
	formingConverterCurrent = 7
)

// Measure writes the channels into dst.
func (g *GridForming) Measure(dst []float64, t float64, v, x []float64) {
	var pt formingPoint
	u := g.orders(t)
	z := g.at(&pt, u, v, x)
	s := pair(v, 0) * conj(pt.iNet)
	iF, lim := g.converter(&pt)
	dst[0], dst[1] = 1.5*real(s), 1.5*imag(s)
	dst[2] = RMSAmperes(abs(pt.iNet))
	dst[3] = Hertz(pt.omega)
	dst[4] = LineVolts(abs(pt.vC))
	if g.layout.phase {
		z = g.drift[:]
		g.primary.settle(z, u, pt.s, pt.v, pt.omega)
	}
	dst[5], dst[6] = g.primary.seen(z, pt.s)
	dst[7] = RMSAmperes(abs(iF))
	dst[8] = 1 - lim.scale
	if g.par.LimitImpedance.Gain > 0 {
		dst[9] = abs(pt.z - complex(g.par.Rv, g.par.Xv))
	}
}

// converter returns the bridge's current and the state of the limit. Without the
// loops the current is the quasi-steady one, and its reference equals it.
func (g *GridForming) converter(pt *formingPoint) (complex128, saturation) {
	if g.looped() {
		return pt.iF, pt.lim
	}
	iF := pt.iG + jtimes(pt.omega*g.par.Filter.Cf, pt.vC)
	return iF, g.limiter.apply(iF)
}

// Energy returns the energy in the filter's elements that the level keeps
// dynamic, the bridge's power and the filter's losses.
func (g *GridForming) Energy(t float64, v, x []float64) facet.Energy {
	var pt formingPoint
	g.at(&pt, g.orders(t), v, x)
	f, l := &g.par.Filter, &g.layout
	iF, _ := g.converter(&pt)
	var e facet.Energy
	lossF := 1.5 * f.Rf * dot(iF, iF)
	e.Dissipated = lossF + 1.5*f.Rg*dot(pt.iNet, pt.iNet)
	e.Supplied = 1.5*dot(pt.vC, iF) + lossF
	if l.iF >= 0 {
		e.Supplied = 1.5 * dot(pt.vI, iF)
		e.Stored += 0.75 * f.Lf * dot(iF, iF)
	}
	if l.vC >= 0 {
		e.Stored += 0.75 * f.Cf * dot(pt.vC, pt.vC)
	}
	if l.iG >= 0 && !l.static {
		e.Stored += 0.75 * f.Lg * dot(pt.iNet, pt.iNet)
	}
	return e
}

// Setpoints lists p (W) and q (var), what the primary control aims at, voltage
// (V line-line rms) and frequency (Hz), where it starts from. An [Oscillator],
// whose equations divide by it, takes no voltage under 5 % of the rated one.
func (g *GridForming) Setpoints(t float64) []facet.Setpoint {
	s := setpointReach * g.par.Rating
	v, f := LineVolts(g.par.V0), Hertz(g.par.Omega0)
	least := 0.0
	if _, ok := g.par.Primary.(Oscillator); ok {
		least = 0.05 * v
	}
	return []facet.Setpoint{
		{Name: "p", Unit: "W", Doc: "active power P* of the primary control", Min: -s, Max: s, Value: g.pRef.value(t)},
		{Name: "q", Unit: "var", Doc: "reactive power Q* of the primary control", Min: -s, Max: s, Value: g.qRef.value(t)},
		{Name: "voltage", Unit: "V", Doc: "voltage V_0, line-line rms", Min: least, Max: 1.5 * v, Value: LineVolts(g.vRef.value(t))},
		{Name: "frequency", Unit: "Hz", Doc: "frequency omega_0", Min: 0.8 * f, Max: 1.2 * f, Value: Hertz(g.wRef.value(t))},
	}
}

// Set moves a setpoint at time t, over ramp seconds.
func (g *GridForming) Set(name string, t, value, ramp float64) error {
	k, err := checkSet("grid-forming inverter", g.Setpoints(t), name, t, value, ramp)
	if err != nil {
		return err
	}
	switch k {
	case 0:
		g.pRef.set(t, value, ramp)
	case 1:
		g.qRef.set(t, value, ramp)
	case 2:
		g.vRef.set(t, PeakVolts(value), ramp)
	case 3:
		g.wRef.set(t, RadPerSecond(value), ramp)
	}
	return nil
}

// AngleUnknown is 0, delta.
func (g *GridForming) AngleUnknown() int { return 0 }

// Speed returns omega, rad/s.
func (g *GridForming) Speed(t float64, v, x []float64) float64 {
	var pt formingPoint
	g.at(&pt, g.orders(t), v, x)
	return pt.omega
}

// Weight returns the rating, VA.
func (g *GridForming) Weight() float64 { return g.par.Rating }

// CurrentLimit returns I_max and the channel "i_converter", which it limits, or
// the rated current and the channel "i" if there is no limit.
func (g *GridForming) CurrentLimit() (limit float64, channel int) {
	if math.IsInf(g.par.IMax, 1) {
		return g.iBase, formingTerminalCurrent
	}
	return g.par.IMax, formingConverterCurrent
}

// Detail returns the level of detail.
func (g *GridForming) Detail() string { return g.detail }

// Details returns the levels this inverter has, from fine to coarse: "full",
// "current loop gone" (with K_ic > 0), "inner loops gone" and "primary only" (with
// K_iv > 0), "phase only" (with K_iv > 0, and D > 0 of a virtual machine).
func (g *GridForming) Details() []string {
	list := []string{Full}
	if g.par.Kic > 0 {
		list = append(list, CurrentLoopGone)
	}
	if g.par.Kiv > 0 {
		list = append(list, InnerLoopsGone, PrimaryOnly)
		if g.primary.phases() {
			list = append(list, PhaseOnly)
		}
	}
	return list
}

// DroppedDynamics returns the groups of dynamics ([facet.Unknown]) that a level
// leaves out.
func (g *GridForming) DroppedDynamics(level string) []string {
	groups := []string{dynCurrent, dynVoltage, dynFilter, dynNetwork}
	switch level {
	case CurrentLoopGone:
		return groups[:1]
	case InnerLoopsGone:
		return groups[:3]
	case PrimaryOnly:
		return groups
	case PhaseOnly:
		for _, u := range g.primary.unknowns() {
			if !slices.Contains(groups, u.Dynamics) {
				groups = append(groups, u.Dynamics)
			}
		}
		return groups
	}
	return nil
}

// WithDetail returns an inverter of the same parameters, setpoints and frame
// speed at another level, one of Details.
func (g *GridForming) WithDetail(level string) (solvers.Block, error) {
	if !slices.Contains(g.Details(), level) {
		return nil, fmt.Errorf("devices: grid-forming inverter: no detail %q: want one of %q", level, g.Details())
	}
	h := *g
	h.setDetail(level)
	return &h, nil
}

// Kinks names where the equations have kinks: "current limit" at the levels at
// which I_max acts, with a second one where a part of i_ref goes first, and
// "limiting impedance".
func (g *GridForming) Kinks() []string {
	var list []string
	if g.looped() {
		list = g.limiter.kinks()
	}
	if g.par.LimitImpedance.Gain > 0 {
		list = append(list, "limiting impedance")
	}
	return list
}

// NKinks returns the number of kinks.
func (g *GridForming) NKinks() int { return len(g.Kinks()) }

// EvalKinks writes |i_ref| - I_max, with a part of i_ref going first |that part| -
// I_max too, and |i_g| - I_t into dst, A.
func (g *GridForming) EvalKinks(dst []float64, t float64, v, x []float64) {
	var pt formingPoint
	g.at(&pt, g.orders(t), v, x)
	k := 0
	if g.looped() {
		k = g.limiter.evalKinks(dst, pt.iRef)
	}
	if l := &g.par.LimitImpedance; l.Gain > 0 {
		dst[k] = abs(pt.iG) - l.Threshold
	}
}

// AppendBinary appends the setpoints to b.
func (g *GridForming) AppendBinary(b []byte) ([]byte, error) {
	return appendInputs(b, &g.pRef, &g.qRef, &g.vRef, &g.wRef), nil
}

// UnmarshalBinary restores what AppendBinary wrote.
func (g *GridForming) UnmarshalBinary(data []byte) error {
	return readInputs("grid-forming inverter", data, &g.pRef, &g.qRef, &g.vRef, &g.wRef)
}

// Guess writes the steady state that goes with the terminal voltage v at the
// frame's speed: the current at which the primary control orders that speed and
// the voltage that the current leaves at the capacitor. Where v, held for good,
// would ask for more than the rating, the current is scaled down to the rated
// one; a flat start then begins within the inverter's range.
func (g *GridForming) Guess(x []float64, t float64, v []float64) {
	var (
		p, f = &g.par, &g.par.Filter
		u    = g.orders(t)
		vBus = pair(v, 0)
		zg   = g.gridImpedance()
	)
	if !(abs(vBus) > 0.05*g.vBase) { // no voltage to go by (5 %: arbitrary)
		vBus = complex(max(u.v, 0.05*g.vBase), 0)
	}
	iNet := g.steadyCurrent(u, vBus)
	if m := abs(iNet); m > g.iBase {
		iNet = times(g.iBase/m, iNet)
	}
	vC := vBus + zg*iNet
	inner := vC + g.virtualImpedance(iNet)*iNet // V e^{j delta}
	delta := math.Atan2(imag(inner), real(inner))
	ei := rotor(-delta)
	iG := ei * iNet
	vC *= ei
	s := 1.5 * vC * conj(iG)
	x[0] = delta
	l := &g.layout
	if !l.phase {
		g.primary.settle(x[1:1+g.nz], u, stimulus{p: real(s), q: imag(s), i: iG}, abs(inner), g.frame)
	}
	if l.iG >= 0 {
		setPair(x, l.iG, iNet)
	}
	if l.phi < 0 {
		return
	}
	omega := g.frame
	omegaN := p.Omega0
	if p.OwnSpeed {
		omegaN = omega
	}
	iF := iG + jtimes(omega*f.Cf, vC)
	setPair(x, l.phi, times(ratio(1, p.Kiv, 0), iF-times(p.F, iG)-jtimes(omegaN*f.Cf, vC)))
	setPair(x, l.vC, vC)
	if l.gamma >= 0 {
		setPair(x, l.gamma, times(ratio(1, p.Kic, 0), vC+complex(f.Rf, omega*f.Lf)*iF-jtimes(omegaN*f.Lf, iF)))
		setPair(x, l.iF, iF)
	}
}

// steadyCurrent solves the two conditions of a steady state, omega = omega_f and
// V = |v_bus + (Z_g + Z_v) i_g|, for the current i_g in the network frame by
// Newton's method from i_g at P*, Q*. Where the frequency doesn't depend on power
// the first condition says nothing, and p~ = 0 stands for it. It returns the
// starting value if the method doesn't settle.
func (g *GridForming) steadyCurrent(u orders, vBus complex128) complex128 {
	start := times(1/1.5, complex(u.p, -u.q)/conj(vBus))
	w0, _, _ := g.mismatch(u, vBus, start)
	wd, _, _ := g.mismatch(u, vBus, start+complex(g.iBase, 0))
	wq, _, _ := g.mismatch(u, vBus, start+complex(0, g.iBase))
	span := math.Abs(wd-w0) + math.Abs(wq-w0) // rad/s by rated current
	residual := func(i complex128) (a, b float64) {
		dw, dv, slip := g.mismatch(u, vBus, i)
		if span == 0 {
			return slip / g.par.Rating, dv / g.vBase
		}
		return dw / span, dv / g.vBase
	}
	i := start
	h := 1e-6 * g.iBase // difference step: the equations are smooth
	for range 30 {
		a, b := residual(i)
		ad, bd := residual(i + complex(h, 0))
		aq, bq := residual(i + complex(0, h))
		ad, bd, aq, bq = (ad-a)/h, (bd-b)/h, (aq-a)/h, (bq-b)/h
		det := ad*bq - aq*bd
		step := complex((b*aq-a*bq)/det, (a*bd-b*ad)/det)
		size := abs(step)
		if math.IsNaN(size) || math.IsInf(size, 0) {
			return start
		}
		// Half the rated current at most: the equations are quadratic, and from
		// afar a full step may end beyond the angle of largest power.
		i += times(min(1, 0.5*g.iBase/max(size, 1e-300)), step)
		if size < 1e-9*g.iBase {
			return i
		}
	}
	return start
}

// mismatch returns by how much frequency (rad/s) and voltage (V) of a steady
// state with current i in the network frame are off, and p~.
func (g *GridForming) mismatch(u orders, vBus, i complex128) (dw, dv, slip float64) {
	vC := vBus + g.gridImpedance()*i
	inner := vC + g.virtualImpedance(i)*i // V e^{j delta}
	e := complex(1, 0)
	v := abs(inner)
	if v > 0 {
		e = times(1/v, inner)
	}
	s := 1.5 * vC * conj(i)
	in := stimulus{p: real(s), q: imag(s), i: conj(e) * i}
	speed, voltage := g.primary.law(u, in, v)
	return speed - g.frame, voltage - v, g.primary.slip(u, in, v)
}

// virtualImpedance is Z_v + Z_l at current i.
func (g *GridForming) virtualImpedance(i complex128) complex128 {
	z := complex(g.par.Rv, g.par.Xv)
	if l := &g.par.LimitImpedance; l.Gain > 0 {
		zl, _ := l.at(abs(i))
		z += zl
	}
	return z
}
