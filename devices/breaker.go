package devices

import (
	"fmt"

	"islet/solvers"
	"islet/solvers/facet"
)

// DefaultContactResistance is the resistance of a closed breaker where none is
// given, ohm: 1 mohm, whose loss is 3 W at 32 A rms. Common practice, no source;
// it shows in results.
const DefaultContactResistance = 1e-3

// BreakerParams are the parameters of a breaker.
type BreakerParams struct {
	// Resistance is that of the closed contacts, ohm per pole, > 0. Zero would
	// make one bus of two and is refused; see DefaultContactResistance.
	Resistance float64
	// Open tells that the breaker is open at the start.
	Open bool
}

// Breaker connects its terminals "from" and "to" by a resistance while closed,
//
//	flow_from = (v_from - v_to) / R        flow_to = -flow_from
//
// and not at all while open. It has no unknowns and one level of detail.
type Breaker struct {
	timeless
	p      BreakerParams
	closed bool
}

// NewBreaker returns a breaker. The error joins all faults.
func NewBreaker(p BreakerParams) (*Breaker, error) {
	f := faults{device: "breaker"}
	f.positive("Resistance", p.Resistance, "ohm")
	if err := f.err(); err != nil {
		return nil, err
	}
	return &Breaker{p: p, closed: !p.Open}, nil
}

// Params returns the parameters. Switching doesn't change them.
func (b *Breaker) Params() BreakerParams { return b.p }

// Closed tells whether the breaker is closed.
func (b *Breaker) Closed() bool { return b.closed }

// SetClosed closes or opens the breaker, all poles at once.
func (b *Breaker) SetClosed(closed bool) { b.closed = closed }

// Dims returns four port components and no unknowns.
func (b *Breaker) Dims() (ports, own int) { return 4, 0 }

// Mass writes zeros.
func (b *Breaker) Mass(port, own []float64) { clear(port) }

// conductance returns 1/R, or 0 if open.
func (b *Breaker) conductance() float64 {
	if !b.closed {
		return 0
	}
	return 1 / b.p.Resistance
}

// Eval writes the flows (A).
func (b *Breaker) Eval(flow, rate []float64, t float64, v, x []float64) error {
	if !b.closed {
		clear(flow)
		return nil
	}
	i := times(1/b.p.Resistance, pair(v, 0)-pair(v, 2))
	setPair(flow, 0, i)
	setPair(flow, 2, -i)
	return nil
}

// Pattern lists the entries that can be nonzero, none if open.
func (b *Breaker) Pattern() []solvers.Entry {
	if !b.closed {
		return nil
	}
	return entryDiagonals([2]int{0, 0}, [2]int{0, 2}, [2]int{2, 0}, [2]int{2, 2})
}

// Jacobian writes the exact Jacobian.
func (b *Breaker) Jacobian(jac []float64, t float64, v, x []float64) {
	if !b.closed {
		return
	}
	g := b.conductance()
	diagonal(jac, 4, 0, 0, g)
	diagonal(jac, 4, 0, 2, -g)
	diagonal(jac, 4, 2, 0, -g)
	diagonal(jac, 4, 2, 2, g)
}

// Describe describes the breaker: a tie if closed.
func (b *Breaker) Describe() facet.Description {
	d := facet.Description{
		Kind:      "breaker",
		Terminals: []facet.Terminal{{Name: "from", Flow: facet.FlowNone}, {Name: "to", Flow: facet.FlowNone}},
	}
	if b.closed {
		d.Ties = []facet.Tie{{A: 0, B: 1, Ratio: 1}}
	}
	return d
}

// Channels lists the current i (A rms) and the power through the breaker, p (W
// in) and q (var in), both at terminal "from": positive towards "to".
func (b *Breaker) Channels() []facet.Channel {
	return []facet.Channel{
		{Name: "p", Unit: "W in", Doc: "active power into the first terminal, on its way to the second"},
		{Name: "q", Unit: "var in", Doc: "reactive power into the first terminal, on its way to the second"},
		{Name: "i", Unit: "A rms", Doc: "current"},
	}
}

// Measure writes the channels.
func (b *Breaker) Measure(dst []float64, t float64, v, x []float64) {
	measureShunt(dst, pair(v, 0), times(b.conductance(), pair(v, 0)-pair(v, 2)))
}

// Energy returns (3/2) |v_from - v_to|^2 / R as dissipated.
func (b *Breaker) Energy(t float64, v, x []float64) facet.Energy {
	across := pair(v, 0) - pair(v, 2)
	return facet.Energy{Dissipated: 1.5 * b.conductance() * dot(across, across)}
}

// AppendBinary appends the position.
func (b *Breaker) AppendBinary(data []byte) ([]byte, error) { return appendSwitch(data, b.closed), nil }

// UnmarshalBinary restores the position.
func (b *Breaker) UnmarshalBinary(data []byte) error { return readSwitch("breaker", data, &b.closed) }

// appendSwitch appends a switch position to data.
func appendSwitch(data []byte, closed bool) []byte {
	if closed {
		return append(data, 1)
	}
	return append(data, 0)
}

// readSwitch sets closed from data, which must hold a position and nothing
// else, or reports an error in the name of device.
func readSwitch(device string, data []byte, closed *bool) error {
	if len(data) != 1 || data[0] > 1 {
		return fmt.Errorf("devices: %s: snapshot %v: want one byte, 0 or 1", device, data)
	}
	*closed = data[0] == 1
	return nil
}
