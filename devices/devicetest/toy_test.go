package devicetest

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"islet/solvers"
	"islet/solvers/facet"
)

// toy is a made-up device with every ability the kit looks at. Between its
// terminals it is
//
//	L di/dt = v_from - e(t) e^{j delta} - (R + j w_f L) i     flow_from = i
//	d delta/dt = w_0 - w_f
//	0 = |v_from|^2 / V^2 - z                                   z: "squared"
//	flow_to = [G (1 + z) if closed + j w_f C] v_to             mass C
//
// At the quasi-steady level i and the capacitor lose their masses. A bug, if
// named, makes it wrong in one place.
type toy struct {
	bug    string
	level  string
	frame  float64
	closed bool
	ramp   [4]float64 // e: from, to, start, end
	spill  []float64
}

const (
	toyVolts  = 300.0
	toyR      = 0.4
	toyL      = 5e-3
	toyG      = 0.02
	toyC      = 40e-6
	toySpeed  = 2*math.Pi*50 + 3
	toyAmpere = 20.0
)

func newToy(bug string) *toy {
	return &toy{bug: bug, level: "full", closed: true, ramp: [4]float64{280, 280, 0, 0}}
}

func (y *toy) Dims() (ports, own int) { return 4, 4 }

func (y *toy) Mass(port, own []float64) {
	clear(port)
	copy(own, []float64{0, 0, 1, 0})
	if y.level == "full" {
		copy(port, []float64{0, 0, toyC, toyC})
		copy(own, []float64{toyL, toyL, 1, 0})
	}
	switch y.bug {
	case "mass changes when switched":
		if !y.closed {
			own[2] = 2
		}
	case "mass of one axis":
		port[2] = 0
	case "negative mass":
		own[2] = -1
	}
}

func (y *toy) e(t float64) (value, slope float64) {
	from, to, start, end := y.ramp[0], y.ramp[1], y.ramp[2], y.ramp[3]
	switch {
	case t >= end:
		return to, 0
	case t < start:
		return from, 0
	case y.bug == "ramp jumps":
		return to, 0
	}
	slope = (to - from) / (end - start)
	return from + slope*(t-start), slope
}

func (y *toy) shunt(z float64) complex128 {
	g := 0.0
	if y.closed {
		g = toyG * (1 + z)
	}
	b := y.frame * toyC
	if y.bug == "capacitor in a fixed frame" {
		b = 2 * math.Pi * 50 * toyC
	}
	return complex(g, b)
}

func (y *toy) reactance() float64 {
	switch {
	case y.bug == "coarse level with another reactance" && y.level != "full":
		return 1.001 * y.frame * toyL
	case y.bug == "inductor in a fixed frame":
		return 2 * math.Pi * 50 * toyL
	}
	return y.frame * toyL
}

func (y *toy) Eval(flow, rate []float64, t float64, v, x []float64) error {
	from, to, i := get(v), get(v[2:]), get(x)
	e, _ := y.e(t)
	put(flow, i)
	put(flow[2:], y.shunt(x[3])*to)
	put(rate, from-cmplx.Rect(e, x[2])-complex(toyR, y.reactance())*i)
	rate[2] = toySpeed - y.frame
	rate[3] = real(from*cmplx.Conj(from))/(toyVolts*toyVolts) - x[3]
	switch y.bug {
	case "allocates":
		y.spill = make([]float64, 3)
	case "changes its arguments":
		x[3] += 1
	case "not a function":
		y.spill = append(y.spill, 0)
		rate[3] += 1e-3 * float64(len(y.spill))
	case "saliency":
		rate[0] += 1e-6 * x[1]
	case "flow depends on voltage":
		flow[0] += 1e-6 * v[1]
	case "flow with an offset":
		flow[0] += 1e-3
	case "never in its domain":
		return fmt.Errorf("toy: %w", solvers.ErrReject)
	}
	return nil
}

func (y *toy) Pattern() []solvers.Entry {
	p := []solvers.Entry{
		{Row: 0, Col: 4}, {Row: 1, Col: 5},
		{Row: 2, Col: 2}, {Row: 2, Col: 3}, {Row: 2, Col: 7}, {Row: 3, Col: 2}, {Row: 3, Col: 3}, {Row: 3, Col: 7},
		{Row: 4, Col: 0}, {Row: 4, Col: 4}, {Row: 4, Col: 5}, {Row: 4, Col: 6},
		{Row: 5, Col: 1}, {Row: 5, Col: 4}, {Row: 5, Col: 5}, {Row: 5, Col: 6},
		{Row: 7, Col: 0}, {Row: 7, Col: 7}, {Row: 7, Col: 1},
	}
	switch y.bug {
	case "pattern out of range":
		p = append(p, solvers.Entry{Row: 8, Col: 0})
	case "pattern entry twice":
		p = append(p, p[3])
	case "pattern too small":
		p = p[:len(p)-1] // without d(squared)/d(from.q)
	case "flow depends on voltage":
		p = append(p, solvers.Entry{Row: 0, Col: 1})
	}
	return p
}

