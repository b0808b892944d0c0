package testproblems

import (
	"fmt"
	"math"

	"islet/solvers"
)

// ProtheroRobinson shows order reduction, from 0 to 10:
//
//	y' = l (y - cos t) - sin t,  y(0) = start
//
// Solution: y = cos t + (start - 1) exp(l t). Source: A. Prothero, A. Robinson,
// Math. Comp. 28 (1974) 145-162; HW2 IV.15.
func ProtheroRobinson(l, start float64) *Case {
	return &Case{
		Name: fmt.Sprintf("Prothero-Robinson%g", l),
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = l*(y[0]-math.Cos(t)) - math.Sin(t)
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = l
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				dst[0] = l*math.Sin(t) - math.Cos(t)
				return nil
			},
		},
		End:     10,
		Initial: []float64{start},
		Exact: func(dst []float64, t float64) {
			dst[0] = math.Cos(t) + (start-1)*math.Exp(l*t)
		},
	}
}
