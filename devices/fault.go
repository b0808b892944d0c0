package devices

import (
	"islet/solvers"
	"islet/solvers/facet"
)

// FaultParams are the elements of a balanced three-phase fault.
type FaultParams struct {
	// R is the resistance of the fault's path to ground, ohm per phase, > 0 (a
	// bolted fault has contacts, too: DefaultContactResistance).
	R float64
	// L is an inductance in series, H; 0 for none.
	L float64
	// RatedCurrent is that of the network around it, A rms, > 0: the base of
	// the error norm of the fault's current.
	RatedCurrent float64
	// Closed tells that the fault is there at the start.
	Closed bool
}

// Fault is a balanced three-phase fault to ground that comes (closes) and goes
// (opens). In the network frame, while it is there:
//
//	L di/dt = v - (R + j omega_f L) i        flow = i
//
// and i = v/R if L = 0. The quasi-steady level has no unknowns:
// i = v / (R + j omega_f L). While it is open nothing flows at the terminal; the
// current is then 0, or dies away within the fault, L di/dt = -(R + j omega_f L) i.
type Fault struct {
	timeless
	levels
	p      FaultParams
	closed bool
	frame  float64
	y      complex128 // 1/(R + j omega_f L)
}

// NewFault returns a fault at level [Full]. The error joins all faults.
func NewFault(p FaultParams) (*Fault, error) {
	f := faults{device: "fault"}
	f.positive("R", p.R, "ohm")
	f.notNegative("L", p.L, "H")
	f.positive("RatedCurrent", p.RatedCurrent, "A rms")
	if err := f.err(); err != nil {
		return nil, err
	}
	b := &Fault{p: p, closed: p.Closed}
	b.SetFrame(0)
	return b, nil
}

// Params returns the parameters. Switching doesn't change them.
func (b *Fault) Params() FaultParams { return b.p }

// Closed tells whether the fault is there.
func (b *Fault) Closed() bool { return b.closed }

// SetClosed applies or clears the fault, all phases at once. After clearing,
// ApplyJumps takes its current to 0.
func (b *Fault) SetClosed(closed bool) { b.closed = closed }

// ApplyJumps sets the current of a fault that is open to 0.
func (b *Fault) ApplyJumps(x []float64) {
	if !b.closed {
		clear(x)
	}
}

// dynamic tells whether the current is an unknown.
func (b *Fault) dynamic() bool { return b.p.L > 0 && !b.quasi }

// Dims returns two port components and the unknowns i.d, i.q, or none.
func (b *Fault) Dims() (ports, own int) {
	if b.dynamic() {
		return 2, 2
	}
	return 2, 0
}

// Mass writes 0 at the terminal, and L.
func (b *Fault) Mass(port, own []float64) {
	clear(port)
	for k := range own {
		own[k] = b.p.L
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (b *Fault) SetFrame(speed float64) {
	b.frame = speed
	b.y = inverse(complex(b.p.R, speed*b.p.L))
}

// flow returns the current at the terminal.
func (b *Fault) flow(v, x []float64) complex128 {
	switch {
	case !b.closed:
		return 0
	case b.dynamic():
		return pair(x, 0)
	}
	return b.y * pair(v, 0)
}

// Eval writes the flow (A) and L di/dt (V).
func (b *Fault) Eval(flow, rate []float64, t float64, v, x []float64) error {
	setPair(flow, 0, b.flow(v, x))
	if b.dynamic() {
		var across complex128
		if b.closed {
			across = pair(v, 0)
		}
		setPair(rate, 0, across-complex(b.p.R, b.frame*b.p.L)*pair(x, 0))
	}
	return nil
}

// Pattern lists the entries that can be nonzero in the present position.
func (b *Fault) Pattern() []solvers.Entry {
	switch {
	case !b.dynamic() && !b.closed:
		return nil
	case !b.dynamic():
		return entryBlocks([2]int{0, 0})
	case !b.closed:
		return entryBlocks([2]int{2, 2})
	}
	return append(entryBlocks([2]int{2, 2}), entryDiagonals([2]int{0, 2}, [2]int{2, 0})...)
}

// Jacobian writes the exact Jacobian.
func (b *Fault) Jacobian(jac []float64, t float64, v, x []float64) {
	if !b.dynamic() {
		if b.closed {
			block(jac, 2, 0, 0, b.y)
		}
		return
	}
	if b.closed {
		diagonal(jac, 4, 0, 2, 1)
		diagonal(jac, 4, 2, 0, 1)
	}
	block(jac, 4, 2, 2, complex(-b.p.R, -b.frame*b.p.L))
}

// Describe describes the fault in its present position.
func (b *Fault) Describe() facet.Description {
	flow := facet.FlowHeld
	switch {
	case !b.closed:
		flow = facet.FlowNone
	case b.dynamic():
		flow = facet.FlowState
	}
	d := facet.Description{Kind: "fault", Terminals: []facet.Terminal{{Name: "ac", Flow: flow}}}
	if b.dynamic() {
		i := statePair("i", "A", PeakAmperes(b.p.RatedCurrent), true, "network")
		d.Unknowns = i[:]
	}
	return d
}

// Guess writes the current of the phasor model.
func (b *Fault) Guess(x []float64, t float64, v []float64) {
	if !b.dynamic() {
		return
	}
	clear(x)
	if b.closed {
		setPair(x, 0, b.y*pair(v, 0))
	}
}

// Channels lists p (W in), q (var in) and i (A rms).
func (b *Fault) Channels() []facet.Channel { return shuntChannels() }

// Measure writes the channels.
func (b *Fault) Measure(dst []float64, t float64, v, x []float64) {
	measureShunt(dst, pair(v, 0), b.flow(v, x))
}

// Energy returns (3/2) L |i|^2 / 2 as stored, nothing if quasi-steady, and
// (3/2) R |i|^2 as dissipated.
func (b *Fault) Energy(t float64, v, x []float64) facet.Energy {
	i := b.flow(v, x)
	if !b.dynamic() {
		return facet.Energy{Dissipated: 1.5 * b.p.R * dot(i, i)}
	}
	i = pair(x, 0)
	return facet.Energy{Stored: 0.75 * b.p.L * dot(i, i), Dissipated: 1.5 * b.p.R * dot(i, i)}
}

// WithDetail returns the fault, position included, at another level.
func (b *Fault) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("fault", level)
	if err != nil {
		return nil, err
	}
	c := *b
	c.levels = at
	return &c, nil
}

// AppendBinary appends the position.
func (b *Fault) AppendBinary(data []byte) ([]byte, error) { return appendSwitch(data, b.closed), nil }

// UnmarshalBinary restores the position.
func (b *Fault) UnmarshalBinary(data []byte) error { return readSwitch("fault", data, &b.closed) }
