package testproblems

import (
	"math"

	"islet/solvers"
)

// ExpSin depends on time explicitly, and its df/dt on y, from 0 to 4:
//
//	y' = y cos t, y(0) = 1
//
// Solution: y = exp(sin t). Source: DETEST, problem A3.
func ExpSin() *Case {
	return &Case{
		Name: "exp-sin",
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = y[0] * math.Cos(t)
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = math.Cos(t)
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				dst[0] = -y[0] * math.Sin(t)
				return nil
			},
		},
		End:     4,
		Initial: []float64{1},
		Exact:   func(dst []float64, t float64) { dst[0] = math.Exp(math.Sin(t)) },
	}
}

// ExpSinDAE has the solution of [ExpSin] as that of a nonlinear index-1 system
// with time in both equations and a mass matrix that isn't diagonal, from 0 to
// 4:
//
//	2 x' + z' = 1.5 (x + z) cos t
//	0         = x z - exp(2 sin t)
//	x(0) = z(0) = 1
//
// Solution: x = z = exp(sin t), along which errors neither grow nor shrink.
// Source: own.
func ExpSinDAE() *Case {
	return &Case{
		Name: "exp-sin-DAE",
		Problem: &solvers.Problem{
			N:    2,
			Mass: []solvers.Element{{Row: 0, Col: 0, Value: 2}, {Row: 0, Col: 1, Value: 1}},
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = 1.5 * (y[0] + y[1]) * math.Cos(t)
				dst[1] = y[0]*y[1] - math.Exp(2*math.Sin(t))
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = 1.5*math.Cos(t), 1.5*math.Cos(t)
				dst[2], dst[3] = y[1], y[0]
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				sin, cos := math.Sincos(t)
				dst[0] = -1.5 * (y[0] + y[1]) * sin
				dst[1] = -2 * cos * math.Exp(2*sin)
				return nil
			},
		},
		End:     4,
		Initial: []float64{1, 1},
		Exact: func(dst []float64, t float64) {
			dst[0] = math.Exp(math.Sin(t))
			dst[1] = dst[0]
		},
	}
}
