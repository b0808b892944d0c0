package engine

import (
	"errors"
	"fmt"
	"math"
	"path"
	"strings"

	"islet/solvers"
)

// Linear is a simulation's system linearised at its present state, in
// descriptor form over deviations y of the unknowns, u of setpoints and w of
// channels:
//
//	E y' = J y + B u        w = C y + D u
//
// E is diagonal; a zero makes the row algebraic. Rows listed in Hidden are
// current laws 0 = J[row] y that hold only unknowns with a derivative, the law
// itself and not its derivative: the pencil (E, J) has no eigenvalue that the
// network doesn't have. Dead buses and devices out of service have no place in
// it. Package modes reduces, analyses and writes it.
//
// The frame of every island turns at the mean speed of its sources at the
// state, so that at an operating point every rate is zero. A setpoint that
// acts by a jump of an unknown (the phase of a grid) enters with the unknown
// counted from its jump, which is exact; that unknown's value is then y plus
// the jump.
type Linear struct {
	Time     float64 // s
	Unknowns []LinearUnknown
	E        []float64 // len Unknowns
	J        *solvers.CSC
	Hidden   []int // rows of J
	B        *solvers.CSC
	C        *solvers.CSC
	D        *solvers.CSC
	Inputs   []LinearSignal
	Outputs  []LinearSignal
	Islands  []LinearIsland
	// Drift is the largest rate of change at the state, per unit of an
	// unknown's base per second, and Worst the unknown concerned. The
	// linearisation is about a steady state where it is zero to rounding.
	Drift float64
	Worst string
	// Notes tell what a reader of the results should know, such as a limiter
	// that acts.
	Notes []string

	buses map[string]int // live bus -> unknown of v_d
	laws  map[int][]law  // unknown of a bus component -> rows its current enters
}

// LinearUnknown describes an unknown of a Linear.
type LinearUnknown struct {
	Name     string // "battery-1.delta", "quay.v_d"
	Unit     string
	Base     float64 // counts as 1 per unit, > 0
	Owner    string  // the device or bus
	Bus      bool    // the owner is a bus
	Dynamics string  // group of dynamics
	Island   int     // index in Islands
}

// LinearSignal describes an input or output of a Linear.
type LinearSignal struct {
	Name  string // "battery-1.p"
	Unit  string
	Value float64 // at the linearisation
}

// LinearIsland describes an energised island of a Linear.
type LinearIsland struct {
	Leader    string  // its leading source
	Reference int     // the leading source's angle among the unknowns
	Speed     float64 // of the frame, rad/s
	// Rotation is the direction, by unknown, in which all moves when the
	// island's angles grow together by one rad. As only differences of angles
	// act, the rates of change then turn as well and J Rotation = Turned, by
	// equation; at a steady state that is zero.
	Rotation, Turned []float64
}

// law is a row that the current into a bus component enters, with a weight.
type law struct {
	row    int
	weight float64
}

// LinearOptions choose the signals of a linearisation. nil, or the zero value,
// gives the stated defaults.
type LinearOptions struct {
	// Inputs are the setpoints, "device.setpoint" or with * for any run of
	// characters; nil means all of every device in service, an empty slice
	// none.
	Inputs []string
	// Outputs are the channels, likewise; nil means those that a run records
	// by default, an empty slice none. Instantaneous phase values rotate and
	// can't be chosen.
	Outputs []string
}

// linearDifference is the relative increment of differences in setpoints and
// channels: the cube root of the rounding unit, which balances truncation
// against rounding in central differences.
const linearDifference = 6.055454452393343e-06

// Linearise linearises the system at the present state of the simulation,
// which it leaves as it is. J holds the devices' own Jacobians; B, C and D are
// central differences of each device alone, to about ten digits. o may be nil.
// The error joins all faults found.
func (m *Simulation) Linearise(o *LinearOptions) (*Linear, error) {
	if o == nil {
		o = &LinearOptions{}
	}
	if m.stopped != nil {
		return nil, fmt.Errorf("engine: no linearisation of a run that has failed: %w", m.stopped)
	}
	// A network of its own leaves the integrator's matrix alone.
	net, err := m.sys.network()
	if err != nil {
		return nil, err
	}
	dead := make([]bool, len(m.sys.buses))
	for b, k := range m.topo.busOf {
		dead[b] = k < 0
	}
	if err := net.Configure(solvers.Configuration{Off: append([]bool(nil), m.topo.off...), Dead: dead, Hidden: m.topo.hidden}); err != nil {
		return nil, m.named(err)
	}
	z := &lineariser{m: m, net: net, y: append([]float64(nil), m.step.State()...), l: &Linear{Time: m.t}}
	defer z.restoreFrames()
	if err := z.turnFrames(); err != nil {
		return nil, err
	}
	z.index()
	if err := z.jacobian(); err != nil {
		return nil, err
	}
	z.islands()
	z.kinks()
	if err := z.signals(o); err != nil {
		return nil, err
	}
	return z.l, nil
}

