package cases

import (
	"errors"
	"fmt"
	"os"
	"path"
	"path/filepath"
	"strconv"
	"strings"

	"islet/engine"
	"islet/solvers/facet"
)

// Case is a case file that has been read and found in order. It is not
// changed by use: any number of systems can be built from it, also at once.
type Case struct {
	Name       string // of the file, without directory and .toml
	Title      string
	Text       string  // what the study is about, for people
	Frequency  float64 // nominal, Hz
	Until      float64 // end of the study, s
	Sample     float64 // spacing of the trace, s; 0 for the solver's own steps
	Tolerance  float64 // see engine.Options.Tolerance
	Record     []string
	Rules      []DetailRule // the file's own
	Events     []Event
	Conditions []Condition

	file    string
	buses   []busSpec
	devices []deviceSpec
}

// Event is an event of the study at a time.
type Event struct {
	Name  string
	Time  float64 // s
	Event engine.Event

	key []string
}

// Condition is an event that happens once a condition has held.
type Condition struct {
	Name  string
	When  engine.Condition
	Event engine.Event

	key []string
}

// DetailRule puts the devices that a pattern matches at a level of detail, as
// far as they offer it. The pattern is matched against the device's name (see
// path.Match), or, after "kind:", against its kind: "kind:line"; "near:NAME:N"
// means the devices within N buses of a bus or device, "far:NAME:N" all others.
// Of several rules for a device the last counts; those of the file come first.
type DetailRule struct {
	Pattern, Level string
}

type busSpec struct {
	name  string
	volts float64
	dead  bool
}

type deviceSpec struct {
	name string
	kind *kind
	at   []int // buses
	part part
	site *site
}

// build makes the device at its fullest level.
func (d *deviceSpec) build() (engine.Device, error) { return d.part.build(d.site) }

// Load reads a case from a file, with overrides applied in order. The error
// joins every fault found, each a *[Fault].
func Load(file string, ov ...Override) (*Case, error) {
	f, err := os.Open(file)
	if err != nil {
		return nil, fmt.Errorf("cases: %w", err)
	}
	defer f.Close()
	data, err := readLimited(f)
	if err != nil {
		return nil, fmt.Errorf("cases: %s: %w", file, err)
	}
	return Parse(file, data, ov...)
}

// Open reads a shipped case by name, or a file. A name with a separator or the
// ending .toml is always a file.
func Open(nameOrPath string, ov ...Override) (*Case, error) {
	if data, err := Source(nameOrPath); err == nil {
		return Parse(nameOrPath+".toml", data, ov...)
	}
	c, err := Load(nameOrPath, ov...)
	if errors.Is(err, os.ErrNotExist) {
		names := shippedNames()
		hint := "shipped cases are " + list(names)
		if n, ok := nearest(nameOrPath, names); ok {
			hint = fmt.Sprintf("did you mean %s? %s", n, hint)
		}
		return nil, fmt.Errorf("cases: no shipped case and no file %q; %s: %w", nameOrPath, hint, os.ErrNotExist)
	}
	return c, err
}

// Parse reads a case from data; name is what errors call it.
func Parse(name string, data []byte, ov ...Override) (*Case, error) {
	d, err := decode(name, data)
	if err != nil {
		return nil, err
	}
	for _, o := range ov {
		d.override(o)
	}
	base := strings.TrimSuffix(filepath.Base(name), ".toml")
	l := &loader{doc: d, c: &Case{Name: base, file: name}}
	l.load()
	if len(d.faults) > 0 {
		return nil, joinFaults(name, d.faults)
	}
	return l.c, nil
}

// BusNames lists the buses in the order of the file.
func (c *Case) BusNames() []string {
	names := make([]string, len(c.buses))
	for i, b := range c.buses {
		names[i] = b.name
	}
	return names
}

// DeviceNames lists the devices in the order of the file.
func (c *Case) DeviceNames() []string {
	names := make([]string, len(c.devices))
	for i, d := range c.devices {
		names[i] = d.name
	}
	return names
}

// Kind returns the kind of a device, "" if there is none of that name.
func (c *Case) Kind(device string) string {
	for _, d := range c.devices {
		if d.name == device {
			return d.kind.name
		}
	}
	return ""
}

