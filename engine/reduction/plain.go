package reduction

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// Deviation is how far a network is from another of the same kept nodes at one
// frequency.
type Deviation struct {
	// Frequency is in Hz.
	Frequency float64
	// Relative is the Frobenius norm of the difference of the admittance
	// matrices over that of the exact one.
	Relative float64
}

// PlainBranches approximates the network by RL branches between the kept nodes
// and to ground that have its Kron reduction at the frequency (Hz, > 0), entry by
// entry: R + j omega L = -1/Y_ij. Phasors at that frequency are right; transients
// aren't unless all branches have one ratio R/L, and the deviations tell by how
// much, at 0 Hz (DC offsets), at half, twice and twenty times the frequency. 0 Hz
// is left out where an admittance is infinite there.
//
// The error joins all pairs of nodes for which no R >= 0 and L >= 0 does it, and
// the faults of network and list.
func PlainBranches(n Network, keep []int, frequency float64) (Network, []Deviation, error) {
	if !(frequency > 0) || math.IsInf(frequency, 1) {
		return Network{}, nil, fmt.Errorf("reduction: frequency = %v Hz: want a finite value > 0", frequency)
	}
	exact, err := Reduce(n, keep)
	if err != nil {
		return Network{}, nil, err
	}
	omega := 2 * math.Pi * frequency
	y := exact.Admittance(complex(0, omega))
	out := Network{Nodes: len(keep)}
	largest := 0.0
	for i := range keep {
		largest = max(largest, cmplx.Abs(y.At(i, i)))
	}
	var errs []error
	add := func(from, to int, g complex128) {
		if cmplx.Abs(g) <= 1e-12*largest {
			return
		}
		z := 1 / g
		r, l := real(z), imag(z)/omega
		// Rounding of a branch without loss or without inductance.
		if tiny := 1e-12 * cmplx.Abs(z); math.Abs(r) < tiny {
			r = 0
		} else if math.Abs(omega*l) < tiny {
			l = 0
		}
		if r < 0 || l < 0 {
			errs = append(errs, &NoBranchError{From: from, To: to, R: r, L: l})
			return
		}
		out.Branches = append(out.Branches, Branch{From: from, To: to, R: r, L: l})
	}
	for i := range keep {
		toGround := y.At(i, i)
		for j := range keep {
			if j == i {
				continue
			}
			toGround += y.At(i, j)
			if j > i {
				add(i, j, -y.At(i, j))
			}
		}
		add(i, Ground, toGround)
	}
	if err := errors.Join(errs...); err != nil {
		return Network{}, nil, err
	}
	var dev []Deviation
	for _, f := range []float64{0, frequency / 2, 2 * frequency, 20 * frequency} {
		s := complex(0, 2*math.Pi*f)
		approx, err := out.Admittance(s)
		if err != nil {
			continue // lossless at 0 Hz
		}
		if d := distance(exact.Admittance(s), approx); !math.IsNaN(d) && !math.IsInf(d, 0) {
			dev = append(dev, Deviation{f, d})
		}
	}
	return out, dev, nil
}

// distance returns |a - b|/|a| in the Frobenius norm, 0 for two empty networks.
func distance(a, b mat.CMatrix) float64 {
	n, _ := a.Dims()
	difference, size := 0.0, 0.0
	for i := range n {
		for j := range n {
			difference = math.Hypot(difference, cmplx.Abs(a.At(i, j)-b.At(i, j)))
			size = math.Hypot(size, cmplx.Abs(a.At(i, j)))
		}
	}
	if difference == 0 {
		return 0
	}
	return difference / size
}

// NoBranchError tells of a pair of kept nodes (or a kept node and [Ground]) whose
// admittance no RL branch has.
type NoBranchError struct {
	From, To int
	R, L     float64 // ohm and H that it would take
}

func (e *NoBranchError) Error() string {
	to := "ground"
	if e.To != Ground {
		to = fmt.Sprintf("node %d", e.To)
	}
	return fmt.Sprintf("reduction: node %d to %s would need R = %.6g ohm and L = %.6g H, and no branch has a negative value", e.From, to, e.R, e.L)
}
