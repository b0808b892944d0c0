package cases

import (
	"fmt"
	"math"
	"strings"

	"islet/engine"
	"islet/solvers/facet"
)

// actions are the values of key action, in the words of the engine.
var actions = []string{"set", "open", "close", "close in sync", "trip"}

// eventDraft is the table of an event or of a condition.
type eventDraft struct {
	at                               float64
	action, device, setpoint         string
	value                            float64
	valueKey                         string
	ramp                             float64
	voltage, frequency, angle, until float64
	channel                          string
	limit                            float64
	limitKey                         string
	below                            bool
	hold                             float64
	values, limits                   int // how many were given
}

// tradeUnit is a unit of key names with its SI unit and scale.
type tradeUnit struct {
	suffix, si string
	scale      float64
}

// setUnits are the units of values of setpoints; limitUnits those of limits of
// channels.
var (
	setUnits = []tradeUnit{
		{"kW", "W", 1e3}, {"kvar", "var", 1e3}, {"kV", "V", 1e3}, {"Hz", "Hz", 1}, {"deg", "rad", math.Pi / 180},
	}
	limitUnits = []tradeUnit{
		{"kW", "W", 1e3}, {"kvar", "var", 1e3}, {"kV", "V", 1e3}, {"A", "A", 1}, {"Hz", "Hz", 1}, {"Hz_per_s", "Hz/s", 1}, {"deg", "deg", 1},
	}
)

// baseUnit is a unit without the words about sign and kind that follow it:
// "V" of "V line-line rms", but "V s" as it is.
func baseUnit(unit string) string {
	first, rest, _ := strings.Cut(unit, " ")
	if next, _, _ := strings.Cut(rest, " "); next == "s" {
		return unit
	}
	return first
}

const anyNumber = 1e12

// actionFields are the keys of what happens.
func actionFields() []field[eventDraft] {
	type T = eventDraft
	action := word("action", "required", func(d *T, s string) { d.action = s }, "what happens")
	action.choices = actions
	list := []field[T]{
		action,
		word("device", "required", func(d *T, s string) { d.device = s }, "the device concerned"),
		word("setpoint", "", func(d *T, s string) { d.setpoint = s }, "set: which one"),
	}
	for _, u := range setUnits {
		key := "value_" + u.suffix
		list = append(list, num(key, u.suffix, "", -anyNumber, anyNumber, func(d *T, x float64) {
			d.values++
			d.value, d.valueKey = x, key
		}, "set: the new value, in the setpoint's unit").in(u.scale))
	}
	return append(list,
		num("ramp_ms", "ms", "0", 0, 1e9, func(d *T, x float64) { d.ramp = x }, "set: time over which the value moves; 0 for a step").in(1e-3),
		above("voltage_percent", "%", "5", 0, 100, func(d *T, x float64) { d.voltage = x }, "close in sync: largest difference of voltages").in(1e-2).orInf(),
		above("frequency_Hz", "Hz", "0.2", 0, 100, func(d *T, x float64) { d.frequency = x }, "close in sync: largest difference of frequencies").orInf(),
		above("angle_deg", "degrees", "10", 0, 180, func(d *T, x float64) { d.angle = x }, "close in sync: largest difference of angles").in(math.Pi/180).orInf(),
		above("deadline_s", "s", "none", 0, 1e6, func(d *T, x float64) { d.until = x }, "close in sync: how long to wait"),
	)
}

func eventFields() []field[eventDraft] {
	return append([]field[eventDraft]{
		num("at_s", "s", "required", 0, 1e6, func(d *eventDraft, x float64) { d.at = x }, "when; within the study"),
	}, actionFields()...)
}

