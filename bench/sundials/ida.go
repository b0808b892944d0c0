//go:build sundials

package sundials

/*
#cgo CFLAGS: -O2 -I/usr/include/suitesparse
#cgo LDFLAGS: -lsundials_ida -lsundials_nvecserial -lsundials_sunmatrixsparse -lsundials_sunlinsolklu -lklu -lm
#include <stdlib.h>
#include "ida.h"
*/
import "C"

import (
	"errors"
	"fmt"
	"math"
	"runtime"
	"runtime/cgo"
	"time"
	"unsafe"

	"islet/solvers"
)

// Ordering is KLU's fill-reducing ordering.
type Ordering int

// Orderings.
const (
	COLAMD Ordering = iota // SUNDIALS' default
	AMD
)

// Method is IDA as a solvers.Method. The zero value gives the stated defaults,
// which are those of SUNDIALS but for the stabilisation.
type Method struct {
	// Stabilisation is the rate a at which a hidden equation is pulled back,
	// 1/s; 0 means 1000, a negative value none.
	Stabilisation float64
	// MaxOrder bounds the order of BDF, 1 to 5; 0 means 5.
	MaxOrder int
	// SuppressAlgebraic leaves the algebraic unknowns out of the error test.
	SuppressAlgebraic bool
	// FirstStep is the first step after each Reset, s; 0 leaves it to IDA,
	// which looks at y' alone. solvers.Options.InitialStep has precedence.
	FirstStep float64
	// Ordering is KLU's ordering.
	Ordering Ordering
}

// IDA is the method with defaults.
var IDA solvers.Method = Method{}

// Name implements solvers.Method.
func (m Method) Name() string { return "IDA" }

