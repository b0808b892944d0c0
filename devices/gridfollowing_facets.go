package devices

import (
	"fmt"
	"math"
	"slices"

	"islet/solvers"
	"islet/solvers/facet"
)

// TimeDerivative adds the effect of setpoints on a ramp.
func (g *GridFollowing) TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool {
	dp, dq := g.pRef.slope(t), g.qRef.slope(t)
	if dp == 0 && dq == 0 {
		return false
	}
	var pt followingPoint
	g.at(&pt, g.orders(t), v, x)
	dLim := pt.lim.slope(complex(dp/(1.5*pt.vD), -dq/(1.5*pt.vD)))
	p, l := &g.par, &g.layout
	if l.gamma >= 0 {
		addPair(rate, l.gamma, dLim)
	}
	switch {
	case l.iF >= 0:
		addPair(rate, l.iF, times(p.Kpc, dLim))
	case l.gamma >= 0:
		addPair(rate, l.iG, pt.e*times(p.Kpc, dLim))
	case l.iG >= 0:
		addPair(rate, l.vC, dLim)
	default:
		addPair(flow, 0, -pt.e*dLim)
		drop := -g.gridImpedance() * dLim
		switch {
		case l.locked && l.vC >= 0:
			rate[0] += imag(drop) / p.V0
			rate[l.vC] += real(drop)
		case l.vC >= 0:
			addPair(rate, l.vC, drop)
		}
	}
	return true
}

// Channels lists the channels: power p and q at the terminal, current i there,
// frequency of the PLL, the bridge's current i_converter, limiting, the part by
// which the current limit cuts |i_ref| (0 when it doesn't act), and, with an
// LCL filter, the voltage v_c of its capacitor.
func (g *GridFollowing) Channels() []facet.Channel {
	list := []facet.Channel{
		{Name: "p", Unit: "W generated", Doc: "active power at the terminal"},
		{Name: "q", Unit: "var generated", Doc: "reactive power at the terminal"},
		{Name: "i", Unit: "A rms", Doc: "current at the terminal"},
		{Name: "frequency", Unit: "Hz", Doc: "frequency of the PLL"},
		{Name: "i_converter", Unit: "A rms", Doc: "current of the bridge"},
		{Name: "limiting", Unit: "1", Doc: "part by which the limit cuts the current reference"},
	}
	if g.lcl {
		list = append(list, facet.Channel{Name: "v_c", Unit: "V line-line rms", Doc: "voltage of the filter capacitor"})
	}
	return list
}

// Indices of channels.
const (
	followingTerminalCurrent  = 2
	followingConverterCurrent = 4
)

// Measure writes the channels into dst.
func (g *GridFollowing) Measure(dst []float64, t float64, v, x []float64) {
	var pt followingPoint
	g.at(&pt, g.orders(t), v, x)
	s := pair(v, 0) * conj(pt.iNet)
	dst[0], dst[1] = 1.5*real(s), 1.5*imag(s)
	dst[2] = RMSAmperes(abs(pt.iNet))
	dst[3] = Hertz(pt.omega)
	dst[4] = RMSAmperes(abs(pt.iF))
	dst[5] = 1 - pt.lim.scale
	if g.lcl {
		dst[6] = LineVolts(abs(pt.vC))
	}
}

// Energy returns the energy in the filter's elements that the level keeps
// dynamic, the bridge's power and the filter's losses. At the levels without i_g
// nothing is stored, and the bridge gives the power at the terminal and the losses.
func (g *GridFollowing) Energy(t float64, v, x []float64) facet.Energy {
	var pt followingPoint
	g.at(&pt, g.orders(t), v, x)
	f := &g.par.Filter
	lossF := 1.5 * f.Rf * dot(pt.iF, pt.iF)
	e := facet.Energy{Dissipated: lossF}
	if g.lcl {
		e.Dissipated += 1.5 * f.Rg * dot(pt.iNet, pt.iNet)
	}
	switch {
	case g.full():
		e.Supplied = 1.5 * dot(pt.vI, pt.iF)
		e.Stored = 0.75 * f.Lf * dot(pt.iF, pt.iF)
	case g.wired():
		e.Supplied = 1.5*dot(pt.vC, pt.iF) + lossF
	default:
		e.Supplied = 1.5*dot(pair(v, 0), pt.iNet) + e.Dissipated
		return e
	}
	if g.lcl {
		e.Stored += 0.75 * (f.Cf*dot(pt.vC, pt.vC) + f.Lg*dot(pt.iNet, pt.iNet))
	}
	return e
}

// Setpoints lists p (W) and q (var).
func (g *GridFollowing) Setpoints(t float64) []facet.Setpoint {
	s := setpointReach * g.par.Rating
	return []facet.Setpoint{
		{Name: "p", Unit: "W", Doc: "active power P* where the PLL measures", Min: -s, Max: s, Value: g.pRef.value(t)},
		{Name: "q", Unit: "var", Doc: "reactive power Q* where the PLL measures", Min: -s, Max: s, Value: g.qRef.value(t)},
	}
}

// Set moves a setpoint at time t, over ramp seconds.
func (g *GridFollowing) Set(name string, t, value, ramp float64) error {
	k, err := checkSet("grid-following inverter", g.Setpoints(t), name, t, value, ramp)
	if err != nil {
		return err
	}
	[]*input{&g.pRef, &g.qRef}[k].set(t, value, ramp)
	return nil
}

