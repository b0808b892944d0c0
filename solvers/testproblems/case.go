package testproblems

import (
	"math"

	"islet/solvers"
)

// Case is a problem with its start, its span and what is known of its
// solution. A case with handlers remembers the mode it is in: make a new one
// for every run.
type Case struct {
	// Name is short and without spaces, fit for a subtest.
	Name string
	// Problem is the problem; its Scale suits the usual AbsTol = RelTol.
	Problem *solvers.Problem
	// Start and End are the span of time.
	Start, End float64
	// Initial is the state at Start.
	Initial []float64
	// Measured lists the components that count for accuracy at End; nil: all.
	Measured []int
	// Points are known states in ascending order of time, after Start.
	Points []Point
	// Exact writes the solution at t into dst; nil if there is no closed
	// form.
	Exact func(dst []float64, t float64)
	// Invariants are kept by the solution.
	Invariants []Invariant
	// Handlers are the roots and stops of the problem and what happens there.
	Handlers solvers.Handlers
	// Events are the events known of the span, in ascending order of time.
	Events []Event
}

// Point is a state at a time.
type Point struct {
	Time  float64
	State []float64
}

// Event is a root of a case and its time.
type Event struct {
	Time      float64
	Root      int
	Direction solvers.Direction
}

// Invariant is a function of the state that the solution keeps constant.
type Invariant struct {
	Name string
	Func func(y []float64) float64
	// Linear tells that the function is linear in y, so that every
	// Runge-Kutta and Rosenbrock method keeps it to rounding.
	Linear bool
}

// At returns the known state at time t, which must be a point unless there is
// a closed form; else it returns nil.
func (c *Case) At(t float64) []float64 {
	if c.Exact != nil {
		y := make([]float64, c.Problem.N)
		c.Exact(y, t)
		return y
	}
	for _, p := range c.Points {
		if p.Time == t {
			return p.State
		}
	}
	return nil
}

// SCD is the number of significant correct digits: -log10 of the largest
// relative error over the measured components, as in TS24. It is +Inf for
// equal states. len(got) = len(want) = N.
func (c *Case) SCD(got, want []float64) float64 {
	return digits(c.measured(), func(i int) float64 {
		if got[i] == want[i] {
			return 0
		}
		return math.Abs(got[i]-want[i]) / math.Abs(want[i])
	})
}

// MESCD is the mixed error measured in digits: -log10 of the largest
// |error| / (abs scale / rel + |want|) over the measured components, as in
// TS24 (mescd), with the absolute tolerance of each component abs times its
// scale.
func (c *Case) MESCD(got, want []float64, tol solvers.Tolerance) float64 {
	return digits(c.measured(), func(i int) float64 {
		scale := 1.0
		if c.Problem.Scale != nil {
			scale = c.Problem.Scale[i]
		}
		return math.Abs(got[i]-want[i]) / (tol.Abs*scale/tol.Rel + math.Abs(want[i]))
	})
}

func (c *Case) measured() []int {
	if c.Measured != nil {
		return c.Measured
	}
	all := make([]int, c.Problem.N)
	for i := range all {
		all[i] = i
	}
	return all
}

// digits returns -log10 of the largest e(i), NaN if one is not a number.
func digits(which []int, e func(int) float64) float64 {
	worst := 0.0
	for _, i := range which {
		worst = math.Max(worst, e(i)) // NaN wins
	}
	return -math.Log10(worst)
}

// Smooth returns all cases without events that change anything, freshly made.
func Smooth() []*Case {
	return []*Case{
		Robertson(), HIRES(), Oregonator(), VanDerPol(), VanDerPolUnscaled(),
		E5(), E5DAE(), Pleiades(), TransistorAmplifier(), RobertsonDAE(),
		InconsistentStart(), CubicDAE(),
		ProtheroRobinson(-1e2, 1), ProtheroRobinson(-1e4, 1), ProtheroRobinson(-1e6, 2),
		Kaps(1), Kaps(1e-2), Kaps(1e-4), Kaps(1e-8), Kaps(0),
		DampedRotation(100), ExpSin(), ExpSinDAE(), Triangle(), RLStep(),
		HiddenRoots(), CloseRoots(),
	}
}

// Hybrid returns all cases with events that change the problem or the state,
// freshly made.
func Hybrid() []*Case {
	return []*Case{
		Balls(0.8), Balls(0.8, 0.5), TwoPointController(), DryFriction(),
		OneWayValve(), JumpingCurrent(), Chopper(), OpenedInductor(),
		EventAtEnd(), EventWithoutEffect(), EventHeld(), Sliding(),
	}
}

// fill returns n copies of v.
func fill(n int, v float64) []float64 {
	s := make([]float64, n)
	for i := range s {
		s[i] = v
	}
	return s
}