// lineariser is the workspace of Linearise.
type lineariser struct {
	m      *Simulation
	net    *solvers.Network
	y      []float64
	l      *Linear
	speeds []float64 // of the islands' frames before
	at     []int     // unknown of the network -> unknown of l, -1 if left out
	from   []int     // the reverse
	rate   []float64 // right-hand sides, by unknown of the network
}

func (z *lineariser) turnFrames() error {
	m := z.m
	turned := false
	for k := range m.topo.islands {
		is := &m.topo.islands[k]
		z.speeds = append(z.speeds, is.frame.speed)
		w := m.islandSpeed(is, m.t, z.y)
		if math.Abs(w-is.frame.speed) > 1e-11*m.sys.nominal {
			m.setSpeed(k, w)
			turned = turned || is.quasi
		}
	}
	if !turned {
		return nil
	}
	// Quasi-steady elements see the frame's speed.
	if err := z.net.Initialise(m.t, z.y, false); err != nil {
		return m.named(err)
	}
	return nil
}

func (z *lineariser) restoreFrames() {
	for k, w := range z.speeds {
		if z.m.topo.islands[k].frame.speed != w {
			z.m.setSpeed(k, w)
		}
	}
}

// index numbers the unknowns in service.
func (z *lineariser) index() {
	m, l := z.m, z.l
	z.at = make([]int, z.net.Dim())
	for i := range z.at {
		z.at[i] = -1
	}
	add := func(i int, u LinearUnknown) {
		z.at[i] = len(z.from)
		z.from = append(z.from, i)
		l.Unknowns = append(l.Unknowns, u)
	}
	for _, d := range m.sys.devices {
		if d.off {
			continue
		}
		for k, u := range d.desc.Unknowns {
			add(d.lo+k, LinearUnknown{d.name + "." + u.Name, u.Unit, u.Base, d.name, false, u.Dynamics, d.island})
		}
	}
	l.buses = make(map[string]int)
	for b, bus := range m.sys.buses {
		k := m.topo.busOf[b]
		if k < 0 {
			continue
		}
		l.buses[bus.name] = len(l.Unknowns)
		for q := range 2 {
			c := busQuantities[busVd+q]
			add(m.net.NodeUnknown(2*b+q), LinearUnknown{bus.name + "." + c.Name, c.Unit, peakPhase(bus.rated), bus.name, true, "network", k})
		}
	}
	// A current into a bus enters its own law unless a hidden one stands in
	// its place, and the hidden ones in whose sum the bus is.
	l.laws = make(map[int][]law)
	hidden := make(map[int]bool)
	for _, h := range m.topo.hidden {
		hidden[h.Row] = true
		for _, t := range h.Terms {
			if row := z.at[m.net.NodeUnknown(h.Row)]; row >= 0 {
				c := z.at[m.net.NodeUnknown(t.Component)]
				l.laws[c] = append(l.laws[c], law{row, t.Weight})
			}
		}
	}
	for b := range m.sys.buses {
		for q := range 2 {
			if i := z.at[m.net.NodeUnknown(2*b+q)]; i >= 0 && !hidden[2*b+q] {
				l.laws[i] = append(l.laws[i], law{i, 1})
			}
		}
	}
}

