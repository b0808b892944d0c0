package solvers

import (
	"fmt"
	"math"
)

// LinearSolver solves A x = b repeatedly for matrices of one pattern. The
// constructors ([NewSparseLU], [NewBorderedLU]) analyse the pattern once and
// keep a reference to the matrix; Factor reads the values it holds then.
type LinearSolver interface {
	// Factor factors the matrix with its present values. The error is a
	// *SingularError if it is singular to working precision, or if it holds
	// a value that is not finite.
	Factor() error

	// Solve overwrites b with the solution. It panics if len(b) is not the
	// order of the matrix, and must follow a successful Factor.
	Solve(b []float64)

	// Condition returns an estimate (a lower bound, mostly within a factor
	// of three) of the 1-norm condition number of the factored matrix.
	Condition() float64
}

// SingularError reports a matrix that is singular to working precision.
type SingularError struct {
	// Column is the index of the unknown for which no acceptable pivot was
	// left.
	Column int
	// Pivot is the largest candidate found, which may be zero or NaN.
	Pivot float64
}

func (e *SingularError) Error() string {
	if math.IsNaN(e.Pivot) || math.IsInf(e.Pivot, 0) {
		return fmt.Sprintf("solvers: matrix has a value that is not finite, met at column %d", e.Column)
	}
	return fmt.Sprintf("solvers: matrix is singular at column %d (largest pivot %.3g)", e.Column, e.Pivot)
}
