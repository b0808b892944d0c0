package engine

import (
	"errors"
	"fmt"
	"math"
	"path"
	"sort"
	"strings"
)

// TraceChannel describes a column of a trace.
type TraceChannel struct {
	Name  string // "quay.v", "battery-1.p"
	Unit  string // with the sign where there is one
	Doc   string
	Owner string // the device or bus
	Bus   bool   // the owner is a bus
}

// Trace is what a run has recorded: a row for every sample and for both sides
// of every event, a column for every channel. Times never decrease; where two
// rows have one time, the first is the state before an event (or several at
// that time) and the second the state after it.
type Trace struct {
	Channels []TraceChannel
	Time     []float64 // s
	Before   []bool    // the row is the left side of an event
	data     [][]float64
	index    map[string]int
}

// Rows is the number of rows.
func (tr *Trace) Rows() int { return len(tr.Time) }

// Index returns the number of the channel of that name, or -1.
func (tr *Trace) Index(name string) int {
	if i, ok := tr.index[name]; ok {
		return i
	}
	return -1
}

// Column returns the values of a channel, a row each, or nil if there is no
// such channel. The slice belongs to the trace.
func (tr *Trace) Column(name string) []float64 {
	i := tr.Index(name)
	if i < 0 {
		return nil
	}
	return tr.data[i]
}

// Values returns the values of channel i, a row each. The slice belongs to
// the trace.
func (tr *Trace) Values(i int) []float64 { return tr.data[i] }

// At interpolates a channel linearly at time t; at an event it gives the
// value after it. It returns NaN for an unknown channel or a time outside.
func (tr *Trace) At(name string, t float64) float64 {
	col := tr.Column(name)
	if len(col) == 0 || t < tr.Time[0] || t > tr.Time[len(tr.Time)-1] {
		return math.NaN()
	}
	k := sort.Search(len(tr.Time), func(i int) bool { return tr.Time[i] > t })
	if k == len(tr.Time) || tr.Time[k-1] == t {
		return col[k-1]
	}
	w := (t - tr.Time[k-1]) / (tr.Time[k] - tr.Time[k-1])
	return (1-w)*col[k-1] + w*col[k]
}

// source tells how a channel gets its value.
type source uint8

const (
	fromMeasure source = iota
	fromUnknown
	fromTerminal // component of a terminal flow
	fromBus
)

// probe is a way to a channel's value.
type probe struct {
	m     *Simulation
	info  TraceChannel
	kind  source
	d     *member
	bus   int
	index int // measured quantity, unknown, 5*terminal + {d, q, a, b, c}, or bus quantity
	buf   []float64
}

// Quantities of a bus.
const (
	busV = iota
	busFrequency
	busAngle
	busVd
	busVq
	busVa
	busVb
	busVc
	nBusQuantities
)

var busQuantities = [nBusQuantities]Channel{
	{Name: "v", Unit: "V line-line rms", Doc: "magnitude of the voltage"},
	{Name: "frequency", Unit: "Hz", Doc: "speed of the sources that hold the island, mean weighted by rating"},
	{Name: "angle", Unit: "deg", Doc: "angle of the voltage in the island's network frame"},
	{Name: "v_d", Unit: "V peak phase", Doc: "d part in the island's network frame"},
	{Name: "v_q", Unit: "V peak phase", Doc: "q part in the island's network frame"},
	{Name: "v_a", Unit: "V", Doc: "instantaneous voltage of phase a to neutral"},
	{Name: "v_b", Unit: "V", Doc: "instantaneous voltage of phase b to neutral"},
	{Name: "v_c", Unit: "V", Doc: "instantaneous voltage of phase c to neutral"},
}

var terminalQuantities = [5]Channel{
	{Name: "i_d", Unit: "A peak into the device"},
	{Name: "i_q", Unit: "A peak into the device"},
	{Name: "i_a", Unit: "A into the device"},
	{Name: "i_b", Unit: "A into the device"},
	{Name: "i_c", Unit: "A into the device"},
}

// probes lists every channel there is, in a fixed order.
func (m *Simulation) probes() []probe {
	var all []probe
	for b := range m.sys.buses {
		for q, c := range busQuantities {
			all = append(all, probe{m: m, kind: fromBus, bus: b, index: q, info: TraceChannel{
				Name: m.sys.buses[b].name + "." + c.Name, Unit: c.Unit, Doc: c.Doc, Owner: m.sys.buses[b].name, Bus: true}})
		}
	}
	for _, d := range m.sys.devices {
		for i, c := range d.channels {
			all = append(all, probe{m: m, kind: fromMeasure, d: d, index: i, info: TraceChannel{
				Name: d.name + "." + c.Name, Unit: c.Unit, Doc: c.Doc, Owner: d.name}})
		}
		for i, u := range d.desc.Unknowns {
			all = append(all, probe{m: m, kind: fromUnknown, d: d, index: i, info: TraceChannel{
				Name: d.name + "." + u.Name, Unit: u.Unit, Doc: "unknown of the model, " + u.Dynamics, Owner: d.name}})
		}
		for k, term := range d.desc.Terminals {
			for q, c := range terminalQuantities {
				all = append(all, probe{m: m, kind: fromTerminal, d: d, index: 5*k + q, info: TraceChannel{
					Name: d.name + "." + term.Name + "." + c.Name, Unit: c.Unit, Doc: "current at terminal " + term.Name, Owner: d.name}})
			}
		}
	}
	return all
}