func (z *lineariser) jacobian() error {
	m, l, n := z.m, z.l, len(z.from)
	f := make([]float64, z.net.Dim())
	if err := z.net.Eval(f, m.t, z.y); err != nil {
		return m.named(err)
	}
	if err := z.net.Linearise(m.t, z.y); err != nil {
		return m.named(err)
	}
	whole := z.net.Assembly()
	whole.Fill(0)
	l.E = make([]float64, n)
	for _, e := range whole.Mass {
		if i := z.at[e.Row]; i >= 0 {
			l.E[i] += e.Value
		}
	}
	hidden := make([]bool, n)
	for _, h := range z.net.Hidden() {
		if i := z.at[h]; i >= 0 {
			l.Hidden = append(l.Hidden, i)
			hidden[i] = true
		}
	}
	var t triplets
	for j := range whole.A.Cols {
		col := z.at[j]
		if col < 0 {
			continue
		}
		for p := whole.A.P[j]; p < whole.A.P[j+1]; p++ {
			row, v := z.at[whole.A.I[p]], -whole.A.X[p]
			if row < 0 || v == 0 {
				continue
			}
			if math.IsNaN(v) || math.IsInf(v, 0) {
				return fmt.Errorf("engine: linearisation at t = %.6g s: the derivative of the equation of %s with respect to %s is %g", m.t, l.Unknowns[row].Name, l.Unknowns[col].Name, v)
			}
			if hidden[row] && l.E[col] == 0 {
				continue // what rounding leaves of conductances that cancel in the sum
			}
			t.add(row, col, v)
		}
	}
	l.J = t.matrix(n, n)
	z.rate = f
	for i, e := range l.E {
		if e == 0 {
			continue
		}
		if r := math.Abs(f[z.from[i]] / (e * l.Unknowns[i].Base)); r > l.Drift || r != r {
			l.Drift, l.Worst = r, l.Unknowns[i].Name
		}
	}
	if !(l.Drift < 1e-3) {
		l.Notes = append(l.Notes, fmt.Sprintf("not a steady state: %s moves at %.3g per unit per second, so the linear system holds for a time short against that only", l.Worst, l.Drift))
	}
	return nil
}

func (z *lineariser) islands() {
	m, l := z.m, z.l
	for k := range m.topo.islands {
		is := &m.topo.islands[k]
		lead := m.sys.devices[is.formers[0]]
		s := LinearIsland{
			Leader:    lead.name,
			Reference: z.at[lead.lo+lead.former.AngleUnknown()],
			Speed:     is.frame.speed,
			Rotation:  make([]float64, len(z.from)),
			Turned:    make([]float64, len(z.from)),
		}
		turn := func(i int) {
			d, q := z.at[i], z.at[i+1]
			s.Rotation[d], s.Rotation[q] = -z.y[i+1], z.y[i]
			s.Turned[d], s.Turned[q] = -z.rate[i+1], z.rate[i]
		}
		for _, i := range is.devices {
			d := m.sys.devices[i]
			for k, u := range d.desc.Unknowns {
				switch u.Frame {
				case PairD:
					turn(d.lo + k)
				case Angle:
					s.Rotation[z.at[d.lo+k]] = 1
				}
			}
		}
		for _, b := range is.buses {
			turn(m.net.NodeUnknown(2 * b))
		}
		for _, i := range l.Hidden {
			s.Turned[i] = 0 // the law stands there, not its derivative
		}
		l.Islands = append(l.Islands, s)
	}
}

// kinks tells of limits that act.
func (z *lineariser) kinks() {
	m := z.m
	for _, d := range m.sys.devices {
		if d.off || d.kinked == nil {
			continue
		}
		v, g := make([]float64, d.ports), make([]float64, len(d.kinks))
		m.net.Ports(d.block, v, z.y)
		d.kinked.EvalKinks(g, m.t, v, z.y[d.lo:d.lo+d.own])
		for k, x := range g {
			if x > 0 {
				z.l.Notes = append(z.l.Notes, fmt.Sprintf("%s is at its %s: the linear system holds for the limited device", d.name, d.kinks[k]))
			}
		}
	}
}

// local is what a device gives, evaluated alone: flows into it, rates,
// channels and, of a source, its speed.
type local struct {
	d     *member
	v, x  []float64
	value []float64
}

func (z *lineariser) local(d *member) *local {
	s := &local{d: d, v: make([]float64, d.ports), x: append([]float64(nil), z.y[d.lo:d.lo+d.own]...)}
	z.m.net.Ports(d.block, s.v, z.y)
	n := d.ports + d.own + len(d.channels)
	if d.former != nil {
		n++
	}
	s.value = make([]float64, n)
	return s
}

// Offsets in local.value.
func (s *local) channelAt(k int) int { return s.d.ports + s.d.own + k }
func (s *local) speedAt() int        { return s.d.ports + s.d.own + len(s.d.channels) }

func (s *local) eval(t float64) error {
	d, p := s.d, s.d.ports
	if err := d.dev.Eval(s.value[:p], s.value[p:p+d.own], t, s.v, s.x); err != nil {
		return fmt.Errorf("engine: device %q: %w", d.name, err)
	}
	if d.measure != nil {
		d.measure.Measure(s.value[p+d.own:s.speedAt()], t, s.v, s.x)
	}
	if d.former != nil {
		s.value[s.speedAt()] = d.former.Speed(t, s.v, s.x)
	}
	return nil
}

