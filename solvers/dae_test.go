package solvers_test

import (
	"errors"
	"fmt"
	"math"
	"testing"

	"islet/solvers"
	tp "islet/solvers/testproblems"
)

// TestDAEs integrates the index-1 problems to each of their known points.
func TestDAEs(t *testing.T) {
	problems := []func() *tp.Case{
		tp.TransistorAmplifier, tp.RobertsonDAE, tp.InconsistentStart, tp.CubicDAE, tp.ExpSinDAE,
		func() *tp.Case { return tp.Kaps(1e-2) },
		func() *tp.Case { return tp.Kaps(1e-4) },
		func() *tp.Case { return tp.Kaps(1e-8) },
		func() *tp.Case { return tp.Kaps(0) },
	}
	for _, make := range problems {
		for _, m := range adaptive {
			for _, tol := range []float64{1e-4, 1e-7} {
				c, o := make(), same(tol)
				t.Run(fmt.Sprintf("%s/%s/%g", c.Name, m.Name(), tol), func(t *testing.T) {
					s := begin(t, c, m, o)
					for _, p := range c.Points {
						reach(t, s, p.Time)
						accept(t, c, p.Time, s.State(), o)
					}
					if s.Time() < c.End {
						reach(t, s, c.End)
						accept(t, c, c.End, s.State(), o)
					}
				})
			}
		}
	}
}

// TestTransistorStart checks that the consistent start stays as it is, and the
// slope of the solution there.
func TestTransistorStart(t *testing.T) {
	for _, m := range adaptive {
		c := tp.TransistorAmplifier()
		// Slope by (4 y(h) - y(2h) - 3 y(0)) / 2h, whose error is some
		// h² rate² = 1e-6 of the slope, the fastest rate 1e4 1/s.
		const h = 1e-7
		s := begin(t, c, m, same(1e-12))
		y0 := append([]float64(nil), s.State()...)
		for i, v := range c.Initial {
			if math.Abs(y0[i]-v) > 1e-12 {
				t.Errorf("%s: start of y%d became %.15g, was %.15g and consistent", m.Name(), i+1, y0[i], v)
			}
		}
		reach(t, s, h)
		y1 := append([]float64(nil), s.State()...)
		reach(t, s, 2*h)
		for i, want := range tp.TransistorAmplifierSlope() {
			got := (4*y1[i] - s.State()[i] - 3*y0[i]) / (2 * h)
			if math.Abs(got-want) > 3e-6*math.Abs(want) {
				t.Errorf("%s: y%d' at the start is %.9g, want %.9g", m.Name(), i+1, got, want)
			}
		}
	}
}

// TestTransistorWrongStart starts the amplifier off its algebraic equations,
// which no zero row of M shows. Consistent values must leave M y, what the
// differential equations remember, as it was.
func TestTransistorWrongStart(t *testing.T) {
	for _, m := range []solvers.Method{solvers.Rodas5P, solvers.Rodas4P, solvers.Trapezoidal} {
		c := tp.TransistorAmplifier()
		wrong := append([]float64(nil), c.Initial...)
		for i := range wrong {
			wrong[i] += 0.02 * float64(1+i%3)
		}
		c.Initial = wrong
		o := same(1e-6)
		o.MaxStep = 1e-5
		s := begin(t, c, m, o)
		y := s.State()
		momentum := func(y []float64) []float64 {
			p := make([]float64, 8)
			for _, e := range c.Problem.Mass {
				p[e.Row] += e.Value * y[e.Col]
			}
			return p
		}
		before, after := momentum(wrong), momentum(y)
		for i := range before {
			if math.Abs(before[i]-after[i]) > 1e-18 { // C y is 1e-7 to 1e-5
				t.Errorf("%s: row %d of M y changed from %.12g to %.12g", m.Name(), i+1, before[i], after[i])
			}
		}
		f := make([]float64, 8)
		if err := c.Problem.F(f, 0, y); err != nil {
			t.Fatal(err)
		}
		for _, i := range []int{0, 3, 6} {
			if r := f[i] + f[i+1]; math.Abs(r) > 1e-14 { // currents are 1e-4
				t.Errorf("%s: f%d + f%d = %g after Reset, want 0", m.Name(), i+1, i+2, r)
			}
		}
	}
}

// TestTransistorOverflow starts with steps far too large, so that trial values
// leave the exponentials' range: the steps must be rejected and the result be
// as good as ever.
func TestTransistorOverflow(t *testing.T) {
	for _, m := range adaptive {
		c, o := tp.TransistorAmplifier(), same(1e-4)
		o.InitialStep = 0.1
		f, jac, overflows := c.Problem.F, c.Problem.Jacobian, 0
		count := func(err error) error {
			if errors.Is(err, solvers.ErrReject) {
				overflows++
			}
			return err
		}
		c.Problem.F = func(dst []float64, t float64, y []float64) error { return count(f(dst, t, y)) }
		c.Problem.Jacobian = func(dst []float64, t float64, y []float64) error { return count(jac(dst, t, y)) }
		s := begin(t, c, m, o)
		reach(t, s, c.End)
		accept(t, c, c.End, s.State(), o)
		if n := s.Stats().Failed; n != overflows || n == 0 {
			t.Errorf("%s: %d failed steps for %d overflows, want the same and some", m.Name(), n, overflows)
		}
	}
}