// NewStepper implements solvers.Method. The system must have the facets
// solvers.MatrixSource and solvers.Scaled. Of the options, MaxSteps and the
// rest mean what they mean to every method.
//
// The stepper holds C memory until it is garbage. It differs from others in
// this: Redo ends the step on IDA's dense output, and the next step starts
// afresh from there, at order 1, since IDA can't take back a step; a saved
// stepper can't be restored (AppendBinary and UnmarshalBinary return
// ErrNotSaved).
func (m Method) NewStepper(s solvers.System, o solvers.Options) (solvers.Stepper, error) {
	var errs []error
	bad := func(name string, v any, want string) {
		errs = append(errs, fmt.Errorf("sundials: %s is %v, want %s", name, v, want))
	}
	if m.MaxOrder < 0 || m.MaxOrder > 5 {
		bad("MaxOrder", m.MaxOrder, "1 to 5, or 0 for 5")
	}
	if math.IsNaN(m.Stabilisation) || math.IsInf(m.Stabilisation, 0) {
		bad("Stabilisation", m.Stabilisation, "a finite rate")
	}
	if !(m.FirstStep >= 0) || math.IsInf(m.FirstStep, 0) {
		bad("FirstStep", m.FirstStep, "0 (default) or a positive step")
	}
	if m.Ordering != COLAMD && m.Ordering != AMD {
		bad("Ordering", int(m.Ordering), "COLAMD or AMD")
	}
	if !(o.RelTol >= 0 && o.RelTol < 1) {
		bad("option RelTol", o.RelTol, "0 (default) or a value below 1")
	}
	if !(o.AbsTol >= 0) || math.IsInf(o.AbsTol, 0) {
		bad("option AbsTol", o.AbsTol, "0 (default) or a positive value")
	}
	if !(o.InitialStep >= 0) {
		bad("option InitialStep", o.InitialStep, "0 (default) or a positive step")
	}
	if !(o.MaxStep >= 0) {
		bad("option MaxStep", o.MaxStep, "0 (no bound) or a positive step")
	}
	if o.MaxSteps < 0 {
		bad("option MaxSteps", o.MaxSteps, "0 (no bound) or a positive number")
	}
	source, ok := s.(solvers.MatrixSource)
	if !ok {
		errs = append(errs, fmt.Errorf("sundials: a %T doesn't hand out its matrix", s))
	}
	scaled, ok := s.(solvers.Scaled)
	if !ok {
		errs = append(errs, fmt.Errorf("sundials: a %T doesn't tell its scales", s))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	if m.Stabilisation == 0 {
		m.Stabilisation = 1000
	}
	m.Stabilisation = math.Max(0, m.Stabilisation)
	if m.MaxOrder == 0 {
		m.MaxOrder = 5
	}
	if o.RelTol == 0 {
		o.RelTol = 1e-6
	}
	if o.AbsTol == 0 {
		o.AbsTol = o.RelTol
	}
	if o.InitialStep == 0 {
		o.InitialStep = m.FirstStep
	}
	n := s.Dim()
	vec := func() []float64 { return make([]float64, n) }
	c := &core{sys: s, n: n, pull: m.Stabilisation, f: vec()}
	c.handle = cgo.NewHandle(c)
	c.ida = C.islet_ida_new(C.int64_t(n), C.uintptr_t(c.handle))
	if c.ida == nil {
		c.handle.Delete()
		return nil, errors.New("sundials: no memory for IDA")
	}
	c.y, c.yp, c.out = view(c.ida.y, n), view(c.ida.yp, n), view(c.ida.out, n)
	rtol, atol := floats(c.ida.rtol, n), floats(c.ida.atol, n)
	scale, absolute := scaled.Scales()
	for i := range n {
		atol[i] = o.AbsTol * scale[i]
		if !absolute[i] {
			rtol[i] = o.RelTol
		}
	}
	st := &stepper{core: c, m: m, opt: o, source: source,
		state: vec(), prev: vec(), w: vec(), d: vec(), rate: vec()}
	runtime.AddCleanup(st, (*core).free, c)
	return st, nil
}

// core is what IDA calls back, and the C memory. It doesn't know its stepper,
// so that the stepper can become garbage.
type core struct {
	sys       solvers.System
	ida       *C.islet_ida
	handle    cgo.Handle
	n         int
	y, yp     []float64 // C memory
	out       []float64 // C memory
	asm       *solvers.Assembly
	hidden    []hiddenRow
	pull      float64
	f         []float64
	err       error // what a callback failed of
	evals     int
	jacobians int
}

// hiddenRow is the matrix row -ds/dy of a hidden equation 0 = s(y).
type hiddenRow struct {
	row   int
	cols  []int
	coef  []float64
	slots []int // of the row's entries in the matrix, zeros included
}

func (c *core) free() {
	C.islet_ida_free(c.ida)
	c.handle.Delete()
}

func view(v C.N_Vector, n int) []float64 {
	return floats((*C.double)(unsafe.Pointer(C.N_VGetArrayPointer(v))), n)
}

func floats(p *C.double, n int) []float64 { return unsafe.Slice((*float64)(unsafe.Pointer(p)), n) }

// What a callback tells IDA.
const (
	fine        = 0
	recoverable = 1
	fatal       = -1
)

func (c *core) verdict(err error) C.int {
	switch {
	case err == nil:
		return fine
	case errors.Is(err, solvers.ErrReject):
		return recoverable
	}
	c.err = err
	return fatal
}

//export isletResidual
func isletResidual(handle C.uintptr_t, t C.double, yp0, ypp, rp *C.double) C.int {
	c := cgo.Handle(handle).Value().(*core)
	y, yp, r := floats(yp0, c.n), floats(ypp, c.n), floats(rp, c.n)
	return c.verdict(c.residual(r, float64(t), y, yp))
}

// residual writes F(t, y, y') into r.
func (c *core) residual(r []float64, t float64, y, yp []float64) error {
	c.evals++
	if err := c.sys.Eval(c.f, t, y); err != nil {
		return err
	}
	for i, f := range c.f {
		r[i] = -f
	}
	c.sys.AddMass(r, 1, yp)
	for k := range c.hidden {
		h := &c.hidden[k]
		sum := -c.pull * c.f[h.row]
		for j, col := range h.cols {
			sum += h.coef[j] * yp[col]
		}
		r[h.row] = sum
	}
	return nil
}

//export isletJacobian
func isletJacobian(handle C.uintptr_t, t, cj C.double, yp, xp *C.double) C.int {
	c := cgo.Handle(handle).Value().(*core)
	c.jacobians++
	err := c.sys.Linearise(float64(t), floats(yp, c.n))
	if err == nil {
		c.asm.Fill(float64(cj))
		x := c.asm.A.X
		for k := range c.hidden {
			for _, s := range c.hidden[k].slots {
				x[s] *= float64(cj) + c.pull
			}
		}
		copy(floats(xp, len(x)), x)
	}
	return c.verdict(err)
}

// stepper implements solvers.Stepper.
type stepper struct {
	*core
	m      Method
	opt    solvers.Options
	source solvers.MatrixSource

	t, tPrev    float64
	state, prev []float64
	tEnd        float64 // where IDA's own last step ended
	started     bool    // Reset has been called
	inited      bool    // IDAInit has been called
	moved       bool    // a step has been taken since Reset
	cut         bool    // the state is not the end of IDA's last step
	filled      bool    // out holds the dense output at outAt
	outAt       float64
	w, d, rate  []float64
	stats       solvers.Stats
	base        counts // of IDA before its last restart
}

type counts struct{ setups, errorFails, solveFails, iterations int }

func (s *stepper) counts() counts {
	if !s.inited {
		return counts{}
	}
	var a, b, c, d C.long
	C.islet_ida_counts(s.ida, &a, &b, &c, &d)
	return counts{int(a), int(b), int(c), int(d)}
}

func (s *stepper) failure(code C.int, h float64, reason string) error {
	err := s.err
	s.err = nil
	if err == nil {
		text := C.GoString(&s.ida.message[0])
		if text == "" {
			text = fmt.Sprintf("IDA returned %d", int(code))
		}
		err = errors.New(text)
	}
	return &solvers.StepError{Time: s.t, Step: h, Index: -1, Reason: reason, Err: err}
}

// Reset implements solvers.Stepper.
func (s *stepper) Reset(t float64, y []float64) error {
	if len(y) != s.n {
		panic("sundials: length of y doesn't match the system")
	}
	s.stats.Restarts++
	copy(s.state, y)
	if err := s.sys.Initialise(t, s.state, true); err != nil {
		return err
	}
	s.t, s.tPrev, s.tEnd = t, t, t
	copy(s.prev, s.state)
	fresh := s.asm == nil || !s.asm.Current()
	if fresh {
		s.asm = s.source.Assembly()
	}
	if err := s.derivative(); err != nil {
		return err
	}
	if !s.inited {
		if e := C.islet_ida_init(s.ida, C.double(t), boolean(s.m.SuppressAlgebraic), C.int(s.m.MaxOrder), C.double(s.opt.MaxStep)); e != 0 {
			return s.failure(e, 0, "IDA can't be set up")
		}
		s.inited = true
	}
	if fresh {
		a := s.asm.A
		p, i := indices(a.P), indices(a.I)
		if e := C.islet_ida_matrix(s.ida, C.int64_t(len(i)), &p[0], &i[0], C.int(s.klu())); e != 0 {
			return s.failure(e, 0, "IDA refuses the matrix")
		}
	}
	if err := s.restart(); err != nil {
		return err
	}
	s.started, s.moved, s.cut, s.filled = true, false, false, false
	runtime.KeepAlive(s)
	return nil
}

// klu is the number of the ordering: SUNLinSol_KLU counts AMD first.
func (s *stepper) klu() int {
	if s.m.Ordering == AMD {
		return 0
	}
	return 1
}

func boolean(b bool) C.int {
	if b {
		return 1
	}
	return 0
}

func indices(v []int) []C.int64_t {
	out := make([]C.int64_t, len(v))
	for k, x := range v {
		out[k] = C.int64_t(x)
	}
	return out
}

// restart makes IDA start at the present state, with s.yp set.
func (s *stepper) restart() error {
	c := s.counts()
	s.base.setups += c.setups
	s.base.errorFails += c.errorFails
	s.base.solveFails += c.solveFails
	s.base.iterations += c.iterations
	copy(s.y, s.state)
	if e := C.islet_ida_restart(s.ida, C.double(s.t), C.double(s.opt.InitialStep)); e != 0 {
		return s.failure(e, 0, "IDA can't restart")
	}
	return nil
}

// derivative writes y' at the present state into s.yp, and finds the hidden
// rows and the differential unknowns. y' solves
//
//	M y' = f                      rows with a derivative
//	-J y' = df/dt                 algebraic rows
//	-S y' = 0                     hidden rows
//
// by corrections (alpha M - J) d = residual, y' += alpha d, with alpha fast
// against J, so that the part of J that moves differential unknowns doesn't
// matter; each is as small as its predecessor times rate/alpha.
func (s *stepper) derivative() error {
	fail := func(err error) error {
		return &solvers.StepError{Time: s.t, Index: -1, Reason: "no derivative at the start", Err: err}
	}
	sys := s.sys
	s.evals++
	if err := sys.Eval(s.f, s.t, s.state); err != nil {
		return fail(err)
	}
	timed, err := sys.TimeDerivative(s.rate, s.t, 1e-6, s.state, s.f)
	if err != nil {
		return fail(err)
	}
	if !timed {
		clear(s.rate)
	}
	s.jacobians++
	if err := sys.Linearise(s.t, s.state); err != nil {
		return fail(err)
	}
	s.asm.Fill(0)
	s.structure()
	for k := range s.hidden {
		s.rate[s.hidden[k].row] = 0
	}
	alpha := 1e4 * s.fastest()
	if err := sys.Factor(alpha); err != nil {
		return fail(err)
	}
	clear(s.yp)
	before := math.Inf(1)
	for range 20 {
		s.asm.A.MulVec(s.w, s.yp) // -J y'
		for i, f := range s.f {
			s.d[i] = f
			if sys.AlgebraicRow(i) {
				s.d[i] = (s.rate[i] - s.w[i]) / alpha
			}
		}
		clear(s.w)
		sys.AddMass(s.w, 1, s.yp)
		for i, w := range s.w {
			s.d[i] -= w
		}
		sys.Solve(s.d)
		for i := range s.d {
			s.d[i] *= alpha
		}
		size, _ := sys.Norm(s.d, s.state, s.state, solvers.Tolerance{Rel: 1, Abs: 1})
		if size != size || math.IsInf(size, 0) {
			return fail(errors.New("it is not finite"))
		}
		if size >= before {
			break // rounding
		}
		before = size
		for i, d := range s.d {
			s.yp[i] += d
		}
	}
	return nil
}

// structure reads the hidden rows and the differential unknowns from the
// assembled matrix -J.
func (s *stepper) structure() {
	a := s.asm.A
	id := view(s.ida.id, s.n)
	clear(id)
	for _, e := range s.asm.Mass {
		id[e.Col] = 1
	}
	s.hidden = s.hidden[:0]
	at := make(map[int]int)
	for _, row := range s.sys.Hidden() {
		at[row] = len(s.hidden)
		s.hidden = append(s.hidden, hiddenRow{row: row})
	}
	if len(at) == 0 {
		return
	}
	for j := range a.Cols {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			k, ok := at[a.I[p]]
			if !ok {
				continue
			}
			h := &s.hidden[k]
			h.slots = append(h.slots, p)
			if a.X[p] != 0 {
				h.cols = append(h.cols, j)
				h.coef = append(h.coef, a.X[p])
			}
		}
	}
}

