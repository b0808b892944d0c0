//go:build sundials

package sundials_test

import (
	"context"
	"errors"
	"math"
	"testing"

	"islet/bench/sundials"
	"islet/solvers"
	"islet/solvers/testproblems"
)

// reach integrates y from the stepper's time to t.
func reach(t *testing.T, s solvers.Stepper, until float64) {
	t.Helper()
	if err := solvers.Integrate(context.Background(), s, until, nil); err != nil {
		t.Fatal(err)
	}
}

func stepper(t *testing.T, m solvers.Method, s solvers.System, o solvers.Options, t0 float64, y []float64) solvers.Stepper {
	t.Helper()
	st, err := m.NewStepper(s, o)
	if err != nil {
		t.Fatal(err)
	}
	if err := st.Reset(t0, y); err != nil {
		t.Fatal(err)
	}
	return st
}

// Robertson's problem as a DAE at the printed times. Source: HW2; values of
// package testproblems, computed with 113 bits. The problem's scale is 1e-4 in
// every component; y2 is of the order 1e-5 and below, so it is compared with a
// mixed measure, as the tolerance is.
func TestRobertson(t *testing.T) {
	c := testproblems.RobertsonDAE()
	sys, err := c.Problem.System()
	if err != nil {
		t.Fatal(err)
	}
	o := solvers.Options{RelTol: 1e-8, AbsTol: 1e-10}
	st := stepper(t, sundials.IDA, sys, o, 0, c.Initial)
	for _, p := range c.Points {
		if p.Time > 4e5 {
			break // beyond, y1 falls towards the absolute tolerance
		}
		reach(t, st, p.Time)
		for i, want := range p.State {
			// BDF's global error: two orders above the local tolerance at most.
			if e := math.Abs(st.State()[i]-want) / (want + 1e-6); e > 1e-6 {
				t.Errorf("t = %g: y%d = %.12g, want %.12g (%.2g)", p.Time, i+1, st.State()[i], want, e)
			}
		}
	}
	s := st.Stats()
	if s.Steps < 200 || s.Evals < s.Steps || s.Jacobians < 10 || s.Factorizations < s.Jacobians-2 || s.Solves < s.Steps {
		t.Errorf("implausible counts: %+v", s)
	}
}

// Textbook problems with published or exact ends; the digits demanded leave
// BDF two to three orders above the local tolerance of 1e-9, as the printed
// work figures of DASSL do (TS24: at 1e-7 it has 5 to 8 digits).
func TestTextbookEnds(t *testing.T) {
	for _, tc := range []struct {
		c      *testproblems.Case
		rel    float64
		abs    float64
		digits float64
	}{
		{testproblems.HIRES(), 1e-9, 1e-9, 6},
		{testproblems.TransistorAmplifier(), 1e-9, 1e-9, 6},
		{testproblems.Kaps(1e-4), 1e-9, 1e-9, 6},
		{testproblems.DampedRotation(100), 1e-9, 1e-9, 6},
		{testproblems.ExpSinDAE(), 1e-9, 1e-9, 6},
	} {
		sys, err := tc.c.Problem.System()
		if err != nil {
			t.Fatal(err)
		}
		o := solvers.Options{RelTol: tc.rel, AbsTol: tc.abs}
		st := stepper(t, sundials.IDA, sys, o, tc.c.Start, tc.c.Initial)
		reach(t, st, tc.c.End)
		want := tc.c.At(tc.c.End)
		if d := tc.c.MESCD(st.State(), want, solvers.Tolerance{Rel: tc.rel, Abs: tc.abs}); !(d >= tc.digits) {
			t.Errorf("%s: %.2f digits at the end, want %g: %v, want %v", tc.c.Name, d, tc.digits, st.State(), want)
		}
	}
}

// Events: the driver takes steps back (Redo) and restarts in the middle of
// IDA's step. Times are closed forms or 113-bit values (package testproblems).
func TestEvents(t *testing.T) {
	for _, c := range []*testproblems.Case{
		testproblems.RobertsonDAE(), testproblems.TwoPointController(),
		testproblems.JumpingCurrent(), testproblems.Balls(0.8, 0.5), testproblems.HiddenRoots(),
	} {
		sys, err := c.Problem.System()
		if err != nil {
			t.Fatal(err)
		}
		o := solvers.Options{RelTol: 1e-9, AbsTol: 1e-10}
		st := stepper(t, sundials.Method{FirstStep: 1e-6}, sys, o, c.Start, c.Initial)
		h := c.Handlers
		var times []float64
		at := h.AtRoot
		h.AtRoot = func(tm float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
			for range hits {
				times = append(times, tm)
			}
			if at == nil {
				return solvers.Continue, nil
			}
			return at(tm, hits, y)
		}
		end := c.End
		if c.Name == "ROBER-DAE" {
			end = 1e8
		}
		if err := solvers.Integrate(context.Background(), st, end, &h); err != nil {
			t.Fatalf("%s: %v", c.Name, err)
		}
		if len(times) < len(c.Events) {
			t.Fatalf("%s: %d events, want %d", c.Name, len(times), len(c.Events))
		}
		for i, e := range c.Events {
			if math.Abs(times[i]-e.Time) > 1e-5*math.Max(e.Time, 1e-3*(c.End-c.Start)) {
				t.Errorf("%s: event %d at %.10g, want %.10g", c.Name, i, times[i], e.Time)
			}
		}
	}
}

