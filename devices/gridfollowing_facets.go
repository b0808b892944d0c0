package devices

import (
	"fmt"
	"math"

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
	switch {
	case g.full() && g.lcl:
		addPair(rate, 3, dLim)
		addPair(rate, 5, times(g.par.Kpc, dLim))
	case g.full():
		addPair(rate, 3, dLim)
		addPair(rate, 5, pt.e*times(g.par.Kpc, dLim))
	default:
		addPair(flow, 0, -pt.e*dLim)
		if g.lcl {
			addPair(rate, 3, -g.gridImpedance()*dLim)
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

// Energy returns the energy in the filter, the bridge's power and the filter's
// losses. At detail "primary only" nothing is stored, and the bridge gives the
// power at the terminal and the losses.
func (g *GridFollowing) Energy(t float64, v, x []float64) facet.Energy {
	var pt followingPoint
	g.at(&pt, g.orders(t), v, x)
	f := &g.par.Filter
	e := facet.Energy{Dissipated: 1.5 * f.Rf * dot(pt.iF, pt.iF)}
	if g.lcl {
		e.Dissipated += 1.5 * f.Rg * dot(pt.iNet, pt.iNet)
	}
	if !g.full() {
		e.Supplied = 1.5*dot(pair(v, 0), pt.iNet) + e.Dissipated
		return e
	}
	e.Supplied = 1.5 * dot(pt.vI, pt.iF)
	e.Stored = 0.75 * f.Lf * dot(pt.iF, pt.iF)
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

// Details returns the levels: "full", "primary only".
func (g *GridFollowing) Details() []string { return []string{Full, PrimaryOnly} }

// WithDetail returns an inverter of the same parameters, setpoints and frame
// speed at another level.
func (g *GridFollowing) WithDetail(level string) (solvers.Block, error) {
	if level != Full && level != PrimaryOnly {
		return nil, fmt.Errorf("devices: grid-following inverter: no detail %q: want one of %q", level, g.Details())
	}
	h := *g
	h.setDetail(level)
	return &h, nil
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
		iRef = saturate(complex(u.p/(1.5*vD), -u.q/(1.5*vD)+g.compensation()*vC), p.IMax).out
		iNet = e * (iRef - complex(0, omg*f.Cf*vC))
		if !g.lcl {
			break
		}
		// Half of the correction: the full one diverges on weak coupling.
		next := vBus + g.gridImpedance()*iNet
		vM += times(0.5, next-vM)
	}
	m := abs(vM)
	x[0] = math.Atan2(imag(vM), real(vM))
	x[1] = ratio(1, p.Ki, 0) * min(max(omg-p.Omega0, -p.SpeedLimit), p.SpeedLimit)
	x[2] = m
	own := complex(m, 0)
	if g.full() {
		vI := own + complex(f.Rf, (omg-p.Omega0)*f.Lf)*iRef - times(p.Kff, own)
		setPair(x, 3, times(ratio(1, p.Kic, 0), vI))
	}
	switch {
	case g.full() && g.lcl:
		setPair(x, 5, iRef)
		setPair(x, 7, own)
		setPair(x, 9, iNet)
	case g.full():
		setPair(x, 5, iNet)
	case g.lcl:
		setPair(x, 3, own)
	}
}
