package engine

import (
	"fmt"
	"math"

	"islet/solvers"
)

// Condition is a condition on the state: a channel stays above or below a
// limit for a time.
type Condition struct {
	// Channel is the name of a channel, "bus.v" or "battery-1.frequency".
	Channel string
	// Below chooses the side of the limit; false means above.
	Below bool
	// Limit in the channel's unit.
	Limit float64
	// For is how long the condition must hold without a break, s; 0 acts at
	// once.
	For float64
}

// watch is a condition, or a synchronism check, being watched.
type watch struct {
	id    int
	cond  Condition
	probe probe
	then  Event
	sync  bool
	since float64 // the condition holds since then; NaN: it doesn't
	fired bool
}

func (w *watch) String() string {
	if w.sync {
		return fmt.Sprintf("synchronism across %s", w.then.Device)
	}
	side := "above"
	if w.cond.Below {
		side = "below"
	}
	s := fmt.Sprintf("%s %s %.6g", w.cond.Channel, side, w.cond.Limit)
	if w.cond.For > 0 {
		s += fmt.Sprintf(" for %.4g s", w.cond.For)
	}
	return s
}

// When carries out an event when a condition has held for its time; once.
func (m *Simulation) When(c Condition, e Event) error {
	if err := m.check(e); err != nil {
		return err
	}
	p, err := m.rec.probe(c.Channel)
	if err != nil {
		return fmt.Errorf("engine: condition for %q: %w", e, err)
	}
	if math.IsNaN(c.Limit) || !(c.For >= 0) || math.IsInf(c.For, 0) {
		return fmt.Errorf("engine: condition for %q: limit is %g and duration %g s, want a number and 0 or a positive time", e, c.Limit, c.For)
	}
	w := &watch{id: m.nextID(), cond: c, probe: p, then: e, since: math.NaN()}
	m.conditions = append(m.conditions, w)
	m.reviewConditions()
	m.rearm()
	return nil
}

// value is positive where the condition holds.
func (w *watch) value(t float64, y []float64) float64 {
	v := w.probe.value(t, y) - w.cond.Limit
	if w.cond.Below {
		v = -v
	}
	return v
}

// roots makes the root functions: of the present conditions, one each, and
// after them the kinks of all devices in service.
func (m *Simulation) roots() *solvers.Roots {
	n := len(m.conditions)
	m.kinked = m.kinked[:0]
	ports, total := 0, n
	for _, d := range m.sys.devices {
		if d.kinked == nil || d.off {
			continue
		}
		for k := range d.kinks {
			m.kinked = append(m.kinked, kink{d, k})
		}
		total += len(d.kinks)
		ports = max(ports, d.ports)
	}
	if total == 0 {
		return nil
	}
	v := make([]float64, ports)
	f := func(dst []float64, t float64, y []float64) {
		for i, w := range m.conditions {
			switch {
			case w.fired:
				dst[i] = 1
			case w.sync:
				dst[i] = m.syncMargin(w, t, y)
			default:
				dst[i] = w.value(t, y)
			}
		}
		at := n
		for _, k := range m.kinked {
			if k.index != 0 {
				continue
			}
			d := k.d
			d.kinked.EvalKinks(dst[at:at+len(d.kinks)], t, m.portValues(d, v, y), y[d.lo:d.lo+d.own])
			at += len(d.kinks)
		}
	}
	return &solvers.Roots{N: total, Func: f, EndsOnly: n == 0}
}

// kink is one kink function of a device.
type kink struct {
	d     *member
	index int
}

// passKinks tells of the kinks among the roots hit and returns the rest.
func (m *Simulation) passKinks(hits []solvers.Hit) []solvers.Hit {
	n := len(m.conditions)
	rest := hits[:0]
	for _, h := range hits {
		if h.Root < n {
			rest = append(rest, h)
			continue
		}
		k := m.kinked[h.Root-n]
		m.setActing(k.d, k.index, h.Direction == solvers.Rising, true)
	}
	return rest
}

// setActing notes whether the limit behind a kink acts, and tells of a change.
func (m *Simulation) setActing(d *member, index int, acts, tell bool) {
	if d.acting[index] == acts {
		return
	}
	d.acting[index] = acts
	if tell {
		verb := "leaves"
		if acts {
			verb = "reaches"
		}
		m.note(d.name, false, "%s %s its %s", d.name, verb, d.kinks[index])
	}
}