// Details lists the levels of detail that each device offers, from full to
// coarsest. Devices with one level alone are left out.
func (c *Case) Details() map[string][]string {
	out := make(map[string][]string)
	for i := range c.devices {
		dev, err := c.devices[i].build()
		if err != nil {
			continue // not possible: it was built once
		}
		if d, ok := dev.(facet.Detailed); ok {
			out[c.devices[i].name] = d.Details()
		}
	}
	return out
}

// selector returns a function that tells whether a rule means device i.
func (r DetailRule) selector(specs []deviceSpec, buses []busSpec) (func(i int) bool, error) {
	for _, side := range []string{"near:", "far:"} {
		rest, ok := strings.CutPrefix(r.Pattern, side)
		if !ok {
			continue
		}
		name, count, _ := strings.Cut(rest, ":")
		hops, err := strconv.Atoi(strings.TrimSpace(count))
		if err != nil || hops < 0 {
			return nil, fmt.Errorf("%q is no distance; want %sNAME:N with a bus or device and a number of buses", r.Pattern, side)
		}
		within, err := reach(specs, buses, strings.TrimSpace(name), hops)
		if err != nil {
			return nil, err
		}
		near := side == "near:"
		return func(i int) bool {
			for _, b := range specs[i].at {
				if within[b] {
					return near
				}
			}
			return !near
		}, nil
	}
	pattern, of := r.Pattern, func(d *deviceSpec) string { return d.name }
	if p, ok := strings.CutPrefix(r.Pattern, "kind:"); ok {
		pattern, of = strings.TrimSpace(p), func(d *deviceSpec) string { return d.kind.name }
	}
	if _, err := path.Match(pattern, ""); err != nil {
		return nil, fmt.Errorf("%q is no pattern; want a name in which * stands for any characters, ? for one and [a-z] for a range", r.Pattern)
	}
	return func(i int) bool {
		ok, _ := path.Match(pattern, of(&specs[i]))
		return ok
	}, nil
}

// reach marks the buses at most hops lines, transformers, breakers or reduced
// networks away from a bus, or from the buses of a device.
func reach(specs []deviceSpec, buses []busSpec, name string, hops int) ([]bool, error) {
	within := make([]bool, len(buses))
	var front []int
	var known []string
	for b := range buses {
		known = append(known, buses[b].name)
		if buses[b].name == name {
			front = append(front, b)
		}
	}
	for i := range specs {
		if specs[i].name == name {
			front = append(front, specs[i].at...)
		}
	}
	if len(front) == 0 {
		return nil, fmt.Errorf("no bus or device is named %q; %s", name, suggest(name, append(known, names(specs)...)))
	}
	for _, b := range front {
		within[b] = true
	}
	for range hops {
		var next []int
		for i := range specs {
			at := specs[i].at
			inside := 0
			for _, b := range at {
				if within[b] {
					inside++
				}
			}
			if inside > 0 && inside < len(at) {
				next = append(next, at...)
			}
		}
		for _, b := range next {
			within[b] = true
		}
		if len(next) == 0 {
			break
		}
	}
	return within, nil
}

// levels finds the level of each device under the rules, "" for as built. The
// errors, one for each rule at most, belong to the rules of the same number.
func levels(specs []deviceSpec, buses []busSpec, built []engine.Device, rules []DetailRule) (at []string, errs []error) {
	at = make([]string, len(specs))
	errs = make([]error, len(rules))
	const patience = 20 // faulty rules, before the rest is left unchecked
	faulty := 0
	for k, r := range rules {
		if faulty == patience {
			break
		}
		matched, used := false, false
		var offered []string
		means, err := r.selector(specs, buses)
		if err != nil {
			errs[k] = err
			faulty++
			continue
		}
		for i := range specs {
			if !means(i) {
				continue
			}
			matched = true
			d, ok := built[i].(facet.Detailed)
			if !ok {
				continue
			}
			for _, l := range d.Details() {
				if l == r.Level {
					at[i], used = l, true
				}
				if !contains(offered, l) {
					offered = append(offered, l)
				}
			}
		}
		switch {
		case errs[k] != nil || used:
		case !matched && strings.HasPrefix(r.Pattern, "kind:"):
			errs[k] = fmt.Errorf("no device is of kind %q; %s", strings.TrimPrefix(r.Pattern, "kind:"), suggest(strings.TrimPrefix(r.Pattern, "kind:"), kindNames()))
		case !matched:
			errs[k] = fmt.Errorf("no device matches %q; %s", r.Pattern, suggest(r.Pattern, names(specs)))
		case len(offered) == 0:
			errs[k] = fmt.Errorf("what %q matches has one level of detail only", r.Pattern)
		default:
			errs[k] = fmt.Errorf("no device that %q matches offers the level %q; accepted are %s", r.Pattern, r.Level, list(offered))
		}
		if errs[k] != nil {
			faulty++
		}
	}
	return at, errs
}

