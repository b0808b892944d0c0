package devices

import (
	"islet/solvers"
	"islet/solvers/facet"
)

// SeriesLoadParams are the elements of a series load, one phase of a star.
type SeriesLoadParams struct {
	// R (ohm) and L (H) are >= 0 and not both 0. With R = 0 a DC offset of the
	// current decays through the network only.
	R, L float64
	// Voltage (V line-to-line rms) and Frequency (Hz) are the rated ones, > 0:
	// the current they drive is the base of the current's error norm.
	Voltage, Frequency float64
}

// SeriesLoadRating describes a series load by the power it draws at rated
// voltage and frequency.
type SeriesLoadRating struct {
	// Voltage is in V line-to-line rms, Frequency in Hz.
	Voltage, Frequency float64
	// P is in W, > 0; Q in var, >= 0.
	P, Q float64
}

// Params returns the R and L that draw P and Q: R + jX = V^2 / (P - jQ). The
// error joins all faults.
func (r SeriesLoadRating) Params() (SeriesLoadParams, error) {
	f := faults{device: "series load"}
	f.positive("Voltage", r.Voltage, "V")
	f.positive("Frequency", r.Frequency, "Hz")
	f.positive("P", r.P, "W")
	f.notNegative("Q", r.Q, "var")
	if err := f.err(); err != nil {
		return SeriesLoadParams{}, err
	}
	z := complex(r.Voltage*r.Voltage, 0) / complex(r.P, -r.Q)
	return SeriesLoadParams{R: real(z), L: Henries(imag(z), r.Frequency), Voltage: r.Voltage, Frequency: r.Frequency}, nil
}

func (p SeriesLoadParams) check(f *faults) {
	f.notNegative("R", p.R, "ohm")
	f.notNegative("L", p.L, "H")
	if p.R == 0 && p.L == 0 {
		f.add("R = 0 and L = 0: want one of them > 0")
	}
	f.positive("Voltage", p.Voltage, "V")
	f.positive("Frequency", p.Frequency, "Hz")
}

// SeriesLoad is a resistor and an inductor in series from its terminal to
// neutral, in the network frame:
//
//	L di/dt = v - (R + j omega_f L) i        flow = i
//
// The quasi-steady level has no unknowns: i = v / (R + j omega_f L). With L = 0
// the load is a resistor at either level.
type SeriesLoad struct {
	timeless
	levels
	p     SeriesLoadParams
	frame float64
	y     complex128 // 1/(R + j omega_f L)
}

// NewSeriesLoad returns a series load at level [Full]. The error joins all
// faults.
func NewSeriesLoad(p SeriesLoadParams) (*SeriesLoad, error) {
	f := faults{device: "series load"}
	p.check(&f)
	if err := f.err(); err != nil {
		return nil, err
	}
	l := &SeriesLoad{p: p}
	l.SetFrame(0)
	return l, nil
}

// Params returns the parameters.
func (l *SeriesLoad) Params() SeriesLoadParams { return l.p }

// dynamic tells whether the current is an unknown.
func (l *SeriesLoad) dynamic() bool { return l.p.L > 0 && !l.quasi }

// Dims returns two port components and the unknowns i.d, i.q, or none.
func (l *SeriesLoad) Dims() (ports, own int) {
	if l.dynamic() {
		return 2, 2
	}
	return 2, 0
}

// Mass writes 0 at the terminal, and L.
func (l *SeriesLoad) Mass(port, own []float64) {
	clear(port)
	for k := range own {
		own[k] = l.p.L
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (l *SeriesLoad) SetFrame(speed float64) {
	l.frame = speed
	l.y = inverse(complex(l.p.R, speed*l.p.L))
}

// current returns the load's current.
func (l *SeriesLoad) current(v, x []float64) complex128 {
	if l.dynamic() {
		return pair(x, 0)
	}
	return l.y * pair(v, 0)
}

// Eval writes the flow (A) and L di/dt (V).
func (l *SeriesLoad) Eval(flow, rate []float64, t float64, v, x []float64) error {
	i := l.current(v, x)
	setPair(flow, 0, i)
	switch {
	case l.dynamic():
		setPair(rate, 0, pair(v, 0)-complex(l.p.R, l.frame*l.p.L)*i)
	case l.y == 0:
		return errNoImpedance
	}
	return nil
}

// Pattern lists the entries that can be nonzero.
func (l *SeriesLoad) Pattern() []solvers.Entry {
	if !l.dynamic() {
		return entryBlocks([2]int{0, 0})
	}
	return append(entryBlocks([2]int{2, 2}), entryDiagonals([2]int{0, 2}, [2]int{2, 0})...)
}

// Jacobian writes the exact Jacobian.
func (l *SeriesLoad) Jacobian(jac []float64, t float64, v, x []float64) {
	if !l.dynamic() {
		block(jac, 2, 0, 0, l.y)
		return
	}
	diagonal(jac, 4, 0, 2, 1)
	diagonal(jac, 4, 2, 0, 1)
	block(jac, 4, 2, 2, complex(-l.p.R, -l.frame*l.p.L))
}

// Describe describes the load.
func (l *SeriesLoad) Describe() facet.Description {
	d := facet.Description{Kind: "series load", Terminals: []facet.Terminal{{Name: "ac", Flow: facet.FlowHeld}}}
	if l.dynamic() {
		rated := complex(l.p.R, RadPerSecond(l.p.Frequency)*l.p.L)
		i := statePair("i", "A", PeakVolts(l.p.Voltage)/abs(rated), true, "network")
		d.Unknowns = i[:]
		d.Terminals[0].Flow = facet.FlowState
	}
	return d
}

// Guess writes the current of the phasor model.
func (l *SeriesLoad) Guess(x []float64, t float64, v []float64) {
	if l.dynamic() {
		setPair(x, 0, l.y*pair(v, 0))
	}
}

// Channels lists p (W in), q (var in) and i (A rms).
func (l *SeriesLoad) Channels() []facet.Channel { return shuntChannels() }

// Measure writes the channels.
func (l *SeriesLoad) Measure(dst []float64, t float64, v, x []float64) {
	measureShunt(dst, pair(v, 0), l.current(v, x))
}

// Energy returns (3/2) L |i|^2 / 2 as stored, nothing if quasi-steady, and
// (3/2) R |i|^2 as dissipated.
func (l *SeriesLoad) Energy(t float64, v, x []float64) facet.Energy {
	i := l.current(v, x)
	e := facet.Energy{Dissipated: 1.5 * l.p.R * dot(i, i)}
	if l.dynamic() {
		e.Stored = 0.75 * l.p.L * dot(i, i)
	}
	return e
}

// WithDetail returns the load at another level.
func (l *SeriesLoad) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("series load", level)
	if err != nil {
		return nil, err
	}
	c := *l
	c.levels = at
	return &c, nil
}
