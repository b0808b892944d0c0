package engine_test

import (
	"encoding/binary"
	"fmt"
	"math"

	"islet/engine"
	"islet/solvers/facet"
)

// The devices of these tests: the smallest that exercise the engine. They
// leave out Jacobians, so the engine differences them.

// source is E e^{j delta} behind R and L at a speed of its own:
//
//	d delta/dt = w - w_f,  L di/dt = v - E e^{j delta} - (R + j w_f L) i
//
// With droop m > 0 (rad/s per W) it slows down under load, filtered at corner
// wc: dP/dt = wc (p - P), w = w0 - m P.
type source struct {
	e, r, l, w, m float64
	wf            float64
}

func (s *source) Describe() engine.Description {
	return engine.Description{
		Kind:      "toy source",
		Terminals: []engine.Terminal{{Name: "terminal", Flow: engine.FlowState}},
		Unknowns: []engine.Unknown{
			{Name: "delta", Unit: "rad", Base: 1, Frame: engine.Angle},
			{Name: "P", Unit: "W", Base: 1e4},
			{Name: "i.d", Unit: "A", Base: 20, Frame: engine.PairD},
			{Name: "i.q", Unit: "A", Base: 20, Frame: engine.PairQ},
		},
	}
}
func (s *source) Dims() (int, int) { return 2, 4 }
func (s *source) Mass(port, own []float64) {
	port[0], port[1] = 0, 0
	own[0], own[1], own[2], own[3] = 1, 1, s.l, s.l
}
func (s *source) SetFrame(w float64) { s.wf = w }
func (s *source) Eval(flow, rate []float64, t float64, v, x []float64) error {
	sin, cos := math.Sincos(x[0])
	p := -1.5 * s.e * (cos*x[2] + sin*x[3])
	rate[0] = s.w - s.m*x[1] - s.wf
	rate[1] = 31.4 * (p - x[1])
	rate[2] = v[0] - s.e*cos - s.r*x[2] + s.wf*s.l*x[3]
	rate[3] = v[1] - s.e*sin - s.r*x[3] - s.wf*s.l*x[2]
	flow[0], flow[1] = x[2], x[3]
	return nil
}
func (s *source) AngleUnknown() int                       { return 0 }
func (s *source) Speed(t float64, v, x []float64) float64 { return s.w - s.m*x[1] }
func (s *source) Weight() float64                         { return 1e4 }
func (s *source) Setpoints(t float64) []engine.Setpoint {
	return []engine.Setpoint{{Name: "e", Unit: "V", Min: 0, Max: 1e6, Value: s.e}}
}
func (s *source) Set(name string, t, value, ramp float64) error {
	if name != "e" {
		return fmt.Errorf("no setpoint %q", name)
	}
	s.e = value
	return nil
}
func (s *source) AppendBinary(b []byte) ([]byte, error) {
	return binary.LittleEndian.AppendUint64(b, math.Float64bits(s.e)), nil
}
func (s *source) UnmarshalBinary(b []byte) error {
	s.e = math.Float64frombits(binary.LittleEndian.Uint64(b))
	return nil
}
func (s *source) Energy(t float64, v, x []float64) engine.Energy {
	sin, cos := math.Sincos(x[0])
	i2 := x[2]*x[2] + x[3]*x[3]
	return engine.Energy{
		Stored:     0.75 * s.l * i2,
		Supplied:   -1.5 * s.e * (cos*x[2] + sin*x[3]),
		Dissipated: 1.5 * s.r * i2,
	}
}
func (s *source) Channels() []engine.Channel {
	return []engine.Channel{{Name: "p", Unit: "W generated"}}
}
func (s *source) Measure(dst []float64, t float64, v, x []float64) {
	dst[0] = -1.5 * (v[0]*x[2] + v[1]*x[3])
}

// branch is a series R-L between two terminals, or with L = 0 a resistor.
type branch struct{ r, l, wf float64 }

