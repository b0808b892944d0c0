package devices

import (
	"islet/solvers"
	"islet/solvers/facet"
)

// ShuntCapacitorParams are the elements of a capacitor bank, one phase of a
// star.
type ShuntCapacitorParams struct {
	// C is the capacitance, F, > 0.
	C float64
	// R is a resistance in series (damping, discharge), ohm; 0 for none.
	R float64
	// Voltage is the rated voltage, V line-to-line rms, > 0.
	Voltage float64
}

// ShuntCapacitorRating describes a bank by what it delivers.
type ShuntCapacitorRating struct {
	// Vars is what the capacitor delivers at rated voltage and frequency, var.
	Vars float64
	// Voltage is in V line-to-line rms, Frequency in Hz.
	Voltage, Frequency float64
	// R is the series resistance, ohm; 0 for none. It isn't part of the
	// rating: C is that of a bank without it.
	R float64
}

// Params returns the elements. The error joins all faults.
func (r ShuntCapacitorRating) Params() (ShuntCapacitorParams, error) {
	f := faults{device: "shunt capacitor"}
	f.positive("Vars", r.Vars, "var")
	f.positive("Voltage", r.Voltage, "V")
	f.positive("Frequency", r.Frequency, "Hz")
	f.notNegative("R", r.R, "ohm")
	if err := f.err(); err != nil {
		return ShuntCapacitorParams{}, err
	}
	return ShuntCapacitorParams{C: FaradsFromVars(r.Vars, r.Voltage, r.Frequency), R: r.R, Voltage: r.Voltage}, nil
}

// ShuntCapacitor is a capacitor bank from its terminal to neutral, in the
// network frame. Without series resistance it has no unknowns,
//
//	flow = j omega_f C v        and a mass of C
//
// and with it
//
//	C dv_c/dt = (v - v_c)/R - j omega_f C v_c        flow = (v - v_c)/R
//
// The quasi-steady level has neither unknowns nor mass:
// flow = v / (R + 1/(j omega_f C)), an open circuit in a frame at rest.
type ShuntCapacitor struct {
	timeless
	levels
	p     ShuntCapacitorParams
	frame float64
	y     complex128 // j omega_f C / (1 + j omega_f C R)
}

// NewShuntCapacitor returns a bank at level [Full]. The error joins all faults.
func NewShuntCapacitor(p ShuntCapacitorParams) (*ShuntCapacitor, error) {
	f := faults{device: "shunt capacitor"}
	f.positive("C", p.C, "F")
	f.notNegative("R", p.R, "ohm")
	f.positive("Voltage", p.Voltage, "V")
	if err := f.err(); err != nil {
		return nil, err
	}
	return &ShuntCapacitor{p: p}, nil
}

// Params returns the parameters.
func (c *ShuntCapacitor) Params() ShuntCapacitorParams { return c.p }

// dynamic tells whether the capacitor's voltage is an unknown.
func (c *ShuntCapacitor) dynamic() bool { return c.p.R > 0 && !c.quasi }

// Dims returns two port components and the unknowns v_c.d, v_c.q, or none.
func (c *ShuntCapacitor) Dims() (ports, own int) {
	if c.dynamic() {
		return 2, 2
	}
	return 2, 0
}

// Mass writes C, at the terminal or for the unknowns.
func (c *ShuntCapacitor) Mass(port, own []float64) {
	clear(port)
	if c.p.R == 0 && !c.quasi {
		port[0], port[1] = c.p.C, c.p.C
	}
	for k := range own {
		own[k] = c.p.C
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (c *ShuntCapacitor) SetFrame(speed float64) {
	c.frame = speed
	b := speed * c.p.C
	c.y = complex(0, b) / complex(1, b*c.p.R)
}

// current returns the flow.
func (c *ShuntCapacitor) current(v, x []float64) complex128 {
	if c.dynamic() {
		return times(1/c.p.R, pair(v, 0)-pair(x, 0))
	}
	return c.y * pair(v, 0)
}

// Eval writes the flow (A) and C dv_c/dt (A).
func (c *ShuntCapacitor) Eval(flow, rate []float64, t float64, v, x []float64) error {
	i := c.current(v, x)
	setPair(flow, 0, i)
	if c.dynamic() {
		setPair(rate, 0, i-jtimes(c.frame*c.p.C, pair(x, 0)))
	}
	return nil
}

// Pattern lists the entries that can be nonzero.
func (c *ShuntCapacitor) Pattern() []solvers.Entry {
	if !c.dynamic() {
		return entryBlocks([2]int{0, 0})
	}
	return append(entryBlocks([2]int{2, 2}), entryDiagonals([2]int{0, 0}, [2]int{0, 2}, [2]int{2, 0})...)
}

// Jacobian writes the exact Jacobian.
func (c *ShuntCapacitor) Jacobian(jac []float64, t float64, v, x []float64) {
	if !c.dynamic() {
		block(jac, 2, 0, 0, c.y)
		return
	}
	g := 1 / c.p.R
	diagonal(jac, 4, 0, 0, g)
	diagonal(jac, 4, 0, 2, -g)
	diagonal(jac, 4, 2, 0, g)
	block(jac, 4, 2, 2, complex(-g, -c.frame*c.p.C))
}

// Describe describes the bank. It holds its terminal.
func (c *ShuntCapacitor) Describe() facet.Description {
	d := facet.Description{Kind: "shunt capacitor", Terminals: []facet.Terminal{{Name: "ac", Flow: facet.FlowHeld}}}
	if c.dynamic() {
		v := statePair("v_c", "V", PeakVolts(c.p.Voltage), true, "network")
		d.Unknowns = v[:]
	}
	return d
}

// Guess writes the voltage of the phasor model.
func (c *ShuntCapacitor) Guess(x []float64, t float64, v []float64) {
	if c.dynamic() {
		setPair(x, 0, pair(v, 0)-times(c.p.R, c.y*pair(v, 0)))
	}
}

// Channels lists p (W in), q (var in, negative) and i (A rms).
func (c *ShuntCapacitor) Channels() []facet.Channel { return shuntChannels() }

// Measure writes the channels.
func (c *ShuntCapacitor) Measure(dst []float64, t float64, v, x []float64) {
	measureShunt(dst, pair(v, 0), c.current(v, x))
}

// Energy returns (3/2) C |v_c|^2 / 2 as stored, nothing if quasi-steady, and
// (3/2) R |i|^2 as dissipated.
func (c *ShuntCapacitor) Energy(t float64, v, x []float64) facet.Energy {
	i := c.current(v, x)
	e := facet.Energy{Dissipated: 1.5 * c.p.R * dot(i, i)}
	if c.quasi {
		return e
	}
	volts := v
	if c.dynamic() {
		volts = x
	}
	vc := pair(volts, 0)
	e.Stored = 0.75 * c.p.C * dot(vc, vc)
	return e
}

// WithDetail returns the bank at another level.
func (c *ShuntCapacitor) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("shunt capacitor", level)
	if err != nil {
		return nil, err
	}
	d := *c
	d.levels = at
	return &d, nil
}