// fastest is a rate no slower than what rows of -J over their mass suggest,
// unknowns measured by their scales.
func (s *stepper) fastest() float64 {
	mass := s.w
	clear(mass)
	for _, e := range s.asm.Mass {
		mass[e.Row] = math.Max(mass[e.Row], math.Abs(e.Value))
	}
	atol := floats(s.ida.atol, s.n) // in proportion to the scales
	a := s.asm.A
	rate := 1.0
	for j := range a.Cols {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			if m := mass[a.I[p]]; m > 0 {
				rate = math.Max(rate, math.Abs(a.X[p])/m*atol[j]/atol[a.I[p]])
			}
		}
	}
	return rate
}

// Step implements solvers.Stepper.
func (s *stepper) Step(tmax float64) error {
	if !s.started {
		panic("sundials: Step before Reset")
	}
	if !(tmax > s.t) {
		return &solvers.StepError{Time: s.t, Step: tmax - s.t, Index: -1, Reason: "the end of the step doesn't lie ahead"}
	}
	if s.opt.MaxSteps > 0 && s.stats.Steps >= s.opt.MaxSteps {
		return &solvers.StepError{Time: s.t, Index: -1, Reason: "too many steps"}
	}
	if s.cut {
		if err := s.resume(); err != nil {
			return err
		}
	}
	var end C.double
	if e := C.islet_ida_step(s.ida, C.double(tmax), &end); e < 0 {
		return s.failure(e, tmax-s.t, "IDA gave up")
	}
	s.prev, s.state = s.state, s.prev
	copy(s.state, s.y)
	s.tPrev, s.t = s.t, float64(end)
	if math.Abs(tmax-s.t) <= 100*0x1p-52*math.Abs(tmax) {
		s.t = tmax // IDA stops within its rounding
	}
	s.tEnd = s.t
	s.moved, s.filled = true, false
	h := s.t - s.tPrev
	s.stats.Steps++
	if s.stats.Smallest == 0 || h < s.stats.Smallest {
		s.stats.Smallest = h
	}
	s.stats.Largest = math.Max(s.stats.Largest, h)
	runtime.KeepAlive(s)
	return nil
}

