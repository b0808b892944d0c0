package devicetest

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"islet/solvers"
	"islet/solvers/facet"
)

// Options tell the kit what a device doesn't say about itself.
type Options struct {
	// Voltages are the rated peak phase-to-neutral voltages of the terminals,
	// V, one each. Required.
	Voltages []float64

	// Frame is the speed of the network frame, rad/s; 0 means 2 pi 50.
	Frame float64

	// Targets are values for setpoints to ramp to. A setpoint without one
	// ramps to about 0.9 of its value (or from 0 to 0.1), kept in its range.
	Targets map[string]float64

	// Point, if not nil, moves a random point into the domain of the device:
	// v are terminal voltages of 0.3 to 1.2 times the rated ones at any angle,
	// x own unknowns up to 1.5 times their bases of either sign.
	Point func(r *rand.Rand, v, x []float64)

	// Steady are terminal voltages for which the device has a steady state in
	// a frame of speed Frame. Nil means near the rated ones, at the ratios of
	// OpenRatio where the device has them.
	Steady []complex128

	// QuasiSteady tells that even the most detailed level is a phasor model,
	// which isn't the same in frames of different speed. Levels after the
	// first are always taken to be such.
	QuasiSteady bool
}

// Times of the ramps and of the points the kit evaluates, s.
const (
	rampStart = 1.0
	rampTime  = 2.0
)

// points is the number of random states for each check.
const points = 12

// reporter is the part of *testing.T the checks need.
type reporter interface {
	Helper()
	Errorf(format string, args ...any)
}

// checks in order; those after "description" rely on it.
var checks = []struct {
	name string
	run  func(reporter, *subject)
}{
	{"description", checkDescription},
	{"jacobian", checkJacobian},
	{"time derivative", checkTimeDerivative},
	{"energy", checkEnergy},
	{"rotation", checkRotation},
	{"frame speed", checkFrameSpeed},
	{"flows", checkFlows},
	{"measure", checkMeasure},
	{"setpoints", checkSetpoints},
	{"memory", checkMemory},
	{"detail", checkDetail},
	{"open ratio", checkOpenRatio},
	{"allocations", checkAllocations},
}

// Run checks the device that make constructs, a fresh one with each call, at
// all levels of detail and in all switch positions, in subtests.
func Run(t *testing.T, make func() solvers.Block, o Options) {
	t.Helper()
	for _, v := range variants(make()) {
		s, err := newSubject(make, v, o)
		if err != nil {
			t.Errorf("%v: %v", v, err)
			continue
		}
		t.Run(v.String(), func(t *testing.T) {
			for _, c := range checks {
				ok := t.Run(c.name, func(t *testing.T) { c.run(t, s) })
				if !ok && c.name == "description" {
					return // the other checks would stumble over it
				}
			}
		})
	}
}

// variant is a level of detail and a switch position.
type variant struct {
	level             string // "" if the block isn't facet.Detailed
	first             bool   // the most detailed level
	switches, closing bool   // is facet.Switchable; closed
}

func (v variant) String() string {
	s := v.level
	if s == "" {
		s = "device"
	}
	switch {
	case v.switches && v.closing:
		s += " closed"
	case v.switches:
		s += " open"
	}
	return s
}

func variants(b solvers.Block) []variant {
	levels := []string{""}
	if d, ok := b.(facet.Detailed); ok {
		levels = d.Details()
	}
	var list []variant
	for k, level := range levels {
		if _, ok := b.(facet.Switchable); ok {
			list = append(list, variant{level, k == 0, true, true}, variant{level, k == 0, true, false})
		} else {
			list = append(list, variant{level, k == 0, false, false})
		}
	}
	return list
}

// subject is a device at one level of detail in one switch position.
type subject struct {
	variant
	o    Options
	make func() solvers.Block // the caller's

	b              solvers.Block // with setpoints at rest
	d              facet.Description
	ports, own     int
	portMass, mass []float64
	bases          []float64 // of [v | x]
}

func newSubject(make func() solvers.Block, v variant, o Options) (*subject, error) {
	if o.Frame == 0 {
		o.Frame = 2 * math.Pi * 50
	}
	s := &subject{variant: v, o: o, make: make}
	b, err := s.fresh()
	if err != nil {
		return nil, err
	}
	s.b = b
	described, ok := b.(facet.Described)
	if !ok {
		return nil, errors.New("the block is not facet.Described")
	}
	s.d = described.Describe()
	s.ports, s.own = b.Dims()
	if s.ports != 2*len(o.Voltages) {
		return nil, fmt.Errorf("%d port components, but Options.Voltages is for %d terminals", s.ports, len(o.Voltages))
	}
	s.portMass, s.mass = floats(s.ports), floats(s.own)
	b.Mass(s.portMass, s.mass)
	for _, volts := range o.Voltages {
		s.bases = append(s.bases, volts, volts)
	}
	for _, u := range s.d.Unknowns {
		s.bases = append(s.bases, u.Base)
	}
	return s, nil
}

