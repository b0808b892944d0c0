package engine

import (
	"errors"
	"fmt"
	"math"
	"sort"

	"islet/solvers"
)

// Action is what an event does.
type Action string

// Actions.
const (
	ActionSet         Action = "set"         // move a setpoint, at once or along a ramp
	ActionOpen        Action = "open"        // open a breaker, clear a fault
	ActionClose       Action = "close"       // close a breaker, apply a fault
	ActionSynchronise Action = "synchronise" // close a breaker when both sides agree
	ActionTrip        Action = "trip"        // take a device off for good
	actionRampEnd     Action = "(end of ramp)"
	actionDeadline    Action = "(deadline)"
	actionDelay       Action = "(delay over)"
)

// Event is something that happens to the network. Make one with [Set],
// [Ramp], [Open], [Close], [CloseInSync] or [Trip]. It is plain data, so a
// snapshot holds the events still to come.
type Event struct {
	Action   Action
	Device   string
	Setpoint string  // ActionSet
	Value    float64 // ActionSet
	Duration float64 // ActionSet: s, 0 for a step
	Sync     SyncCheck
	watch    int // internal: the condition concerned
}

// SyncCheck is a synchronism check across an open breaker. A window of 0 is
// never met; use +Inf for one that doesn't matter.
type SyncCheck struct {
	Voltage   float64 // largest difference of magnitudes, per unit of rated
	Frequency float64 // largest difference, Hz
	Angle     float64 // largest difference, rad, below pi
	Deadline  float64 // s after the event; 0 waits for ever
}

// Set makes an event that moves a setpoint at once.
func Set(device, setpoint string, value float64) Event {
	return Event{Action: ActionSet, Device: device, Setpoint: setpoint, Value: value}
}

// Ramp makes an event that moves a setpoint linearly over duration seconds.
func Ramp(device, setpoint string, value, duration float64) Event {
	return Event{Action: ActionSet, Device: device, Setpoint: setpoint, Value: value, Duration: duration}
}

// Open makes an event that opens a breaker, or clears a fault. Inductive
// currents through it are interrupted at once: what Kirchhoff's law still
// allows is kept with its flux linkage, and the energy lost is booked.
func Open(device string) Event { return Event{Action: ActionOpen, Device: device} }

// Close makes an event that closes a breaker, or applies a fault.
func Close(device string) Event { return Event{Action: ActionClose, Device: device} }

// CloseInSync makes an event that closes a breaker as soon as the voltages on
// its sides agree within the check's windows.
func CloseInSync(breaker string, c SyncCheck) Event {
	return Event{Action: ActionSynchronise, Device: breaker, Sync: c}
}

// Trip makes an event that takes a device off for the rest of the run.
func Trip(device string) Event { return Event{Action: ActionTrip, Device: device} }

func (e Event) String() string {
	switch e.Action {
	case ActionSet:
		if e.Duration > 0 {
			return fmt.Sprintf("%s: %s to %.6g over %.4g s", e.Device, e.Setpoint, e.Value, e.Duration)
		}
		return fmt.Sprintf("%s: %s to %.6g", e.Device, e.Setpoint, e.Value)
	case ActionSynchronise:
		return fmt.Sprintf("%s: close when in synchronism", e.Device)
	}
	return fmt.Sprintf("%s: %s", e.Device, e.Action)
}

// scheduled is an event with its time; order breaks ties.
type scheduled struct {
	at    float64
	order int
	e     Event
}

