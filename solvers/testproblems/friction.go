package testproblems

import (
	"math"

	"islet/solvers"
)

// DryFriction is a mass on a spring with Coulomb friction until it sticks, from
// 0 to 25:
//
//	x' = v, v' = -x - 0.07 s, s the sign of the motion; x(0) = 1, v(0) = 0
//	when v = 0: reverse s if |x| > 0.07, else stick for good (x' = v' = 0)
//
// It starts on the root, which is no event. Reversals at k pi, where
// x = (-1)^k (1 - 0.14 k), up to k = 6; at 7 pi, where x = -0.02, it sticks.
// Source: own.
func DryFriction() *Case {
	const friction = 0.07
	s, moving := -1.0, 1.0
	c := &Case{
		Name: "friction",
		Problem: &solvers.Problem{
			N: 2,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = moving * y[1]
				dst[1] = moving * (-y[0] - friction*s)
				return nil
			},
			Pattern: []solvers.Entry{{Row: 0, Col: 1}, {Row: 1, Col: 0}},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = moving, -moving
				return nil
			},
			Autonomous: true,
		},
		End:     25,
		Initial: []float64{1, 0},
		Exact: func(dst []float64, t float64) {
			k := math.Floor(t / math.Pi)
			if k >= 7 {
				dst[0], dst[1] = -0.02, 0
				return
			}
			sign := 1 - 2*math.Mod(k, 2)
			centre := sign * friction // of this half-wave
			swing := sign*(1-2*friction*k) - centre
			sin, cos := math.Sincos(t - k*math.Pi)
			dst[0], dst[1] = centre+swing*cos, -swing*sin
		},
		Handlers: solvers.Handlers{
			Roots: &solvers.Roots{
				N:     1,
				Func:  func(dst []float64, t float64, y []float64) { dst[0] = y[1] },
				Needs: []int{1},
			},
			AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
				if math.Abs(y[0]) > friction {
					s = -s
				} else {
					y[1], moving = 0, 0
				}
				return solvers.Jump, nil
			},
		},
	}
	for k := 1; k <= 7; k++ {
		e := Event{Time: float64(k) * math.Pi, Direction: solvers.Falling}
		if k%2 == 1 {
			e.Direction = solvers.Rising // v < 0 in the first half-wave
		}
		c.Events = append(c.Events, e)
	}
	return c
}