func (b *branch) Describe() engine.Description {
	d := engine.Description{Kind: "toy branch", Terminals: []engine.Terminal{{Name: "from"}, {Name: "to"}}}
	f := facet.FlowState
	if b.l == 0 {
		f = facet.FlowNone
		d.Ties = []engine.Tie{{A: 0, B: 1, Ratio: 1}}
	} else {
		d.Unknowns = []engine.Unknown{
			{Name: "i.d", Unit: "A", Base: 20, Frame: engine.PairD},
			{Name: "i.q", Unit: "A", Base: 20, Frame: engine.PairQ},
		}
	}
	d.Terminals[0].Flow, d.Terminals[1].Flow = f, f
	return d
}
func (b *branch) Dims() (int, int) {
	if b.l == 0 {
		return 4, 0
	}
	return 4, 2
}
func (b *branch) Mass(port, own []float64) {
	clear(port)
	for i := range own {
		own[i] = b.l
	}
}
func (b *branch) SetFrame(w float64) { b.wf = w }
func (b *branch) Eval(flow, rate []float64, t float64, v, x []float64) error {
	if b.l == 0 {
		flow[0], flow[1] = (v[0]-v[2])/b.r, (v[1]-v[3])/b.r
	} else {
		rate[0] = v[0] - v[2] - b.r*x[0] + b.wf*b.l*x[1]
		rate[1] = v[1] - v[3] - b.r*x[1] - b.wf*b.l*x[0]
		flow[0], flow[1] = x[0], x[1]
	}
	flow[2], flow[3] = -flow[0], -flow[1]
	return nil
}
func (b *branch) Energy(t float64, v, x []float64) engine.Energy {
	if b.l == 0 {
		d, q := v[0]-v[2], v[1]-v[3]
		return engine.Energy{Dissipated: 1.5 * (d*d + q*q) / b.r}
	}
	i2 := x[0]*x[0] + x[1]*x[1]
	return engine.Energy{Stored: 0.75 * b.l * i2, Dissipated: 1.5 * b.r * i2}
}

// contact is a resistor that opens.
type contact struct {
	branch
	open bool
}

func newContact(r float64, open bool) *contact { return &contact{branch{r: r}, open} }

func (c *contact) Describe() engine.Description {
	d := c.branch.Describe()
	d.Kind = "toy switch"
	if c.open {
		d.Ties = nil
	}
	return d
}
func (c *contact) Eval(flow, rate []float64, t float64, v, x []float64) error {
	if c.open {
		clear(flow)
		return nil
	}
	return c.branch.Eval(flow, rate, t, v, x)
}
func (c *contact) Energy(t float64, v, x []float64) engine.Energy {
	if c.open {
		return engine.Energy{}
	}
	return c.branch.Energy(t, v, x)
}
func (c *contact) Closed() bool     { return !c.open }
func (c *contact) SetClosed(y bool) { c.open = !y }

// shunt is a load to ground: a resistor (l = 0), or a series R-L.
type shunt struct{ r, l, wf float64 }

func (s *shunt) Describe() engine.Description {
	d := engine.Description{Kind: "toy load", Terminals: []engine.Terminal{{Name: "terminal", Flow: engine.FlowHeld}}}
	if s.l > 0 {
		d.Terminals[0].Flow = engine.FlowState
		d.Unknowns = []engine.Unknown{
			{Name: "i.d", Unit: "A", Base: 20, Frame: engine.PairD},
			{Name: "i.q", Unit: "A", Base: 20, Frame: engine.PairQ},
		}
	}
	return d
}
func (s *shunt) Dims() (int, int) {
	if s.l == 0 {
		return 2, 0
	}
	return 2, 2
}
func (s *shunt) Mass(port, own []float64) {
	clear(port)
	for i := range own {
		own[i] = s.l
	}
}
func (s *shunt) SetFrame(w float64) { s.wf = w }
func (s *shunt) Eval(flow, rate []float64, t float64, v, x []float64) error {
	if s.l == 0 {
		flow[0], flow[1] = v[0]/s.r, v[1]/s.r
		return nil
	}
	rate[0] = v[0] - s.r*x[0] + s.wf*s.l*x[1]
	rate[1] = v[1] - s.r*x[1] - s.wf*s.l*x[0]
	flow[0], flow[1] = x[0], x[1]
	return nil
}
func (s *shunt) Energy(t float64, v, x []float64) engine.Energy {
	if s.l == 0 {
		return engine.Energy{Dissipated: 1.5 * (v[0]*v[0] + v[1]*v[1]) / s.r}
	}
	i2 := x[0]*x[0] + x[1]*x[1]
	return engine.Energy{Stored: 0.75 * s.l * i2, Dissipated: 1.5 * s.r * i2}
}

// injection feeds a given current that turns with an angle of its own.
type injection struct{ i float64 }

func (s *injection) Describe() engine.Description {
	return engine.Description{Kind: "toy injection",
		Terminals: []engine.Terminal{{Name: "terminal", Flow: engine.FlowInjected}},
		Unknowns:  []engine.Unknown{{Name: "delta", Unit: "rad", Base: 1, Frame: engine.Angle}}}
}
func (s *injection) Dims() (int, int)         { return 2, 1 }
func (s *injection) Mass(port, own []float64) { clear(port); own[0] = 1 }
func (s *injection) Eval(flow, rate []float64, t float64, v, x []float64) error {
	rate[0] = 0
	flow[0], flow[1] = -s.i*math.Cos(x[0]), -s.i*math.Sin(x[0])
	return nil
}
