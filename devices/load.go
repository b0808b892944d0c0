package devices

import (
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// DefaultQualityFactor is omega L / R of an inductor in parallel with other
// elements where none is given. A DC offset trapped in the inductor, which shows
// as ripple at the frame's speed, decays with the time constant
// quality/omega: 64 ms at 50 Hz, so that 1 % is left after 0.3 s (a lossless
// inductor on a stiff bus keeps it for ever). The resistance draws 1/20 of the
// inductor's vars as active power, which ratings take out of the resistor in
// parallel. Common practice, no source.
const DefaultQualityFactor = 20

// LoadParams are the elements of a parallel load, one phase of a star.
type LoadParams struct {
	// Voltage is the rated voltage (V line-to-line rms) and Frequency the
	// rated frequency (Hz). Setpoint p and the base of the inductor's current
	// refer to them. Both > 0.
	Voltage, Frequency float64
	// R is the resistor, ohm; 0 for none.
	R float64
	// L is the inductor, H, 0 for none, and RL its series resistance, ohm.
	// With RL = 0 a DC offset in the inductor decays through the network only.
	L, RL float64
	// C is the capacitor, F; 0 for none.
	C float64
}

// LoadRating describes a parallel load by the power it draws at rated voltage
// and frequency.
type LoadRating struct {
	// Voltage is in V line-to-line rms, Frequency in Hz.
	Voltage, Frequency float64
	// P is the total active power, W, >= 0.
	P float64
	// Q is the total reactive power, var, positive if inductive.
	Q float64
	// QCapacitive is how much the capacitor delivers, var, >= 0; the inductor
	// then draws Q + QCapacitive. Less than -Q counts as -Q, so that 0 leaves
	// either inductor or capacitor, by the sign of Q.
	QCapacitive float64
	// QualityFactor is omega L / R of the inductor at rated frequency. 0 means
	// DefaultQualityFactor; +Inf a lossless inductor.
	QualityFactor float64
}

// Params returns the elements that draw exactly P and Q. The error joins all
// faults.
func (r LoadRating) Params() (LoadParams, error) {
	f := faults{device: "load"}
	f.positive("Voltage", r.Voltage, "V")
	f.positive("Frequency", r.Frequency, "Hz")
	f.notNegative("P", r.P, "W")
	f.finite("Q", r.Q, "var")
	f.notNegative("QCapacitive", r.QCapacitive, "var")
	if len(f.errs) == 0 && r.P == 0 && r.Q == 0 && r.QCapacitive == 0 {
		f.add("P, Q and QCapacitive are 0: want one that isn't")
	}
	quality := checkQuality(&f, r.QualityFactor)
	if err := f.err(); err != nil {
		return LoadParams{}, err
	}
	qc := max(r.QCapacitive, -r.Q)
	ql := r.Q + qc
	p := LoadParams{Voltage: r.Voltage, Frequency: r.Frequency}
	p.L, p.RL = shuntInductor(ql, r.Voltage, r.Frequency, quality)
	p.C = FaradsFromVars(qc, r.Voltage, r.Frequency)
	switch lost := ql / quality; {
	case r.P < lost*(1-1e-12):
		f.add("P = %v W: want at least %v W, what the inductor of %v var draws with a quality factor of %v, or a higher quality factor",
			r.P, lost, ql, quality)
		return LoadParams{}, f.err()
	case r.P > lost*(1+1e-12):
		p.R = BaseOhms(r.Voltage, r.P-lost)
	}
	return p, nil
}

// checkQuality returns the quality factor, or the default if it is 0.
func checkQuality(f *faults, quality float64) float64 {
	if quality == 0 {
		return DefaultQualityFactor
	}
	if !math.IsInf(quality, 1) {
		f.check(quality > 0, "QualityFactor", quality, "", "a value > 0, +Inf for lossless, 0 for the default")
	}
	return quality
}

// shuntInductor returns the series L (H) and R (ohm) that draw vars at lineRMS
// and hertz with quality = omega L / R. The admittance (1/X) / (1/quality + j)
// draws V^2 / (X (1 + 1/quality^2)) var, and vars/quality W.
func shuntInductor(vars, lineRMS, hertz, quality float64) (l, r float64) {
	if vars == 0 {
		return 0, 0
	}
	x := BaseOhms(lineRMS, vars) / (1 + 1/(quality*quality))
	return Henries(x, hertz), x / quality
}

func (p LoadParams) check(f *faults) {
	f.positive("Voltage", p.Voltage, "V")
	f.positive("Frequency", p.Frequency, "Hz")
	f.notNegative("R", p.R, "ohm")
	f.notNegative("L", p.L, "H")
	f.notNegative("RL", p.RL, "ohm")
	f.notNegative("C", p.C, "F")
	if p.L == 0 && p.RL != 0 {
		f.add("RL = %v ohm without L: want L > 0, or the resistance as R", p.RL)
	}
	if p.R == 0 && p.L == 0 && p.C == 0 {
		f.add("R, L and C are 0: want one of them > 0")
	}
}

// Load is a parallel connection of a resistor, an inductor with series
// resistance and a capacitor from its terminal to neutral, in the network
// frame:
//
//	L di_l/dt = v - (R_L + j omega_f L) i_l
//	flow = (G(t) + j omega_f C) v + i_l          and a mass of C
//
// Elements may be missing. The quasi-steady level has no unknowns, with
// i_l = v / (R_L + j omega_f L), and no mass.
//
// Setpoint p, there if the load has a resistor, is the total active power at
// rated voltage and frequency. It acts on G alone: a resistor is switched, the
// reactive elements stay.
type Load struct {
	levels
	p      LoadParams
	frame  float64
	yl     complex128 // 1/(R_L + j omega_f L)
	square float64    // V^2, so that G = (p - pl)/V^2
	pl     float64    // what the inductor's resistance draws at rating, W
	least  float64    // lower bound of setpoint p, W
	base   float64    // current at rating, A peak: the load's or the inductor's
	power  input      // setpoint p, W; unused without a resistor
}

// NewLoad returns a load at level [Full]. The error joins all faults.
func NewLoad(p LoadParams) (*Load, error) {
	f := faults{device: "load"}
	p.check(&f)
	if err := f.err(); err != nil {
		return nil, err
	}
	w := RadPerSecond(p.Frequency)
	l := &Load{p: p, square: p.Voltage * p.Voltage}
	rated, yl := complex(0, w*p.C), complex(0, 0)
	if p.L > 0 {
		yl = inverse(complex(p.RL, w*p.L))
		rated += yl
		l.pl = l.square * real(yl)
	}
	if p.R > 0 {
		rated += complex(1/p.R, 0)
		l.power = constant(l.pl + l.square/p.R)
		l.least = l.pl
		if p.C == 0 {
			l.least += 1e-3 * l.square / p.R
		}
	}
	// A capacitor may hide much of the inductor's current from the terminal.
	l.base = max(abs(rated), abs(yl)) * PeakVolts(p.Voltage)
	l.SetFrame(0)
	return l, nil
}

// Params returns the parameters. Setpoint p doesn't change them.
func (l *Load) Params() LoadParams { return l.p }

// dynamic tells whether the inductor's current is an unknown.
func (l *Load) dynamic() bool { return l.p.L > 0 && !l.quasi }

// Dims returns two port components and the unknowns i_l.d, i_l.q, or none.
func (l *Load) Dims() (ports, own int) {
	if l.dynamic() {
		return 2, 2
	}
	return 2, 0
}

// Mass writes C at the terminal (0 at the quasi-steady level) and L.
func (l *Load) Mass(port, own []float64) {
	c := l.p.C
	if l.quasi {
		c = 0
	}
	port[0], port[1] = c, c
	for k := range own {
		own[k] = l.p.L
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (l *Load) SetFrame(speed float64) {
	l.frame = speed
	l.yl = 0
	if l.p.L > 0 {
		l.yl = inverse(complex(l.p.RL, speed*l.p.L))
	}
}

// conductance returns G(t), S.
func (l *Load) conductance(t float64) float64 {
	if l.p.R == 0 {
		return 0
	}
	return (l.power.value(t) - l.pl) / l.square
}

// current returns the inductor's current and the flow.
func (l *Load) current(t float64, v, x []float64) (il, flow complex128) {
	volts := pair(v, 0)
	if l.dynamic() {
		il = pair(x, 0)
	} else {
		il = l.yl * volts
	}
	return il, complex(l.conductance(t), l.frame*l.p.C)*volts + il
}

// Eval writes the flow (A) and L di_l/dt (V).
func (l *Load) Eval(flow, rate []float64, t float64, v, x []float64) error {
	il, i := l.current(t, v, x)
	setPair(flow, 0, i)
	switch {
	case l.dynamic():
		setPair(rate, 0, pair(v, 0)-complex(l.p.RL, l.frame*l.p.L)*il)
	case l.p.L > 0 && l.yl == 0:
		return errNoImpedance
	}
	return nil
}

// Pattern lists the entries that can be nonzero.
func (l *Load) Pattern() []solvers.Entry {
	if !l.dynamic() {
		return entryBlocks([2]int{0, 0})
	}
	return append(entryBlocks([2]int{0, 0}, [2]int{2, 2}), entryDiagonals([2]int{0, 2}, [2]int{2, 0})...)
}

// Jacobian writes the exact Jacobian.
func (l *Load) Jacobian(jac []float64, t float64, v, x []float64) {
	y := complex(l.conductance(t), l.frame*l.p.C)
	if !l.dynamic() {
		block(jac, 2, 0, 0, y+l.yl)
		return
	}
	block(jac, 4, 0, 0, y)
	diagonal(jac, 4, 0, 2, 1)
	diagonal(jac, 4, 2, 0, 1)
	block(jac, 4, 2, 2, complex(-l.p.RL, -l.frame*l.p.L))
}

// TimeDerivative adds dG/dt v while setpoint p ramps.
func (l *Load) TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool {
	slope := l.power.slope(t)
	if slope == 0 {
		return false
	}
	flow[0] += slope / l.square * v[0]
	flow[1] += slope / l.square * v[1]
	return true
}

// Describe describes the load. Its terminal is held unless all it has is an
// inductor whose current is an unknown.
func (l *Load) Describe() facet.Description {
	d := facet.Description{Kind: "parallel load", Terminals: []facet.Terminal{{Name: "ac", Flow: facet.FlowHeld}}}
	if l.dynamic() {
		i := statePair("i_l", "A", l.base, true, "network")
		d.Unknowns = i[:]
		if l.p.R == 0 && l.p.C == 0 {
			d.Terminals[0].Flow = facet.FlowState
		}
	}
	return d
}

// Guess writes the current of the phasor model.
func (l *Load) Guess(x []float64, t float64, v []float64) {
	if l.dynamic() {
		setPair(x, 0, l.yl*pair(v, 0))
	}
}

// Channels lists p (W in), q (var in) and i (A rms).
func (l *Load) Channels() []facet.Channel { return shuntChannels() }

// Measure writes the channels.
func (l *Load) Measure(dst []float64, t float64, v, x []float64) {
	_, i := l.current(t, v, x)
	measureShunt(dst, pair(v, 0), i)
}

// Energy returns (3/2) (L |i_l|^2 + C |v|^2) / 2 as stored, nothing if
// quasi-steady, and (3/2) (R_L |i_l|^2 + G |v|^2) as dissipated.
func (l *Load) Energy(t float64, v, x []float64) facet.Energy {
	volts := pair(v, 0)
	il, _ := l.current(t, v, x)
	e := facet.Energy{Dissipated: 1.5 * (l.p.RL*dot(il, il) + l.conductance(t)*dot(volts, volts))}
	if !l.quasi {
		e.Stored = 0.75 * (l.p.L*dot(il, il) + l.p.C*dot(volts, volts))
	}
	return e
}

// Setpoints lists p, the active power at rated voltage and frequency (W), if
// the load has a resistor. It can't go below what the inductor's resistance
// draws; and of a resistor without a capacitor 0.1 % stays, so that the
// terminal keeps a path for current.
func (l *Load) Setpoints(t float64) []facet.Setpoint {
	if l.p.R == 0 {
		return nil
	}
	return []facet.Setpoint{{
		Name: "p", Unit: "W in", Doc: "active power drawn at rated voltage and frequency, by change of the resistor",
		Min: l.least, Max: math.Inf(1), Value: l.power.value(t),
	}}
}

// Set moves a setpoint; see [facet.Adjustable].
func (l *Load) Set(name string, t, value, ramp float64) error {
	if _, err := checkSet("load", l.Setpoints(t), name, t, value, ramp); err != nil {
		return err
	}
	l.power.set(t, value, ramp)
	return nil
}

// WithDetail returns the load, setpoint included, at another level.
func (l *Load) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("load", level)
	if err != nil {
		return nil, err
	}
	c := *l
	c.levels = at
	return &c, nil
}

// AppendBinary appends the setpoint.
func (l *Load) AppendBinary(b []byte) ([]byte, error) { return appendInputs(b, &l.power), nil }

// UnmarshalBinary restores the setpoint.
func (l *Load) UnmarshalBinary(b []byte) error { return readInputs("load", b, &l.power) }
