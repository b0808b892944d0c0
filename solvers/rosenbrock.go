package solvers

import (
	"errors"
	"math"
	"slices"
)

// rosenbrockTable holds the coefficients of a Rosenbrock-Wanner method. With
// W = M/(h gamma) - J the stages i = 1..s are
//
//	W u_i = f(t + c_i h, y + sum_{j<i} a_ij u_j) + M sum_{j<i} (cc_ij/h) u_j + h d_i df/dt
//
// the new value is y + sum_j a_sj u_j + u_s and the error estimate u_s. Dense
// output over the step, with th in [0, 1]:
//
//	y(t + th h) = (1-th) y0 + th (y1 + (1-th)(k_1 + th (k_2 + th k_3))),  k_j = sum_i dense_ji u_i
type rosenbrockTable struct {
	name  string
	order int
	gamma float64
	c, d  []float64   // s
	a, cc [][]float64 // s rows, strictly lower
	dense [][]float64 // 2 or 3 rows of s
}

// Name returns the method's published name.
func (m *rosenbrockTable) Name() string { return m.name }

// Rodas5P is the default method: Rosenbrock-Wanner of order 5 with 8 stages,
// stiffly accurate and L-stable, for index 1, with dense output of order 4. A
// step costs one Jacobian, one factorisation, eight evaluations and eight
// solutions.
var Rodas5P Method = rodas5P

// Rodas4P is Rosenbrock-Wanner of order 4 with 6 stages, stiffly accurate and
// L-stable, for index 1, with little order reduction and dense output of order
// 3.
var Rodas4P Method = rodas4P

// NewStepper allocates a stepper.
func (m *rosenbrockTable) NewStepper(s System, o Options) (Stepper, error) {
	if err := o.check(); err != nil {
		return nil, err
	}
	n := s.Dim()
	r := &rosenbrock{sys: s, tab: m, tol: o.tolerance(), opt: o, n: n, hidden: s.Hidden()}
	// Vectors reach to a multiple of four values, as combineTwo wants it.
	vec := func() []float64 { return make([]float64, n, (n+3)&^3) }
	r.y, r.prev, r.trial, r.f0, r.ft, r.acc = vec(), vec(), vec(), vec(), vec(), vec()
	r.mass = vec()
	r.pairs = make([]float64, 2*len(m.c))
	for range m.c {
		r.u = append(r.u, vec())
	}
	for range m.dense {
		r.k = append(r.k, vec())
	}
	r.midValue, r.midSlope = m.middle()
	r.adds = m.increments()
	return r, nil
}

// increments tells of each stage whether its argument is that of the stage
// before plus that stage's increment, as in the last stages of stiffly accurate
// methods.
func (m *rosenbrockTable) increments() []bool {
	adds := make([]bool, len(m.a))
	for i := 2; i < len(m.a); i++ {
		row, before := m.a[i], m.a[i-1]
		adds[i] = slices.Equal(row[:i-1], before) && row[i-1] == 1
	}
	return adds
}

// middle returns the weights of the stages in the dense output at mid-step,
// y = (y0 + y1)/2 + sum value_i u_i, and in its slope, h y' = y1 - y0 + sum
// slope_i u_i.
func (m *rosenbrockTable) middle() (value, slope []float64) {
	value, slope = make([]float64, len(m.c)), make([]float64, len(m.c))
	for j, row := range m.dense {
		// th (1-th) th^j k_j at th = 1/2, and its derivative.
		v := 0.25 * math.Pow(0.5, float64(j))
		s := 0.25 * float64(j) * math.Pow(0.5, float64(j-1))
		for i, w := range row {
			value[i] += v * w
			slope[i] += s * w
		}
	}
	return value, slope
}

// rosenbrock is the stepper of the Rosenbrock methods.
type rosenbrock struct {
	sys    System
	tab    *rosenbrockTable
	opt    Options
	tol    Tolerance
	n      int
	hidden []int

	t, tPrev  float64
	y, prev   []float64 // end and start of the last step
	trial     []float64 // stage argument, then the candidate
	f0, ft    []float64 // f and df/dt at the start of the step
	acc       []float64
	u         [][]float64 // stage increments
	k         [][]float64 // dense output coefficients
	mass      []float64   // its diagonal, where the system has one; else ones
	diagonal  bool
	pairs     []float64 // coefficients of a stage, see combineTwo
	haveFt    bool
	midValue  []float64 // weights of the stages at mid-step
	midSlope  []float64
	adds      []bool // see increments
	haveDense bool
	started   bool // Reset has been called
	moved     bool // a step has been taken since Reset

	h       float64 // proposal for the next step
	hLast   float64 // last accepted step under error control
	errLast float64 // and its error
	stats   Stats
}

