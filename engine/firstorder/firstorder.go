// Package firstorder rewrites a system so that its fast dynamics (network and
// filter currents, say) are dropped to first order of singular perturbation
// instead of zero order.
//
// With slow unknowns s and fast ones z, M z' = f(t, z, s, v) and s' = g, the
// zero-order reduction is 0 = f: it is blind to what the fast part's lag does
// to slow modes, and droop-controlled networks judged by it can look stable at
// any gain. To first order the derivative is kept, at the value it has along
// the zero-order solution:
//
//	0 = f(t, z, s, v) - M w
//	0 = f_t + f_z w + f_s g + f_v v'        (w = z', differentiated 0 = f)
//
// Each fast unknown so gets a companion w, and each bus a shadow bus whose
// voltage is v' and at which the currents' derivatives sum to zero. Both are
// algebraic: the order of the system is that of the zero-order reduction.
//
// Source: P. Vorobev, P.-H. Huang, M. Al Hosani, J. L. Kirtley, K. Turitsyn,
// "High-fidelity model order reduction for microgrids stability assessment",
// IEEE Trans. Power Systems 33(1), 874-887, 2018, there for lines between
// droop-controlled sources; the form with companions is our own and equals it
// for linear fast dynamics.
package firstorder

import (
	"errors"
	"fmt"
	"strings"

	"islet/engine"
	"islet/solvers"
	"islet/solvers/facet"
)

// shadow is what a shadow bus's name adds to its bus's.
const shadow = "-rate"

// Correct builds a system that holds every bus of s twice, the second time as
// its shadow, and every device of s with the unknowns in the named groups of
// dynamics (facet.Unknown.Dynamics) dropped to first order; capacitors at
// buses likewise. Unknowns without a derivative of their own count as fast.
// The devices' values are used, not copied: s must not be started.
func Correct(s *engine.System, groups ...string) (*engine.System, error) {
	out := engine.NewSystem(s.Frequency())
	fast := make(map[string]bool)
	for _, g := range groups {
		fast[g] = true
	}
	known := make(map[string]bool)
	real := make(map[string]engine.Bus)
	rate := make(map[string]engine.Bus)
	for _, name := range s.BusNames() {
		b, _ := s.FindBus(name)
		real[name] = out.Bus(name, b.Rated())
		// The voltage's rate of change at a tenth of nominal speed is a
		// sensible unit for its error.
		rate[name] = out.Bus(name+shadow, b.Rated()*0.1*2*3.141592653589793*s.Frequency())
	}
	var errs []error
	for _, name := range s.DeviceNames() {
		d := s.Device(name)
		for _, u := range d.Describe().Unknowns {
			known[u.Dynamics] = true
		}
		var at []engine.Bus
		for _, b := range s.Connections(name) {
			at = append(at, real[b])
		}
		for _, b := range s.Connections(name) {
			at = append(at, rate[b])
		}
		w, err := newBlock(d, fast)
		if err != nil {
			errs = append(errs, fmt.Errorf("firstorder: device %q: %w", name, err))
			continue
		}
		if err := out.Add(name, w, at...); err != nil {
			errs = append(errs, err)
		}
	}
	for _, g := range groups {
		if !known[g] {
			var names []string
			for k := range known {
				if k != "" {
					names = append(names, k)
				}
			}
			errs = append(errs, fmt.Errorf("firstorder: no device has dynamics %q; there are %s", g, strings.Join(sorted(names), ", ")))
		}
	}
	return out, errors.Join(errs...)
}

func sorted(s []string) []string {
	for i := range s {
		for j := i; j > 0 && s[j] < s[j-1]; j-- {
			s[j], s[j-1] = s[j-1], s[j]
		}
	}
	return s
}

// block is a device with its fast unknowns dropped to first order. Its ports
// are those of the device and then their shadows; its own unknowns the slow
// ones, the fast ones and the fast ones' companions.
type block struct {
	dev        engine.Device
	desc       engine.Description
	diff       solvers.Differentiable
	timed      solvers.TimeDependent
	ports, own int
	slow, fast []int // indices of the device's own unknowns
	mass       []float64
	portMass   []float64
	x          []float64 // the device's own unknowns
	rate       []float64 // and their rates
	flowT      []float64
	rateT      []float64
	jac        []float64
	dx         []float64 // direction of the whole: [v' | x']
}

