package testproblems

import (
	"math"

	"islet/solvers"
)

// InconsistentStart is a linear index-1 system with a wrong start of its
// algebraic unknown, from 0 to 10:
//
//	x' = x + z
//	0  = x + z - sin t
//	x(0) = 1, z(0) = 2, where z(0) = -1 is consistent
//
// Solution for x(0) = 1: x = 2 - cos t, z = sin t + cos t - 2. A code that
// mishandles the time derivative of f was seen to end at x = 4.97. Source: own
// closed form; the system is from SciML OrdinaryDiffEq.jl, issue 1602.
func InconsistentStart() *Case {
	return &Case{
		Name: "inconsistent",
		Problem: &solvers.Problem{
			N:    2,
			Mass: solvers.Diagonal(1, 0),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = y[0] + y[1]
				dst[1] = y[0] + y[1] - math.Sin(t)
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1], dst[2], dst[3] = 1, 1, 1, 1
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = 0, -math.Cos(t)
				return nil
			},
		},
		End:     10,
		Initial: []float64{1, 2},
		Exact: func(dst []float64, t float64) {
			dst[0] = 2 - math.Cos(t)
			dst[1] = math.Sin(t) + math.Cos(t) - 2
		},
		Points: []Point{{10, []float64{2.8390715290764524523, -3.3830926399658222573}}},
	}
}

// CubicDAE is an index-1 system whose solution x = z = t³ a method of order 3
// with dense output of order 3 in every component reproduces at every time,
// from 0 to 1:
//
//	x' = 3 t²
//	0  = x - z
//	x(0) = z(0) = 0
//
// Source: SciML OrdinaryDiffEq.jl, issue 1554.
func CubicDAE() *Case {
	return &Case{
		Name: "cubic",
		Problem: &solvers.Problem{
			N:    2,
			Mass: solvers.Diagonal(1, 0),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = 3 * t * t
				dst[1] = y[0] - y[1]
				return nil
			},
			Pattern: []solvers.Entry{{Row: 1, Col: 0}, {Row: 1, Col: 1}},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = 1, -1
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = 6*t, 0
				return nil
			},
		},
		End:     1,
		Initial: []float64{0, 0},
		Exact: func(dst []float64, t float64) {
			dst[0], dst[1] = t*t*t, t*t*t
		},
	}
}