// Step-size control: the standard controller with the predictive term of
// K. Gustafsson, Control-theoretic techniques for stepsize selection in
// implicit Runge-Kutta methods, ACM TOMS 20(4), 1994, in the form given by
// Hairer & Wanner II, section IV.8; the constants are those usual there.
const (
	stepSafety = 0.9
	stepShrink = 0.2
	stepGrow   = 6.0
)

func (r *rosenbrock) Time() float64            { return r.t }
func (r *rosenbrock) State() []float64         { return r.y }
func (r *rosenbrock) Previous() float64        { return r.tPrev }
func (r *rosenbrock) PreviousState() []float64 { return r.prev }
func (r *rosenbrock) Stats() Stats             { return r.stats }

func (r *rosenbrock) Reset(t float64, y []float64) error {
	if len(y) != r.n {
		panic("solvers: length of y doesn't match the system")
	}
	r.stats.Restarts++
	r.connect()
	copy(r.y, y)
	if err := r.sys.Initialise(t, r.y, true); err != nil {
		return err
	}
	r.t, r.tPrev = t, t
	copy(r.prev, r.y)
	r.started, r.moved, r.haveDense = true, false, false
	r.hLast, r.errLast = 0, 0
	r.h = r.opt.InitialStep
	return nil
}

// connect reads what depends on how the system is connected at present.
func (r *rosenbrock) connect() {
	r.hidden = r.sys.Hidden()
	d, ok := r.sys.(DiagonalMass)
	if r.diagonal = ok; ok {
		d.MassDiagonal(r.mass)
		return
	}
	for i := range r.mass {
		r.mass[i] = 1
	}
}

// firstStep chooses the first step after a reset from the sizes of y, y' and
// a difference for y”, after E. Hairer, S.P. Nørsett, G. Wanner, Solving
// Ordinary Differential Equations I, 2nd ed., section II.4; y' comes from
// (alpha M - J) with alpha large, so that M may be singular.
func (r *rosenbrock) firstStep(span float64) (float64, error) {
	y1, d := r.trial, r.acc
	if span == 0 || math.IsInf(span, 0) {
		span = 1
	}
	// A rate fast against anything resolved by the run.
	alpha := 1e9 / span
	if err := r.sys.Factor(alpha); err != nil {
		return 0, err
	}
	r.stats.Factorizations++
	rate := func(dst, f []float64) {
		copy(dst, f)
		for i := range dst {
			if r.sys.AlgebraicRow(i) {
				dst[i] = 0
			}
		}
		r.sys.Solve(dst)
		r.stats.Solves++
		for i := range dst {
			dst[i] *= alpha
		}
	}
	rate(d, r.f0)
	size, _ := r.sys.Norm(r.y, r.y, r.y, r.tol)
	d1, _ := r.sys.Norm(d, r.y, r.y, r.tol)
	if d1 != d1 || math.IsInf(d1, 0) {
		return 1e-9 * span, nil
	}
	h0 := 1e-6 * span
	if size > 1e-5 && d1 > 1e-5 {
		h0 = math.Min(1e-2*span, 0.01*size/d1)
	}
	for i := range y1 {
		y1[i] = r.y[i] + h0*d[i]
	}
	r.stats.Evals++
	if err := r.sys.Eval(r.u[0], r.t+h0, y1); err != nil {
		if errors.Is(err, ErrReject) {
			return h0 / 100, nil
		}
		return 0, err
	}
	rate(r.u[1], r.u[0])
	for i := range y1 {
		d[i] = (r.u[1][i] - d[i]) / h0
	}
	d2, _ := r.sys.Norm(d, r.y, r.y, r.tol)
	biggest := math.Max(d1, d2)
	h1 := math.Max(1e-6*span, h0*1e-3)
	if biggest > 1e-15 {
		h1 = math.Pow(0.01/biggest, 1/float64(r.tab.order))
	}
	h := math.Min(100*h0, h1)
	if h != h {
		h = 1e-9 * span
	}
	return h, nil
}