func newBlock(d engine.Device, groups map[string]bool) (engine.Device, error) {
	b := &block{dev: d, desc: d.Describe()}
	b.ports, b.own = d.Dims()
	b.mass, b.portMass = make([]float64, b.own), make([]float64, b.ports)
	d.Mass(b.portMass, b.mass)
	for i, u := range b.desc.Unknowns {
		if groups[u.Dynamics] || b.mass[i] == 0 {
			b.fast = append(b.fast, i)
		} else {
			b.slow = append(b.slow, i)
		}
	}
	b.diff, _ = d.(solvers.Differentiable)
	b.timed, _ = d.(solvers.TimeDependent)
	if b.diff == nil {
		return nil, errors.New("the correction needs the device's Jacobian (solvers.Differentiable)")
	}
	b.x, b.rate = make([]float64, b.own), make([]float64, b.own)
	b.flowT, b.rateT = make([]float64, b.ports), make([]float64, b.own)
	n := b.ports + b.own
	b.jac, b.dx = make([]float64, n*n), make([]float64, n)
	if sw, ok := d.(facet.Switchable); ok {
		return &switching{b, sw}, nil
	}
	f, isFormer := d.(facet.Former)
	if !isFormer {
		return b, nil
	}
	at := f.AngleUnknown()
	for i, k := range b.slow {
		if k == at {
			return &forming{b, f, i}, nil
		}
	}
	return nil, errors.New("the angle by which the source holds its island is among the dynamics to drop")
}

// Dims returns twice the device's ports, and its unknowns with companions.
func (b *block) Dims() (ports, own int) { return 2 * b.ports, b.own + len(b.fast) }

// Describe describes the reduced device.
func (b *block) Describe() engine.Description {
	d := b.dev.Describe()
	out := engine.Description{Kind: d.Kind + ", first-order"}
	n := len(d.Terminals)
	held := func(t engine.Terminal) engine.Terminal {
		// With its currents algebraic the device ties bus and current;
		// what a state fed before is now conductive.
		if t.Flow == engine.FlowState {
			t.Flow = engine.FlowHeld
		}
		return t
	}
	for _, t := range d.Terminals {
		out.Terminals = append(out.Terminals, held(t))
	}
	for _, t := range d.Terminals {
		t.Name += shadow
		out.Terminals = append(out.Terminals, held(t))
	}
	for _, t := range d.Ties {
		out.Ties = append(out.Ties, t, engine.Tie{A: t.A + n, B: t.B + n, Ratio: t.Ratio})
	}
	for _, k := range b.slow {
		out.Unknowns = append(out.Unknowns, d.Unknowns[k])
	}
	for _, k := range b.fast {
		out.Unknowns = append(out.Unknowns, d.Unknowns[k])
	}
	for _, k := range b.fast {
		u := d.Unknowns[k]
		u.Name, u.Unit, u.Base = u.Name+shadow, u.Unit+"/s", u.Base*30
		out.Unknowns = append(out.Unknowns, u)
	}
	return out
}

// Mass keeps the slow unknowns' masses.
func (b *block) Mass(port, own []float64) {
	clear(port)
	clear(own)
	for i, k := range b.slow {
		own[i] = b.mass[k]
	}
}

// gather puts the device's unknowns back in order.
func (b *block) gather(x []float64) {
	for i, k := range b.slow {
		b.x[k] = x[i]
	}
	for i, k := range b.fast {
		b.x[k] = x[len(b.slow)+i]
	}
}