// ChannelNames lists every channel that can be recorded or watched.
func (m *Simulation) ChannelNames() []string {
	var names []string
	for _, p := range m.probes() {
		names = append(names, p.info.Name)
	}
	return names
}

// Value returns a channel's present value. The error names close matches.
func (m *Simulation) Value(channel string) (float64, error) {
	p, err := m.rec.probe(channel)
	if err != nil {
		return 0, err
	}
	return p.value(m.t, m.step.State()), nil
}

// usual reports whether the channel is recorded by default.
func (p *probe) usual() bool {
	switch p.kind {
	case fromMeasure:
		return true
	case fromBus:
		return p.index == busV || p.index == busFrequency
	}
	return false
}

// value evaluates the channel in state y at time t; a device or bus that takes
// no part gives 0.
func (p *probe) value(t float64, y []float64) float64 {
	if p.kind == fromBus {
		return p.m.busQuantity(p.bus, p.index, t, y)
	}
	d := p.d
	if d.off {
		return 0
	}
	own := y[d.lo : d.lo+d.own]
	switch p.kind {
	case fromUnknown:
		return own[p.index]
	case fromMeasure:
		if p.buf == nil {
			p.buf = make([]float64, len(d.channels)+d.ports)
		}
		v := p.buf[len(d.channels):]
		p.m.net.Ports(d.block, v, y)
		d.measure.Measure(p.buf[:len(d.channels)], t, v, own)
		return p.buf[p.index]
	}
	if p.buf == nil {
		p.buf = make([]float64, 2*d.ports+d.own)
	}
	v, flow, rate := p.buf[:d.ports], p.buf[d.ports:2*d.ports], p.buf[2*d.ports:]
	p.m.net.Ports(d.block, v, y)
	if err := d.dev.Eval(flow, rate, t, v, own); err != nil {
		return 0
	}
	k, q := p.index/5, p.index%5
	id, iq := flow[2*k], flow[2*k+1]
	switch q {
	case 0:
		return id
	case 1:
		return iq
	}
	return phase(id, iq, p.m.topo.islands[d.island].frame.at(t), q-2)
}

// phase is the instantaneous value of phase k (0, 1, 2 for a, b, c) of a pair
// in a frame at angle theta: the inverse of the amplitude-invariant Park
// transform without zero sequence.
func phase(d, q, theta float64, k int) float64 {
	s, c := math.Sincos(theta - 2*math.Pi/3*float64(k))
	return d*c - q*s
}

func (m *Simulation) busQuantity(b, quantity int, t float64, y []float64) float64 {
	k := m.topo.busOf[b]
	if k < 0 {
		return 0
	}
	i := m.net.NodeUnknown(2 * b)
	d, q := y[i], y[i+1]
	switch quantity {
	case busV:
		return lineLine(math.Hypot(d, q))
	case busFrequency:
		return m.islandSpeed(&m.topo.islands[k], t, y) / (2 * math.Pi)
	case busAngle:
		return math.Atan2(q, d) * 180 / math.Pi
	case busVd:
		return d
	case busVq:
		return q
	}
	return phase(d, q, m.topo.islands[k].frame.at(t), quantity-busVa)
}

// recorder fills a trace.
type recorder struct {
	byName map[string]probe // every channel, made when one is first asked for
	m      *Simulation
	trace  *Trace
	rows   []probe   // what is recorded, in order of columns
	groups []group   // devices measured, a group each
	y      []float64 // interpolated state
	sample int       // number of the next uniform sample
	fixed  []int     // columns of probes that are not measured in groups
	speed  []float64 // frequency of every island, Hz, NaN if not yet known in this row
}

// group is a device whose measured quantities are recorded.
type group struct {
	d      *member
	buf    []float64 // channels, then ports
	column []int     // channel -> column, -1 if not recorded
}