func (y *toy) Jacobian(jac []float64, t float64, v, x []float64) {
	at := func(row, col int, a float64) { jac[8*row+col] = a }
	e, _ := y.e(t)
	s := y.shunt(x[3])
	at(0, 4, 1)
	at(1, 5, 1)
	at(2, 2, real(s))
	at(2, 3, -imag(s))
	at(3, 2, imag(s))
	at(3, 3, real(s))
	var dg float64
	if y.closed {
		dg = toyG
	}
	at(2, 7, dg*v[2])
	at(3, 7, dg*v[3])
	X := y.reactance()
	at(4, 0, 1)
	at(4, 4, -toyR)
	at(4, 5, X)
	at(4, 6, e*math.Sin(x[2]))
	at(5, 1, 1)
	at(5, 4, -X)
	at(5, 5, -toyR)
	at(5, 6, -e*math.Cos(x[2]))
	at(7, 0, 2*v[0]/(toyVolts*toyVolts))
	if y.bug != "pattern too small" {
		at(7, 1, 2*v[1]/(toyVolts*toyVolts))
	}
	at(7, 7, -1)
	switch y.bug {
	case "jacobian off by a millionth":
		at(4, 6, (1+1e-6)*e*math.Sin(x[2]))
	case "jacobian sign":
		at(2, 7, -dg*v[2])
	case "jacobian entry not written":
		at(5, 6, math.NaN())
	case "jacobian writes outside":
		at(6, 0, 0)
	case "flow depends on voltage":
		at(0, 1, 1e-6)
	case "saliency":
		at(4, 5, X+1e-6)
	}
}

func (y *toy) TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool {
	_, slope := y.e(t)
	if slope == 0 || y.bug == "time derivative denied" {
		return false
	}
	d := cmplx.Rect(slope, x[2])
	switch y.bug {
	case "time derivative wrong":
		d *= 1.001
	case "time derivative overwrites":
		put(rate, 0)
	}
	rate[0] -= real(d)
	rate[1] -= imag(d)
	return true
}

func (y *toy) Describe() facet.Description {
	d := facet.Description{
		Kind:      "toy",
		Terminals: []facet.Terminal{{Name: "from", Flow: facet.FlowState}, {Name: "to", Flow: facet.FlowHeld}},
		Unknowns: []facet.Unknown{
			{Name: "i.d", Unit: "A", Base: toyAmpere, Frame: facet.PairD, Dynamics: "network"},
			{Name: "i.q", Unit: "A", Base: toyAmpere, Frame: facet.PairQ, Dynamics: "network"},
			{Name: "delta", Unit: "rad", Base: 1, Frame: facet.Angle, Dynamics: "source"},
			{Name: "squared", Unit: "1", Base: 1, Dynamics: "algebraic"},
		},
	}
	if y.level != "full" {
		d.Terminals[0].Flow = facet.FlowHeld
	}
	switch y.bug {
	case "unknowns change when switched":
		if !y.closed {
			d.Unknowns[3].Name = "cubed"
		}
	case "no kind":
		d.Kind = ""
	case "terminal missing":
		d.Terminals = d.Terminals[:1]
	case "unknown missing":
		d.Unknowns = d.Unknowns[:3]
	case "unknown twice":
		d.Unknowns[3].Name = "delta"
	case "no unit":
		d.Unknowns[3].Unit = ""
	case "no base":
		d.Unknowns[3].Base = 0
	case "q part missing":
		d.Unknowns[1].Frame = facet.Invariant
	case "flow undeclared":
		d.Terminals[0].Flow = facet.FlowUndeclared
	case "tie to nowhere":
		d.Ties = []facet.Tie{{A: 0, B: 2, Ratio: 1}}
	case "pair taken for invariants":
		d.Unknowns[0].Frame, d.Unknowns[1].Frame = facet.Invariant, facet.Invariant
	case "angle taken for an invariant":
		d.Unknowns[2].Frame = facet.Invariant
	case "state taken for held":
		d.Terminals[0].Flow = facet.FlowHeld
	case "state taken for none":
		d.Terminals[0].Flow = facet.FlowNone
	case "held taken for state":
		d.Terminals[1].Flow = facet.FlowState
	case "held taken for injected":
		d.Terminals[1].Flow = facet.FlowInjected
	case "tie that carries nothing":
		d.Ties = []facet.Tie{{A: 0, B: 1, Ratio: 1}}
	}
	return d
}

func (y *toy) SetFrame(speed float64) { y.frame = speed }

