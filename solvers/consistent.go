package solvers

import (
	"errors"
	"math"
)

// algebraic is what initialise needs of a System.
//
// The Newton corrections come from the matrix alpha M - J of the steps, with
// alpha so large that the differential unknowns can't move: with r in the
// left null space of M, (alpha M - J) d = r has, as alpha grows, the solution
// d in the right null space with N'J d = -N'r.
type algebraic interface {
	System
	// fastRate is a suitable alpha for the Jacobian kept last.
	fastRate() float64
	// algebraicResidual writes f(t, y) reduced to the left null space of M,
	// and the hidden equations' time derivatives divided by alpha.
	algebraicResidual(dst []float64, t float64, y []float64, alpha float64) error
	// keepAlgebraic reduces d to the right null space of M.
	keepAlgebraic(d []float64)
}

// initialise solves the algebraic equations of s for the algebraic unknowns
// in y by Newton's method with a line search on the natural monotonicity test
// (P. Deuflhard, Newton Methods for Nonlinear Problems, Springer 2004,
// section 3.3): a damped step is taken if the next simplified correction is
// shorter. work holds at least 4 vectors of s.Dim() entries.
func initialise(s algebraic, t float64, y []float64, work [][]float64) error {
	const (
		maxIterations = 60
		minDamping    = 1e-5
		done          = 1e-13 // correction relative to the unknown's size
		stalled       = 1e-8  // good enough if rounding stops the progress
	)
	unit := Tolerance{Rel: 1, Abs: 1}
	d, dNext, trial := work[2], work[3], work[4]
	fail := func(i int, size float64, err error) error {
		return &InconsistentError{Time: t, Index: i, Size: size, Err: err}
	}
	damping := 1.0
	for range maxIterations {
		if err := s.Linearise(t, y); err != nil {
			return fail(-1, math.NaN(), err)
		}
		alpha := s.fastRate()
		if err := s.Factor(alpha); err != nil {
			i := -1
			var sing *SingularError
			if errors.As(err, &sing) {
				i = sing.Column
			}
			return fail(i, math.NaN(), err)
		}
		if err := s.algebraicResidual(d, t, y, alpha); err != nil {
			return fail(-1, math.NaN(), err)
		}
		s.Solve(d)
		s.keepAlgebraic(d)
		size, worst := s.Norm(d, y, y, unit)
		if size != size {
			return fail(worst, size, nil)
		}
		if size <= done {
			for i := range y {
				y[i] += d[i]
			}
			return nil
		}
		for damping = math.Min(1, 4*damping); ; damping /= 2 {
			if damping < minDamping {
				if size <= stalled {
					return nil
				}
				return fail(worst, size, nil)
			}
			for i := range y {
				trial[i] = y[i] + damping*d[i]
			}
			if err := s.algebraicResidual(dNext, t, trial, alpha); err != nil {
				if errors.Is(err, ErrReject) {
					continue
				}
				return fail(-1, math.NaN(), err)
			}
			s.Solve(dNext)
			s.keepAlgebraic(dNext)
			next, _ := s.Norm(dNext, trial, trial, unit)
			if next <= done {
				// The next correction by the same matrix is nothing: linear
				// equations end here.
				for i := range y {
					y[i] = trial[i] + dNext[i]
				}
				return nil
			}
			if next <= (1-damping/4)*size {
				break
			}
			if size <= stalled && damping == 1 {
				// Rounding: neither step is better than the other.
				copy(y, trial)
				return nil
			}
		}
		copy(y, trial)
	}
	size, worst := s.Norm(d, y, y, unit)
	return fail(worst, size, errors.New("no convergence of newton's method"))
}