// Eval writes the currents and their derivatives into the two halves of flow.
func (b *block) Eval(flow, rate []float64, t float64, v, x []float64) error {
	b.gather(x)
	p := b.ports
	if err := b.dev.Eval(flow[:p], b.rate, t, v[:p], b.x); err != nil {
		return err
	}
	companions := x[len(b.slow)+len(b.fast):]
	// The direction of motion: v' at the shadows, s' = g/M, z' = w.
	copy(b.dx, v[p:])
	for i, k := range b.slow {
		rate[i] = b.rate[k]
		b.dx[p+k] = b.rate[k] / b.mass[k]
	}
	for i, k := range b.fast {
		b.dx[p+k] = companions[i]
	}
	for i := range b.flowT {
		b.flowT[i] = 0
	}
	for i := range b.rateT {
		b.rateT[i] = 0
	}
	if b.timed != nil {
		b.timed.TimeDerivative(b.flowT, b.rateT, t, v[:p], b.x)
	}
	b.diff.Jacobian(b.jac, t, v[:p], b.x)
	n := p + b.own
	along := func(row int) float64 {
		sum := 0.0
		for j, d := range b.dx {
			sum += b.jac[row*n+j] * d
		}
		return sum
	}
	for i := range p {
		flow[i] += b.portMass[i] * v[p+i]
		flow[p+i] = b.flowT[i] + along(i)
	}
	ns, nf := len(b.slow), len(b.fast)
	for i, k := range b.fast {
		rate[ns+i] = b.rate[k] - b.mass[k]*companions[i]
		rate[ns+nf+i] = b.rateT[k] + along(p+k)
	}
	return nil
}

// SetFrame hands on the frame's speed.
func (b *block) SetFrame(speed float64) {
	if f, ok := b.dev.(facet.Framed); ok {
		f.SetFrame(speed)
	}
}

// Channels are the device's.
func (b *block) Channels() []engine.Channel {
	if m, ok := b.dev.(facet.Measurer); ok {
		return m.Channels()
	}
	return nil
}

// Measure measures the device.
func (b *block) Measure(dst []float64, t float64, v, x []float64) {
	if m, ok := b.dev.(facet.Measurer); ok {
		b.gather(x)
		m.Measure(dst, t, v[:b.ports], b.x)
	}
}

// Guess takes the device's guess; nothing moves at first.
func (b *block) Guess(x []float64, t float64, v []float64) {
	clear(x)
	s, ok := b.dev.(facet.Starter)
	if !ok {
		return
	}
	s.Guess(b.x, t, v[:b.ports])
	for i, k := range b.slow {
		x[i] = b.x[k]
	}
	for i, k := range b.fast {
		x[len(b.slow)+i] = b.x[k]
	}
}

// OpenRatio is the device's between buses, and nothing to a shadow.
func (b *block) OpenRatio(from, to int) complex128 {
	n := len(b.desc.Terminals)
	if from >= n || to >= n {
		return 0
	}
	if r, ok := b.dev.(facet.Ratioed); ok {
		return r.OpenRatio(from, to)
	}
	return 1
}

// Setpoints are the device's.
func (b *block) Setpoints(t float64) []engine.Setpoint {
	if a, ok := b.dev.(facet.Adjustable); ok {
		return a.Setpoints(t)
	}
	return nil
}

// Set sets the device's setpoint.
func (b *block) Set(name string, t, value, ramp float64) error {
	if a, ok := b.dev.(facet.Adjustable); ok {
		return a.Set(name, t, value, ramp)
	}
	return fmt.Errorf("no setpoint %q", name)
}

// forming is a block of a device that holds an island.
type forming struct {
	*block
	former facet.Former
	angle  int
}

// AngleUnknown is the place of the device's angle among the slow unknowns.
func (f *forming) AngleUnknown() int { return f.angle }

// Speed is the device's.
func (f *forming) Speed(t float64, v, x []float64) float64 {
	f.gather(x)
	return f.former.Speed(t, v[:f.ports], f.x)
}

// Weight is the device's.
func (f *forming) Weight() float64 { return f.former.Weight() }

// switching is a block of a device that opens and closes.
type switching struct {
	*block
	device facet.Switchable
}

// Closed is the device's position.
func (s *switching) Closed() bool { return s.device.Closed() }

// SetClosed switches the device.
func (s *switching) SetClosed(closed bool) { s.device.SetClosed(closed) }