// gradients returns the derivatives of all values, value by value, with
// respect to [v | x].
func (z *lineariser) gradients(d *member) (*local, [][]float64, error) {
	s := z.local(d)
	w := d.ports + d.own
	g := make([][]float64, len(s.value))
	for i := range g {
		g[i] = make([]float64, w)
	}
	for j := range w {
		var at *float64
		var scale float64
		if j < d.ports {
			at, scale = &s.v[j], peakPhase(z.m.sys.buses[d.buses[j/2]].rated)
		} else {
			at, scale = &s.x[j-d.ports], d.desc.Unknowns[j-d.ports].Base
		}
		was := *at
		step := linearDifference * math.Max(math.Abs(was), scale)
		if err := s.central(z.m.t, func(k float64) error { *at = was + k*step; return nil }, 2*step, -1, 1); err != nil {
			return nil, nil, err
		}
		*at = was
		for i, v := range s.value {
			g[i][j] = v
		}
	}
	return s, g, nil
}

// central replaces s.value by a second-order difference quotient: central
// between lo = -1 and hi = 1, or one-sided with steps to the other side where
// one of them is 0. span is the distance between -1 and 1.
func (s *local) central(t float64, move func(k float64) error, span, lo, hi float64) error {
	at := func(k float64) ([]float64, error) {
		if err := move(k); err != nil {
			return nil, err
		}
		if err := s.eval(t); err != nil {
			return nil, err
		}
		return append([]float64(nil), s.value...), nil
	}
	if lo == -1 && hi == 1 {
		a, err := at(-1)
		if err != nil {
			return err
		}
		b, err := at(1)
		if err != nil {
			return err
		}
		for i := range s.value {
			s.value[i] = (b[i] - a[i]) / span
		}
		return nil
	}
	side := hi + lo // 1 or -1
	var v [3][]float64
	for k := range v {
		var err error
		if v[k], err = at(side * float64(k)); err != nil {
			return err
		}
	}
	for i := range s.value {
		s.value[i] = side * (4*v[1][i] - 3*v[0][i] - v[2][i]) / span
	}
	return nil
}