func conditionFields() []field[eventDraft] {
	type T = eventDraft
	list := []field[T]{
		word("channel", "required", func(d *T, s string) { d.channel = s }, "what is watched, like quay.v or battery-1.frequency"),
	}
	for _, below := range []bool{false, true} {
		side := "above"
		if below {
			side = "below"
		}
		limit := func(suffix, unit string, scale float64, doc string) {
			key := side + suffix
			list = append(list, num(key, unit, "", -anyNumber, anyNumber, func(d *T, x float64) {
				d.limits++
				d.limit, d.limitKey, d.below = x, key, below
			}, doc).in(scale))
		}
		for _, u := range limitUnits {
			limit("_"+u.suffix, strings.ReplaceAll(u.suffix, "_per_", "/"), u.scale, "limit "+side+" which the condition holds")
		}
		limit("", "that of the channel", 1, "the same for a channel in any other unit")
	}
	list = append(list, num("for_ms", "ms", "0", 0, 1e9, func(d *T, x float64) { d.hold = x }, "how long it must hold without a break").in(1e-3))
	return append(list, actionFields()...)
}

// defaultWindows are those of a synchronism check. Common practice, no source.
func defaultWindows() eventDraft {
	return eventDraft{voltage: 0.05, frequency: 0.2, angle: 10 * math.Pi / 180}
}

func (l *loader) events() {
	c := l.c
	l.section("event", MaxEvents, "islanding", func(p []string, t map[string]any) {
		d := defaultWindows()
		v := read(l.doc, p, t, eventFields(), &d, "an event")
		e, ok := l.event(v, &d)
		// A study cut short from outside leaves out what comes later; in a
		// file an event after the end is a mistake.
		if v.given["at_s"] && d.at > c.Until && c.Until > 0 && l.untilP.set == "" {
			v.fault("at_s", "lies after the end of the study; accepted is 0 to %g", c.Until)
		}
		if ok {
			c.Events = append(c.Events, Event{Name: p[1], Time: d.at, Event: e, key: p})
		}
	})
	room := max(0, MaxEvents-len(c.Events))
	l.section("condition", room, "undervoltage", func(p []string, t map[string]any) {
		d := defaultWindows()
		v := read(l.doc, p, t, conditionFields(), &d, "a condition")
		e, ok := l.event(v, &d)
		w, okW := l.condition(v, &d)
		if ok && okW {
			c.Conditions = append(c.Conditions, Condition{Name: p[1], When: w, Event: e, key: p})
		}
	})
}

// event makes an event of its table. It reports whether all is well.
func (l *loader) event(v *values, d *eventDraft) (engine.Event, bool) {
	if !v.given["action"] || !v.given["device"] {
		return engine.Event{}, false
	}
	before := len(l.doc.faults)
	only := func(keys []string, action string) {
		for _, k := range keys {
			if v.tried[k] && d.action != action {
				v.fault(k, "goes with action = %q only", action)
			}
		}
	}
	var valueKeys []string
	for _, u := range setUnits {
		valueKeys = append(valueKeys, "value_"+u.suffix)
	}
	only(append([]string{"setpoint", "ramp_ms"}, valueKeys...), "set")
	only([]string{"voltage_percent", "frequency_Hz", "angle_deg", "deadline_s"}, "close in sync")
	i, there := l.devAt[d.device]
	switch {
	case !there && !l.named(d.device):
		v.fault("device", "no device of that name; %s", l.doc.suggest(d.device, l.c.DeviceNames()))
	case !there || l.built[i] == nil:
		return engine.Event{}, false // has faults of its own
	}
	if len(l.doc.faults) > before {
		return engine.Event{}, false
	}
	dev := l.built[i]
	what := l.c.devices[i].kind.what()
	var e engine.Event
	switch d.action {
	case "set":
		l.setpoint(v, d, dev, what)
		e = engine.Ramp(d.device, d.setpoint, d.value, d.ramp)
	case "open", "close", "close in sync":
		if _, ok := dev.(facet.Switchable); !ok {
			v.fault("device", "%s can't be opened or closed; accepted is a breaker or a fault", what)
		}
		switch d.action {
		case "open":
			e = engine.Open(d.device)
		case "close":
			e = engine.Close(d.device)
		default:
			if len(l.c.devices[i].at) != 2 {
				v.fault("device", "%s has one side only; accepted is a breaker", what)
			}
			e = engine.CloseInSync(d.device, engine.SyncCheck{Voltage: d.voltage, Frequency: d.frequency, Angle: d.angle, Deadline: d.until})
		}
	case "trip":
		e = engine.Trip(d.device)
	}
	return e, len(l.doc.faults) == before
}