// check validates an event against the system.
func (m *Simulation) check(e Event) error {
	i, ok := m.sys.devAt[e.Device]
	if !ok {
		return fmt.Errorf("engine: event %q: no device of that name; there are %s", e, list(m.sys.DeviceNames()))
	}
	d := m.sys.devices[i]
	switch e.Action {
	case ActionSet:
		if d.adjust == nil {
			return fmt.Errorf("engine: event %q: a %s has no setpoints", e, d.desc.Kind)
		}
		if math.IsNaN(e.Value) || math.IsInf(e.Value, 0) {
			return fmt.Errorf("engine: event %q: value is %g", e, e.Value)
		}
		if !(e.Duration >= 0) || math.IsInf(e.Duration, 0) {
			return fmt.Errorf("engine: event %q: duration is %g s, want 0 or a positive time", e, e.Duration)
		}
		var names []string
		for _, s := range d.adjust.Setpoints(m.t) {
			if s.Name == e.Setpoint {
				if e.Value < s.Min || e.Value > s.Max {
					return fmt.Errorf("engine: event %q: value is %g %s, want %g to %g", e, e.Value, s.Unit, s.Min, s.Max)
				}
				return nil
			}
			names = append(names, s.Name)
		}
		return fmt.Errorf("engine: event %q: no setpoint %q; there are %s", e, e.Setpoint, list(names))
	case ActionOpen, ActionClose, ActionSynchronise:
		if d.swtch == nil {
			return fmt.Errorf("engine: event %q: a %s can't be opened or closed; a breaker or a fault can", e, d.desc.Kind)
		}
		if e.Action == ActionSynchronise {
			if len(d.buses) != 2 {
				return fmt.Errorf("engine: event %q: a synchronism check needs two sides", e)
			}
			c := e.Sync
			if !(c.Voltage > 0) || !(c.Frequency > 0) || !(c.Angle > 0) || !(c.Deadline >= 0) {
				return fmt.Errorf("engine: event %q: windows are %g pu, %g Hz, %g rad, deadline %g s; want positive windows and a deadline of 0 (none) or more", e, c.Voltage, c.Frequency, c.Angle, c.Deadline)
			}
		}
	case ActionTrip:
	default:
		return fmt.Errorf("engine: event %q: unknown action", e)
	}
	return nil
}

// At schedules an event. Events at one time happen in the order in which they
// were scheduled. The error names what is wrong with the event or its time.
func (m *Simulation) At(t float64, e Event) error {
	if !(t >= m.t) || math.IsInf(t, 0) {
		return fmt.Errorf("engine: event %q at t = %g s lies before the present, %g s", e, t, m.t)
	}
	if err := m.check(e); err != nil {
		return err
	}
	m.schedule(t, e)
	return nil
}

func (m *Simulation) schedule(t float64, e Event) {
	m.sequence++
	m.queue = append(m.queue, scheduled{t, m.sequence, e})
	sort.SliceStable(m.queue, func(i, j int) bool { return m.queue[i].at < m.queue[j].at })
}

// Apply carries out an event now, between two steps.
func (m *Simulation) Apply(e Event) error {
	if m.stopped != nil {
		return m.stopped
	}
	if err := m.check(e); err != nil {
		return err
	}
	m.schedule(m.t, e)
	return m.handle(nil)
}

// due reports whether an event is to happen at the present time.
func (m *Simulation) due() bool { return len(m.queue) > 0 && m.queue[0].at <= m.t }

// handle carries out the roots just hit and everything due now, in order, and
// restarts if anything changed. Both sides are recorded.
func (m *Simulation) handle(hits []solvers.Hit) error {
	fired := append([]solvers.Hit(nil), hits...)
	if len(fired) > 0 && m.chatter.Add(m.t, m.step.Stats().Largest) {
		w := m.conditions[fired[0].Root]
		m.stopped = &RunError{Time: m.t, At: w.String(), Err: &solvers.ChatterError{Time: m.t, Root: fired[0].Root, Events: m.chatter.Events()}}
		return m.stopped
	}
	before := m.ledger.stored(m.t, m.step.State())
	m.rec.row(m.t, m.step.State(), true)
	copy(m.y, m.step.State())
	changed, topology := false, false
	for _, h := range fired {
		m.crossed(m.conditions[h.Root], h.Direction)
	}
	var errs []error
	for m.due() {
		s := m.queue[0]
		m.queue = m.queue[1:]
		c, t, err := m.carryOut(s.e)
		changed = changed || c
		topology = topology || t
		if err != nil {
			errs = append(errs, err)
		}
	}
	if topology {
		changed = true
		if err := m.connect(); err != nil {
			errs = append(errs, err)
		}
	}
	if err := errors.Join(errs...); err != nil {
		m.stopped = fmt.Errorf("engine: t = %.6g s: event failed: %w", m.t, err)
		return m.stopped
	}
	if changed {
		st := m.step.Stats()
		m.costs = append(m.costs, Cost{m.costTo, m.t, st.Sub(m.costAt)})
		m.costAt, m.costTo = st, m.t
		if err := m.restart(); err != nil {
			m.stopped = err
			return err
		}
		m.ledger.jump(before, m.t, m.step.State())
		m.rec.row(m.t, m.step.State(), false)
		m.reviewConditions()
	} else {
		// A derivative may jump, nothing else: go on from here.
		m.rearm()
	}
	if len(fired) > 0 {
		m.driver.Disarm(m.stillThere(fired))
	}
	return nil
}

