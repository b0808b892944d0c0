package testproblems

import (
	"math"

	"islet/solvers"
)

// JumpingCurrent charges a capacitor (1 F) through a resistance, with events
// that make the algebraic current i jump, from 0 to 5:
//
//	v' = i
//	0  = E - R i - v;  v(0) = 0, i(0) = 1, R = 1, E = 1
//	A, when i falls to 0.4: R := 2;  B, when i falls to 0.1: E := -1
//
// v is continuous. A at ln 2.5 (v = 0.6, i from 0.4 to 0.2), B at ln 10
// (v = 0.8, i from 0.1 to -0.9). Source: own.
func JumpingCurrent() *Case {
	r, e := 1.0, 1.0
	ta, tb := math.Log(2.5), math.Log(10)
	return &Case{
		Name: "jumping-current",
		Problem: &solvers.Problem{
			N:    2,
			Mass: solvers.Diagonal(1, 0),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = y[1]
				dst[1] = e - r*y[1] - y[0]
				return nil
			},
			Pattern: []solvers.Entry{{Row: 0, Col: 1}, {Row: 1, Col: 0}, {Row: 1, Col: 1}},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1], dst[2] = 1, -1, -r
				return nil
			},
			Autonomous: true,
		},
		End:     5,
		Initial: []float64{0, 1},
		Exact: func(dst []float64, t float64) {
			switch {
			case t < ta:
				dst[0], dst[1] = 1-math.Exp(-t), math.Exp(-t)
			case t < tb:
				d := math.Exp(-(t - ta) / 2)
				dst[0], dst[1] = 1-0.4*d, 0.2*d
			default:
				d := math.Exp(-(t - tb) / 2)
				dst[0], dst[1] = -1+1.8*d, -0.9*d
			}
		},
		Points: []Point{
			{2, []float64{0.76733261230966408438, 0.11633369384516795781}},
			{5, []float64{-0.53276399671004682526, -0.23361800164497658737}},
		},
		Handlers: solvers.Handlers{
			Roots: &solvers.Roots{
				N: 2,
				Func: func(dst []float64, t float64, y []float64) {
					dst[0], dst[1] = y[1]-0.4, y[1]-0.1
				},
				Direction: []solvers.Direction{solvers.Falling, solvers.Falling},
				Needs:     []int{1},
			},
			AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
				for _, h := range hits {
					if h.Root == 0 {
						r = 2
					} else {
						e = -1
					}
				}
				return solvers.Jump, nil
			},
		},
		Events: []Event{
			{Time: 0.91629073187415506518, Root: 0, Direction: solvers.Falling},
			{Time: 2.3025850929940456840, Root: 1, Direction: solvers.Falling},
		},
	}
}
