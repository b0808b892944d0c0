package solvers

import (
	"errors"
	"fmt"
	"math"
)

type trapezoidalMethod struct{}

// Trapezoidal is the implicit trapezoidal rule at a fixed step,
// Options.MaxStep (required), the textbook habit of transient programs, kept
// as a second opinion. The first step after Reset is taken as two half steps
// of the backward Euler rule, which stops the numerical oscillation that the
// trapezoidal rule shows after a discontinuity (J. R. Marti, J. Lin, IEEE
// Trans. Power Systems 4(2), 1989, value from memory). A step is shorter only
// to meet an exact stop. Newton's method solves each step to a thousandth of
// the tolerances; there is no error control. Interpolation within a step is
// linear.
var Trapezoidal Method = trapezoidalMethod{}

func (trapezoidalMethod) Name() string { return "Trapezoidal" }

func (trapezoidalMethod) NewStepper(s System, o Options) (Stepper, error) {
	err := o.check()
	if o.MaxStep == 0 {
		err = errors.Join(err, fmt.Errorf("solvers: option MaxStep is 0, want the fixed step of the trapezoidal rule"))
	}
	if err != nil {
		return nil, err
	}
	n := s.Dim()
	tr := &trapezoidal{sys: s, opt: o, tol: o.tolerance(), n: n}
	vec := func() []float64 { return make([]float64, n) }
	tr.y, tr.prev, tr.trial, tr.f0, tr.g, tr.diff = vec(), vec(), vec(), vec(), vec(), vec()
	tr.yJac, tr.half = vec(), vec()
	return tr, nil
}

type trapezoidal struct {
	sys System
	opt Options
	tol Tolerance
	n   int

	t, tPrev float64
	y, prev  []float64
	trial    []float64
	f0       []float64
	g, diff  []float64
	half     []float64 // state after the first backward Euler half step
	started  bool
	moved    bool
	fresh    bool // the next step starts after a discontinuity
	wasFresh bool // the last step did

	// The matrix in use: Jacobian at (tJac, yJac), factored with alpha.
	haveJac bool
	tJac    float64
	yJac    []float64
	alpha   float64

	stats Stats
}

func (r *trapezoidal) Time() float64            { return r.t }
func (r *trapezoidal) State() []float64         { return r.y }
func (r *trapezoidal) Previous() float64        { return r.tPrev }
func (r *trapezoidal) PreviousState() []float64 { return r.prev }
func (r *trapezoidal) Stats() Stats             { return r.stats }

func (r *trapezoidal) Reset(t float64, y []float64) error {
	if len(y) != r.n {
		panic("solvers: length of y doesn't match the system")
	}
	r.stats.Restarts++
	copy(r.y, y)
	if err := r.sys.Initialise(t, r.y, true); err != nil {
		return err
	}
	r.t, r.tPrev = t, t
	copy(r.prev, r.y)
	r.started, r.moved, r.fresh, r.haveJac = true, false, true, false
	return nil
}

func (r *trapezoidal) Step(tmax float64) error {
	if !r.started {
		panic("solvers: Step before Reset")
	}
	if !(tmax > r.t) {
		return &StepError{Time: r.t, Step: tmax - r.t, Index: -1, Reason: "the end of the step doesn't lie ahead"}
	}
	if r.opt.MaxSteps > 0 && r.stats.Steps >= r.opt.MaxSteps {
		return &StepError{Time: r.t, Step: r.opt.MaxStep, Index: -1, Reason: "too many steps"}
	}
	h := r.opt.MaxStep
	end := r.t + h
	if r.t+1.0001*h >= tmax {
		h, end = tmax-r.t, tmax
	}
	return r.advance(h, end, r.fresh)
}

func (r *trapezoidal) advance(h, end float64, fresh bool) error {
	if fresh {
		if err := r.solve(r.half, r.t, h/2, r.y, false); err != nil {
			return err
		}
		if err := r.solve(r.trial, r.t+h/2, h/2, r.half, false); err != nil {
			return err
		}
	} else if err := r.solve(r.trial, r.t, h, r.y, true); err != nil {
		return err
	}
	r.tPrev, r.t = r.t, end
	r.prev, r.y, r.trial = r.y, r.trial, r.prev
	r.moved, r.wasFresh, r.fresh = true, fresh, false
	r.stats.accept(h)
	return nil
}