func names(specs []deviceSpec) []string {
	out := make([]string, len(specs))
	for i := range specs {
		out[i] = specs[i].name
	}
	return out
}

func contains(list []string, s string) bool {
	for _, l := range list {
		if l == s {
			return true
		}
	}
	return false
}

// withLevel returns the device at a level.
func withLevel(dev engine.Device, level string) (engine.Device, error) {
	d, ok := dev.(facet.Detailed)
	if level == "" || !ok || d.Detail() == level {
		return dev, nil
	}
	b, err := d.WithDetail(level)
	if err != nil {
		return nil, err
	}
	out, ok := b.(engine.Device)
	if !ok {
		return nil, fmt.Errorf("at level %q it isn't a device any more", level)
	}
	return out, nil
}

// Build makes a system of the case, with the file's rules of detail and then
// the given ones. The error joins all faults of the rules.
func (c *Case) Build(rules ...DetailRule) (*engine.System, error) {
	sys := engine.NewSystem(c.Frequency)
	buses := make([]engine.Bus, len(c.buses))
	for i, b := range c.buses {
		buses[i] = sys.Bus(b.name, b.volts)
	}
	var errs []error
	built := make([]engine.Device, len(c.devices))
	for i := range c.devices {
		var err error
		if built[i], err = c.devices[i].build(); err != nil {
			errs = append(errs, fmt.Errorf("cases: device %s: %s", c.devices[i].name, plain(err)))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	all := append(append([]DetailRule(nil), c.Rules...), rules...)
	at, ruleErrs := levels(c.devices, c.buses, built, all)
	for k, err := range ruleErrs {
		if err != nil && k >= len(c.Rules) {
			errs = append(errs, fmt.Errorf("cases: detail %s=%s: %w", all[k].Pattern, all[k].Level, err))
		}
	}
	for i := range c.devices {
		d := &c.devices[i]
		dev, err := withLevel(built[i], at[i])
		if err != nil {
			errs = append(errs, fmt.Errorf("cases: device %s: %s", d.name, plain(err)))
			continue
		}
		ends := make([]engine.Bus, len(d.at))
		for k, b := range d.at {
			ends[k] = buses[b]
		}
		if err := sys.Add(d.name, dev, ends...); err != nil {
			errs = append(errs, err)
		}
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	return sys, nil
}

// Start builds the case, starts it (engine.Start finds the operating point)
// and schedules its events and conditions. Options left at zero (Record nil,
// Sample and Tolerance 0) are the case's; o may be nil and isn't changed.
func (c *Case) Start(o *engine.Options, rules ...DetailRule) (*engine.Simulation, error) {
	sys, err := c.Build(rules...)
	if err != nil {
		return nil, err
	}
	var opt engine.Options
	if o != nil {
		opt = *o
	}
	if opt.Record == nil {
		opt.Record = c.Record
	}
	if opt.Sample == 0 {
		opt.Sample = c.Sample
	}
	if opt.Tolerance == 0 {
		opt.Tolerance = c.Tolerance
	}
	sim, err := engine.Start(sys, &opt)
	if err != nil {
		return nil, err
	}
	var errs []error
	for _, e := range c.Events {
		if err := sim.At(e.Time, e.Event); err != nil {
			errs = append(errs, fmt.Errorf("cases: %s: %s: %w", c.file, dotted(e.key), err))
		}
	}
	for _, w := range c.Conditions {
		if err := sim.When(w.When, w.Event); err != nil {
			errs = append(errs, fmt.Errorf("cases: %s: %s: %w", c.file, dotted(w.key), err))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	return sim, nil
}