// named tells whether there is a table of a device of that name, in order or
// not.
func (l *loader) named(device string) bool {
	_, ok := l.badDev[device]
	return ok
}

// setpoint checks the setpoint and value of an event against the device.
func (l *loader) setpoint(v *values, d *eventDraft, dev engine.Device, what string) {
	adj, ok := dev.(facet.Adjustable)
	var list []facet.Setpoint
	if ok {
		list = adj.Setpoints(0)
	}
	if len(list) == 0 {
		v.fault("device", "%s has no setpoints", what)
		return
	}
	var names []string
	for _, s := range list {
		names = append(names, s.Name)
	}
	if !v.given["setpoint"] {
		if !v.tried["setpoint"] {
			l.doc.fault(v.path, "action = \"set\" needs setpoint; %s has %s", what, strings.Join(names, ", "))
		}
		return
	}
	for _, s := range list {
		if s.Name != d.setpoint {
			continue
		}
		want := ""
		scale := 1.0
		for _, u := range setUnits {
			if u.si == baseUnit(s.Unit) {
				want, scale = "value_"+u.suffix, u.scale
			}
		}
		switch {
		case d.values > 1:
			l.doc.fault(v.path, "more than one value; want %s alone", want)
		case d.valueKey == "":
			if !v.tried[want] {
				l.doc.fault(v.path, "action = \"set\" needs %s, the new value of setpoint %s", want, s.Name)
			}
		case d.valueKey != want:
			v.fault(d.valueKey, "setpoint %s of %s is in another unit; want %s", s.Name, what, want)
		case d.value < s.Min || d.value > s.Max:
			v.fault(d.valueKey, "out of range; accepted is %s", between(s.Min/scale, s.Max/scale))
		}
		return
	}
	v.fault("setpoint", "%s has no such setpoint; %s", what, suggest(d.setpoint, names))
}

// between writes a range.
func between(lo, hi float64) string {
	switch {
	case math.IsInf(lo, -1) && math.IsInf(hi, 1):
		return "any number"
	case math.IsInf(hi, 1):
		return figure(lo) + " or more"
	case math.IsInf(lo, -1):
		return figure(hi) + " or less"
	}
	return figure(lo) + " to " + figure(hi)
}

// condition makes the condition of its table.
func (l *loader) condition(v *values, d *eventDraft) (engine.Condition, bool) {
	before := len(l.doc.faults)
	c := engine.Condition{Channel: d.channel, Below: d.below, Limit: d.limit, For: d.hold}
	if d.limits > 1 {
		l.doc.fault(v.path, "more than one limit; want one")
	}
	if !v.given["channel"] {
		return c, false
	}
	unit, ok := l.channel[d.channel]
	if !ok {
		if !l.complete() {
			return c, false
		}
		v.fault("channel", "no channel of that name; %s", l.suggestChannel(d.channel))
		return c, false
	}
	suffix := ""
	for _, u := range limitUnits {
		if u.si == baseUnit(unit) {
			suffix = "_" + u.suffix
		}
	}
	side := "above"
	if d.below {
		side = "below"
	}
	switch {
	case d.limits > 1:
	case d.limitKey == "":
		for k := range v.tried {
			if strings.HasPrefix(k, "above") || strings.HasPrefix(k, "below") {
				return c, false // refused already
			}
		}
		l.doc.fault(v.path, "a condition needs a limit; want above%s or below%s", suffix, suffix)
	case d.limitKey != side && d.limitKey != side+suffix:
		v.fault(d.limitKey, "channel %s is in %s; want %s%s", d.channel, unit, side, suffix)
	}
	return c, len(l.doc.faults) == before
}

// String tells an event of the study in words.
func (e Event) String() string { return fmt.Sprintf("%s at %g s: %s", e.Name, e.Time, e.Event) }
