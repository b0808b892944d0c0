package modes_test

import (
	"encoding/binary"
	"fmt"
	"math"
	"testing"

	"islet/engine"
	"islet/engine/modes"
)

// The devices of these tests. They have no Jacobians: the engine differences
// them.

// machine is a voltage e e^{j delta} behind R and L with droop on both powers,
// measured at that voltage behind a first-order filter:
//
//	d delta/dt = w0 - m P - w_f        e = v0 - n Q
//	dP/dt = wc (p - P), dQ/dt = wc (q - Q)
//	L di/dt = v - e e^{j delta} - (R + j w_f L) i
//
// Unknown groups are left out: with m = n = 0 the filters, and with quasi set
// the current's derivative.
type machine struct {
	v0, r, l, w0, m, n float64
	quasi              bool
	wf                 float64
}

const wc = 31.41 // rad/s

func (s *machine) filtered() bool { return s.m != 0 || s.n != 0 }
func (s *machine) Describe() engine.Description {
	d := engine.Description{Kind: "toy machine", Terminals: []engine.Terminal{{Name: "terminal", Flow: engine.FlowState}}}
	if s.quasi {
		d.Terminals[0].Flow = engine.FlowHeld
	}
	d.Unknowns = []engine.Unknown{
		{Name: "i.d", Unit: "A", Base: 20, Frame: engine.PairD, Dynamics: "network"},
		{Name: "i.q", Unit: "A", Base: 20, Frame: engine.PairQ, Dynamics: "network"},
		{Name: "delta", Unit: "rad", Base: 1, Frame: engine.Angle, Dynamics: "primary control"},
	}
	if s.filtered() {
		d.Unknowns = append(d.Unknowns,
			engine.Unknown{Name: "P", Unit: "W", Base: 1e4, Dynamics: "power filter"},
			engine.Unknown{Name: "Q", Unit: "var", Base: 1e4, Dynamics: "power filter"})
	}
	return d
}
func (s *machine) Dims() (int, int) {
	if s.filtered() {
		return 2, 5
	}
	return 2, 3
}
func (s *machine) Mass(port, own []float64) {
	clear(port)
	own[0], own[1] = s.l, s.l
	if s.quasi {
		own[0], own[1] = 0, 0
	}
	for i := 2; i < len(own); i++ {
		own[i] = 1
	}
}
func (s *machine) SetFrame(w float64) { s.wf = w }
func (s *machine) Eval(flow, rate []float64, t float64, v, x []float64) error {
	sin, cos := math.Sincos(x[2])
	e := s.v0
	if s.filtered() {
		e -= s.n * x[4]
		p := -1.5 * e * (cos*x[0] + sin*x[1])
		q := -1.5 * e * (sin*x[0] - cos*x[1])
		rate[3], rate[4] = wc*(p-x[3]), wc*(q-x[4])
	}
	rate[0] = v[0] - e*cos - s.r*x[0] + s.wf*s.l*x[1]
	rate[1] = v[1] - e*sin - s.r*x[1] - s.wf*s.l*x[0]
	rate[2] = s.Speed(t, v, x) - s.wf
	flow[0], flow[1] = x[0], x[1]
	return nil
}
func (s *machine) AngleUnknown() int { return 2 }
func (s *machine) Speed(t float64, v, x []float64) float64 {
	if s.filtered() {
		return s.w0 - s.m*x[3]
	}
	return s.w0
}
func (s *machine) Weight() float64 { return s.v0/(s.r+s.w0*s.l) + 1 }
func (s *machine) Channels() []engine.Channel {
	return []engine.Channel{{Name: "p", Unit: "W generated"}}
}
func (s *machine) Setpoints(float64) []engine.Setpoint {
	return []engine.Setpoint{{Name: "e", Unit: "V", Min: 0, Max: 1e6, Value: s.v0}}
}
func (s *machine) Measure(dst []float64, t float64, v, x []float64) {
	dst[0] = -1.5 * (v[0]*x[0] + v[1]*x[1])
}
func (s *machine) Set(name string, t, value, ramp float64) error {
	if name != "e" {
		return fmt.Errorf("no setpoint %q", name)
	}
	s.v0 = value
	return nil
}
func (s *machine) AppendBinary(b []byte) ([]byte, error) {
	return binary.LittleEndian.AppendUint64(b, math.Float64bits(s.v0)), nil
}
func (s *machine) UnmarshalBinary(b []byte) error {
	s.v0 = math.Float64frombits(binary.LittleEndian.Uint64(b))
	return nil
}