// solve finds y1 at t+h by Newton's method: (2/h) M (y1-y0) = f0 + f1 by the
// trapezoidal rule, (1/h) M (y1-y0) = f1 by the backward Euler rule. Equations
// without a derivative are taken as f1 = 0 by both.
func (r *trapezoidal) solve(y1 []float64, t, h float64, y0 []float64, trapezoid bool) error {
	const maxIterations = 20
	fail := func(i int, why string, err error) error {
		return &StepError{Time: t, Step: h, Index: i, Reason: why, Err: err}
	}
	alpha := 1 / h
	if trapezoid {
		alpha = 2 / h
		r.stats.Evals++
		if err := r.sys.Eval(r.f0, t, y0); err != nil {
			return fail(-1, "evaluation failed", err)
		}
		for i := range r.f0 {
			if r.sys.AlgebraicRow(i) {
				r.f0[i] = 0
			}
		}
	}
	copy(y1, y0)
	before := math.Inf(1)
	for iteration := range maxIterations {
		if !r.haveJac || alpha != r.alpha {
			if err := r.matrix(t, y0, alpha); err != nil {
				return err
			}
		}
		r.stats.Evals++
		if err := r.sys.Eval(r.g, t+h, y1); err != nil {
			return fail(-1, "evaluation failed", err)
		}
		if trapezoid {
			for i, v := range r.f0 {
				r.g[i] += v
			}
		}
		for i := range r.diff {
			r.diff[i] = y1[i] - y0[i]
		}
		r.sys.AddMass(r.g, -alpha, r.diff)
		r.sys.Solve(r.g)
		r.stats.Solves++
		for i, d := range r.g {
			y1[i] += d
		}
		size, worst := r.sys.Norm(r.g, y0, y1, r.tol)
		if size != size {
			return fail(worst, "the iteration met a value that is not a number", nil)
		}
		if size <= 1e-3 {
			return nil
		}
		if iteration == maxIterations-1 {
			return fail(worst, fmt.Sprintf("no convergence in %d iterations", maxIterations), nil)
		}
		if size > 0.3*before || iteration%6 == 5 {
			// Slow: the matrix is out of date.
			if err := r.matrix(t+h, y1, alpha); err != nil {
				return err
			}
		}
		before = size
	}
	return nil
}

func (r *trapezoidal) matrix(t float64, y []float64, alpha float64) error {
	r.stats.Jacobians++
	if err := r.sys.Linearise(t, y); err != nil {
		return &StepError{Time: t, Index: -1, Reason: "the Jacobian can't be evaluated", Err: err}
	}
	copy(r.yJac, y)
	r.tJac, r.alpha, r.haveJac = t, alpha, true
	r.stats.Factorizations++
	if err := r.sys.Factor(alpha); err != nil {
		i := -1
		var sing *SingularError
		if errors.As(err, &sing) {
			i = sing.Column
		}
		return &StepError{Time: t, Step: 1 / alpha, Index: i, Reason: "singular matrix", Err: err}
	}
	return nil
}

func (r *trapezoidal) Redo(t float64) error {
	if !r.moved {
		panic("solvers: Redo without a step to take back")
	}
	end := r.t
	r.t = r.tPrev
	r.prev, r.y = r.y, r.prev
	r.moved = false
	if t == r.t {
		copy(r.prev, r.y)
		r.fresh = r.wasFresh
		return nil
	}
	if err := r.advance(t-r.t, t, r.wasFresh); err != nil {
		r.t, r.moved = end, true
		r.prev, r.y = r.y, r.prev
		return err
	}
	return nil
}

func (r *trapezoidal) Interpolate(dst []float64, which []int, t float64) {
	h := r.t - r.tPrev
	if h == 0 || t == r.t {
		gather(dst, which, r.y)
		return
	}
	w := (t - r.tPrev) / h
	if which == nil {
		for i := range dst[:r.n] {
			dst[i] = (1-w)*r.prev[i] + w*r.y[i]
		}
		return
	}
	for i, c := range which {
		dst[i] = (1-w)*r.prev[c] + w*r.y[c]
	}
}

func (r *trapezoidal) AppendBinary(b []byte) ([]byte, error) {
	w := stateWriter{b}
	w.floats(r.t, r.tJac, r.alpha)
	w.bools(r.started, r.fresh, r.haveJac)
	w.vector(r.y)
	w.vector(r.yJac)
	w.stats(&r.stats)
	return w.b, nil
}

func (r *trapezoidal) UnmarshalBinary(data []byte) error {
	rd := stateReader{b: data}
	var t, tJac, alpha float64
	var started, fresh, haveJac bool
	rd.floats(&t, &tJac, &alpha)
	rd.bools(&started, &fresh, &haveJac)
	y, yJac := make([]float64, r.n), make([]float64, r.n)
	rd.vector(y)
	rd.vector(yJac)
	var st Stats
	rd.stats(&st)
	if err := rd.finish(); err != nil {
		return err
	}
	r.t, r.tPrev, r.started, r.fresh, r.moved = t, t, started, fresh, false
	copy(r.y, y)
	copy(r.prev, y)
	r.haveJac = false
	if haveJac {
		if err := r.matrix(tJac, yJac, alpha); err != nil {
			return err
		}
	}
	r.stats = st
	return nil
}