func (y *toy) Channels() []facet.Channel {
	c := []facet.Channel{
		{Name: "p_from", Unit: "W in", Doc: "active power"},
		{Name: "q_from", Unit: "var in", Doc: "reactive power"},
		{Name: "i_from", Unit: "A rms", Doc: "current"},
		{Name: "p_to", Unit: "W generated", Doc: "active power"},
		{Name: "frequency", Unit: "Hz", Doc: "of the source"},
	}
	switch y.bug {
	case "channels change when switched":
		if !y.closed {
			c = c[:4]
		}
	case "channel named as an unknown":
		c[4].Name = "delta"
	case "channel without sign":
		c[0].Unit = "W"
	}
	return c
}

func (y *toy) Measure(dst []float64, t float64, v, x []float64) {
	s := 1.5 * get(v) * cmplx.Conj(get(x))
	to := get(v[2:])
	dst[0] = real(s)
	dst[1] = imag(s)
	dst[2] = cmplx.Abs(get(x)) / math.Sqrt2
	dst[3] = -1.5 * real(to*cmplx.Conj(y.shunt(x[3])*to))
	dst[4] = toySpeed / (2 * math.Pi)
	switch y.bug {
	case "channel without factor 3/2":
		dst[0] /= 1.5
	case "channel peak for rms":
		dst[2] *= math.Sqrt2
	case "channel not written":
		dst[4] = math.NaN()
	case "channel sign":
		dst[1] = -dst[1]
	}
}

func (y *toy) Energy(t float64, v, x []float64) facet.Energy {
	e, _ := y.e(t)
	i, to := get(x), get(v[2:])
	abs2 := func(z complex128) float64 { return real(z)*real(z) + imag(z)*imag(z) }
	en := facet.Energy{
		Supplied:   -1.5 * real(cmplx.Rect(e, x[2])*cmplx.Conj(i)),
		Dissipated: 1.5 * (toyR*abs2(i) + real(y.shunt(x[3]))*abs2(to)),
	}
	if y.level == "full" {
		en.Stored = 0.75 * (toyL*abs2(i) + toyC*abs2(to))
	}
	switch y.bug {
	case "energy without the capacitor":
		en.Stored = 0.75 * toyL * abs2(i)
	case "energy of one phase":
		en.Stored /= 3
	case "loss left out":
		en.Dissipated -= 1.5 * toyR * abs2(i) * 1e-4
	case "supply of the wrong sign":
		en.Supplied = -en.Supplied
	case "energy of one axis":
		en.Supplied += 1e-3 * i2(real(i))
		en.Dissipated += 1e-3 * i2(real(i))
	}
	return en
}

func i2(a float64) float64 { return a * a }

func (y *toy) Setpoints(t float64) []facet.Setpoint {
	e, _ := y.e(t)
	s := facet.Setpoint{Name: "e", Unit: "V", Doc: "inner voltage", Min: 0, Max: 400, Value: e}
	if y.bug == "setpoint outside its range" {
		s.Max = 200
	}
	return []facet.Setpoint{s}
}

func (y *toy) Set(name string, t, value, ramp float64) error {
	if y.bug == "changes before it checks" {
		y.ramp[1] = value + 1
	}
	if name != "e" && y.bug != "takes any name" {
		return errors.New("toy: no such setpoint")
	}
	if y.bug != "takes NaN" && !(value >= 0 && value <= 400) || y.bug == "takes NaN" && (value < 0 || value > 400) {
		return errors.New("toy: e out of range")
	}
	if y.bug != "takes a negative ramp" && !(ramp >= 0) {
		return errors.New("toy: negative ramp")
	}
	from, _ := y.e(t)
	if y.bug == "ramp forgets the ramp before" {
		from = y.ramp[1]
	}
	if ramp == 0 {
		from = value
	}
	y.ramp = [4]float64{from, value, t, t + ramp}
	return nil
}

func (y *toy) Closed() bool          { return y.closed }
func (y *toy) SetClosed(closed bool) { y.closed = closed }

func (y *toy) AppendBinary(b []byte) ([]byte, error) {
	if y.bug == "snapshot overwrites" {
		b = nil
	}
	for _, x := range y.ramp {
		if y.bug == "snapshot in single precision" {
			x = float64(float32(x))
		}
		b = binary.LittleEndian.AppendUint64(b, math.Float64bits(x))
	}
	if y.closed {
		return append(b, 1), nil
	}
	return append(b, 0), nil
}

func (y *toy) UnmarshalBinary(b []byte) error {
	switch y.bug {
	case "restores half before it fails":
		if len(b) > 8 {
			y.ramp[0] = 1
		}
	case "takes damaged snapshots":
		if len(b) < 33 {
			return nil
		}
		b = b[:33]
	case "forgets its setpoints":
		y.closed = b[len(b)-1] == 1
		return nil
	}
	if len(b) != 33 {
		return errors.New("toy: damaged snapshot")
	}
	for k := range y.ramp {
		y.ramp[k] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*k:]))
	}
	if y.bug != "forgets its switch" {
		y.closed = b[32] == 1
	}
	return nil
}

