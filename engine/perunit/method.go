package perunit

import (
	"encoding/binary"
	"fmt"
	"math"

	"islet/solvers"
)

// Method integrates a system per unit by another method: the stepper it makes works
// on the scaled system alone, and shows states and takes them in SI.
//
// Unknown i has the base value Base(i, scale), with scale what the system tells of
// it ([solvers.Scaled]); nil takes the scale itself. Rates are divided by the same
// bases, which leaves the masses as they are but for the base of time.
type Method struct {
	Of   solvers.Method
	Base func(i int, scale float64) float64
	Time float64 // s; 0 means 1
}

// Name implements solvers.Method.
func (m Method) Name() string { return m.Of.Name() + " per unit" }

// NewStepper implements solvers.Method. The error tells of a system without scales,
// or of bases that aren't positive.
func (m Method) NewStepper(s solvers.System, o solvers.Options) (solvers.Stepper, error) {
	scaled, ok := s.(solvers.Scaled)
	if !ok {
		return nil, fmt.Errorf("perunit: a %T doesn't tell its scales", s)
	}
	base, _ := scaled.Scales()
	if m.Base != nil {
		for i, x := range base {
			base[i] = m.Base(i, x)
		}
	}
	for i, x := range base {
		if !(x > 0) || math.IsInf(x, 1) {
			return nil, fmt.Errorf("perunit: base of unknown %d is %g, want a positive value", i, x)
		}
	}
	t := m.Time
	if t == 0 {
		t = 1
	}
	if !(t > 0) || math.IsInf(t, 1) {
		return nil, fmt.Errorf("perunit: base of time is %g s, want a positive value", t)
	}
	n := s.Dim()
	vec := func() []float64 { return make([]float64, n) }
	sys := &system{s: s, base: base, time: t, y: vec(), y1: vec(), e: vec()}
	o.InitialStep /= t
	o.MaxStep /= t
	st, err := m.Of.NewStepper(sys, o)
	if err != nil {
		return nil, err
	}
	return &stepper{sys: sys, st: st, state: vec(), previous: vec()}, nil
}

// system is a solvers.System per unit: z = y/base, tau = t/time.
type system struct {
	s        solvers.System
	base     []float64
	time     float64
	y, y1, e []float64
}

func (p *system) si(dst, z []float64) []float64 {
	for i, b := range p.base {
		dst[i] = b * z[i]
	}
	return dst
}

func (p *system) perUnit(dst []float64) {
	for i, b := range p.base {
		dst[i] /= b
	}
}

// Scales implements solvers.Scaled, so that a system per unit can be scaled once more.
func (p *system) Scales() ([]float64, []bool) {
	scale, absolute := p.s.(solvers.Scaled).Scales()
	p.perUnit(scale)
	return scale, absolute
}

func (p *system) Dim() int                { return p.s.Dim() }
func (p *system) Hidden() []int           { return p.s.Hidden() }
func (p *system) AlgebraicRow(i int) bool { return p.s.AlgebraicRow(i) }

func (p *system) Eval(dst []float64, t float64, z []float64) error {
	err := p.s.Eval(dst, t*p.time, p.si(p.y, z))
	p.perUnit(dst)
	return err
}

func (p *system) TimeDerivative(dst []float64, t, h float64, z, f0 []float64) (bool, error) {
	any, err := p.s.TimeDerivative(dst, t*p.time, h*p.time, p.si(p.y, z), p.si(p.e, f0))
	if any {
		for i, b := range p.base {
			dst[i] *= p.time / b
		}
	}
	return any, err
}

func (p *system) Linearise(t float64, z []float64) error {
	return p.s.Linearise(t*p.time, p.si(p.y, z))
}

func (p *system) Factor(alpha float64) error { return p.s.Factor(alpha / p.time) }

func (p *system) Solve(b []float64) {
	p.si(b, b)
	p.s.Solve(b)
	p.perUnit(b)
}

func (p *system) AddMass(dst []float64, c float64, z []float64) {
	clear(p.e)
	p.s.AddMass(p.e, c/p.time, p.si(p.y, z))
	for i, b := range p.base {
		dst[i] += p.e[i] / b
	}
}

func (p *system) Initialise(t float64, z []float64, project bool) error {
	p.si(z, z)
	err := p.s.Initialise(t*p.time, z, project)
	p.perUnit(z)
	return err
}

func (p *system) Norm(e, z0, z1 []float64, tol solvers.Tolerance) (float64, int) {
	return p.s.Norm(p.si(p.e, e), p.si(p.y, z0), p.si(p.y1, z1), tol)
}

// stepper shows a stepper of the scaled system in SI.
type stepper struct {
	sys             *system
	st              solvers.Stepper
	state, previous []float64
	// Times in SI. Those that were asked for are kept as they are: dividing by
	// the base of time and multiplying again may change the last digit.
	t, tPrevious float64
}

// end takes the time at which a step ended, asked to end at tmax or before.
func (s *stepper) end(tmax float64) {
	s.t = s.st.Time() * s.sys.time
	if s.st.Time() == tmax/s.sys.time {
		s.t = tmax
	}
}

func (s *stepper) show() {
	s.sys.si(s.state, s.st.State())
	s.sys.si(s.previous, s.st.PreviousState())
}

func (s *stepper) Time() float64            { return s.t }
func (s *stepper) State() []float64         { return s.state }
func (s *stepper) Previous() float64        { return s.tPrevious }
func (s *stepper) PreviousState() []float64 { return s.previous }
func (s *stepper) Stats() solvers.Stats     { return s.st.Stats() }

func (s *stepper) Reset(t float64, y []float64) error {
	z := append([]float64(nil), y...)
	s.sys.perUnit(z)
	err := s.st.Reset(t/s.sys.time, z)
	s.t, s.tPrevious = t, t
	s.show()
	return err
}

func (s *stepper) Step(tmax float64) error {
	before := s.st.Time()
	err := s.st.Step(tmax / s.sys.time)
	if s.st.Time() != before {
		s.tPrevious = s.t
		s.end(tmax)
	}
	s.show()
	return err
}

func (s *stepper) Redo(t float64) error {
	err := s.st.Redo(t / s.sys.time)
	if err == nil {
		s.end(t)
	}
	s.show()
	return err
}

func (s *stepper) Interpolate(dst []float64, which []int, t float64) {
	tau := t / s.sys.time
	switch t { // the ends exactly
	case s.t:
		tau = s.st.Time()
	case s.tPrevious:
		tau = s.st.Previous()
	}
	s.st.Interpolate(dst, which, tau)
	if which == nil {
		s.sys.si(dst, dst)
		return
	}
	for k, i := range which {
		dst[k] *= s.sys.base[i]
	}
}

// AppendBinary implements solvers.Stepper: the time, and the scaled stepper.
func (s *stepper) AppendBinary(b []byte) ([]byte, error) {
	return s.st.AppendBinary(binary.LittleEndian.AppendUint64(b, math.Float64bits(s.t)))
}

// UnmarshalBinary implements solvers.Stepper.
func (s *stepper) UnmarshalBinary(data []byte) error {
	if len(data) < 8 {
		return fmt.Errorf("perunit: %d bytes are no saved stepper", len(data))
	}
	if err := s.st.UnmarshalBinary(data[8:]); err != nil {
		return err
	}
	s.t = math.Float64frombits(binary.LittleEndian.Uint64(data))
	s.tPrevious = s.t
	s.show()
	return nil
}
