package testproblems

import (
	"math"

	"islet/solvers"
)

// TwoPointController switches a first-order lag on and off, with hysteresis,
// from 0 to 20:
//
//	y' = u - y, y(0) = 0, u = 1 (on)
//	u := 0 when y rises to 0.7; u := 1 when y falls to 0.3
//
// The first switch is at ln(1/0.3), the others follow every ln(7/3), 23 in all.
// Source: own.
func TwoPointController() *Case {
	const first, period, switches = 1.2039728043259359926, 0.84729786038720361371, 23
	u := 1.0
	c := &Case{
		Name: "two-point",
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = u - y[0]
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = -1
				return nil
			},
			Autonomous: true,
		},
		End:     20,
		Initial: []float64{0},
		Exact: func(dst []float64, t float64) {
			if t < first {
				dst[0] = 1 - math.Exp(-t)
				return
			}
			n, past := math.Floor((t-first)/period), 0.0
			past = t - first - n*period
			if math.Mod(n, 2) == 0 {
				dst[0] = 0.7 * math.Exp(-past)
			} else {
				dst[0] = 1 - 0.7*math.Exp(-past)
			}
		},
		Points: []Point{{20, []float64{0.59920637293622862894}}},
		Handlers: solvers.Handlers{
			Roots: &solvers.Roots{
				N: 2,
				Func: func(dst []float64, t float64, y []float64) {
					dst[0], dst[1] = y[0]-0.7, y[0]-0.3
				},
				Direction: []solvers.Direction{solvers.Rising, solvers.Falling},
			},
			AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
				for _, h := range hits {
					u = float64(h.Root) // 0.7 rising: off; 0.3 falling: on
				}
				return solvers.Jump, nil
			},
		},
	}
	for n := range switches {
		e := Event{Time: first + float64(n)*period, Root: n % 2, Direction: solvers.Rising}
		if e.Root == 1 {
			e.Direction = solvers.Falling
		}
		c.Events = append(c.Events, e)
	}
	return c
}
