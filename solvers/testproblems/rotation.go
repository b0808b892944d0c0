package testproblems

import (
	"fmt"
	"math"

	"islet/solvers"
)

// DampedRotation has a pair of eigenvalues -10 ± ja, for a = 100 some 84 degrees
// off the negative real axis, from 0 to 20:
//
//	y1' = -10 y1 + a y2    y3' = -4 y3    y5' = -0.5 y5
//	y2' = -a y1 - 10 y2    y4' = -y4      y6' = -0.1 y6
//	y(0) = (0, 1, 1, 1, 1, 1)
//
// Solution: y1 = exp(-10t) sin at, y2 = exp(-10t) cos at, the others
// exp(-ct); only these are measured at the end, where the pair is 1e-87. Source:
// EHL75, problem B5 (B2 to B4: a = 3, 8, 25). Points are given for a = 100 only.
func DampedRotation(a float64) *Case {
	c := &Case{
		Name: fmt.Sprintf("B5-%g", a),
		Problem: &solvers.Problem{
			N: 6,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = -10*y[0] + a*y[1]
				dst[1] = -a*y[0] - 10*y[1]
				dst[2] = -4 * y[2]
				dst[3] = -y[3]
				dst[4] = -0.5 * y[4]
				dst[5] = -0.1 * y[5]
				return nil
			},
			Pattern: []solvers.Entry{
				{Row: 0, Col: 0}, {Row: 0, Col: 1}, {Row: 1, Col: 0}, {Row: 1, Col: 1},
				{Row: 2, Col: 2}, {Row: 3, Col: 3}, {Row: 4, Col: 4}, {Row: 5, Col: 5},
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				copy(dst, []float64{-10, a, -a, -10, -4, -1, -0.5, -0.1})
				return nil
			},
			Autonomous: true,
		},
		End:      20,
		Initial:  []float64{0, 1, 1, 1, 1, 1},
		Measured: []int{2, 3, 4, 5},
		Exact: func(dst []float64, t float64) {
			s, c := math.Sincos(a * t)
			d := math.Exp(-10 * t)
			dst[0], dst[1] = d*s, d*c
			for i, rate := range [4]float64{4, 1, 0.5, 0.1} {
				dst[2+i] = math.Exp(-rate * t)
			}
		},
	}
	if a == 100 {
		c.Points = []Point{
			{0.05, []float64{-0.58161697292589186738, 0.17204981248453800083, 0.81873075307798185867, 0.95122942450071400909, 0.97530991202833266863, 0.99501247919268231335}},
			{0.1, []float64{-0.20013418225944862205, -0.30867716521951294533, 0.67032004603563930074, 0.90483741803595957316, 0.95122942450071400909, 0.99004983374916805357}},
			{0.5, []float64{-0.0017678678581498754145, 0.006501889955897855975, 0.13533528323661269189, 0.60653065971263342360, 0.77880078307140486825, 0.95122942450071400909}},
		}
	}
	return c
}