// resume starts IDA afresh at a state that isn't the end of its last step.
func (s *stepper) resume() error {
	if err := s.sys.Initialise(s.t, s.state, true); err != nil {
		return err
	}
	if err := s.derivative(); err != nil {
		return err
	}
	s.cut, s.filled = false, false
	return s.restart()
}

// Redo implements solvers.Stepper: the step ends on IDA's dense output.
func (s *stepper) Redo(t float64) error {
	if !s.moved {
		panic("sundials: Redo without a step to take back")
	}
	if t == s.tPrev {
		copy(s.state, s.prev)
		s.t, s.cut, s.moved = t, true, false
		return nil
	}
	if t <= s.tPrev || t > s.tEnd {
		return &solvers.StepError{Time: s.tPrev, Step: t - s.tPrev, Index: -1, Reason: "IDA can end a step again only within itself"}
	}
	if t == s.tEnd {
		copy(s.state, s.y)
		s.t, s.cut = t, false
		return nil
	}
	s.dense(t)
	copy(s.state, s.out)
	s.t, s.cut = t, true
	return nil
}

// dense puts the dense output at t into s.out.
func (s *stepper) dense(t float64) {
	if s.filled && s.outAt == t {
		return
	}
	if e := C.islet_ida_dense(s.ida, C.double(t), 0); e != 0 {
		panic(fmt.Sprintf("sundials: no dense output at t = %g outside of the last step, %g to %g", t, s.tPrev, s.tEnd))
	}
	s.filled, s.outAt = true, t
}

