package testproblems

import (
	"fmt"
	"math"

	"islet/solvers"
)

// Kaps is a singularly perturbed system with the same solution for every eps,
// an index-1 system for eps = 0, from 0 to 1:
//
//	eps y1' = -(2 eps + 1) y1 + y2²
//	    y2' = y1 - y2 - y2²
//	y(0) = (1, 1)
//
// Solution: y1 = exp(-2t), y2 = exp(-t). For eps > 0 the first equation is
// divided by eps. Source: P. Kaps, Rosenbrock-type methods, in Numerische
// Behandlung steifer Differentialgleichungen, RWTH Aachen 1981; HW2.
func Kaps(eps float64) *Case {
	c1, c2, mass := -(2 + 1/eps), 1/eps, []solvers.Element(nil)
	if eps == 0 {
		c1, c2, mass = -1, 1, solvers.Diagonal(0, 1)
	}
	return &Case{
		Name: fmt.Sprintf("Kaps-%g", eps),
		Problem: &solvers.Problem{
			N:    2,
			Mass: mass,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = c1*y[0] + c2*y[1]*y[1]
				dst[1] = y[0] - y[1] - y[1]*y[1]
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = c1, 2*c2*y[1]
				dst[2], dst[3] = 1, -1-2*y[1]
				return nil
			},
			Autonomous: true,
		},
		End:     1,
		Initial: []float64{1, 1},
		Exact: func(dst []float64, t float64) {
			dst[0], dst[1] = math.Exp(-2*t), math.Exp(-t)
		},
		Points: []Point{{1, []float64{0.13533528323661269189, 0.36787944117144232160}}},
	}
}
