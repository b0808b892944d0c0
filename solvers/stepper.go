package solvers

import (
	"errors"
	"fmt"
	"io"
	"math"
)

// System is a problem made ready for a method: M y' = f(t, y) with a Jacobian,
// a factorisation of alpha M - J and the solution of its algebraic part.
// [Problem.System] and [Network] provide it. A System holds workspace and
// serves one stepper at a time.
type System interface {
	// Dim is the number of unknowns.
	Dim() int

	// Eval writes f(t, y) into dst.
	Eval(dst []float64, t float64, y []float64) error

	// TimeDerivative writes the partial derivative of f with respect to t
	// into dst and returns true, or returns false (dst then holds rubbish)
	// if f doesn't depend on t explicitly. Where it has to be differenced,
	// h is the step about to be taken and f0 is f(t, y); only times from t
	// on are looked at.
	TimeDerivative(dst []float64, t, h float64, y, f0 []float64) (bool, error)

	// Linearise evaluates the Jacobian J = df/dy at (t, y) and keeps it.
	Linearise(t float64, y []float64) error

	// Factor factors alpha M - J with the Jacobian kept last.
	Factor(alpha float64) error

	// Solve overwrites b with the solution of (alpha M - J) x = b.
	Solve(b []float64)

	// AddMass adds c M x to dst. See also DiagonalMass.
	AddMass(dst []float64, c float64, x []float64)

	// Hidden lists equations of the form 0 = s(y), s linear in differential
	// unknowns alone, which stand for their own time derivative (index 2
	// reduced to 1). A method keeps s(y) = 0 at every stage: with a
	// consistent start, the stage equations of the differentiated form give
	// s(u) = 0 for the stage increments u, so the matrix row of s with a zero
	// right-hand side is the differentiated equation, without its loss of
	// condition at large steps.
	Hidden() []int

	// AlgebraicRow reports whether equation i holds no derivative: its mass
	// row is empty or it is hidden.
	AlgebraicRow(i int) bool

	// Initialise changes the algebraic part of y (and, if project is true,
	// the differential part as far as hidden equations demand it) so that all
	// equations without derivatives hold, the differentiated hidden ones
	// included. The error is an *InconsistentError naming the worst one.
	Initialise(t float64, y []float64, project bool) error

	// Norm returns the size of e in units of the tolerances: the largest
	// over the groups of unknowns of the root mean square of
	// e_i / (tol.Abs scale_i + tol.Rel max(|y0_i|, |y1_i|)), the last term
	// dropped for unknowns that are measured absolutely. worst is the index
	// of the largest entry of that group.
	Norm(e, y0, y1 []float64, tol Tolerance) (norm float64, worst int)
}

// DiagonalMass is the facet of a [System] whose M is diagonal, for methods that
// add M x in passing.
type DiagonalMass interface {
	// MassDiagonal writes the diagonal of M, as it is until the system is
	// configured again, into dst (len Dim).
	MassDiagonal(dst []float64)
}

// Tolerance is a pair of error tolerances.
type Tolerance struct {
	// Rel weighs the magnitude of an unknown.
	Rel float64
	// Abs weighs its scale (1 if the problem gives none).
	Abs float64
}

// Options steer a stepper. The zero value gives the stated defaults.
type Options struct {
	// RelTol is the relative tolerance; 0 means 1e-6.
	RelTol float64
	// AbsTol is the absolute tolerance in units of each unknown's scale;
	// 0 means RelTol.
	AbsTol float64
	// InitialStep is the first step after Reset; 0 lets the method choose.
	InitialStep float64
	// MaxStep bounds the step; 0 means no bound. For Trapezoidal see there.
	MaxStep float64
	// MaxSteps bounds the number of accepted steps of a stepper's life; 0
	// means no bound.
	MaxSteps int
}

func (o Options) tolerance() Tolerance {
	t := Tolerance{Rel: o.RelTol, Abs: o.AbsTol}
	if t.Rel == 0 {
		t.Rel = 1e-6
	}
	if t.Abs == 0 {
		t.Abs = t.Rel
	}
	return t
}

func (o Options) check() error {
	var errs []error
	bad := func(name string, v float64, want string) {
		errs = append(errs, fmt.Errorf("solvers: option %s is %g, want %s", name, v, want))
	}
	if !(o.RelTol >= 0 && o.RelTol < 1) {
		bad("RelTol", o.RelTol, "0 (default) or a value below 1")
	}
	if !(o.AbsTol >= 0 && o.AbsTol < math.Inf(1)) {
		bad("AbsTol", o.AbsTol, "0 (default) or a positive value")
	}
	if !(o.InitialStep >= 0) {
		bad("InitialStep", o.InitialStep, "0 (default) or a positive step")
	}
	if !(o.MaxStep >= 0) {
		bad("MaxStep", o.MaxStep, "0 (no bound) or a positive step")
	}
	if o.MaxSteps < 0 {
		bad("MaxSteps", float64(o.MaxSteps), "0 (no bound) or a positive number")
	}
	return errors.Join(errs...)
}