func (y *toy) Detail() string { return y.level }

func (y *toy) Details() []string { return []string{"full", "quasi-steady"} }

func (y *toy) WithDetail(level string) (solvers.Block, error) {
	if level != "full" && level != "quasi-steady" && y.bug != "takes any level" {
		return nil, errors.New("toy: no such level")
	}
	c := newToy(y.bug)
	if y.bug != "level change forgets setpoints" {
		c.ramp = y.ramp
	}
	c.closed, c.frame, c.level = y.closed, y.frame, level
	if y.bug == "level change of the receiver" {
		y.level = level
	}
	return c, nil
}

func (y *toy) Guess(x []float64, t float64, v []float64) {
	put(x, 0)
	x[2] = cmplx.Phase(get(v))
	x[3] = 1
	if y.bug == "guess not finite" {
		x[3] = math.NaN()
	}
}

func (y *toy) AngleUnknown() int {
	if y.bug == "angle unknown is none" {
		return 3
	}
	return 2
}

func (y *toy) Speed(t float64, v, x []float64) float64 {
	if y.bug == "speed without offset" {
		return 2 * math.Pi * 50
	}
	return toySpeed
}

func (y *toy) Weight() float64 {
	if y.bug == "no weight" {
		return 0
	}
	return 1e4
}

func (y *toy) CurrentLimit() (limit float64, channel int) {
	if y.bug == "limit of a power" {
		return toyAmpere, 0
	}
	return toyAmpere, 2
}

// coupler is an ideal transformer behind a resistance, without unknowns: a
// device that is nothing but a tie, with as few facets as the kit allows.
//
//	i = (v_b - ratio v_a) / R    flow_a = ratio* (-i)    flow_b = i
type coupler struct {
	bug   string
	ratio complex128 // v_b / v_a
}

func (c *coupler) Dims() (ports, own int) { return 4, 0 }

func (c *coupler) Mass(port, own []float64) { clear(port) }

func (c *coupler) Eval(flow, rate []float64, t float64, v, x []float64) error {
	i := (get(v[2:]) - c.ratio*get(v)) / 0.5
	put(flow, -cmplx.Conj(c.ratio)*i)
	put(flow[2:], i)
	if c.bug == "coupler with a leak" {
		put(flow[2:], i+1e-6*get(v[2:]))
	}
	return nil
}

func (c *coupler) Describe() facet.Description {
	d := facet.Description{
		Kind:      "coupler",
		Terminals: []facet.Terminal{{Name: "a", Flow: facet.FlowNone}, {Name: "b", Flow: facet.FlowNone}},
		Ties:      []facet.Tie{{A: 1, B: 0, Ratio: c.ratio}},
	}
	if c.bug == "coupler with the inverse ratio" {
		d.Ties[0].Ratio = 1 / c.ratio
	}
	return d
}

func (c *coupler) OpenRatio(from, to int) complex128 {
	if from == 0 || c.bug == "coupler with one ratio for both ways" {
		return c.ratio
	}
	return 1 / c.ratio
}

// injector is a controlled current source in the frame of an angle.
//
//	T d angle/dt = -w_f ... flow = I e^{j angle}
type injector struct {
	bug   string
	frame float64
}

func (c *injector) Dims() (ports, own int) { return 2, 1 }

func (c *injector) Mass(port, own []float64) { clear(port); own[0] = 1 }

func (c *injector) Eval(flow, rate []float64, t float64, v, x []float64) error {
	put(flow, cmplx.Rect(10, x[0]))
	rate[0] = 314 - c.frame
	switch c.bug {
	case "injector with a conductance":
		put(flow, cmplx.Rect(10, x[0])+0.01*get(v))
	case "injector off":
		put(flow, 0)
	}
	return nil
}

func (c *injector) SetFrame(speed float64) {
	if c.bug != "injector deaf to the frame" {
		c.frame = speed
	}
}

func (c *injector) Describe() facet.Description {
	d := facet.Description{
		Kind:      "injector",
		Terminals: []facet.Terminal{{Name: "terminal", Flow: facet.FlowInjected}},
		Unknowns:  []facet.Unknown{{Name: "angle", Unit: "rad", Base: 1, Frame: facet.Angle, Dynamics: "source"}},
	}
	switch c.bug {
	case "injector taken for state":
		d.Terminals[0].Flow = facet.FlowState
	case "injector taken for held":
		d.Terminals[0].Flow = facet.FlowHeld
	}
	return d
}
