package engine

import (
	"bytes"
	"encoding"
	"encoding/gob"
	"errors"
	"fmt"
)

// Snapshot is the state of a simulation between two steps: unknowns, frames,
// switch positions, what devices remember, events and conditions to come, the
// integrator and the energy ledger. It doesn't hold the trace recorded before.
// Its binary form can be kept in a file; it fits any simulation of a system
// built in the same way with the same options.
type Snapshot struct{ c content }

type content struct {
	Version     int
	Fingerprint string
	Time        float64
	State       []float64
	Stepper     []byte
	Frames      []savedFrame
	Devices     []savedDevice
	Queue       []savedEvent
	Sequence    int
	Conditions  []savedWatch
	Ledger      [6]float64
	Chatter     []byte
}

type savedFrame struct{ Speed, Angle, Since float64 }

type savedDevice struct {
	Name            string
	Tripped, Closed bool
	Memory          []byte
}

type savedEvent struct {
	At    float64
	Order int
	E     Event
	Watch int
}

type savedWatch struct {
	ID    int
	Cond  Condition
	Then  Event
	Sync  bool
	Since float64
	Fired bool
}

const snapshotVersion = 1

// Time is the time at which the snapshot was taken, s.
func (s *Snapshot) Time() float64 { return s.c.Time }

// MarshalBinary encodes the snapshot.
func (s *Snapshot) MarshalBinary() ([]byte, error) {
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(s.c); err != nil {
		return nil, fmt.Errorf("engine: snapshot: %w", err)
	}
	return b.Bytes(), nil
}

// UnmarshalBinary decodes a snapshot.
func (s *Snapshot) UnmarshalBinary(data []byte) error {
	var c content
	if err := gob.NewDecoder(bytes.NewReader(data)).Decode(&c); err != nil {
		return fmt.Errorf("engine: snapshot can't be read: %w", err)
	}
	if c.Version != snapshotVersion {
		return fmt.Errorf("engine: snapshot has version %d, this program reads %d", c.Version, snapshotVersion)
	}
	s.c = c
	return nil
}

var (
	_ encoding.BinaryMarshaler   = (*Snapshot)(nil)
	_ encoding.BinaryUnmarshaler = (*Snapshot)(nil)
)

// fingerprint tells systems apart: names, kinds, sizes and connections.
func (m *Simulation) fingerprint() string {
	s := fmt.Sprintf("%.17g Hz, %s;", m.sys.Frequency(), m.opt.Method.Name())
	for _, b := range m.sys.buses {
		s += fmt.Sprintf(" %s %.17g;", b.name, b.rated)
	}
	for _, d := range m.sys.devices {
		s += fmt.Sprintf(" %s %s %d %v;", d.name, d.desc.Kind, d.own, d.buses)
	}
	return s
}

// Snapshot takes a snapshot. The simulation itself goes on from what a
// restored one would go on from, so both continue with the same bits.
func (m *Simulation) Snapshot() (*Snapshot, error) {
	if m.stopped != nil {
		return nil, fmt.Errorf("engine: no snapshot of a run that has failed: %w", m.stopped)
	}
	c := content{
		Version:     snapshotVersion,
		Fingerprint: m.fingerprint(),
		Time:        m.t,
		State:       append([]float64(nil), m.step.State()...),
		Sequence:    m.sequence,
	}
	var err error
	if c.Stepper, err = m.step.AppendBinary(nil); err != nil {
		return nil, err
	}
	for _, is := range m.topo.islands {
		c.Frames = append(c.Frames, savedFrame{is.frame.speed, is.frame.angle, is.frame.since})
	}
	for _, d := range m.sys.devices {
		s := savedDevice{Name: d.name, Tripped: d.tripped}
		if d.swtch != nil {
			s.Closed = d.swtch.Closed()
		}
		if d.memory != nil {
			if s.Memory, err = d.memory.AppendBinary(nil); err != nil {
				return nil, fmt.Errorf("engine: snapshot: device %q: %w", d.name, err)
			}
		}
		c.Devices = append(c.Devices, s)
	}
	for _, q := range m.queue {
		c.Queue = append(c.Queue, savedEvent{q.at, q.order, q.e, q.e.watch})
	}
	for _, w := range m.conditions {
		c.Conditions = append(c.Conditions, savedWatch{w.id, w.cond, w.then, w.sync, w.since, w.fired})
	}
	l := m.ledger
	c.Ledger = [6]float64{l.start, l.supplied, l.dissipated, l.elsewhere, l.destroyed, l.throughput}
	if c.Chatter, err = m.chatter.AppendBinary(nil); err != nil {
		return nil, err
	}
	s := &Snapshot{c}
	return s, m.Restore(s)
}

