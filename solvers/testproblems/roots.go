package testproblems

import (
	"math"

	"islet/solvers"
)

// HiddenRoots has three roots within the few steps that its smooth right-hand
// side invites, from -8 to 4:
//
//	y' = 3 t² + 12 t - 4, y(-8) = -120; root y
//
// Solution: y = (t + 6)(t + 2)(t - 2). Source: scipy issue 9228.
func HiddenRoots() *Case {
	return &Case{
		Name: "hidden-roots",
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = 3*t*t + 12*t - 4
				return nil
			},
			Pattern:  []solvers.Entry{},
			Jacobian: func(dst []float64, t float64, y []float64) error { return nil },
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				dst[0] = 6*t + 12
				return nil
			},
		},
		Start:   -8,
		End:     4,
		Initial: []float64{-120},
		Exact:   func(dst []float64, t float64) { dst[0] = (t + 6) * (t + 2) * (t - 2) },
		Handlers: solvers.Handlers{Roots: &solvers.Roots{
			N:    1,
			Func: func(dst []float64, t float64, y []float64) { dst[0] = y[0] },
		}},
		Events: []Event{
			{Time: -6, Direction: solvers.Rising},
			{Time: -2, Direction: solvers.Falling},
			{Time: 2, Direction: solvers.Rising},
		},
	}
}

// CloseRoots has a root function that is negative for a thousandth of the
// interval only, from 0 to 1:
//
//	y' = 1, y(0) = 0; root (y - 0.5)² - 1e-6
//
// Source: own.
func CloseRoots() *Case {
	c := ramp("close-roots")
	c.Handlers.Roots = &solvers.Roots{
		N:    1,
		Func: func(dst []float64, t float64, y []float64) { dst[0] = (y[0]-0.5)*(y[0]-0.5) - 1e-6 },
	}
	c.Events = []Event{
		{Time: 0.499, Direction: solvers.Falling},
		{Time: 0.501, Direction: solvers.Rising},
	}
	return c
}

// EventAtEnd has its root y - 1 at the very end of the span:
//
//	y' = 1, y(0) = 0, from 0 to 1
//
// It must be reported once. Source: own.
func EventAtEnd() *Case {
	c := ramp("event-at-end")
	c.Handlers.Roots = rootAt(1)
	c.Events = []Event{{Time: 1, Direction: solvers.Rising}}
	return c
}

// EventWithoutEffect has an event that sets the state to what it is, a jump of
// nothing, and must not fire again, from 0 to 2:
//
//	y' = -y, y(0) = 1; when y = 0.5: y := 0.5
//
// Source: own.
func EventWithoutEffect() *Case {
	return &Case{
		Name: "event-without-effect",
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = -y[0]
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = -1
				return nil
			},
			Autonomous: true,
		},
		End:     2,
		Initial: []float64{1},
		Exact:   func(dst []float64, t float64) { dst[0] = math.Exp(-t) },
		Handlers: solvers.Handlers{
			Roots: rootAt(0.5),
			AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
				y[0] = 0.5
				return solvers.Jump, nil
			},
		},
		Events: []Event{{Time: 0.69314718055994530942, Direction: solvers.Falling}},
	}
}

// EventHeld stays exactly on its root after the event, from 0 to 2:
//
//	y' = 1, y(0) = 0; when y = 1: y := 1, y' := 0
//
// Source: own, after SUNDIALS issue 881.
func EventHeld() *Case {
	rate := 1.0
	return &Case{
		Name: "event-held",
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = rate
				return nil
			},
			Pattern:    []solvers.Entry{},
			Jacobian:   func(dst []float64, t float64, y []float64) error { return nil },
			Autonomous: true,
		},
		End:     2,
		Initial: []float64{0},
		Exact:   func(dst []float64, t float64) { dst[0] = math.Min(t, 1) },
		Handlers: solvers.Handlers{
			Roots: rootAt(1),
			AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
				y[0], rate = 1, 0
				return solvers.Jump, nil
			},
		},
		Events: []Event{{Time: 1, Direction: solvers.Rising}},
	}
}

// Sliding has a switch whose both sides push back, from 0 to 2:
//
//	x' = 1 for x < 0, x' = -0.5 for x > 0; x(0) = -1; the side changes at x = 0
//
// x reaches 0 at t = 1 and slides there. A run must see that or stop with an
// error that names the switch. Source: own.
func Sliding() *Case {
	rate := 1.0
	return &Case{
		Name: "sliding",
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = rate
				return nil
			},
			Pattern:    []solvers.Entry{},
			Jacobian:   func(dst []float64, t float64, y []float64) error { return nil },
			Autonomous: true,
		},
		End:     2,
		Initial: []float64{-1},
		Exact:   func(dst []float64, t float64) { dst[0] = math.Min(t-1, 0) },
		Handlers: solvers.Handlers{
			Roots: rootAt(0),
			AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
				rate = 1
				if hits[0].Direction == solvers.Rising {
					rate = -0.5
				}
				return solvers.Jump, nil
			},
		},
	}
}

// ramp is y' = 1, y(0) = 0 from 0 to 1.
func ramp(name string) *Case {
	return &Case{
		Name: name,
		Problem: &solvers.Problem{
			N: 1,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = 1
				return nil
			},
			Pattern:    []solvers.Entry{},
			Jacobian:   func(dst []float64, t float64, y []float64) error { return nil },
			Autonomous: true,
		},
		End:     1,
		Initial: []float64{0},
		Exact:   func(dst []float64, t float64) { dst[0] = t },
	}
}

// rootAt is the root y1 - level.
func rootAt(level float64) *solvers.Roots {
	return &solvers.Roots{
		N:    1,
		Func: func(dst []float64, t float64, y []float64) { dst[0] = y[0] - level },
	}
}