func floats(n int) []float64 { return make([]float64, n) }

// fresh makes a block of the subject's level and position.
func (s *subject) fresh() (solvers.Block, error) {
	b := s.make()
	if s.level != "" {
		var err error
		if b, err = b.(facet.Detailed).WithDetail(s.level); err != nil {
			return nil, err
		}
	}
	if s.switches {
		b.(facet.Switchable).SetClosed(s.closing)
	}
	setFrame(b, s.o.Frame)
	return b, nil
}

// moving makes a block whose setpoints all ramp from rampStart on for
// rampTime; nil if it has none.
func (s *subject) moving(t reporter) solvers.Block {
	b, err := s.fresh()
	if err != nil {
		t.Errorf("%v", err)
		return nil
	}
	a, ok := b.(facet.Adjustable)
	if !ok {
		return nil
	}
	for _, p := range a.Setpoints(rampStart) {
		if err := a.Set(p.Name, rampStart, s.target(p), rampTime); err != nil {
			t.Errorf("setpoint %q: %v", p.Name, err)
		}
	}
	return b
}

// target is a value for a setpoint other than its present one.
func (s *subject) target(p facet.Setpoint) float64 {
	if v, ok := s.o.Targets[p.Name]; ok {
		return v
	}
	v := 0.9123456789 * p.Value // a full mantissa: nothing may round it
	if p.Value == 0 {
		v = 0.1
	}
	if v = min(max(v, p.Min), p.Max); v != p.Value {
		return v
	}
	// At a bound already: go a little to the other side.
	if math.IsInf(p.Max, 1) {
		return p.Value + 0.1*max(1, math.Abs(p.Value))
	}
	return p.Value + 0.1*(p.Max-p.Value)
}

// blocks returns the block at rest and, if it has setpoints, one with ramps.
func (s *subject) blocks(t reporter) []solvers.Block {
	list := []solvers.Block{s.b}
	if b := s.moving(t); b != nil {
		list = append(list, b)
	}
	return list
}

func setFrame(b solvers.Block, speed float64) {
	if f, ok := b.(facet.Framed); ok {
		f.SetFrame(speed)
	}
}

// random returns the source of randomness of a check: always the same.
func random() *rand.Rand { return rand.New(rand.NewPCG(0x15de7, 2)) }

// point draws a time within the ramps, terminal voltages and own unknowns at
// which the block can be evaluated. It reports failure and returns ok false
// if it finds none.
func (s *subject) point(t reporter, b solvers.Block, r *rand.Rand) (time float64, v, x []float64, ok bool) {
	t.Helper()
	v, x = floats(s.ports), floats(s.own)
	f := floats(s.ports + s.own)
	var err error
	for range 100 {
		for k, volts := range s.o.Voltages {
			put(v[2*k:], cmplx.Rect(volts*(0.3+0.9*r.Float64()), 2*math.Pi*r.Float64()))
		}
		for k, u := range s.d.Unknowns {
			x[k] = u.Base * 1.5 * (2*r.Float64() - 1)
		}
		if s.o.Point != nil {
			s.o.Point(r, v, x)
		}
		time = rampStart + rampTime*(0.1+0.8*r.Float64())
		if err = s.eval(b, f, time, v, x); err == nil && finite(f) {
			return time, v, x, true
		}
	}
	t.Errorf("no random state can be evaluated; the last gave %v, error %v; see Options.Point", f, err)
	return 0, nil, nil, false
}

// eval writes [flow | rate] into f.
func (s *subject) eval(b solvers.Block, f []float64, t float64, v, x []float64) error {
	return b.Eval(f[:s.ports:s.ports], f[s.ports:], t, v, x)
}

// name of row or column k of [ports | own].
func (s *subject) name(k int) string {
	if k < s.ports {
		return s.d.Terminals[k/2].Name + [2]string{".d", ".q"}[k%2]
	}
	return s.d.Unknowns[k-s.ports].Name
}

func get(a []float64) complex128    { return complex(a[0], a[1]) }
func put(a []float64, z complex128) { a[0], a[1] = real(z), imag(z) }

func finite(a []float64) bool {
	for _, x := range a {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return false
		}
	}
	return true
}

// sameBits tells whether a and b hold the same floating-point numbers.
func sameBits(a, b []float64) bool {
	if len(a) != len(b) {
		return false
	}
	for k, x := range a {
		if math.Float64bits(x) != math.Float64bits(b[k]) {
			return false
		}
	}
	return true
}
