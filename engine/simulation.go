package engine

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strings"

	"islet/solvers"
)

// Options steer a simulation. nil, or the zero value, gives the stated
// defaults.
type Options struct {
	// Method is the integrator; nil means solvers.Rodas5P.
	Method solvers.Method
	// Tolerance is the accuracy asked of waveforms, relative to their range or
	// to the equipment's rating if they hardly move; 0 means 1e-6. The error
	// the integrator may make in a step is a tenth of it: errors of many
	// steps add up, and a device's norm is a mean over its unknowns. Measured
	// on the shipped cases, waveforms are then good to ten times Tolerance.
	Tolerance float64
	// Solver holds step limits and, for those who want to set them
	// themselves, the integrator's tolerances: RelTol 0 means a tenth of
	// Tolerance.
	Solver solvers.Options
	// Record lists the channels to record, by name or with * for any run of
	// characters ("battery-1.*"); nil means the voltage and frequency of
	// every bus and all derived quantities of every device.
	Record []string
	// Sample is the spacing of the trace, s; 0 records the solver's own
	// steps. Both sides of every event are recorded in either case.
	Sample float64
	// FromRest starts with all unknowns at zero instead of the operating
	// point: a black network whose sources close in at t = 0. Angles and
	// control states start from the devices' guesses.
	FromRest bool
	// NoLedger leaves out the energy ledger, which costs some time a step.
	NoLedger bool
	// FixedFrame keeps every frame at the speed it has at the start, or at
	// its making, instead of following the island.
	FixedFrame bool
	// GeneralLU solves with one general sparse LU of the whole matrix
	// instead of static condensation; slower, a second opinion.
	GeneralLU bool
	// Hooks watch the run.
	Hooks Hooks
}

// Hooks watch a run without steering it; nil functions are left out.
type Hooks struct {
	// Progress is called after every step with the time reached and the end
	// of the present Run.
	Progress func(t, until float64)
	// Note is called with every entry of the run's story as it happens.
	Note func(Note)
	// Step is called after every accepted step with its end and size.
	Step func(t, h float64)
}

// Note is an entry in the story of a run.
type Note struct {
	Time   float64 // s
	Device string  // the device or bus concerned, or ""
	Text   string  // what happened, for people
	Event  bool    // an event of the study, in contrast to a consequence
}

// Simulation is a system in time. It is not safe for concurrent use;
// independent Simulations are.
type Simulation struct {
	sys    *System
	opt    Options
	net    *solvers.Network
	step   solvers.Stepper
	driver *solvers.Driver
	topo   *topology
	y      []float64 // workspace: the state during changes
	ports  []float64 // workspace: values at a device's ports
	t      float64

	queue      []scheduled // by time, then order of entry
	sequence   int
	conditions []*watch
	kinked     []kink // in the order of their root functions
	chatter    solvers.Chatter
	stopped    error // a failure that ended the run

	rec    *recorder
	ledger *ledger
	notes  []Note
	costs  []Cost
	costAt solvers.Stats // at the end of the last of costs, at costTo
	costTo float64
	point  OperatingPoint
	lean   leanFrame
}

// Cost is the work of one stretch of a run, from one event to the next.
type Cost struct {
	From, To float64
	Stats    solvers.Stats
}