// TestRobertsonRoots locates the two roots of the Robertson problem, the second
// of them at a large time within steps of some 1e7.
func TestRobertsonRoots(t *testing.T) {
	for _, m := range adaptive {
		for _, r := range []struct{ tol, digits float64 }{{1e-4, 2}, {1e-8, 6}} {
			c := tp.RobertsonDAE()
			got := locate(t, c, m, same(r.tol))
			compare(t, c.Name+" "+m.Name(), got, c.Events, math.Pow(10, -r.digits), true)
		}
	}
}

// TestInconsistentStart offers a wrong value of the algebraic unknown. It must
// be corrected by Reset, the differential one must stay.
func TestInconsistentStart(t *testing.T) {
	for _, m := range []solvers.Method{solvers.Rodas5P, solvers.Rodas4P, solvers.Trapezoidal} {
		c, o := tp.InconsistentStart(), same(1e-7)
		o.MaxStep = 1e-3
		offered := append([]float64(nil), c.Initial...)
		s := begin(t, c, m, o)
		if y := s.State(); y[0] != 1 || math.Abs(y[1]+1) > 1e-14 {
			t.Errorf("%s: state after Reset is %v, want [1 -1]", m.Name(), y)
		}
		if c.Initial[0] != offered[0] || c.Initial[1] != offered[1] {
			t.Errorf("%s: Reset changed the vector it was given", m.Name())
		}
		reach(t, s, c.End)
		if m != solvers.Trapezoidal {
			accept(t, c, c.End, s.State(), o)
			continue
		}
		// Second order: h²/12 times the third derivative, amplified over
		// t = 10 by no more than 10.
		want := c.At(c.End)
		for i, v := range s.State() {
			if math.Abs(v-want[i]) > 1e-6 {
				t.Errorf("%s: y%d is %.9g, want %.9g", m.Name(), i+1, v, want[i])
			}
		}
	}
}

// TestDenseAlgebraic reproduces a cubic by the dense output of a differential
// and an algebraic unknown, at steps and within, to rounding.
func TestDenseAlgebraic(t *testing.T) {
	for _, m := range adaptive {
		for _, start := range []float64{0, 0.05, 0.3} { // InitialStep, 0: chosen
			c, o := tp.CubicDAE(), same(1e-6)
			o.InitialStep = start
			s := begin(t, c, m, o)
			y := make([]float64, 2)
			for s.Time() < c.End {
				if err := s.Step(c.End); err != nil {
					t.Fatal(err)
				}
				for k := range 21 {
					at := s.Previous() + float64(k)/20*(s.Time()-s.Previous())
					s.Interpolate(y, nil, at)
					// The coefficients have 16 digits and add up to some 100.
					if want := at * at * at; math.Abs(y[0]-want) > 1e-13 || math.Abs(y[1]-want) > 1e-13 {
						t.Fatalf("%s: at %.9g within [%.9g, %.9g]: x, z off by %.3g, %.3g",
							m.Name(), at, s.Previous(), s.Time(), y[0]-want, y[1]-want)
					}
				}
			}
		}
	}
}

// TestKapsSteps checks that the number of steps at eps = 1e-8 is close to that
// of the limit, which is a DAE. (Between, at 1e-2 to 1e-4, order reduction
// costs up to eight times as many.)
func TestKapsSteps(t *testing.T) {
	for _, m := range adaptive {
		for _, tol := range []float64{1e-4, 1e-7} {
			steps := map[float64]int{}
			for _, eps := range []float64{1e-8, 0} {
				c := tp.Kaps(eps)
				s := begin(t, c, m, same(tol))
				reach(t, s, c.End)
				steps[eps] = s.Stats().Steps
			}
			if steps[1e-8] > steps[0]+5 {
				t.Errorf("%s, rtol %g: %d steps at 1e-8, %d in the limit", m.Name(), tol, steps[1e-8], steps[0])
			}
		}
	}
}

// TestNoConsistentStart asks for what doesn't exist: 0 = z² + x has no solution
// for x = 1.
func TestNoConsistentStart(t *testing.T) {
	p := &solvers.Problem{
		N:    2,
		Mass: solvers.Diagonal(1, 0),
		F: func(dst []float64, t float64, y []float64) error {
			dst[0], dst[1] = -y[0], y[1]*y[1]+y[0]
			return nil
		},
		Autonomous: true,
	}
	sys, err := p.System()
	if err != nil {
		t.Fatal(err)
	}
	for _, m := range adaptive {
		s, err := m.NewStepper(sys, solvers.Options{})
		if err != nil {
			t.Fatal(err)
		}
		var bad *solvers.InconsistentError
		if err := s.Reset(0, []float64{1, 1}); !errors.As(err, &bad) {
			t.Fatalf("%s: Reset returns %v, want an InconsistentError", m.Name(), err)
		}
		if bad.Index != 1 {
			t.Errorf("%s: the error names unknown %d, want 1", m.Name(), bad.Index)
		}
		// A start that can be met is accepted by the same stepper.
		if err := s.Reset(0, []float64{-1, 3}); err != nil || math.Abs(s.State()[1]-1) > 1e-12 {
			t.Errorf("%s: Reset to x = -1 gives %v, error %v, want z = 1", m.Name(), s.State(), err)
		}
	}
}