// coil is a series R-L to ground, or with l = 0 a resistor whose conductance is
// a setpoint.
type coil struct{ r, l, wf float64 }

func (s *coil) Describe() engine.Description {
	d := engine.Description{Kind: "toy load", Terminals: []engine.Terminal{{Name: "terminal", Flow: engine.FlowHeld}}}
	if s.l > 0 {
		d.Terminals[0].Flow = engine.FlowState
		d.Unknowns = []engine.Unknown{
			{Name: "i.d", Unit: "A", Base: 20, Frame: engine.PairD, Dynamics: "network"},
			{Name: "i.q", Unit: "A", Base: 20, Frame: engine.PairQ, Dynamics: "network"},
		}
	}
	return d
}
func (s *coil) Dims() (int, int) {
	if s.l == 0 {
		return 2, 0
	}
	return 2, 2
}
func (s *coil) Mass(port, own []float64) {
	clear(port)
	for i := range own {
		own[i] = s.l
	}
}
func (s *coil) SetFrame(w float64) { s.wf = w }
func (s *coil) Eval(flow, rate []float64, t float64, v, x []float64) error {
	if s.l == 0 {
		flow[0], flow[1] = v[0]/s.r, v[1]/s.r
		return nil
	}
	rate[0] = v[0] - s.r*x[0] + s.wf*s.l*x[1]
	rate[1] = v[1] - s.r*x[1] - s.wf*s.l*x[0]
	flow[0], flow[1] = x[0], x[1]
	return nil
}
func (s *coil) Setpoints(float64) []engine.Setpoint {
	if s.l > 0 {
		return nil
	}
	return []engine.Setpoint{{Name: "g", Unit: "S", Min: 0, Max: 1e3, Value: 1 / s.r}}
}
func (s *coil) Set(name string, t, value, ramp float64) error {
	if name != "g" {
		return fmt.Errorf("no setpoint %q", name)
	}
	s.r = 1 / value
	return nil
}

// branch is a series R-L between two buses.
type branch struct{ r, l, wf float64 }

func (b *branch) Describe() engine.Description {
	return engine.Description{Kind: "toy branch",
		Terminals: []engine.Terminal{{Name: "from", Flow: engine.FlowState}, {Name: "to", Flow: engine.FlowState}},
		Unknowns: []engine.Unknown{
			{Name: "i.d", Unit: "A", Base: 20, Frame: engine.PairD, Dynamics: "network"},
			{Name: "i.q", Unit: "A", Base: 20, Frame: engine.PairQ, Dynamics: "network"},
		}}
}
func (b *branch) Dims() (int, int) { return 4, 2 }
func (b *branch) Mass(port, own []float64) {
	clear(port)
	own[0], own[1] = b.l, b.l
}
func (b *branch) SetFrame(w float64) { b.wf = w }
func (b *branch) Eval(flow, rate []float64, t float64, v, x []float64) error {
	rate[0] = v[0] - v[2] - b.r*x[0] + b.wf*b.l*x[1]
	rate[1] = v[1] - v[3] - b.r*x[1] - b.wf*b.l*x[0]
	flow[0], flow[1], flow[2], flow[3] = x[0], x[1], -x[0], -x[1]
	return nil
}

// net is a system under construction.
type net struct {
	t *testing.T
	s *engine.System
}

func newNet(t *testing.T, hz float64) *net { return &net{t, engine.NewSystem(hz)} }

func (n *net) bus(name string) engine.Bus {
	if b, ok := n.s.FindBus(name); ok {
		return b
	}
	return n.s.Bus(name, 380)
}

func (n *net) add(name string, d engine.Device, at ...string) {
	n.t.Helper()
	var buses []engine.Bus
	for _, b := range at {
		buses = append(buses, n.bus(b))
	}
	if err := n.s.Add(name, d, buses...); err != nil {
		n.t.Fatal(err)
	}
}

func (n *net) start(o *engine.Options) *engine.Simulation {
	n.t.Helper()
	m, err := engine.Start(n.s, o)
	if err != nil {
		n.t.Fatal(err)
	}
	return m
}

func linear(t *testing.T, m *engine.Simulation, o *engine.LinearOptions) *engine.Linear {
	t.Helper()
	l, err := m.Linearise(o)
	if err != nil {
		t.Fatal(err)
	}
	return l
}

func analyse(t *testing.T, l *engine.Linear, o *modes.Options) *modes.Report {
	t.Helper()
	r, err := modes.Analyse(l, o)
	if err != nil {
		t.Fatal(err)
	}
	return r
}