// signals chooses inputs and outputs and fills B, C and D.
func (z *lineariser) signals(o *LinearOptions) error {
	l, m := z.l, z.m
	outputs, errO := z.chooseOutputs(o.Outputs)
	inputs, errI := z.chooseInputs(o.Inputs)
	if err := errors.Join(errI, errO); err != nil {
		return err
	}
	var b, c, d triplets
	byDevice := make(map[*member][]int) // outputs that depend on the device
	for k, p := range outputs {
		l.Outputs = append(l.Outputs, LinearSignal{p.info.Name, p.info.Unit, p.value(m.t, z.y)})
		if p.kind != fromBus {
			byDevice[p.d] = append(byDevice[p.d], k)
			continue
		}
		i := m.net.NodeUnknown(2 * p.bus)
		at, vd, vq := z.at[i], z.y[i], z.y[i+1]
		size := math.Hypot(vd, vq)
		switch p.index {
		case busV:
			c.add(k, at, lineLine(vd/size))
			c.add(k, at+1, lineLine(vq/size))
		case busAngle:
			c.add(k, at, -vq/(size*size)*180/math.Pi)
			c.add(k, at+1, vd/(size*size)*180/math.Pi)
		case busVd:
			c.add(k, at, 1)
		case busVq:
			c.add(k, at+1, 1)
		case busFrequency:
			for _, f := range m.topo.islands[m.topo.busOf[p.bus]].formers {
				byDevice[m.sys.devices[f]] = append(byDevice[m.sys.devices[f]], k)
			}
		}
	}
	// share returns where among the device's values an output comes from, and
	// with what weight; -1 for an unknown itself.
	share := func(s *local, p *probe) (at int, weight float64) {
		switch p.kind {
		case fromMeasure:
			return s.channelAt(p.index), 1
		case fromTerminal:
			return 2*(p.index/5) + p.index%5, 1
		case fromBus:
			total := 0.0
			for _, f := range m.topo.islands[m.topo.busOf[p.bus]].formers {
				total += m.sys.devices[f].former.Weight()
			}
			return s.speedAt(), s.d.former.Weight() / total / (2 * math.Pi)
		}
		return -1, 1
	}
	for _, dev := range m.sys.devices {
		list := byDevice[dev]
		if len(list) == 0 {
			continue
		}
		s, g, err := z.gradients(dev)
		if err != nil {
			return err
		}
		for _, k := range list {
			p := &outputs[k]
			at, weight := share(s, p)
			if at < 0 {
				c.add(k, z.at[dev.lo+p.index], 1)
				continue
			}
			for j, v := range g[at] {
				if math.IsNaN(v) || math.IsInf(v, 0) {
					return fmt.Errorf("engine: linearisation: channel %s has no derivative at the present state", p.info.Name)
				}
				if v != 0 {
					c.add(k, z.column(dev, j), weight*v)
				}
			}
		}
	}
	n := len(z.from)
	l.C = c.matrix(len(outputs), n)
	for k, in := range inputs {
		l.Inputs = append(l.Inputs, LinearSignal{in.d.name + "." + in.p.Name, in.p.Unit, in.p.Value})
		s, jump, err := z.input(in)
		if err != nil {
			return err
		}
		p := in.d.ports
		for i, v := range s.value[:p] {
			if v != 0 {
				for _, w := range l.laws[z.column(in.d, i)] {
					b.add(w.row, k, -w.weight*v)
				}
			}
		}
		for i, v := range s.value[p : p+in.d.own] {
			if v != 0 {
				b.add(z.at[in.d.lo+i], k, v)
			}
		}
		for _, out := range byDevice[in.d] {
			if at, weight := share(s, &outputs[out]); at >= 0 && s.value[at] != 0 {
				d.add(out, k, weight*s.value[at])
			}
		}
		for i, a := range jump {
			if a == 0 {
				continue
			}
			col := z.at[in.d.lo+i]
			for q := l.J.P[col]; q < l.J.P[col+1]; q++ {
				b.add(l.J.I[q], k, a*l.J.X[q])
			}
			for q := l.C.P[col]; q < l.C.P[col+1]; q++ {
				d.add(l.C.I[q], k, a*l.C.X[q])
			}
		}
	}
	l.B = b.matrix(n, len(inputs))
	l.D = d.matrix(len(outputs), len(inputs))
	return nil
}

// column is the unknown of l behind local unknown j of a device, ports first.
func (z *lineariser) column(d *member, j int) int {
	if j >= d.ports {
		return z.at[d.lo+j-d.ports]
	}
	return z.at[z.m.net.NodeUnknown(2*d.buses[j/2]+j%2)]
}

// setting is a setpoint of a device.
type setting struct {
	d *member
	p Setpoint
}

// input differences a device with respect to a setpoint, and returns besides
// the jump of its own unknowns by one unit of the setpoint, or nil. The
// setpoint, a ramp under way included, is as before afterwards; of a device
// that keeps no memory (encoding.BinaryAppender), its value is.
func (z *lineariser) input(in setting) (s *local, jump []float64, err error) {
	d, t := in.d, z.m.t
	s = z.local(d)
	scratch := make([]float64, d.own)
	restore := func() error {
		err := d.adjust.Set(in.p.Name, t, in.p.Value, 0)
		if d.stepped != nil {
			d.stepped.ApplyJumps(scratch)
		}
		return err
	}
	if d.memory != nil {
		saved, err := d.memory.AppendBinary(nil)
		if err != nil {
			return nil, nil, fmt.Errorf("engine: device %q: %w", d.name, err)
		}
		restore = func() error { return d.memory.UnmarshalBinary(saved) }
	}
	scale := math.Abs(in.p.Value)
	if width := in.p.Max - in.p.Min; !math.IsInf(width, 0) {
		scale = math.Max(scale, 1e-2*width)
	} else if scale == 0 {
		scale = 1
	}
	step := linearDifference * scale
	lo, hi := -1.0, 1.0
	if in.p.Value-step < in.p.Min {
		lo = 0
	} else if in.p.Value+step > in.p.Max {
		hi = 0
	}
	if lo == 0 && in.p.Value+2*step > in.p.Max || hi == 0 && in.p.Value-2*step < in.p.Min {
		return nil, nil, fmt.Errorf("engine: device %q: setpoint %s can't move between %g and %g %s", d.name, in.p.Name, in.p.Min, in.p.Max, in.p.Unit)
	}
	move := func(k float64) error {
		if err := d.adjust.Set(in.p.Name, t, in.p.Value+k*step, 0); err != nil {
			return fmt.Errorf("engine: linearisation: device %q: %w", d.name, err)
		}
		if d.stepped == nil {
			return nil
		}
		clear(scratch)
		d.stepped.ApplyJumps(scratch)
		if k != 0 && jump == nil {
			for i, v := range scratch {
				if v != 0 {
					if jump == nil {
						jump = make([]float64, d.own)
					}
					jump[i] = v / (k * step)
				}
			}
		}
		return nil
	}
	err = s.central(t, move, 2*step, lo, hi)
	return s, jump, errors.Join(err, restore())
}

