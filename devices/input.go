package devices

import (
	"encoding/binary"
	"fmt"
	"math"

	"islet/solvers/facet"
)

// input is a setpoint: a value that is constant but for a linear ramp from
// start to end. The zero value is the constant 0; constant makes any other.
type input struct {
	from, to   float64 // values before and after the ramp
	start, end float64 // of the ramp, s; equal if there is none
}

// inputSize is the number of bytes an input takes in a snapshot.
const inputSize = 4 * 8

// constant returns an input that keeps its value until it is set.
func constant(value float64) input { return input{from: value, to: value} }

// value returns the value at time t, continuous over a ramp.
func (in *input) value(t float64) float64 {
	switch {
	case t >= in.end:
		return in.to
	case t <= in.start:
		return in.from
	}
	return in.from + (in.to-in.from)*((t-in.start)/(in.end-in.start))
}

// slope returns the time derivative at t, right-continuous: that of the ramp
// at its start, 0 at its end.
func (in *input) slope(t float64) float64 {
	if t < in.start || t >= in.end {
		return 0
	}
	return (in.to - in.from) / (in.end - in.start)
}

// final returns the value once a ramp is over.
func (in *input) final() float64 { return in.to }

// set moves the input from its value at t to value: at once if ramp is 0, else
// linearly until t + ramp. The arguments have been checked (see checkSet).
func (in *input) set(t, value, ramp float64) {
	from := in.value(t)
	if t+ramp == t { // no ramp, or one too short to be told from none
		from = value
	}
	*in = input{from: from, to: value, start: t, end: t + ramp}
}

// append appends the input to b, inputSize bytes.
func (in *input) append(b []byte) []byte {
	for _, x := range [...]float64{in.from, in.to, in.start, in.end} {
		b = binary.LittleEndian.AppendUint64(b, math.Float64bits(x))
	}
	return b
}

// read sets the input from the first inputSize bytes of b, which must be
// there, and returns the rest. It is an error, and changes nothing, if they
// are no input's bytes.
func (in *input) read(b []byte) ([]byte, error) {
	var x [4]float64
	for k := range x {
		x[k] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*k:]))
		if math.IsNaN(x[k]) || math.IsInf(x[k], 0) {
			return b, fmt.Errorf("setpoint holds %v", x[k])
		}
	}
	if x[3] < x[2] {
		return b, fmt.Errorf("ramp ends at %v s, before its start at %v s", x[3], x[2])
	}
	*in = input{from: x[0], to: x[1], start: x[2], end: x[3]}
	return b[inputSize:], nil
}

// appendInputs appends inputs to b, the body of an AppendBinary.
func appendInputs(b []byte, inputs ...*input) []byte {
	for _, in := range inputs {
		b = in.append(b)
	}
	return b
}

// readInputs sets inputs from b, which must hold them and nothing else, or
// sets none of them and reports an error in the name of device.
func readInputs(device string, b []byte, inputs ...*input) error {
	if len(b) != len(inputs)*inputSize {
		return fmt.Errorf("devices: %s: snapshot of %d bytes: want %d", device, len(b), len(inputs)*inputSize)
	}
	read := make([]input, len(inputs))
	for k := range read {
		var err error
		if b, err = read[k].read(b); err != nil {
			return fmt.Errorf("devices: %s: snapshot: %w", device, err)
		}
	}
	for k, in := range inputs {
		*in = read[k]
	}
	return nil
}

// checkSet finds the setpoint called name in list and checks the arguments of
// a Set. It returns its index, or an error that names all that is wrong.
func checkSet(device string, list []facet.Setpoint, name string, t, value, ramp float64) (int, error) {
	for k, s := range list {
		if s.Name != name {
			continue
		}
		f := faults{device: device}
		f.within(name, value, s.Min, s.Max, s.Unit)
		f.finite("time", t, "s")
		f.notNegative("ramp", ramp, "s")
		return k, f.err()
	}
	names := make([]string, len(list))
	for k, s := range list {
		names[k] = s.Name
	}
	return -1, fmt.Errorf("devices: %s: no setpoint %q: want one of %q", device, name, names)
}