// stillThere maps the roots that fired to the present list of conditions.
func (m *Simulation) stillThere(fired []solvers.Hit) []solvers.Hit {
	var out []solvers.Hit
	for _, h := range fired {
		if h.Root < len(m.conditions) {
			out = append(out, h)
		}
	}
	return out
}

// carryOut does one event to m.y and the devices. It reports whether anything
// changed, and whether connections did.
func (m *Simulation) carryOut(e Event) (changed, topology bool, err error) {
	switch e.Action {
	case actionRampEnd:
		return false, false, nil
	case actionDeadline:
		for i, w := range m.conditions {
			if w.id == e.watch {
				m.note(e.Device, false, "%s: not in synchronism within %.4g s: stays open (%s)", e.Device, w.then.Sync.Deadline, m.syncState(w))
				m.conditions = append(m.conditions[:i], m.conditions[i+1:]...)
				m.rearm()
				break
			}
		}
		return false, false, nil
	case actionDelay:
		for _, w := range m.conditions {
			if w.id == e.watch && w.since == w.since && !w.fired && m.t >= w.since+w.cond.For {
				w.fired = true
				m.note(w.then.Device, true, "%s: %s", w, w.then)
				return m.carryOut(w.then)
			}
		}
		return false, false, nil
	}
	d := m.sys.devices[m.sys.devAt[e.Device]]
	if d.tripped && e.Action != ActionTrip {
		m.note(d.name, true, "%s: no effect, the device has tripped", e)
		return false, false, nil
	}
	switch e.Action {
	case ActionSet:
		unit, was := m.setpoint(d, e.Setpoint)
		if err := d.adjust.Set(e.Setpoint, m.t, e.Value, e.Duration); err != nil {
			return false, false, err
		}
		if d.stepped != nil && !d.off {
			d.stepped.ApplyJumps(m.y[d.lo : d.lo+d.own])
		}
		if e.Duration > 0 {
			m.note(d.name, true, "%s: %s from %.6g to %.6g %s over %.4g s", d.name, e.Setpoint, was, e.Value, unit, e.Duration)
			m.schedule(m.t+e.Duration, Event{Action: actionRampEnd, Device: d.name})
		} else {
			m.note(d.name, true, "%s: %s from %.6g to %.6g %s", d.name, e.Setpoint, was, e.Value, unit)
		}
		return true, false, nil
	case ActionOpen, ActionClose:
		want := e.Action == ActionClose
		if d.swtch.Closed() == want {
			m.note(d.name, true, "%s: is %s already", d.name, map[bool]string{true: "closed", false: "open"}[want])
			return false, false, nil
		}
		d.swtch.SetClosed(want)
		if d.stepped != nil {
			d.stepped.ApplyJumps(m.y[d.lo : d.lo+d.own])
		}
		m.note(d.name, true, "%s %s", d.name, map[bool]string{true: "closes", false: "opens"}[want])
		return true, true, nil
	case ActionSynchronise:
		if d.swtch.Closed() {
			m.note(d.name, true, "%s: is closed already", d.name)
			return false, false, nil
		}
		w := &watch{id: m.nextID(), then: e, sync: true, since: math.NaN()}
		if m.inSync(w, m.t, m.y) {
			m.note(d.name, true, "%s: in synchronism at once (%s)", d.name, m.syncState(w))
			return m.carryOut(Close(d.name))
		}
		m.note(d.name, true, "%s: waits for synchronism (%s)", d.name, m.syncState(w))
		m.conditions = append(m.conditions, w)
		if e.Sync.Deadline > 0 {
			m.schedule(m.t+e.Sync.Deadline, Event{Action: actionDeadline, Device: e.Device, watch: w.id})
		}
		return false, false, nil
	case ActionTrip:
		if d.tripped {
			return false, false, nil
		}
		d.tripped = true
		m.note(d.name, true, "%s trips", d.name)
		return true, true, nil
	}
	return false, false, fmt.Errorf("engine: unknown action %q", e.Action)
}

func (m *Simulation) setpoint(d *member, name string) (unit string, value float64) {
	for _, s := range d.adjust.Setpoints(m.t) {
		if s.Name == name {
			return s.Unit, s.Value
		}
	}
	return "", math.NaN()
}

func (m *Simulation) nextID() int {
	m.sequence++
	return m.sequence
}