// CurrentLimit returns I_max and the channel "i_converter", which it limits, or
// the rated current and the channel "i" if there is no limit.
func (g *GridFollowing) CurrentLimit() (limit float64, channel int) {
	if math.IsInf(g.par.IMax, 1) {
		return g.iBase, followingTerminalCurrent
	}
	return g.par.IMax, followingConverterCurrent
}

// Detail returns the level of detail.
func (g *GridFollowing) Detail() string { return g.detail }

// Details returns the levels this inverter has, from fine to coarse: "full",
// "current loop gone" and "primary only" (with K_ic > 0), "injection only" (with K_i
// > 0 too).
func (g *GridFollowing) Details() []string {
	switch {
	case !(g.par.Kic > 0):
		return []string{Full}
	case !(g.par.Ki > 0):
		return []string{Full, CurrentLoopGone, PrimaryOnly}
	}
	return []string{Full, CurrentLoopGone, PrimaryOnly, InjectionOnly}
}

// DroppedDynamics returns the groups of dynamics ([facet.Unknown]) that a level
// leaves out.
func (g *GridFollowing) DroppedDynamics(level string) []string {
	groups := []string{dynCurrent, dynFilter, dynNetwork}
	if !g.lcl {
		groups = groups[:1]
	}
	switch level {
	case CurrentLoopGone:
		return groups[:1]
	case PrimaryOnly:
		return groups
	case InjectionOnly:
		return append(groups, dynPLL)
	}
	return nil
}

// WithDetail returns an inverter of the same parameters, setpoints and frame
// speed at another level, one of Details.
func (g *GridFollowing) WithDetail(level string) (solvers.Block, error) {
	if !slices.Contains(g.Details(), level) {
		return nil, fmt.Errorf("devices: grid-following inverter: no detail %q: want one of %q", level, g.Details())
	}
	h := *g
	h.setDetail(level)
	return &h, nil
}

// Kinks names where the equations have kinks: "current limit", with a second one
// where a part of i_ref goes first, and "speed limit" of the PLL.
func (g *GridFollowing) Kinks() []string {
	list := g.limiter.kinks()
	if g.speedLimited() {
		list = append(list, "speed limit")
	}
	return list
}

// speedLimited tells whether there is a speed limit at this level.
func (g *GridFollowing) speedLimited() bool {
	return !g.layout.locked && !math.IsInf(g.par.SpeedLimit, 1)
}

// NKinks returns the number of kinks.
func (g *GridFollowing) NKinks() int { return len(g.Kinks()) }

// EvalKinks writes |i_ref| - I_max (A), with a part of i_ref going first |that
// part| - I_max too, and |dw*| - its limit (rad/s) into dst.
func (g *GridFollowing) EvalKinks(dst []float64, t float64, v, x []float64) {
	var pt followingPoint
	g.at(&pt, g.orders(t), v, x)
	k := g.limiter.evalKinks(dst, pt.iRef)
	if g.speedLimited() {
		dst[k] = math.Abs(pt.wanted) - g.par.SpeedLimit
	}
}

// AppendBinary appends the setpoints to b.
func (g *GridFollowing) AppendBinary(b []byte) ([]byte, error) {
	return appendInputs(b, &g.pRef, &g.qRef), nil
}

// UnmarshalBinary restores what AppendBinary wrote.
func (g *GridFollowing) UnmarshalBinary(data []byte) error {
	return readInputs("grid-following inverter", data, &g.pRef, &g.qRef)
}

// Guess writes the steady state that goes with the terminal voltage v at the
// frame's speed. The voltage over an LCL filter's grid side is found by
// repetition, since the current depends on the voltage behind it; where P* and
// Q* can't be reached the result is near the limit of what can.
func (g *GridFollowing) Guess(x []float64, t float64, v []float64) {
	var (
		p, f = &g.par, &g.par.Filter
		u    = g.orders(t)
		vBus = pair(v, 0)
		vM   = vBus
		iRef complex128 // own frame
		iNet complex128
		e    complex128
		omg  = g.frame
	)
	if !(abs(vBus) > 0.05*p.V0) { // no voltage to go by (5 %: arbitrary)
		vBus = complex(p.V0, 0)
		vM = vBus
	}
	for range 50 {
		m := abs(vM)
		if m == 0 {
			break
		}
		e = times(1/m, vM)
		vD := max(m, p.VFloor)
		vC := 0.0
		if g.lcl {
			vC = m
		}
		iRef = g.limiter.apply(complex(u.p/(1.5*vD), -u.q/(1.5*vD)+g.compensation()*vC)).out
		iNet = e * (iRef - complex(0, omg*f.Cf*vC))
		if !g.lcl {
			break
		}
		// Half of the correction: the full one diverges on weak coupling.
		next := vBus + g.gridImpedance()*iNet
		vM += times(0.5, next-vM)
	}
	m := abs(vM)
	l := &g.layout
	x[0] = math.Atan2(imag(vM), real(vM))
	x[l.vMD] = m
	own := complex(m, 0)
	if l.eps >= 0 {
		x[l.eps] = ratio(1, p.Ki, 0) * min(max(omg-p.Omega0, -p.SpeedLimit), p.SpeedLimit)
	}
	if l.gamma >= 0 {
		vI := own + complex(f.Rf, (omg-p.Omega0)*f.Lf)*iRef - times(p.Kff, own)
		setPair(x, l.gamma, times(ratio(1, p.Kic, 0), vI))
	}
	if l.iF >= 0 {
		setPair(x, l.iF, iRef)
	}
	switch {
	case l.vC >= 0 && l.locked:
		x[l.vC] = m
	case l.vC >= 0:
		setPair(x, l.vC, own)
	}
	if l.iG >= 0 {
		setPair(x, l.iG, iNet)
	}
}