func newRecorder(m *Simulation, patterns []string) (*recorder, error) {
	r := &recorder{m: m, y: make([]float64, m.net.Dim())}
	all := m.probes()
	tr := &Trace{index: make(map[string]int)}
	var errs []error
	take := make([]bool, len(all))
	if patterns == nil {
		for i := range all {
			take[i] = all[i].usual()
		}
	}
	for _, p := range patterns {
		found := false
		for i := range all {
			ok, err := path.Match(p, all[i].info.Name)
			if err != nil {
				errs = append(errs, fmt.Errorf("engine: channel pattern %q: %w", p, err))
				break
			}
			if ok {
				take[i], found = true, true
			}
		}
		if !found {
			errs = append(errs, fmt.Errorf("engine: no channel matches %q%s", p, near(p, all)))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	at := make(map[*member]int)
	for i := range all {
		if !take[i] {
			continue
		}
		p := all[i]
		col := len(r.rows)
		r.rows = append(r.rows, p)
		tr.Channels = append(tr.Channels, p.info)
		tr.index[p.info.Name] = col
		if p.kind != fromMeasure {
			r.fixed = append(r.fixed, col)
			continue
		}
		g, ok := at[p.d]
		if !ok {
			g = len(r.groups)
			at[p.d] = g
			c := make([]int, len(p.d.channels))
			for k := range c {
				c[k] = -1
			}
			r.groups = append(r.groups, group{p.d, make([]float64, len(p.d.channels)+p.d.ports), c})
		}
		r.groups[g].column[p.index] = col
	}
	tr.data = make([][]float64, len(r.rows))
	r.trace = tr
	return r, nil
}

// probe finds a channel by name.
func (r *recorder) probe(name string) (probe, error) {
	if r.byName == nil {
		all := r.m.probes()
		r.byName = make(map[string]probe, len(all))
		for _, p := range all {
			r.byName[p.info.Name] = p
		}
	}
	if p, ok := r.byName[name]; ok {
		return p, nil
	}
	return probe{}, fmt.Errorf("engine: no channel %q%s", name, near(name, r.m.probes()))
}

// near suggests channels with the same owner, or owners.
func near(name string, all []probe) string {
	owner := name
	if i := strings.IndexByte(name, '.'); i >= 0 {
		owner = name[:i]
	}
	var same, owners []string
	for _, p := range all {
		if p.info.Owner == owner {
			same = append(same, strings.TrimPrefix(p.info.Name, owner+"."))
		}
		if len(owners) == 0 || owners[len(owners)-1] != p.info.Owner {
			owners = append(owners, p.info.Owner)
		}
	}
	if len(same) > 0 {
		return fmt.Sprintf("; %s has %s", owner, list(same))
	}
	return "; buses and devices are " + list(owners)
}

// row records the state y at time t.
func (r *recorder) row(t float64, y []float64, before bool) {
	tr := r.trace
	if n := len(tr.Time); n > 0 && tr.Time[n-1] == t && !tr.Before[n-1] && before {
		// The state is there already as the end of the last step.
		tr.Before[n-1] = true
		return
	}
	tr.Time = append(tr.Time, t)
	tr.Before = append(tr.Before, before)
	for i := range tr.data {
		tr.data[i] = append(tr.data[i], 0)
	}
	n := len(tr.Time) - 1
	for k := range r.speed {
		r.speed[k] = math.NaN()
	}
	for _, c := range r.fixed {
		p := &r.rows[c]
		if p.kind == fromBus && p.index == busFrequency {
			tr.data[c][n] = r.frequency(p.bus, t, y)
			continue
		}
		tr.data[c][n] = p.value(t, y)
	}
	for i := range r.groups {
		g := &r.groups[i]
		if g.d.off {
			continue
		}
		v := g.buf[len(g.column):]
		vals := g.buf[:len(g.column)]
		r.m.net.Ports(g.d.block, v, y)
		g.d.measure.Measure(vals, t, v, y[g.d.lo:g.d.lo+g.d.own])
		for k, c := range g.column {
			if c >= 0 {
				tr.data[c][n] = vals[k]
			}
		}
	}
}

// frequency is the frequency of a bus's island, computed once a row.
func (r *recorder) frequency(b int, t float64, y []float64) float64 {
	k := r.m.topo.busOf[b]
	if k < 0 {
		return 0
	}
	for len(r.speed) <= k {
		r.speed = append(r.speed, math.NaN())
	}
	if r.speed[k] != r.speed[k] {
		r.speed[k] = r.m.islandSpeed(&r.m.topo.islands[k], t, y) / (2 * math.Pi)
	}
	return r.speed[k]
}

// step records what falls into the last step.
func (r *recorder) step() {
	st := r.m.step
	if len(r.rows) == 0 {
		return
	}
	if r.m.opt.Sample == 0 {
		r.row(st.Time(), st.State(), false)
		return
	}
	for {
		if r.sample == 0 {
			r.sample = int(math.Floor(st.Previous()/r.m.opt.Sample*(1+1e-15))) + 1
		}
		t := float64(r.sample) * r.m.opt.Sample
		if t > st.Time() {
			return
		}
		if t > st.Previous() {
			if t == st.Time() {
				r.row(t, st.State(), false)
			} else {
				st.Interpolate(r.y, nil, t)
				r.row(t, r.y, false)
			}
		}
		r.sample++
	}
}

// last records the present state if it isn't there yet.
func (r *recorder) last() {
	if n := len(r.trace.Time); n == 0 || r.trace.Time[n-1] != r.m.t {
		r.row(r.m.t, r.m.step.State(), false)
	}
}

// restart makes the recorder go on at time t: what lies after it is dropped.
func (r *recorder) restart(t float64) {
	tr := r.trace
	n := sort.Search(len(tr.Time), func(i int) bool { return tr.Time[i] > t })
	tr.Time, tr.Before = tr.Time[:n], tr.Before[:n]
	for i := range tr.data {
		tr.data[i] = tr.data[i][:n]
	}
	r.sample = 0
	if n == 0 || tr.Time[n-1] != t {
		r.row(t, r.m.step.State(), false)
	}
}
