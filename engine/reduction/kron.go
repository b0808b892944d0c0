package reduction

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// KronPhasor eliminates nodes from a nodal admittance matrix y (S): with kept
// nodes K and the others I, into which no current is injected,
//
//	Y = Y_KK - Y_KI Y_II^-1 Y_IK        in the order of keep
//
// The error tells of an empty or faulty list, and of nodes that nothing holds
// (Y_II is singular to working precision).
//
// Source: J. J. Grainger, W. D. Stevenson, Power System Analysis, McGraw-Hill
// 1994, chapter 7 (node elimination by matrix algebra).
func KronPhasor(y mat.CMatrix, keep []int) (*mat.CDense, error) {
	n, c := y.Dims()
	if n != c {
		return nil, fmt.Errorf("reduction: admittance matrix of %d x %d: want a square one", n, c)
	}
	if err := checkKeep(n, keep); err != nil {
		return nil, err
	}
	a := make([]complex128, n*n)
	for i := range n {
		for j := range n {
			a[i*n+j] = y.At(i, j)
		}
	}
	if err := eliminate(a, n, others(n, keep), cmplx.Abs); err != nil {
		return nil, err
	}
	out := mat.NewCDense(len(keep), len(keep), nil)
	for i, r := range keep {
		for j, c := range keep {
			out.Set(i, j, a[r*n+c])
		}
	}
	return out, nil
}

// kronReal is KronPhasor for a real symmetric matrix, n x n, row-major.
func kronReal(a []float64, n int, keep []int) (*mat.SymDense, error) {
	if err := eliminate(a, n, others(n, keep), math.Abs); err != nil {
		return nil, err
	}
	out := mat.NewSymDense(len(keep), nil)
	for i, r := range keep {
		for j, c := range keep[:i+1] {
			out.SetSym(i, j, (a[r*n+c]+a[c*n+r])/2)
		}
	}
	return out, nil
}

// eliminate eliminates the given nodes from the n x n matrix a, one by one by
// Gaussian elimination with the largest diagonal entry as the next pivot:
// a_ij -= a_ik a_kj / a_kk. For an admittance matrix that is symmetric with
// positive real part such pivots suffice.
func eliminate[T float64 | complex128](a []T, n int, nodes []int, abs func(T) float64) error {
	gone := make([]bool, n)
	left := append([]int(nil), nodes...)
	scale := make(map[int]float64) // of each diagonal entry before the start
	for _, k := range nodes {
		scale[k] = abs(a[k*n+k])
	}
	for len(left) > 0 {
		best, at := 0.0, -1
		for i, k := range left {
			if scale[k] == 0 {
				continue
			}
			if r := abs(a[k*n+k]) / scale[k]; r > best {
				best, at = r, i
			}
		}
		if at < 0 || best < 1e-13 {
			var errs []error
			for _, k := range left {
				errs = append(errs, fmt.Errorf("reduction: node %d can't be eliminated: no branch leads from it to a kept node or to ground", k))
			}
			return errors.Join(errs...)
		}
		k := left[at]
		left = append(left[:at], left[at+1:]...)
		gone[k] = true
		pivot := a[k*n+k]
		for i := range n {
			if gone[i] || a[i*n+k] == 0 {
				continue
			}
			f := a[i*n+k] / pivot
			for j := range n {
				if !gone[j] {
					a[i*n+j] -= f * a[k*n+j]
				}
			}
			a[i*n+k] = 0
		}
	}
	return nil
}