// prepare evaluates f, the Jacobian and df/dt at the start of a step.
func (r *rosenbrock) prepare() error {
	r.stats.Evals++
	if err := r.sys.Eval(r.f0, r.t, r.y); err != nil {
		return err
	}
	for _, i := range r.hidden {
		r.f0[i] = 0
	}
	r.stats.Jacobians++
	return r.sys.Linearise(r.t, r.y)
}

func (r *rosenbrock) timeDerivative(h float64) error {
	var err error
	r.haveFt, err = r.sys.TimeDerivative(r.ft, r.t, h, r.y, r.f0)
	if r.haveFt {
		for _, i := range r.hidden {
			r.ft[i] = 0
		}
	}
	return err
}

func (r *rosenbrock) Step(tmax float64) error {
	if !r.started {
		panic("solvers: Step before Reset")
	}
	if !(tmax > r.t) {
		return &StepError{Time: r.t, Step: tmax - r.t, Index: -1, Reason: "the end of the step doesn't lie ahead"}
	}
	if r.opt.MaxSteps > 0 && r.stats.Steps >= r.opt.MaxSteps {
		return &StepError{Time: r.t, Step: r.h, Index: -1, Reason: "too many steps"}
	}
	if err := r.prepare(); err != nil {
		return &StepError{Time: r.t, Step: r.h, Index: -1, Reason: "the right-hand side can't be evaluated at an accepted state", Err: err}
	}
	if r.h == 0 {
		h, err := r.firstStep(math.Min(tmax-r.t, 1))
		if err != nil {
			return &StepError{Time: r.t, Index: -1, Reason: "no first step", Err: err}
		}
		r.h = h
	}
	h := r.h
	if r.opt.MaxStep > 0 {
		h = math.Min(h, r.opt.MaxStep)
	}
	smallest := 8 * ulp(r.t)
	h = math.Max(h, smallest)
	rejectedBefore := false
	shrunk := false
	worst := -1
	var cause error
	for {
		last := false
		if r.t+1.0001*h >= tmax {
			last = true
			h = tmax - r.t
		}
		if h < smallest && !last {
			if cause != nil {
				return &StepError{Time: r.t, Step: h, Index: worst, Reason: "step size too small", Err: cause}
			}
			return &StepError{Time: r.t, Step: h, Index: worst, Reason: "step size too small: the error test fails repeatedly"}
		}
		err := r.attempt(h)
		if err != nil {
			var sing *SingularError
			if !errors.Is(err, ErrReject) && !errors.As(err, &sing) {
				return &StepError{Time: r.t, Step: h, Index: -1, Reason: "evaluation failed", Err: err}
			}
			r.stats.Failed++
			cause = err
			if sing != nil {
				worst = sing.Column
			}
			h /= 4
			shrunk = true
			if last && h < smallest {
				return &StepError{Time: r.t, Step: h, Index: worst, Reason: "step size too small", Err: cause}
			}
			continue
		}
		e, w := r.sys.Norm(r.u[len(r.u)-1], r.y, r.trial, r.tol)
		p := 1 / float64(r.tab.order)
		if !(e <= 1) {
			// Rejected, or not a number.
			r.stats.Rejected++
			worst, cause = w, nil
			f := stepShrink
			if e == e && !math.IsInf(e, 0) {
				f = math.Min(0.8, math.Max(stepShrink, stepSafety*math.Pow(e, -p)))
			}
			if rejectedBefore {
				f = math.Min(f, 0.5)
			}
			if last && h*f < smallest {
				return &StepError{Time: r.t, Step: h, Index: worst, Reason: "step size too small: the error test fails repeatedly"}
			}
			h *= f
			rejectedBefore = true
			continue
		}
		if r.haveFt {
			inside, w, err := r.insideError(h)
			if err != nil && !errors.Is(err, ErrReject) {
				return &StepError{Time: r.t, Step: h, Index: -1, Reason: "evaluation failed", Err: err}
			}
			if err != nil || !(inside <= 1) {
				r.stats.Rejected++
				worst, cause = w, err
				f := 0.25
				if err == nil && inside == inside && !math.IsInf(inside, 0) {
					f = math.Min(0.8, math.Max(stepShrink, stepSafety*math.Pow(inside, -p)))
				}
				if last && h*f < smallest {
					return &StepError{Time: r.t, Step: h, Index: worst, Reason: "step size too small: the error within the step stays large"}
				}
				h *= f
				rejectedBefore = true
				continue
			}
			e = math.Max(e, inside)
		}
		// Accepted.
		r.tPrev = r.t
		r.t += h
		if last {
			r.t = tmax
		}
		r.prev, r.y, r.trial = r.y, r.trial, r.prev
		r.haveDense, r.moved = false, true
		r.stats.accept(h)
		grow := stepGrow
		if e > 0 {
			grow = math.Min(grow, stepSafety*math.Pow(e, -p))
		}
		if r.hLast > 0 && e > 0 {
			// Predictive term: what the trend of the error suggests.
			g := stepSafety * (h / r.hLast) * math.Pow(math.Max(1e-2, r.errLast)/(e*e), p)
			grow = math.Min(grow, g)
		}
		grow = math.Max(grow, stepShrink)
		if rejectedBefore || shrunk {
			grow = math.Min(grow, 1)
		}
		next := h * grow
		if last && h < 0.5*r.h && next < r.h && !rejectedBefore && !shrunk {
			// The step was cut to meet tmax: its error says little about
			// the step the problem allows.
			next = r.h
		}
		r.h = next
		r.hLast, r.errLast = h, e
		return nil
	}
}