// Start checks the system, finds its operating point and makes it ready to
// run. The system can't be changed afterwards, and serves this simulation
// alone. o may be nil. The error joins all faults found in the network, or is
// an *OperatingPointError.
func Start(s *System, o *Options) (*Simulation, error) {
	if o == nil {
		o = &Options{}
	}
	errs := append([]error(nil), s.faults...)
	if len(s.devices) == 0 {
		errs = append(errs, errors.New("engine: the system has no device"))
	}
	if s.started {
		errs = append(errs, errors.New("engine: the system has been started already; build another for a second simulation"))
	}
	if !(o.Tolerance >= 0 && o.Tolerance < 1) {
		errs = append(errs, fmt.Errorf("engine: option Tolerance is %g, want 0 (default) or a value below 1", o.Tolerance))
	}
	if !(o.Sample >= 0) || math.IsInf(o.Sample, 0) {
		errs = append(errs, fmt.Errorf("engine: option Sample is %g s, want 0 (own steps) or a positive spacing", o.Sample))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	net, err := s.network()
	if err != nil {
		return nil, err
	}
	m := &Simulation{sys: s, opt: *o, net: net}
	if m.opt.Method == nil {
		m.opt.Method = solvers.Rodas5P
	}
	if m.opt.Solver.RelTol == 0 {
		if m.opt.Tolerance == 0 {
			m.opt.Tolerance = 1e-6
		}
		m.opt.Solver.RelTol = m.opt.Tolerance / 10
	}
	m.y = make([]float64, net.Dim())
	widest := 0
	for _, d := range s.devices {
		widest = max(widest, d.ports)
	}
	m.ports = make([]float64, widest)
	if m.rec, err = newRecorder(m, o.Record); err != nil {
		return nil, err
	}
	for _, d := range s.devices {
		d.island = -1
	}
	if err := m.connect(); err != nil {
		return nil, err
	}
	if o.FromRest {
		err = m.rest()
	} else {
		err = m.findOperatingPoint()
	}
	if err != nil {
		return nil, err
	}
	net.Reanalyse()
	if m.step, err = m.opt.Method.NewStepper(net, m.opt.Solver); err != nil {
		return nil, err
	}
	if err := m.step.Reset(m.t, m.y); err != nil {
		return nil, m.named(err)
	}
	s.started = true
	copy(m.y, m.step.State())
	m.rearm()
	m.reviewKinks(false)
	m.ledger = newLedger(m)
	m.rec.row(m.t, m.step.State(), false)
	return m, nil
}

// Time is the present time, s.
func (m *Simulation) Time() float64 { return m.t }

// System returns the system simulated.
func (m *Simulation) System() *System { return m.sys }

// Unknowns is the number of unknowns of the system of equations, dead parts
// included.
func (m *Simulation) Unknowns() int { return m.net.Dim() }

// Stats counts the work since Start.
func (m *Simulation) Stats() solvers.Stats { return m.step.Stats() }

// Costs returns the work between events so far, since Start or Restore.
func (m *Simulation) Costs() []Cost {
	c := append([]Cost(nil), m.costs...)
	if m.t > m.costTo {
		c = append(c, Cost{m.costTo, m.t, m.step.Stats().Sub(m.costAt)})
	}
	return c
}

// Notes returns the story so far.
func (m *Simulation) Notes() []Note { return append([]Note(nil), m.notes...) }

// Trace returns what has been recorded so far.
func (m *Simulation) Trace() *Trace { return m.rec.trace }

func (m *Simulation) note(device string, event bool, format string, a ...any) {
	n := Note{Time: m.t, Device: device, Text: fmt.Sprintf(format, a...), Event: event}
	m.notes = append(m.notes, n)
	if m.opt.Hooks.Note != nil {
		m.opt.Hooks.Note(n)
	}
}

// connect searches the topology, carries the frames over and configures the
// network. m.y is adjusted: what is off is zeroed.
func (m *Simulation) connect() error {
	old := m.topo
	next, err := m.sys.search()
	if err != nil {
		return err
	}
	m.settle(old, next)
	for i, d := range m.sys.devices {
		wasOff := d.off
		d.off = next.off[i]
		d.island = -1
		if !d.off {
			d.island = next.busOf[d.buses[0]]
			if d.framed != nil {
				d.framed.SetFrame(next.islands[d.island].frame.speed)
			}
			if wasOff && d.starter != nil {
				// Back in service: from its guess at the rated voltage.
				v := make([]float64, d.ports)
				for k, b := range d.buses {
					v[2*k] = peakPhase(m.sys.buses[b].rated)
				}
				d.starter.Guess(m.y[d.lo:d.lo+d.own], m.t, v)
				for k, u := range d.desc.Unknowns {
					if u.Frame == PairD || u.Frame == PairQ {
						m.y[d.lo+k] = 0
					}
				}
			}
			continue
		}
		for k := range d.own {
			m.y[d.lo+k] = 0
		}
		if !d.tripped && old != nil && d.isInverter() {
			d.tripped = true
			m.note(d.name, false, "%s %s lost its network and tripped", d.desc.Kind, d.name)
		}
	}
	dead := make([]bool, len(m.sys.buses))
	for b, k := range next.busOf {
		if k < 0 {
			dead[b] = true
			m.y[m.net.NodeUnknown(2*b)], m.y[m.net.NodeUnknown(2*b+1)] = 0, 0
		}
	}
	off := append([]bool(nil), next.off...)
	if err := m.net.Configure(solvers.Configuration{Off: off, Dead: dead, Hidden: next.hidden, General: m.opt.GeneralLU}); err != nil {
		return m.named(err)
	}
	for k := range next.islands {
		next.islands[k].quasi = m.hasQuasiSteady(&next.islands[k])
	}
	m.reportTopology(old, next)
	m.topo = next
	return nil
}

// isInverter reports whether the device is a rated source, which doesn't come
// back by itself after its network has gone: one terminal, a current limit, and
// power generated.
func (d *member) isInverter() bool {
	if d.sized == nil || len(d.buses) != 1 {
		return false
	}
	for _, c := range d.channels {
		if c.Name == "p" {
			return strings.HasPrefix(c.Unit, "W generated")
		}
	}
	return false
}

// hasQuasiSteady reports whether a change of the frame's speed changes an
// algebraic equation: some unknown or bus has no derivative of its own.
func (m *Simulation) hasQuasiSteady(is *island) bool {
	for _, i := range is.devices {
		d := m.sys.devices[i]
		for k := range d.own {
			if m.net.AlgebraicRow(d.lo + k) {
				return true
			}
		}
		if d.framed != nil && d.own == 0 {
			return true
		}
	}
	return false
}

func (m *Simulation) reportTopology(old, next *topology) {
	if old == nil {
		for b, k := range next.busOf {
			if k < 0 {
				m.note(m.sys.buses[b].name, false, "bus %s is dead: no source that can hold a voltage is connected", m.sys.buses[b].name)
			}
		}
		return
	}
	var died, back []string
	for b := range next.busOf {
		switch was, is := old.busOf[b] >= 0, next.busOf[b] >= 0; {
		case was && !is:
			died = append(died, m.sys.buses[b].name)
		case !was && is:
			back = append(back, m.sys.buses[b].name)
		}
	}
	if len(died) > 0 {
		m.note("", false, "no source left for %s: de-energised", list(died))
	}
	if len(back) > 0 {
		m.note("", false, "%s energised", list(back))
	}
	if len(old.islands) != len(next.islands) {
		s := "s"
		if len(next.islands) == 1 {
			s = ""
		}
		m.note("", false, "the network now forms %d energised island%s", len(next.islands), s)
	}
}

func list(names []string) string {
	const most = 6
	s := ""
	for i, n := range names {
		if i == most {
			return fmt.Sprintf("%s and %d more", s, len(names)-most)
		}
		if i > 0 {
			s += ", "
		}
		s += n
	}
	return s
}

// rest sets the start of a black network.
func (m *Simulation) rest() error {
	for i := range m.y {
		m.y[i] = 0
	}
	m.flatVoltages()
	v := make([]float64, 0, 8)
	for _, d := range m.sys.devices {
		if d.off || d.starter == nil {
			continue
		}
		v = v[:0]
		for range d.ports {
			v = append(v, 0)
		}
		m.net.Ports(d.block, v, m.y)
		own := m.y[d.lo : d.lo+d.own]
		d.starter.Guess(own, m.t, v)
		for k, u := range d.desc.Unknowns {
			if u.Frame == PairD || u.Frame == PairQ {
				own[k] = 0
			}
		}
	}
	for b := range m.sys.buses {
		m.y[m.net.NodeUnknown(2*b)], m.y[m.net.NodeUnknown(2*b+1)] = 0, 0
	}
	return nil
}

// rearm makes a fresh driver for the present conditions.
func (m *Simulation) rearm() {
	m.driver = solvers.NewDriver(m.step, m.roots())
}

// Step takes one step of the integrator, ended by the next event at the
// latest, and handles the events due at its end. An error ends the run; all
// that was computed stays available.
func (m *Simulation) Step() error { return m.advance(math.Inf(1)) }

func (m *Simulation) advance(until float64) error {
	if m.stopped != nil {
		return m.stopped
	}
	if m.due() {
		return m.handle(nil)
	}
	tmax := until
	if len(m.queue) > 0 && m.queue[0].at < tmax {
		tmax = m.queue[0].at
	}
	tmax = math.Min(tmax, m.t+m.syncStride())
	if math.IsInf(tmax, 1) {
		// Stepping by hand without any event ahead: the size of the run is
		// unknown; a second is long against anything at first.
		tmax = m.t + 1
	}
	hits, err := m.driver.Advance(tmax)
	if err != nil {
		m.stopped = m.named(err)
		return m.stopped
	}
	m.t = m.step.Time()
	m.rec.step()
	m.ledger.step()
	if m.opt.Hooks.Step != nil {
		m.opt.Hooks.Step(m.t, m.t-m.step.Previous())
	}
	if hits = m.passKinks(hits); len(hits) > 0 || m.due() {
		return m.handle(hits)
	}
	return m.followFrames()
}

// Run runs until the given time and returns everything recorded since Start.
// On an error (ctx's, a failed step, a failed event) the trace holds what was
// computed before it.
func (m *Simulation) Run(ctx context.Context, until float64) (*Trace, error) {
	for m.t < until || m.due() {
		if err := ctx.Err(); err != nil {
			m.rec.last()
			return m.rec.trace, fmt.Errorf("engine: stopped at t = %.6g s: %w", m.t, err)
		}
		if err := m.advance(until); err != nil {
			m.rec.last()
			return m.rec.trace, err
		}
		if m.opt.Hooks.Progress != nil {
			m.opt.Hooks.Progress(m.t, until)
		}
	}
	m.rec.last()
	return m.rec.trace, nil
}

// restart makes the state in m.y the start of a new stretch.
func (m *Simulation) restart() error {
	if err := m.step.Reset(m.t, m.y); err != nil {
		return m.named(err)
	}
	copy(m.y, m.step.State())
	m.rearm()
	m.reviewKinks(true)
	return nil
}

// leanFrame remembers what followFrames saw last.
type leanFrame struct {
	mean []float64 // of every island, after the last step
}

// portValues returns the values at a device's ports in state y: a part of y, or
// copied into v.
func (m *Simulation) portValues(d *member, v, y []float64) []float64 {
	if d.port >= 0 {
		return y[d.port : d.port+d.ports : d.port+d.ports]
	}
	m.net.Ports(d.block, v[:d.ports], y)
	return v[:d.ports]
}

// islandSpeed is the mean speed of the sources that hold an island, weighted
// by rating, rad/s.
func (m *Simulation) islandSpeed(is *island, t float64, y []float64) float64 {
	sum, weight := 0.0, 0.0
	for _, i := range is.formers {
		d := m.sys.devices[i]
		w := d.former.Weight()
		sum += w * d.former.Speed(t, m.portValues(d, m.ports, y), y[d.lo:d.lo+d.own])
		weight += w
	}
	return sum / weight
}

// frameStride is the number of steps from one look at the speeds of the sources
// to the next: a look costs as much as a third of an evaluation.
const frameStride = 4

// followFrames turns an island's frame to the speed its sources have settled
// at. The angle of the frame is continuous, so no unknown changes; only what
// the equations call the frame's speed does.
func (m *Simulation) followFrames() error {
	if m.opt.FixedFrame || m.step.Stats().Steps%frameStride != 0 {
		return nil
	}
	const (
		worth   = 2e-5 // of nominal: 1 mHz at 50 Hz
		settled = 0.02 // drift since the last look, relative to what is gained
	)
	n := len(m.topo.islands)
	if len(m.lean.mean) != n {
		m.lean.mean = make([]float64, n)
		for k := range m.lean.mean {
			m.lean.mean[k] = math.NaN()
		}
	}
	y := m.step.State()
	reset := false
	for k := range m.topo.islands {
		is := &m.topo.islands[k]
		w := m.islandSpeed(is, m.t, y)
		gain := math.Abs(w - is.frame.speed)
		drift := math.Abs(w - m.lean.mean[k])
		m.lean.mean[k] = w
		if !(gain > worth*m.sys.nominal && drift < settled*gain) {
			continue
		}
		is.frame = frame{speed: w, angle: wrap(is.frame.at(m.t)), since: m.t}
		for _, i := range is.devices {
			if f := m.sys.devices[i].framed; f != nil {
				f.SetFrame(w)
			}
		}
		reset = reset || is.quasi
	}
	if reset {
		copy(m.y, y)
		return m.restart()
	}
	return nil
}

// FrameSpeed is the speed of the network frame at a bus, rad/s; 0 for a dead
// or unknown bus. Quasi-steady elements take their reactance at this speed.
func (m *Simulation) FrameSpeed(bus string) float64 {
	b, ok := m.sys.busAt[bus]
	if !ok || m.topo.busOf[b] < 0 {
		return 0
	}
	return m.topo.islands[m.topo.busOf[b]].frame.speed
}

// State returns a device's own unknowns by name at the present time. It
// returns nil for an unknown device.
func (m *Simulation) State(device string) map[string]float64 {
	i, ok := m.sys.devAt[device]
	if !ok {
		return nil
	}
	d := m.sys.devices[i]
	out := make(map[string]float64, d.own)
	for k, u := range d.desc.Unknowns {
		out[u.Name] = m.step.State()[d.lo+k]
	}
	return out
}