// reviewKinks notes which limits act in the present state, after a jump.
func (m *Simulation) reviewKinks(tell bool) {
	y := m.step.State()
	for _, d := range m.sys.devices {
		if d.kinked == nil || d.off || len(d.kinks) == 0 {
			continue
		}
		v := m.ports[:d.ports]
		m.net.Ports(d.block, v, y)
		g := make([]float64, len(d.kinks))
		d.kinked.EvalKinks(g, m.t, v, y[d.lo:d.lo+d.own])
		for k, x := range g {
			m.setActing(d, k, x > 0, tell)
		}
	}
}

// crossed notes that a condition has begun or ceased to hold.
func (m *Simulation) crossed(w *watch, dir solvers.Direction) {
	if w.fired {
		return
	}
	if w.sync {
		if dir != solvers.Rising {
			return
		}
		w.fired = true
		m.note(w.then.Device, true, "%s: in synchronism (%s)", w.then.Device, m.syncState(w))
		m.schedule(m.t, Close(w.then.Device))
		for i, s := range m.queue {
			if s.e.Action == actionDeadline && s.e.watch == w.id {
				m.queue = append(m.queue[:i], m.queue[i+1:]...)
				break
			}
		}
		return
	}
	if dir == solvers.Falling {
		w.since = math.NaN()
		return
	}
	w.since = m.t
	m.schedule(m.t+w.cond.For, Event{Action: actionDelay, Device: w.then.Device, watch: w.id})
}

// reviewConditions notes conditions that an event made hold, or cease to, in a
// jump. What they cause at once is due now.
func (m *Simulation) reviewConditions() {
	y := m.step.State()
	for _, w := range m.conditions {
		if w.fired {
			continue
		}
		if w.sync {
			if m.syncMargin(w, m.t, y) >= 0 {
				m.crossed(w, solvers.Rising)
			}
			continue
		}
		v := w.value(m.t, y)
		if math.Abs(v) <= 1e-9*math.Abs(w.cond.Limit) {
			continue // on the limit: what the crossing said stands
		}
		holds, held := v > 0, w.since == w.since
		if holds != held {
			dir := solvers.Falling
			if holds {
				dir = solvers.Rising
			}
			m.crossed(w, dir)
		}
	}
}

// syncSides returns the differences across a breaker: magnitudes in per unit
// of rated voltage, Hz, and rad.
func (m *Simulation) syncSides(w *watch, t float64, y []float64) (dv, df, da float64) {
	d := m.sys.devices[m.sys.devAt[w.then.Device]]
	var mag, freq, ang [2]float64
	for k, b := range d.buses {
		i := m.net.NodeUnknown(2 * b)
		mag[k] = math.Hypot(y[i], y[i+1]) / peakPhase(m.sys.buses[b].rated)
		is := m.topo.busOf[b]
		if is < 0 {
			continue
		}
		freq[k] = m.islandSpeed(&m.topo.islands[is], t, y) / (2 * math.Pi)
		ang[k] = math.Atan2(y[i+1], y[i]) + m.topo.islands[is].frame.at(t)
	}
	return mag[0] - mag[1], freq[0] - freq[1], wrap(ang[0] - ang[1])
}

// syncStride bounds a step while a synchronism check waits. Islands at rest in
// their own frames allow steps of many seconds, in which the angle between them
// may turn past the window unseen: the points at which a step is looked at must
// lie less than a third of a radian apart.
func (m *Simulation) syncStride() float64 {
	stride := math.Inf(1)
	y := m.step.State()
	for _, w := range m.conditions {
		if !w.sync || w.fired {
			continue
		}
		if _, df, _ := m.syncSides(w, m.t, y); df != 0 {
			stride = math.Min(stride, 1.5/(2*math.Pi*math.Abs(df)))
		}
	}
	return stride
}

// syncMargin is positive where all windows are met.
func (m *Simulation) syncMargin(w *watch, t float64, y []float64) float64 {
	dv, df, da := m.syncSides(w, t, y)
	c := w.then.Sync
	g := 1 - math.Abs(dv)/c.Voltage
	g = math.Min(g, 1-math.Abs(df)/c.Frequency)
	// Smooth around a turn, with the sign of the angle's own margin.
	a := math.Min(c.Angle, math.Pi)
	return math.Min(g, (math.Cos(da)-math.Cos(a))/(1-math.Cos(a)))
}

func (m *Simulation) inSync(w *watch, t float64, y []float64) bool {
	return m.syncMargin(w, t, y) >= 0
}

func (m *Simulation) syncState(w *watch) string {
	dv, df, da := m.syncSides(w, m.t, m.y)
	return fmt.Sprintf("%+.2f %% voltage, %+.3f Hz, %+.1f degrees", 100*dv, df, da*180/math.Pi)
}