// insideTolerance is how far, in units of the tolerances, the dense output may
// fall behind the values at the ends of a step.
const insideTolerance = 10

// insideError estimates the error of the dense output at mid-step, in units of
// insideTolerance: the defect there, turned into a correction by the step's
// matrix. For unknowns that follow a function of time, algebraically or nearly
// so, the values at the ends of a step are exact however long it is and tell
// nothing of what lies between; where time enters only through the state, the
// error estimate of the state does, and this one isn't needed.
func (r *rosenbrock) insideError(h float64) (size float64, worst int, err error) {
	// acc = M (h y') at mid-step, k[0] the value there.
	mid, slope := r.k[0], r.k[1]
	combine(mid, nil, r.midValue, r.u)
	combine(slope, nil, r.midSlope, r.u)
	for i := range mid {
		mid[i] += 0.5 * (r.y[i] + r.trial[i])
		slope[i] += r.trial[i] - r.y[i]
	}
	r.stats.Evals++
	if err := r.sys.Eval(r.acc, r.t+0.5*h, mid); err != nil {
		return 0, -1, err
	}
	r.sys.AddMass(r.acc, -1/h, slope)
	for _, k := range r.hidden {
		r.acc[k] = 0
	}
	r.sys.Solve(r.acc)
	r.stats.Solves++
	size, worst = r.sys.Norm(r.acc, r.y, r.trial, r.tol)
	return size / insideTolerance, worst, nil
}

// ulp is the distance from |t| to the next float64, at least that of 1e-9.
func ulp(t float64) float64 {
	t = math.Max(math.Abs(t), 1e-9)
	return math.Nextafter(t, math.Inf(1)) - t
}

// attempt computes the stages of a step of size h from (r.t, r.y) into r.u and
// the candidate into r.trial.
func (r *rosenbrock) attempt(h float64) error {
	if err := r.timeDerivative(h); err != nil {
		return err
	}
	tab := r.tab
	r.stats.Factorizations++
	if err := r.sys.Factor(1 / (h * tab.gamma)); err != nil {
		return err
	}
	hInv := 1 / h
	for i, u := range r.u {
		if i == 0 {
			copy(u, r.f0)
		} else {
			// What the stages before add: M times a sum, over h. In a last
			// stage the argument is that of the stage before, which trial
			// still holds, plus its increment.
			for j, c := range tab.cc[i] {
				r.pairs[2*j], r.pairs[2*j+1] = tab.a[i][j], hInv*c
			}
			from := r.y
			if r.adds[i] {
				from = r.trial
				for j := range i {
					r.pairs[2*j] = 0
				}
				r.pairs[2*i-2] = 1
			}
			combineTwo(r.trial, r.acc, from, r.mass, r.pairs[:2*i], r.u[:i])
			r.stats.Evals++
			if err := r.sys.Eval(u, r.t+tab.c[i]*h, r.trial); err != nil {
				return err
			}
			if r.diagonal {
				addTo(u, r.acc)
			} else {
				r.sys.AddMass(u, 1, r.acc)
			}
			for _, k := range r.hidden {
				u[k] = 0
			}
		}
		if r.haveFt && tab.d[i] != 0 {
			hd := h * tab.d[i]
			ft := r.ft[:len(u)]
			for k := range u {
				u[k] += hd * ft[k]
			}
		}
		r.sys.Solve(u)
		r.stats.Solves++
	}
	addTo(r.trial, r.u[len(r.u)-1]) // the argument of the last stage plus u_s
	return nil
}