// Restore takes the simulation to the snapshot's state. The trace goes on
// from its present end if that lies before the snapshot's time, and starts
// anew otherwise. The error says what doesn't fit; the simulation is then
// unchanged or, if a device refuses its memory, stopped.
func (m *Simulation) Restore(s *Snapshot) error {
	c := &s.c
	if f := m.fingerprint(); f != c.Fingerprint {
		return errors.New("engine: the snapshot belongs to another system, or to another method")
	}
	if len(c.State) != m.net.Dim() || len(c.Devices) != len(m.sys.devices) {
		return fmt.Errorf("engine: the snapshot holds %d unknowns and %d devices, the system has %d and %d", len(c.State), len(c.Devices), m.net.Dim(), len(m.sys.devices))
	}
	fail := func(err error) error {
		m.stopped = err
		return err
	}
	m.stopped = nil
	for i, d := range m.sys.devices {
		sd := c.Devices[i]
		d.tripped = sd.Tripped
		if d.swtch != nil {
			d.swtch.SetClosed(sd.Closed)
		}
		if d.memory != nil {
			if err := d.memory.UnmarshalBinary(sd.Memory); err != nil {
				return fail(fmt.Errorf("engine: snapshot: device %q: %w", d.name, err))
			}
		}
		d.island, d.off = -1, false
	}
	m.t = c.Time
	notes, hook := m.notes, m.opt.Hooks.Note
	m.opt.Hooks.Note = nil // what connect would tell is no news
	m.topo = nil
	err := m.connect()
	m.notes, m.opt.Hooks.Note = notes, hook
	if err != nil {
		return fail(err)
	}
	if len(c.Frames) != len(m.topo.islands) {
		return fail(fmt.Errorf("engine: the snapshot holds %d islands, the system forms %d", len(c.Frames), len(m.topo.islands)))
	}
	for k := range m.topo.islands {
		f := c.Frames[k]
		m.topo.islands[k].frame = frame{f.Speed, f.Angle, f.Since}
		m.setSpeed(k, f.Speed)
	}
	m.lean.mean = nil
	copy(m.y, c.State)
	if err := m.step.UnmarshalBinary(c.Stepper); err != nil {
		return fail(err)
	}
	m.sequence = c.Sequence
	m.queue = nil
	for _, q := range c.Queue {
		e := q.E
		e.watch = q.Watch
		m.queue = append(m.queue, scheduled{q.At, q.Order, e})
	}
	m.conditions = nil
	for _, w := range c.Conditions {
		n := &watch{id: w.ID, cond: w.Cond, then: w.Then, sync: w.Sync, since: w.Since, fired: w.Fired}
		if !w.Sync {
			if n.probe, err = m.rec.probe(w.Cond.Channel); err != nil {
				return fail(err)
			}
		}
		m.conditions = append(m.conditions, n)
	}
	l := m.ledger
	l.start, l.supplied, l.dissipated, l.elsewhere, l.destroyed, l.throughput = c.Ledger[0], c.Ledger[1], c.Ledger[2], c.Ledger[3], c.Ledger[4], c.Ledger[5]
	if err := m.chatter.UnmarshalBinary(c.Chatter); err != nil {
		return fail(err)
	}
	m.costs, m.costAt, m.costTo = nil, m.step.Stats(), m.t
	kept := m.notes[:0]
	for _, n := range m.notes {
		if n.Time <= m.t {
			kept = append(kept, n)
		}
	}
	m.notes = kept
	m.rec.restart(m.t)
	m.rearm()
	m.reviewKinks(false)
	return nil
}
