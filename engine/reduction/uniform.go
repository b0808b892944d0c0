package reduction

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// UniformTolerance is how far ratios R/L may lie apart, relative to the
// largest, to count as one.
const UniformTolerance = 1e-9

// Ratio returns the ratio R/L (1/s) that all branches share within
// [UniformTolerance]. The error names the branches with the smallest and the
// largest ratio if there isn't one.
func (n Network) Ratio() (float64, error) {
	if len(n.Branches) == 0 {
		return 0, errors.New("reduction: no branches, so no ratio R/L")
	}
	low, high := 0, 0
	ratio := func(k int) float64 { return n.Branches[k].R / n.Branches[k].L } // L = 0: +Inf
	for k := range n.Branches {
		if ratio(k) < ratio(low) {
			low = k
		}
		if ratio(k) > ratio(high) {
			high = k
		}
	}
	if lo, hi := ratio(low), ratio(high); math.IsInf(hi, 1) || hi-lo > UniformTolerance*hi {
		return 0, fmt.Errorf("reduction: R/L goes from %.6g 1/s (branch %d) to %.6g 1/s (branch %d): want one ratio", lo, low, hi, high)
	}
	return ratio(high), nil
}

// Uniform eliminates all nodes but those in keep from a network whose branches
// share one ratio R/L. The result, a network of len(keep) nodes in the order of
// keep, has the same ratio in every branch and draws the same currents at the
// kept nodes at all frequencies and in transients from rest: with L i' = v - R i
// on every branch, (d/dt + R/L) i = W v where W, the Laplacian of 1/L, is
// constant, so that its Kron reduction serves all times.
//
// The error is that of [Network.Ratio], or tells of nodes that nothing holds.
//
// Source: S. Y. Caliskan, P. Tabuada, Towards Kron reduction of generalized
// electrical networks, Automatica 50(10), 2014.
func Uniform(n Network, keep []int) (Network, error) {
	if err := n.check(keep); err != nil {
		return Network{}, err
	}
	ratio, err := n.Ratio()
	if err != nil {
		return Network{}, err
	}
	w, err := inverseInductance(n, keep)
	if err != nil {
		return Network{}, err
	}
	return branchesOf(w, func(g float64) (r, l float64) { return ratio / g, 1 / g }), nil
}

// inverseInductance returns the Kron reduction of the Laplacian of 1/L.
func inverseInductance(n Network, keep []int) (*mat.SymDense, error) {
	a := make([]float64, n.Nodes*n.Nodes)
	for _, b := range n.Branches {
		for _, e := range [][2]int{{b.From, b.To}, {b.To, b.From}} {
			if e[0] == Ground {
				continue
			}
			a[e[0]*n.Nodes+e[0]] += 1 / b.L
			if e[1] != Ground {
				a[e[0]*n.Nodes+e[1]] -= 1 / b.L
			}
		}
	}
	return kronReal(a, n.Nodes, keep)
}

// branchesOf reads a Laplacian as branches, whose R and L come from their
// weight. Weights below 1e-12 of the largest diagonal entry are rounding.
func branchesOf(w mat.Symmetric, values func(g float64) (r, l float64)) Network {
	m := w.SymmetricDim()
	out := Network{Nodes: m}
	largest := 0.0
	for i := range m {
		largest = max(largest, w.At(i, i))
	}
	add := func(from, to int, g float64) {
		if g > 1e-12*largest {
			r, l := values(g)
			out.Branches = append(out.Branches, Branch{From: from, To: to, R: r, L: l})
		}
	}
	for i := range m {
		toGround := w.At(i, i)
		for j := range m {
			if j == i {
				continue
			}
			toGround += w.At(i, j)
			if j > i {
				add(i, j, -w.At(i, j))
			}
		}
		add(i, Ground, toGround)
	}
	return out
}