// Interpolate implements solvers.Stepper.
func (s *stepper) Interpolate(dst []float64, which []int, t float64) {
	y := s.state
	switch {
	case t == s.t || !s.moved:
	case t == s.tPrev:
		y = s.prev
	default:
		s.dense(t)
		y = s.out
	}
	if which == nil {
		copy(dst, y)
		return
	}
	for i, c := range which {
		dst[i] = y[c]
	}
	runtime.KeepAlive(s)
}

func (s *stepper) Time() float64            { return s.t }
func (s *stepper) State() []float64         { return s.state }
func (s *stepper) Previous() float64        { return s.tPrev }
func (s *stepper) PreviousState() []float64 { return s.prev }

// Stats implements solvers.Stepper. Rejected are failures of the error test,
// Failed those of Newton's method, and Solves its iterations.
func (s *stepper) Stats() solvers.Stats {
	st, c := s.stats, s.counts()
	st.Evals, st.Jacobians = s.evals, s.jacobians
	st.Factorizations = s.base.setups + c.setups + st.Restarts
	st.Rejected = s.base.errorFails + c.errorFails
	st.Failed = s.base.solveFails + c.solveFails
	st.Solves = s.base.iterations + c.iterations
	return st
}

// ErrNotSaved is returned by AppendBinary and UnmarshalBinary: the history of
// IDA can't be read out.
var ErrNotSaved = errors.New("sundials: a stepper of IDA can't be saved or restored")

func (s *stepper) AppendBinary(b []byte) ([]byte, error) { return b, ErrNotSaved }
func (s *stepper) UnmarshalBinary(data []byte) error     { return ErrNotSaved }

// Version is the version of the SUNDIALS library that is linked.
func Version() string {
	var buf [32]C.char
	C.SUNDIALSGetVersion(&buf[0], C.int(len(buf)))
	return C.GoString(&buf[0])
}

// KernelTime measures the time, ns, the linked library takes for an entry of a
// linear sum of vectors that fit the cache: well below 1 where it was built
// with optimisation, several times that where it was not. It returns 0 if
// there is no memory.
func KernelTime() float64 {
	const n, repeat = 1000, 2000
	c := C.islet_ida_new(n, 0)
	if c == nil {
		return 0
	}
	defer C.islet_ida_free(c)
	y, id := view(c.y, n), view(c.id, n)
	for i := range n {
		y[i], id[i] = 1, float64(i)
	}
	best := time.Duration(math.MaxInt64)
	for range 5 {
		from := time.Now()
		C.islet_ida_sum(c, repeat)
		best = min(best, time.Since(from))
	}
	return float64(best.Nanoseconds()) / (n * repeat)
}