func (z *lineariser) chooseInputs(patterns []string) ([]setting, error) {
	var all []setting
	for _, d := range z.m.sys.devices {
		if d.adjust == nil || d.off {
			continue
		}
		for _, p := range d.adjust.Setpoints(z.m.t) {
			all = append(all, setting{d, p})
		}
	}
	take, err := choose("setpoint", patterns, len(all), func(i int) string { return all[i].d.name + "." + all[i].p.Name })
	var list []setting
	for i, t := range take {
		if t {
			list = append(list, all[i])
		}
	}
	return list, err
}

func (z *lineariser) chooseOutputs(patterns []string) ([]probe, error) {
	var all []probe
	for _, p := range z.m.probes() {
		switch {
		case p.kind == fromBus && (p.index > busVq || z.m.topo.busOf[p.bus] < 0):
		case p.kind == fromTerminal && p.index%5 > 1:
		case p.kind != fromBus && p.d.off:
		default:
			all = append(all, p)
		}
	}
	take, err := choose("channel", patterns, len(all), func(i int) string { return all[i].info.Name })
	var list []probe
	for i := range all {
		if patterns == nil && all[i].usual() || patterns != nil && take[i] {
			list = append(list, all[i])
		}
	}
	return list, err
}

// choose marks the names that match a pattern; all of them for nil.
func choose(what string, patterns []string, n int, name func(i int) string) ([]bool, error) {
	take := make([]bool, n)
	if patterns == nil {
		for i := range take {
			take[i] = true
		}
	}
	var errs []error
	for _, p := range patterns {
		found := false
		var near []string
		owner, _, _ := strings.Cut(p, ".")
		for i := range take {
			ok, err := path.Match(p, name(i))
			if err != nil {
				errs = append(errs, fmt.Errorf("engine: %s pattern %q: %w", what, p, err))
				found = true
				break
			}
			if ok {
				take[i], found = true, true
			}
			if strings.HasPrefix(name(i), owner+".") {
				near = append(near, name(i))
			}
		}
		if !found {
			e := fmt.Sprintf("engine: no %s in service that a linear system can hold matches %q", what, p)
			if len(near) > 0 {
				e += "; there are " + list(near)
			}
			errs = append(errs, errors.New(e))
		}
	}
	return take, errors.Join(errs...)
}

// BusUnknown returns the index of a bus's v_d among the unknowns; v_q follows.
// It returns false for a dead or unknown bus.
func (l *Linear) BusUnknown(bus string) (int, bool) {
	i, ok := l.buses[bus]
	return i, ok
}

// BusNames lists the buses in service in order of their unknowns.
func (l *Linear) BusNames() []string {
	var names []string
	for i := 0; i < len(l.Unknowns); i++ {
		if l.Unknowns[i].Bus {
			names = append(names, l.Unknowns[i].Owner)
			i++
		}
	}
	return names
}

// Inject adds to the right-hand side f (len Unknowns) what a current into a
// bus from outside, A peak in the network frame, adds to the equations.
func (l *Linear) Inject(f []float64, bus string, d, q float64) error {
	i, ok := l.buses[bus]
	if !ok {
		return fmt.Errorf("engine: no bus %q in service; there are %s", bus, list(l.BusNames()))
	}
	for k, a := range [2]float64{d, q} {
		for _, w := range l.laws[i+k] {
			f[w.row] += w.weight * a
		}
	}
	return nil
}

// triplets gathers the entries of a sparse matrix; those of one place add up.
type triplets struct {
	at    []solvers.Entry
	value []float64
}

func (t *triplets) add(row, col int, v float64) {
	t.at = append(t.at, solvers.Entry{Row: row, Col: col})
	t.value = append(t.value, v)
}

func (t *triplets) matrix(rows, cols int) *solvers.CSC {
	a, slot := solvers.NewCSC(rows, cols, t.at)
	for k, s := range slot {
		a.X[s] += t.value[k]
	}
	return a
}