// addTo adds src to dst, both with room to a multiple of four values.
func addTo(dst, src []float64) {
	n := len(dst)
	if useAVX && n > 0 {
		_, _ = dst[:(n+3)&^3], src[:(n+3)&^3]
		addAVX(&dst[0], &src[0], n)
		return
	}
	src = src[:n]
	for i, x := range src {
		dst[i] += x
	}
}

// combineTwo writes y + sum_j a[j] u[j] into dst and scale times sum_j c[j]
// u[j] into acc, reading every u once. ac holds a[0], c[0], a[1], ...; all
// vectors reach to a multiple of four values.
func combineTwo(dst, acc, y, scale, ac []float64, u [][]float64) {
	n := len(dst)
	if n == 0 {
		return
	}
	if useAVX {
		full := (n + 3) &^ 3
		for _, v := range u {
			_ = v[:full]
		}
		_, _, _, _ = dst[:full], acc[:full], y[:full], scale[:full]
		combineTwoAVX(&dst[0], &acc[0], &y[0], &scale[0], n, &ac[0], &u[0], len(u))
		return
	}
	combineTwoGo(dst, acc, y, scale, ac, u)
}

func combineTwoGo(dst, acc, y, scale, ac []float64, u [][]float64) {
	n := len(dst)
	acc, y, scale = acc[:n], y[:n], scale[:n]
	if &dst[0] != &y[0] {
		copy(dst, y)
	}
	clear(acc)
	j := 0
	for ; j+2 <= len(u); j += 2 {
		a0, c0, a1, c1 := ac[2*j], ac[2*j+1], ac[2*j+2], ac[2*j+3]
		u0, u1 := u[j][:n], u[j+1][:n]
		for i, x := range u0 {
			x1 := u1[i]
			dst[i] = dst[i] + a0*x + a1*x1
			acc[i] = acc[i] + c0*x + c1*x1
		}
	}
	if j < len(u) {
		a0, c0, u0 := ac[2*j], ac[2*j+1], u[j][:n]
		for i, x := range u0 {
			dst[i] += a0 * x
			acc[i] += c0 * x
		}
	}
	for i, m := range scale {
		acc[i] *= m
	}
}

// combine writes y + sum_j c[j] u[j] into dst; y may be nil for zero. The sum
// runs over the vectors in one pass, four at a time.
func combine(dst, y []float64, c []float64, u [][]float64) {
	n := len(dst)
	switch {
	case y != nil:
		copy(dst, y[:n])
	default:
		for i := range dst {
			dst[i] = 0
		}
	}
	j := 0
	for ; j+4 <= len(c); j += 4 {
		c0, c1, c2, c3 := c[j], c[j+1], c[j+2], c[j+3]
		u0, u1, u2, u3 := u[j][:n], u[j+1][:n], u[j+2][:n], u[j+3][:n]
		for i := range dst {
			dst[i] += c0*u0[i] + c1*u1[i] + c2*u2[i] + c3*u3[i]
		}
	}
	switch len(c) - j {
	case 3:
		c0, c1, c2 := c[j], c[j+1], c[j+2]
		u0, u1, u2 := u[j][:n], u[j+1][:n], u[j+2][:n]
		for i := range dst {
			dst[i] += c0*u0[i] + c1*u1[i] + c2*u2[i]
		}
	case 2:
		c0, c1 := c[j], c[j+1]
		u0, u1 := u[j][:n], u[j+1][:n]
		for i := range dst {
			dst[i] += c0*u0[i] + c1*u1[i]
		}
	case 1:
		c0 := c[j]
		u0 := u[j][:n]
		for i := range dst {
			dst[i] += c0 * u0[i]
		}
	}
}

