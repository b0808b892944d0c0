package testproblems

import (
	"fmt"
	"math"

	"islet/solvers"
)

// Gravity and height of [Balls].
const (
	BallGravity = 9.81 // m/s²
	BallHeight  = 10.0 // m
)

// Balls drops balls of the given coefficients of restitution together, each
// h (m) and v (m/s), from 0 to 20 s:
//
//	h' = v, v' = -9.81; h(0) = 10, v(0) = 0; when h falls to 0: v := -e v
//
// The impacts of each ball accumulate at t1 (1 + e)/(1 - e), where
// t1 = sqrt(2 h(0)/9.81); the run can't go on from there. Events are listed
// for a single ball. Source: own.
func Balls(restitution ...float64) *Case {
	n := len(restitution)
	c := &Case{
		Name: "balls",
		Problem: &solvers.Problem{
			N: 2 * n,
			F: func(dst []float64, t float64, y []float64) error {
				for k := range n {
					dst[2*k], dst[2*k+1] = y[2*k+1], -BallGravity
				}
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				for k := range dst {
					dst[k] = 1
				}
				return nil
			},
			Autonomous: true,
		},
		End: 20,
	}
	roots := &solvers.Roots{
		N: n,
		Func: func(dst []float64, t float64, y []float64) {
			for k := range n {
				dst[k] = y[2*k]
			}
		},
	}
	for k := range n {
		c.Name += fmt.Sprintf("-%g", restitution[k])
		c.Problem.Pattern = append(c.Problem.Pattern, solvers.Entry{Row: 2 * k, Col: 2*k + 1})
		c.Initial = append(c.Initial, BallHeight, 0)
		roots.Direction = append(roots.Direction, solvers.Falling)
		roots.Needs = append(roots.Needs, 2*k)
	}
	c.Handlers = solvers.Handlers{
		Roots: roots,
		AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
			for _, h := range hits {
				y[2*h.Root+1] *= -restitution[h.Root]
			}
			return solvers.Jump, nil
		},
	}
	if n == 1 {
		for i := 1; i <= 30; i++ {
			c.Events = append(c.Events, Event{Time: BallImpact(restitution[0], i), Root: 0, Direction: solvers.Falling})
		}
		c.Exact = func(dst []float64, t float64) { dst[0], dst[1] = ballState(restitution[0], t) }
	}
	return c
}

// BallImpact is the time of the nth impact, n >= 1, of a ball of restitution e.
func BallImpact(e float64, n int) float64 {
	t1 := math.Sqrt(2 * BallHeight / BallGravity)
	return t1 * (1 + 2*e*(1-math.Pow(e, float64(n-1)))/(1-e))
}

// BallLimit is the time at which the impacts accumulate.
func BallLimit(e float64) float64 {
	return math.Sqrt(2*BallHeight/BallGravity) * (1 + e) / (1 - e)
}

// ballState is the state at t, at rest from the accumulation of impacts on.
func ballState(e, t float64) (h, v float64) {
	if t >= BallLimit(e) {
		return 0, 0
	}
	if t < BallImpact(e, 1) {
		return BallHeight - BallGravity/2*t*t, -BallGravity * t
	}
	n := 1
	for t >= BallImpact(e, n+1) {
		n++
	}
	v0 := math.Sqrt(2*BallGravity*BallHeight) * math.Pow(e, float64(n))
	t -= BallImpact(e, n)
	return v0*t - BallGravity/2*t*t, v0 - BallGravity*t
}