func TestRedo(t *testing.T) {
	c := testproblems.ExpSin() // a closed form
	sys, err := c.Problem.System()
	if err != nil {
		t.Fatal(err)
	}
	st := stepper(t, sundials.IDA, sys, solvers.Options{RelTol: 1e-9}, c.Start, c.Initial)
	for range 60 {
		if err := st.Step(c.End); err != nil {
			t.Fatal(err)
		}
	}
	near := func(what string, got, want float64) {
		t.Helper()
		if math.Abs(got-want) > 1e-6*math.Abs(want) {
			t.Errorf("%s: %.12g, want %.12g", what, got, want)
		}
	}
	t0, t1 := st.Previous(), st.Time()
	mid := 0.5 * (t0 + t1)
	if err := st.Redo(mid); err != nil {
		t.Fatal(err)
	}
	if st.Time() != mid || st.Previous() != t0 {
		t.Errorf("step %g to %g, want %g to %g", st.Previous(), st.Time(), t0, mid)
	}
	near("middle", st.State()[0], c.At(mid)[0])
	late := 0.25*t0 + 0.75*t1
	if err := st.Redo(late); err != nil {
		t.Fatal(err)
	}
	near("later", st.State()[0], c.At(late)[0])
	dst := make([]float64, 1)
	st.Interpolate(dst, []int{0}, mid)
	near("between", dst[0], c.At(mid)[0])
	if err := st.Redo(t0); err != nil {
		t.Fatal(err)
	}
	near("taken back", st.State()[0], c.At(t0)[0])
	if st.Time() != t0 {
		t.Errorf("time %g, want %g", st.Time(), t0)
	}
	if err := st.Step(c.End); err != nil {
		t.Fatal(err)
	}
	reach(t, st, c.End)
	near("end", st.State()[0], c.At(c.End)[0])
}

func TestRefusals(t *testing.T) {
	sys, err := testproblems.ExpSin().Problem.System()
	if err != nil {
		t.Fatal(err)
	}
	for _, m := range []sundials.Method{{MaxOrder: 6}, {MaxOrder: -1}, {FirstStep: -1}, {Stabilisation: math.NaN()}, {Ordering: 7}} {
		if _, err := m.NewStepper(sys, solvers.Options{}); err == nil {
			t.Errorf("%+v accepted", m)
		}
	}
	for _, o := range []solvers.Options{{RelTol: -1}, {AbsTol: math.Inf(1)}, {MaxStep: -1}, {InitialStep: -1}, {MaxSteps: -1}} {
		if _, err := sundials.IDA.NewStepper(sys, o); err == nil {
			t.Errorf("%+v accepted", o)
		}
	}
	st, err := sundials.IDA.NewStepper(sys, solvers.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := st.AppendBinary(nil); !errors.Is(err, sundials.ErrNotSaved) {
		t.Errorf("saving: %v", err)
	}
	if err := st.UnmarshalBinary(nil); !errors.Is(err, sundials.ErrNotSaved) {
		t.Errorf("restoring: %v", err)
	}
}

// A right-hand side's own error ends the run and comes out; ErrReject shortens
// the step.
func TestEvaluationErrors(t *testing.T) {
	broken := errors.New("broken")
	p := &solvers.Problem{N: 1, F: func(dst []float64, t float64, y []float64) error {
		if t > 0.5 {
			return broken
		}
		dst[0] = -y[0]
		return nil
	}}
	sys, err := p.System()
	if err != nil {
		t.Fatal(err)
	}
	st := stepper(t, sundials.IDA, sys, solvers.Options{}, 0, []float64{1})
	err = solvers.Integrate(context.Background(), st, 1, nil)
	var step *solvers.StepError
	if !errors.Is(err, broken) || !errors.As(err, &step) {
		t.Errorf("error is %v, want a StepError around %v", err, broken)
	}
	rejected := 0
	p.F = func(dst []float64, t float64, y []float64) error {
		if y[0] < 0 {
			rejected++
			return solvers.ErrReject
		}
		dst[0] = -math.Sqrt(y[0]) // y = (1 - t/2)^2
		return nil
	}
	st = stepper(t, sundials.IDA, sys, solvers.Options{RelTol: 1e-6, InitialStep: 1.9}, 0, []float64{1})
	reach(t, st, 1.8)
	if y := st.State()[0]; math.Abs(y-0.01) > 1e-4 {
		t.Errorf("y(1.8) = %g, want 0.01", y)
	}
}

// The library linked is the one the wrapper was written against, and whether
// it is an optimised one shows in the report.
func TestVersion(t *testing.T) {
	k := sundials.KernelTime()
	t.Logf("SUNDIALS %s, %.2f ns an entry of a linear sum", sundials.Version(), k)
	if !(k > 0.05 && k < 100) {
		t.Errorf("a linear sum takes %g ns an entry", k)
	}
}