func (r *rosenbrock) Redo(t float64) error {
	if !r.moved {
		panic("solvers: Redo without a step to take back")
	}
	tEnd := r.t
	r.t = r.tPrev
	r.prev, r.y = r.y, r.prev
	r.moved, r.haveDense = false, false
	if t == r.t {
		copy(r.prev, r.y)
		return nil
	}
	h := t - r.t
	if err := r.attempt(h); err != nil {
		r.t, r.moved = tEnd, true
		r.prev, r.y = r.y, r.prev
		return &StepError{Time: r.tPrev, Step: h, Index: -1, Reason: "the step can't be repeated to a shorter end", Err: err}
	}
	r.t = t
	r.prev, r.y, r.trial = r.y, r.trial, r.prev
	r.moved = true
	return nil
}

func (r *rosenbrock) Interpolate(dst []float64, which []int, t float64) {
	h := r.t - r.tPrev
	if h == 0 || t == r.t {
		gather(dst, which, r.y)
		return
	}
	th := (t - r.tPrev) / h
	if !r.haveDense && (which == nil || 4*len(which) > r.n) {
		for j, k := range r.k {
			combine(k, nil, r.tab.dense[j], r.u)
		}
		r.haveDense = true
	}
	w0, w1 := 1-th, th
	if which == nil {
		r.interpolateAll(dst[:r.n], w0, w1)
		return
	}
	for i, c := range which {
		dst[i] = r.interpolateOne(c, w0, w1)
	}
}

// interpolateAll is interpolateOne for every component, with the coefficients
// of the dense output at hand.
func (r *rosenbrock) interpolateAll(dst []float64, w0, w1 float64) {
	n := len(dst)
	y0, y1 := r.prev[:n], r.y[:n]
	k0, k1 := r.k[0][:n], r.k[1][:n]
	if len(r.k) == 2 {
		for i := range dst {
			dst[i] = w0*y0[i] + w1*(y1[i]+w0*(k0[i]+w1*k1[i]))
		}
		return
	}
	k2 := r.k[2][:n]
	for i := range dst {
		dst[i] = w0*y0[i] + w1*(y1[i]+w0*(k0[i]+w1*(k1[i]+w1*k2[i])))
	}
}

func (r *rosenbrock) interpolateOne(c int, w0, w1 float64) float64 {
	s := 0.0
	for j := len(r.k) - 1; j >= 0; j-- {
		k := 0.0
		if r.haveDense {
			k = r.k[j][c]
		} else {
			row := r.tab.dense[j]
			for i, u := range r.u {
				k += row[i] * u[c]
			}
		}
		s = s*w1 + k
	}
	return w0*r.prev[c] + w1*(r.y[c]+w0*s)
}

func gather(dst []float64, which []int, y []float64) {
	if which == nil {
		copy(dst, y)
		return
	}
	for i, c := range which {
		dst[i] = y[c]
	}
}

func (r *rosenbrock) AppendBinary(b []byte) ([]byte, error) {
	w := stateWriter{b}
	w.floats(r.t, r.tPrev, r.h, r.hLast, r.errLast)
	w.bools(r.started)
	w.vector(r.y)
	w.stats(&r.stats)
	return w.b, nil
}

func (r *rosenbrock) UnmarshalBinary(data []byte) error {
	rd := stateReader{b: data}
	var t, tPrev, h, hLast, errLast float64
	var started bool
	rd.floats(&t, &tPrev, &h, &hLast, &errLast)
	rd.bools(&started)
	y := make([]float64, r.n)
	rd.vector(y)
	var st Stats
	rd.stats(&st)
	if err := rd.finish(); err != nil {
		return err
	}
	r.t, r.tPrev, r.h, r.hLast, r.errLast, r.started, r.stats = t, t, h, hLast, errLast, started, st
	copy(r.y, y)
	copy(r.prev, y)
	r.moved, r.haveDense = false, false
	r.connect()
	return nil
}