// Method is a numerical method: a value without state.
type Method interface {
	// Name is the method's published name.
	Name() string
	// NewStepper allocates a stepper for s. It fails on bad options.
	NewStepper(s System, o Options) (Stepper, error)
}

// Stepper integrates a System, one step at a time.
type Stepper interface {
	// Reset starts at (t, y), or starts again after a jump. It makes y
	// consistent (System.Initialise with projection; y is copied, not
	// changed) and chooses a fresh first step.
	Reset(t float64, y []float64) error

	// Step takes one accepted step that ends at or before tmax; it ends
	// exactly at tmax if that is in reach. The error is a *StepError; the
	// state is then the last accepted one.
	Step(tmax float64) error

	// Redo takes back the last step and repeats it, without error control,
	// to end exactly at t, which must lie within it or close to its end. At
	// t = Previous() it just takes the step back.
	Redo(t float64) error

	// Time and State are the end of the last accepted step. The slice is
	// valid, and constant, until the next call that moves the stepper.
	Time() float64
	State() []float64

	// Previous and PreviousState are the start of the last accepted step.
	Previous() float64
	PreviousState() []float64

	// Interpolate writes the components which (nil: all) at time t within
	// the last step into dst[i] for component which[i] (dst[i] for i if nil).
	Interpolate(dst []float64, which []int, t float64)

	// Stats counts the work since the stepper was made.
	Stats() Stats

	// AppendBinary and UnmarshalBinary save and restore the stepper between
	// steps: a restored stepper of the same system and options goes on with
	// the same bits.
	AppendBinary(b []byte) ([]byte, error)
	UnmarshalBinary(data []byte) error
}

// Stats counts work.
type Stats struct {
	Steps          int // accepted steps
	Rejected       int // steps rejected by the error estimate
	Failed         int // steps shortened because an evaluation, a factorisation or an iteration failed
	Evals          int // evaluations of f
	Jacobians      int // evaluations of the Jacobian
	Factorizations int // factorisations of alpha M - J
	Solves         int // solutions with it
	Restarts       int // calls of Reset
	Smallest       float64
	Largest        float64 // smallest and largest accepted step
}

func (s *Stats) accept(h float64) {
	s.Steps++
	if s.Smallest == 0 || h < s.Smallest {
		s.Smallest = h
	}
	if h > s.Largest {
		s.Largest = h
	}
}

// Sub returns the work done since an earlier count. Smallest and Largest stay
// those of s.
func (s Stats) Sub(before Stats) Stats {
	s.Steps -= before.Steps
	s.Rejected -= before.Rejected
	s.Failed -= before.Failed
	s.Evals -= before.Evals
	s.Jacobians -= before.Jacobians
	s.Factorizations -= before.Factorizations
	s.Solves -= before.Solves
	s.Restarts -= before.Restarts
	return s
}

// WriteTo prints all statistics, a line each.
func (s Stats) WriteTo(w io.Writer) (int64, error) {
	n, err := fmt.Fprintf(w, "steps %d\nrejected %d\nfailed %d\nevaluations %d\nJacobians %d\nfactorisations %d\nsolutions %d\nrestarts %d\nsmallest step %.3g\nlargest step %.3g\n",
		s.Steps, s.Rejected, s.Failed, s.Evals, s.Jacobians, s.Factorizations, s.Solves, s.Restarts, s.Smallest, s.Largest)
	return int64(n), err
}

// StepError reports a step that could not be taken.
type StepError struct {
	Time   float64 // start of the step
	Step   float64 // the last step size tried
	Index  int     // the unknown or equation that is worst, -1 if none stands out
	Reason string  // "step size too small", "too many steps", ...
	Err    error   // the cause, if there is one
}

func (e *StepError) Error() string {
	s := fmt.Sprintf("solvers: t = %.9g, h = %.3g", e.Time, e.Step)
	if e.Index >= 0 {
		s += fmt.Sprintf(", unknown %d", e.Index)
	}
	s += ": " + e.Reason
	if e.Err != nil {
		s += ": " + e.Err.Error()
	}
	return s
}

func (e *StepError) Unwrap() error { return e.Err }

// InconsistentError reports algebraic equations for which no solution was
// found near the start.
type InconsistentError struct {
	Time  float64
	Index int     // the equation or unknown that is worst
	Size  float64 // its remaining correction, in units of the unknown's scale
	Err   error   // the cause, if there is one (a singular matrix)
}

func (e *InconsistentError) Error() string {
	s := fmt.Sprintf("solvers: t = %.9g: algebraic equations have no solution near the start: unknown %d (correction %.3g)", e.Time, e.Index, e.Size)
	if e.Err != nil {
		s += ": " + e.Err.Error()
	}
	return s
}

func (e *InconsistentError) Unwrap() error { return e.Err }
