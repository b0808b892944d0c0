package devices

import (
	"errors"
	"fmt"

	"islet/solvers"
	"islet/solvers/facet"
)

// What the passive elements and the grid share: two levels of detail, channels
// of terminals, and terminal powers.

// Levels of detail of the network elements, for WithDetail.
const (
	// Full keeps the currents of inductors and the voltages of capacitors
	// dynamic.
	Full = "full"
	// QuasiSteady drops their derivatives in the network frame: the phasor
	// model at the frame's speed.
	QuasiSteady = "quasi-steady"
)

// levels is a device's present level of the two.
type levels struct{ quasi bool }

// Detail returns the present level.
func (l levels) Detail() string {
	if l.quasi {
		return QuasiSteady
	}
	return Full
}

// Details returns [Full] and [QuasiSteady].
func (l levels) Details() []string { return []string{Full, QuasiSteady} }

// parseLevels returns the levels at level, or an error in the name of device.
func parseLevels(device, level string) (levels, error) {
	switch level {
	case Full:
		return levels{false}, nil
	case QuasiSteady:
		return levels{true}, nil
	}
	return levels{}, fmt.Errorf("devices: %s: no level of detail %q: want %q or %q", device, level, Full, QuasiSteady)
}

// timeless is the part of a device without setpoints.
type timeless struct{}

// TimeDerivative returns false: nothing depends on time explicitly.
func (timeless) TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool { return false }

// errNoImpedance is what Eval returns where a lossless inductor stands in for
// its phasor model in a frame at rest. It can't be cured by a shorter step.
var errNoImpedance = errors.New("devices: quasi-steady inductor without resistance in a frame at rest: its impedance is zero")

// inverse returns 1/z, or 0 for z = 0.
func inverse(z complex128) complex128 {
	if z == 0 {
		return 0
	}
	return 1 / z
}

// power returns the three-phase P + jQ = (3/2) v i* of peak values.
func power(v, i complex128) complex128 { return times(1.5, v*conj(i)) }

// shuntChannels are the channels of a passive element with one terminal.
func shuntChannels() []facet.Channel {
	return []facet.Channel{
		{Name: "p", Unit: "W in", Doc: "active power drawn at the terminal"},
		{Name: "q", Unit: "var in", Doc: "reactive power drawn at the terminal, positive if inductive"},
		{Name: "i", Unit: "A rms", Doc: "current at the terminal"},
	}
}

// measureShunt writes shuntChannels for the terminal voltage v and current i.
func measureShunt(dst []float64, v, i complex128) {
	s := power(v, i)
	dst = dst[:3]
	dst[0], dst[1], dst[2] = real(s), imag(s), RMSAmperes(abs(i))
}

// branchChannels are the channels of an element with two terminals, whose
// currents may differ or not.
func branchChannels(oneCurrent bool) []facet.Channel {
	c := []facet.Channel{
		{Name: "p_from", Unit: "W in", Doc: "active power into the element at its first terminal"},
		{Name: "q_from", Unit: "var in", Doc: "reactive power into the element at its first terminal"},
		{Name: "p_to", Unit: "W in", Doc: "active power into the element at its second terminal"},
		{Name: "q_to", Unit: "var in", Doc: "reactive power into the element at its second terminal"},
	}
	if oneCurrent {
		return append(c, facet.Channel{Name: "i", Unit: "A rms", Doc: "current, the same at both terminals"})
	}
	return append(c,
		facet.Channel{Name: "i_from", Unit: "A rms", Doc: "current at the first terminal"},
		facet.Channel{Name: "i_to", Unit: "A rms", Doc: "current at the second terminal"})
}

// measureBranch writes branchChannels.
func measureBranch(dst []float64, v1, i1, v2, i2 complex128) {
	s1, s2 := power(v1, i1), power(v2, i2)
	dst[0], dst[1], dst[2], dst[3] = real(s1), imag(s1), real(s2), imag(s2)
	dst[4] = RMSAmperes(abs(i1))
	if len(dst) > 5 {
		dst[5] = RMSAmperes(abs(i2))
	}
}

type entry = solvers.Entry

// entryBlocks lists the entries of 2 x 2 blocks at the given corners (row, col).
func entryBlocks(corners ...[2]int) (list []entry) {
	for _, c := range corners {
		for k := range 4 {
			list = append(list, entry{Row: c[0] + k/2, Col: c[1] + k%2})
		}
	}
	return list
}

// entryDiagonals lists the diagonal entries of 2 x 2 blocks.
func entryDiagonals(corners ...[2]int) (list []entry) {
	for _, c := range corners {
		list = append(list, entry{Row: c[0], Col: c[1]}, entry{Row: c[0] + 1, Col: c[1] + 1})
	}
	return list
}

// diagonal writes the real factor a between the pair of rows at row and the pair
// of columns at col, touching the diagonal only.
func diagonal(w []float64, n, row, col int, a float64) {
	w[row*n+col] = a
	w[(row+1)*n+col+1] = a
}
