package devices

import (
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// GridParams are the elements of a grid's Thevenin equivalent, one phase of a
// star.
type GridParams struct {
	// Voltage is the inner voltage E, V line-to-line rms, and Frequency its
	// frequency, Hz: the starting values of the setpoints. Both > 0.
	Voltage, Frequency float64
	// R (ohm) and L (H) are >= 0 and not both 0.
	R, L float64
	// VA is the rating that currents are measured by in error norms; 0 means
	// 1/20 of the short-circuit power (a short-circuit ratio of 20: common
	// practice, no source).
	VA float64
}

// GridRating describes a grid by its short-circuit power.
type GridRating struct {
	// Voltage is in V line-to-line rms, Frequency in Hz.
	Voltage, Frequency float64
	// ShortCircuit is the short-circuit power sqrt(3) V I_sc, VA.
	ShortCircuit float64
	// XR is X/R of the short-circuit impedance, > 0; +Inf for R = 0.
	XR float64
	// VA is GridParams.VA.
	VA float64
}

// Params returns the elements: |Z| = V^2 / ShortCircuit. The error joins all
// faults.
func (r GridRating) Params() (GridParams, error) {
	f := faults{device: "grid"}
	f.positive("Voltage", r.Voltage, "V")
	f.positive("Frequency", r.Frequency, "Hz")
	f.positive("ShortCircuit", r.ShortCircuit, "VA")
	if !math.IsInf(r.XR, 1) {
		f.check(r.XR > 0, "XR", r.XR, "", "a value > 0, +Inf for no resistance")
	}
	f.notNegative("VA", r.VA, "VA")
	if err := f.err(); err != nil {
		return GridParams{}, err
	}
	resistance, reactance := SplitXR(BaseOhms(r.Voltage, r.ShortCircuit), r.XR)
	return GridParams{
		Voltage: r.Voltage, Frequency: r.Frequency,
		R: resistance, L: Henries(reactance, r.Frequency), VA: r.VA,
	}, nil
}

func (p GridParams) check(f *faults) {
	f.positive("Voltage", p.Voltage, "V")
	f.positive("Frequency", p.Frequency, "Hz")
	f.notNegative("R", p.R, "ohm")
	f.notNegative("L", p.L, "H")
	if p.R == 0 && p.L == 0 {
		f.add("R = 0 and L = 0: want one of them > 0")
	}
	f.notNegative("VA", p.VA, "VA")
}

// Grid is a voltage of given magnitude and frequency behind an impedance, in
// the network frame:
//
//	d delta/dt = omega_g(t) - omega_f
//	L di/dt = v - E(t) e^{j delta} - (R + j omega_f L) i        flow = i
//
// delta (rad) is the angle of the inner voltage, i (A peak) the current into
// the grid: a grid that supplies a network has it against its voltage. The
// quasi-steady level has delta alone, with
// i = (v - E e^{j delta}) / (R + j omega_f L); so has a grid with L = 0.
//
// Setpoints are voltage (E, V line-to-line rms), frequency (Hz) and phase (rad,
// relative to the start). A phase set at once is a jump of delta (ApplyJumps);
// one that ramps adds the ramp's slope to omega_g while it lasts.
type Grid struct {
	levels
	p                         GridParams
	va                        float64 // short-circuit power, VA
	frame                     float64
	y                         complex128 // 1/(R + j omega_f L)
	voltage, frequency, phase input
	jump                      input // pending, rad
}

// NewGrid returns a grid at level [Full]. The error joins all faults.
func NewGrid(p GridParams) (*Grid, error) {
	f := faults{device: "grid"}
	p.check(&f)
	if err := f.err(); err != nil {
		return nil, err
	}
	z := complex(p.R, RadPerSecond(p.Frequency)*p.L)
	g := &Grid{p: p, va: p.Voltage * p.Voltage / abs(z), voltage: constant(p.Voltage), frequency: constant(p.Frequency)}
	g.SetFrame(0)
	return g, nil
}

// Params returns the parameters. Setpoints don't change them.
func (g *Grid) Params() GridParams { return g.p }

// dynamic tells whether the current is an unknown.
func (g *Grid) dynamic() bool { return g.p.L > 0 && !g.quasi }

// Dims returns two port components and the unknowns delta, i.d, i.q, or delta
// alone.
func (g *Grid) Dims() (ports, own int) {
	if g.dynamic() {
		return 2, 3
	}
	return 2, 1
}

// Mass writes 0 at the terminal, 1 for delta, and L.
func (g *Grid) Mass(port, own []float64) {
	clear(port)
	own[0] = 1
	for k := 1; k < len(own); k++ {
		own[k] = g.p.L
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (g *Grid) SetFrame(speed float64) {
	g.frame = speed
	g.y = inverse(complex(g.p.R, speed*g.p.L))
}

// inner returns the inner voltage E e^{j delta}, V peak.
func (g *Grid) inner(t float64, x []float64) complex128 {
	return times(PeakVolts(g.voltage.value(t)), rotor(x[0]))
}

// current returns the current into the grid.
func (g *Grid) current(t float64, v, x []float64) complex128 {
	if g.dynamic() {
		return pair(x, 1)
	}
	return g.y * (pair(v, 0) - g.inner(t, x))
}

// Eval writes the flow (A), d delta/dt (rad/s) and L di/dt (V).
func (g *Grid) Eval(flow, rate []float64, t float64, v, x []float64) error {
	i := g.current(t, v, x)
	setPair(flow, 0, i)
	rate[0] = g.Speed(t, v, x) - g.frame
	switch {
	case g.dynamic():
		setPair(rate, 1, pair(v, 0)-g.inner(t, x)-complex(g.p.R, g.frame*g.p.L)*i)
	case g.y == 0:
		return errNoImpedance
	}
	return nil
}

// Pattern lists the entries that can be nonzero.
func (g *Grid) Pattern() []solvers.Entry {
	if !g.dynamic() {
		return append(entryBlocks([2]int{0, 0}), entry{Row: 0, Col: 2}, entry{Row: 1, Col: 2})
	}
	p := append(entryDiagonals([2]int{0, 3}, [2]int{3, 0}), entryBlocks([2]int{3, 3})...)
	return append(p, entry{Row: 3, Col: 2}, entry{Row: 4, Col: 2})
}

// Jacobian writes the exact Jacobian.
func (g *Grid) Jacobian(jac []float64, t float64, v, x []float64) {
	turned := jtimes(1, g.inner(t, x)) // d/d delta of the inner voltage
	if !g.dynamic() {
		block(jac, 3, 0, 0, g.y)
		column(jac, 3, 0, 2, -g.y*turned)
		return
	}
	diagonal(jac, 5, 0, 3, 1)
	diagonal(jac, 5, 3, 0, 1)
	block(jac, 5, 3, 3, complex(-g.p.R, -g.frame*g.p.L))
	column(jac, 5, 3, 2, -turned)
}

// TimeDerivative adds what ramps of voltage and frequency do. A phase ramp has
// a constant slope, so nothing comes from it.
func (g *Grid) TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool {
	dv, df := g.voltage.slope(t), g.frequency.slope(t)
	if dv == 0 && df == 0 {
		return false
	}
	rate[0] += RadPerSecond(df)
	de := times(PeakVolts(dv), rotor(x[0]))
	if g.dynamic() {
		rate[1] -= real(de)
		rate[2] -= imag(de)
		return true
	}
	di := g.y * de
	flow[0] -= real(di)
	flow[1] -= imag(di)
	return true
}

// Describe describes the grid.
func (g *Grid) Describe() facet.Description {
	d := facet.Description{
		Kind:      "grid",
		Terminals: []facet.Terminal{{Name: "ac", Flow: facet.FlowHeld}},
		Unknowns:  []facet.Unknown{{Name: "delta", Unit: "rad", Base: 1, Frame: facet.Angle, Dynamics: "primary control"}},
	}
	if g.dynamic() {
		va := g.p.VA
		if va == 0 {
			va = g.va / 20
		}
		i := statePair("i", "A", PeakAmperes(RatedAmperes(va, g.p.Voltage)), true, "network")
		d.Unknowns = append(d.Unknowns, i[:]...)
		d.Terminals[0].Flow = facet.FlowState
	}
	return d
}

// Guess writes the terminal voltage's angle as delta, and the current that the
// phasor model gives with it.
func (g *Grid) Guess(x []float64, t float64, v []float64) {
	x[0] = math.Atan2(v[1], v[0])
	if g.dynamic() {
		setPair(x, 1, g.y*(pair(v, 0)-g.inner(t, x)))
	}
}

// AngleUnknown returns 0, the index of delta.
func (g *Grid) AngleUnknown() int { return 0 }

// Speed returns the grid's angular frequency, rad/s, the slope of a phase ramp
// included.
func (g *Grid) Speed(t float64, v, x []float64) float64 {
	return RadPerSecond(g.frequency.value(t)) + g.phase.slope(t)
}

// Weight returns the short-circuit power, VA.
func (g *Grid) Weight() float64 { return g.va }

// Channels lists p (W generated), q (var generated), both at the terminal, i (A
// rms) and frequency (Hz).
func (g *Grid) Channels() []facet.Channel {
	return []facet.Channel{
		{Name: "p", Unit: "W generated", Doc: "active power supplied at the terminal"},
		{Name: "q", Unit: "var generated", Doc: "reactive power supplied at the terminal"},
		{Name: "i", Unit: "A rms", Doc: "current at the terminal"},
		{Name: "frequency", Unit: "Hz", Doc: "frequency of the inner voltage"},
	}
}

// Measure writes the channels.
func (g *Grid) Measure(dst []float64, t float64, v, x []float64) {
	measureShunt(dst, pair(v, 0), g.current(t, v, x))
	dst[0], dst[1] = -dst[0], -dst[1]
	dst[3] = Hertz(g.Speed(t, v, x))
}

// Energy returns (3/2) L |i|^2 / 2 as stored, nothing if quasi-steady,
// -(3/2) Re(E e^{j delta} i*) as supplied and (3/2) R |i|^2 as dissipated.
func (g *Grid) Energy(t float64, v, x []float64) facet.Energy {
	i := g.current(t, v, x)
	e := facet.Energy{
		Supplied:   -1.5 * dot(g.inner(t, x), i),
		Dissipated: 1.5 * g.p.R * dot(i, i),
	}
	if g.dynamic() {
		e.Stored = 0.75 * g.p.L * dot(i, i)
	}
	return e
}

// Setpoints lists voltage, up to twice the rated one, frequency, from half to
// twice the rated one (a value in rad/s is refused), and phase.
func (g *Grid) Setpoints(t float64) []facet.Setpoint {
	return []facet.Setpoint{
		{
			Name: "voltage", Unit: "V", Doc: "inner voltage, line-to-line rms",
			Min: 0, Max: 2 * g.p.Voltage, Value: g.voltage.value(t),
		},
		{
			Name: "frequency", Unit: "Hz", Doc: "frequency of the inner voltage",
			Min: g.p.Frequency / 2, Max: 2 * g.p.Frequency, Value: g.frequency.value(t),
		},
		{
			Name: "phase", Unit: "rad", Doc: "angle of the inner voltage relative to its start, on top of what the frequency makes of it",
			Min: math.Inf(-1), Max: math.Inf(1), Value: g.phase.value(t),
		},
	}
}

// Set moves a setpoint; see [facet.Adjustable]. A phase set without ramp waits
// for ApplyJumps.
func (g *Grid) Set(name string, t, value, ramp float64) error {
	k, err := checkSet("grid", g.Setpoints(t), name, t, value, ramp)
	if err != nil {
		return err
	}
	inputs := [...]*input{&g.voltage, &g.frequency, &g.phase}
	before := g.phase.value(t)
	inputs[k].set(t, value, ramp)
	if k == 2 {
		g.jump = constant(g.jump.final() + g.phase.value(t) - before)
	}
	return nil
}

// ApplyJumps adds the pending jump of phase to delta.
func (g *Grid) ApplyJumps(x []float64) {
	x[0] += g.jump.final()
	g.jump = constant(0)
}

// WithDetail returns the grid, setpoints included, at another level.
func (g *Grid) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("grid", level)
	if err != nil {
		return nil, err
	}
	c := *g
	c.levels = at
	return &c, nil
}

// AppendBinary appends the setpoints and a pending jump.
func (g *Grid) AppendBinary(b []byte) ([]byte, error) {
	return appendInputs(b, &g.voltage, &g.frequency, &g.phase, &g.jump), nil
}

// UnmarshalBinary restores them.
func (g *Grid) UnmarshalBinary(b []byte) error {
	return readInputs("grid", b, &g.voltage, &g.frequency, &g.phase, &g.jump)
}
