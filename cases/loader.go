package cases

import (
	"fmt"
	"math"
	"path"
	"strings"

	"islet/engine"
	"islet/solvers/facet"
)

// loader turns a document into a case and notes every fault on the way.
type loader struct {
	doc    *document
	c      *Case
	untilP place // where the end of the study is set

	busAt    map[string]int
	badBus   map[string]bool // there, but at fault
	busNames []string
	devAt    map[string]int
	badDev   map[string]bool
	built    []engine.Device // at the file's level of detail; nil if at fault
	used     []bool
	channel  map[string]string // name -> unit
	names    []string          // of channels
}

// sections are the tables of a case file.
var sections = []string{"study", "bus", "device", "event", "condition", "detail"}

func (l *loader) load() {
	d := l.doc
	for _, k := range d.keysOf(nil, d.root) {
		if !contains(sections, k) {
			d.fault([]string{k}, "unknown; %s", d.suggest(k, sections))
		}
	}
	l.study()
	l.buses()
	l.devices()
	l.connections()
	l.detail()
	l.channels()
	l.record()
	l.events()
}

// section returns the named tables of a section in order of the file.
func (l *loader) section(name string, most int, of string, visit func(path []string, table map[string]any)) {
	v, ok := l.doc.root[name]
	if !ok {
		return
	}
	want := fmt.Sprintf("named tables such as [%s.%s]", name, of)
	all, ok := l.doc.asTable([]string{name}, v, want)
	if !ok {
		return
	}
	if len(all) > most {
		l.doc.fault([]string{name}, "%d tables; accepted are %d", len(all), most)
		return
	}
	for _, k := range l.doc.keysOf([]string{name}, all) {
		p := []string{name, k}
		if t, ok := l.doc.asTable(p, all[k], want); ok && l.goodName(p) {
			visit(p, t)
		}
	}
}

// goodName checks the last part of a key as a name.
func (l *loader) goodName(key []string) bool {
	name := key[len(key)-1]
	ok := name != "" && len(name) <= MaxName
	for _, c := range name {
		ok = ok && (c == '-' || c == '_' || c >= '0' && c <= '9' || c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z')
	}
	if !ok {
		l.doc.fault(key, "not a name; accepted are up to %d letters, digits, - and _", MaxName)
	}
	return ok
}

// study

type studyDraft struct {
	title, text      string
	hertz, until     float64
	sample, relative float64
	record           []string
}

func studyFields() []field[studyDraft] {
	type T = studyDraft
	return []field[T]{
		word("title", "", func(d *T, s string) { d.title = s }, "a line that names the study"),
		word("text", "", func(d *T, s string) { d.text = s }, "what it is about"),
		num("frequency_Hz", "Hz", "50", 1, 1000, func(d *T, x float64) { d.hertz = x }, "nominal frequency"),
		above("until_s", "s", "required", 0, 1e6, func(d *T, x float64) { d.until = x }, "end of the study"),
		num("sample_ms", "ms", "0", 0, 1e6, func(d *T, x float64) { d.sample = x }, "spacing of the recorded waveforms; 0 for the solver's own steps").in(1e-3),
		num("tolerance", "1", "1e-6", 1e-12, 0.1, func(d *T, x float64) { d.relative = x }, "accuracy asked of waveforms, relative to their range"),
		words("record", "voltages, frequencies, and all derived quantities of devices", func(d *T, s []string) { d.record = s }, "channels to record, by name or pattern like battery-*.p"),
	}
}

func (l *loader) study() {
	c := l.c
	s := studyDraft{hertz: 50, relative: 1e-6, title: c.Name}
	p := []string{"study"}
	v, ok := l.doc.root["study"]
	if !ok {
		l.doc.faults = append(l.doc.faults, &Fault{File: l.doc.file, Text: "no table [study]; want one with until_s, the end of the study"})
	} else if t, ok := l.doc.asTable(p, v, "a table [study]"); ok {
		read(l.doc, p, t, studyFields(), &s, "a study")
	}
	c.Title, c.Text, c.Frequency, c.Until = s.title, s.text, s.hertz, s.until
	c.Sample, c.Tolerance, c.Record = s.sample, s.relative, s.record
	l.untilP = l.doc.places[join([]string{"study", "until_s"})]
}

// buses

func busFields() []field[busSpec] {
	return []field[busSpec]{
		above("voltage_kV", "kV line-line rms", "required", 0, 2000, func(b *busSpec, x float64) { b.volts = x }, "rated voltage").in(1e3),
		yes("dead", func(b *busSpec, v bool) { b.dead = v }, "it has no source at the start, on purpose"),
	}
}

func (l *loader) buses() {
	l.busAt, l.badBus = make(map[string]int), make(map[string]bool)
	l.section("bus", MaxBuses, "quay", func(p []string, t map[string]any) {
		b := busSpec{name: p[1]}
		v := read(l.doc, p, t, busFields(), &b, "a bus")
		if !v.given["voltage_kV"] {
			l.badBus[b.name] = true
			b.volts = math.NaN()
		}
		l.busAt[b.name] = len(l.c.buses)
		l.c.buses = append(l.c.buses, b)
	})
	if len(l.c.buses) == 0 && l.doc.root["bus"] == nil {
		l.doc.faults = append(l.doc.faults, &Fault{File: l.doc.file, Text: "no buses; want tables such as [bus.quay]"})
	}
	l.used = make([]bool, len(l.c.buses))
	l.busNames = l.c.BusNames()
}

// devices

func (l *loader) devices() {
	d := l.doc
	all := kinds()
	var kindList []string
	for _, k := range all {
		kindList = append(kindList, k.name)
	}
	l.devAt, l.badDev = make(map[string]int), make(map[string]bool)
	l.section("device", MaxDevices, "battery-1", func(p []string, t map[string]any) {
		name := p[1]
		l.badDev[name] = true
		if _, dup := l.busAt[name]; dup {
			d.fault(p, "a bus has that name too; want another, so that channels can be told apart")
		}
		kv, ok := t["kind"]
		if !ok {
			d.fault(p, "a device needs kind; accepted is one of %s", strings.Join(kindList, ", "))
			l.touch(t)
			return
		}
		ks, ok := kv.(string)
		if !ok {
			d.fault([]string{"device", name, "kind"}, "%s; want a string, one of %s", typeName(kv), strings.Join(kindList, ", "))
			l.touch(t)
			return
		}
		k := findKind(all, ks)
		if k == nil {
			n, ok := nearest(ks, kindList)
			hint := ""
			if ok {
				hint = fmt.Sprintf("did you mean %s? ", n)
			}
			d.fault([]string{"device", name, "kind"}, "unknown; %saccepted is one of %s", hint, strings.Join(kindList, ", "))
			l.touch(t)
			return
		}
		before := len(d.faults)
		spec := deviceSpec{name: name, kind: k}
		fine := l.terminals(&spec, p, t)
		skip := append([]string{"kind"}, k.terminals...)
		pt, v := k.read(d, p, t, skip)
		spec.part = pt
		spec.site = &site{hertz: l.c.Frequency, given: v.given}
		for _, b := range spec.at {
			if b >= 0 {
				spec.site.volts = append(spec.site.volts, l.c.buses[b].volts)
			}
		}
		l.badDev[name] = !fine || len(d.faults) > before
		l.devAt[name] = len(l.c.devices)
		l.c.devices = append(l.c.devices, spec)
	})
	if len(l.c.devices) == 0 && d.root["device"] == nil {
		d.faults = append(d.faults, &Fault{File: d.file, Text: "no devices; want tables such as [device.battery-1]"})
	}
	l.feeding()
	l.built = make([]engine.Device, len(l.c.devices))
	for i := range l.c.devices {
		s := &l.c.devices[i]
		if l.badDev[s.name] {
			continue
		}
		dev, err := s.build()
		if err != nil {
			for _, e := range causes(err) {
				if k, ok := e.(*keyError); ok {
					d.fault([]string{"device", s.name, k.key}, "%s", k.text)
					continue
				}
				d.fault([]string{"device", s.name}, "%s", plain(e))
			}
			l.badDev[s.name] = true
			continue
		}
		l.built[i] = dev
	}
}

// touch marks the buses that a device at fault names as used, so that they
// aren't reported too.
func (l *loader) touch(t map[string]any) {
	mark := func(v any) {
		if s, ok := v.(string); ok {
			if b, ok := l.busAt[s]; ok {
				l.used[b] = true
			}
		}
	}
	for _, k := range []string{"bus", "from", "to"} {
		mark(t[k])
	}
	if list, ok := t["buses"].([]any); ok {
		for _, v := range list {
			mark(v)
		}
	}
}

// terminals resolves the buses of a device.
func (l *loader) terminals(s *deviceSpec, p []string, t map[string]any) bool {
	d := l.doc
	good := true
	keys, ends := s.kind.terminals, make([]any, 0, 2)
	for _, k := range keys {
		v, ok := t[k]
		if !ok {
			of := "the name of a bus"
			if s.kind.many() {
				of = "a list of the names of its buses"
			}
			d.fault(p, "%s needs %s, %s", s.kind.what(), strings.Join(keys, " and "), of)
			good = false
			break
		}
		ends = append(ends, v)
	}
	if s.kind.many() && good {
		list, ok := ends[0].([]any)
		switch {
		case !ok:
			d.fault([]string{p[0], p[1], keys[0]}, "%s; want a list of the names of its buses", typeName(ends[0]))
			return false
		case len(list) == 0:
			d.fault([]string{p[0], p[1], keys[0]}, "no buses; want a list of the names of its buses")
			return false
		case len(list) > MaxNumbers:
			d.fault([]string{p[0], p[1], keys[0]}, "%d entries; accepted are %d", len(list), MaxNumbers)
			return false
		}
		ends = list
	}
	for i, v := range ends {
		k := keys[min(i, len(keys)-1)]
		key := []string{p[0], p[1], k}
		name, ok := v.(string)
		if !ok {
			d.fault(key, "%s; want the name of a bus", typeName(v))
			s.at = append(s.at, -1)
			good = false
			continue
		}
		b, ok := l.busAt[name]
		if !ok {
			near := ""
			if !d.full() {
				near, _ = nearest(name, l.busNames)
			}
			if near != "" {
				l.used[l.busAt[near]] = true // it is what was meant
			}
			d.fault(key, "no bus of that name; %s", hint(near, l.busNames))
			s.at = append(s.at, -1)
			good = false
			continue
		}
		s.at = append(s.at, b)
		l.used[b] = true
		good = good && !l.badBus[name]
	}
	seen := make(map[int]bool)
	for k := 0; good && k < len(s.at); k++ {
		first, twice := s.at[0], seen[s.at[k]]
		seen[s.at[k]] = true
		a, b := l.c.buses[first], l.c.buses[s.at[k]]
		switch {
		case twice && s.kind.many():
			d.fault(p, "bus %s is listed twice; want different ones", b.name)
			good = false
		case twice:
			d.fault(p, "from and to are the same bus %s; want two", a.name)
			good = false
		case s.kind.sameVolts && math.Abs(a.volts-b.volts) > 1e-9*a.volts:
			d.fault(p, "%s between bus %s of %g kV and bus %s of %g kV; want buses of one voltage, or a transformer", s.kind.what(), a.name, a.volts/1e3, b.name, b.volts/1e3)
			good = false
		}
	}
	return good
}

// union is a set of disjoint sets of buses.
type union []int

func newUnion(n int) union {
	u := make(union, n)
	for i := range u {
		u[i] = i
	}
	return u
}

func (u union) find(i int) int {
	for u[i] != i {
		u[i] = u[u[i]]
		i = u[i]
	}
	return i
}

// feeding sets, for every device, the total rating of the sources and
// transformers in its part of the network: the buses that lines and breakers,
// open or closed, tie to its own.
func (l *loader) feeding() {
	u := newUnion(len(l.c.buses))
	for _, s := range l.c.devices {
		for k, b := range s.at {
			for _, a := range s.at[:k] {
				// A reduced network may span several voltages.
				if a >= 0 && b >= 0 && (s.kind.sameVolts || s.kind.many() && l.c.buses[a].volts == l.c.buses[b].volts) {
					u[u.find(a)] = u.find(b)
					break
				}
			}
		}
	}
	sum := make(map[int]float64)
	total := 0.0
	for _, s := range l.c.devices {
		if l.badDev[s.name] {
			continue
		}
		r := s.part.rating(s.site)
		total += r
		for _, b := range s.at {
			sum[u.find(b)] += r
		}
	}
	for i := range l.c.devices {
		s := &l.c.devices[i]
		fed := total
		if len(s.at) > 0 && s.at[0] >= 0 {
			if r := sum[u.find(s.at[0])]; r > 0 {
				fed = r
			}
		}
		if fed == 0 {
			fed = 1e3 // there are faults anyway: nothing feeds anything
		}
		s.site.feeding = func() float64 { return fed }
	}
}

// connections finds buses without devices and islands without a source.
func (l *loader) connections() {
	c := l.c
	u := newUnion(len(c.buses))
	unsure := false // a device at fault may be what is missing
	source := make([]bool, len(c.buses))
	for i, s := range c.devices {
		if l.built[i] == nil {
			unsure = true
			continue
		}
		_, former := l.built[i].(facet.Former)
		sw, switched := l.built[i].(facet.Switchable)
		for k := 1; k < len(s.at) && (!switched || sw.Closed()); k++ {
			u[u.find(s.at[0])] = u.find(s.at[k])
		}
		if former {
			source[s.at[0]] = true
		}
	}
	unsure = unsure || len(l.badDev) > len(c.devices)
	live := make(map[int]bool)
	marked := make(map[int]bool)
	members := make(map[int][]string)
	for b := range c.buses {
		r := u.find(b)
		live[r] = live[r] || source[b]
		marked[r] = marked[r] || c.buses[b].dead
		members[r] = append(members[r], c.buses[b].name)
	}
	for b, s := range c.buses {
		p := []string{"bus", s.name}
		r := u.find(b)
		switch {
		case !l.used[b]:
			l.doc.fault(p, "no device is connected to it; connect one, or remove the bus")
		case unsure || l.badBus[s.name]:
		case !live[r] && !marked[r]:
			marked[r] = true // one report for the island
			l.doc.fault(p, "no source holds the voltage of %s; connect a grid or a grid-forming inverter, close a breaker, or say dead = true if that is meant", list(members[r]))
		case live[r] && s.dead:
			l.doc.fault(append(p, "dead"), "the bus is connected to a source; remove the mark")
		}
	}
}

// detail reads the rules of detail and puts the devices at their levels.
func (l *loader) detail() {
	v, ok := l.doc.root["detail"]
	if !ok {
		return
	}
	t, ok := l.doc.asTable([]string{"detail"}, v, `a table with lines such as "line-*" = "quasi-steady"`)
	if !ok {
		return
	}
	if len(t) > MaxEntries {
		l.doc.fault([]string{"detail"}, "%d rules; accepted are %d", len(t), MaxEntries)
		return
	}
	var keys [][]string
	for _, k := range l.doc.keysOf([]string{"detail"}, t) {
		key := []string{"detail", k}
		level, ok := t[k].(string)
		if !ok {
			l.doc.fault(key, "%s; want the name of a level of detail", typeName(t[k]))
			continue
		}
		if len(k) > MaxString || len(level) > MaxString {
			l.doc.fault(key, "longer than %d bytes", MaxString)
			continue
		}
		keys = append(keys, key)
		l.c.Rules = append(l.c.Rules, DetailRule{k, level})
	}
	for _, b := range l.built {
		if b == nil {
			return // rules can't be judged before all devices are there
		}
	}
	at, errs := levels(l.c.devices, l.c.buses, l.built, l.c.Rules)
	for k, err := range errs {
		if err != nil {
			l.doc.fault(keys[k], "%s", err)
		}
	}
	for i := range l.built {
		dev, err := withLevel(l.built[i], at[i])
		if err != nil {
			l.doc.fault([]string{"device", l.c.devices[i].name}, "%s", plain(err))
			continue
		}
		l.built[i] = dev
	}
}

// record checks the patterns of channels.
func (l *loader) record() {
	key := []string{"study", "record"}
	const patience = 200000 // comparisons that come to nothing, before the rest is left unchecked
	spent := 0
	for _, p := range l.c.Record {
		if spent > patience {
			break // there are faults already
		}
		found := false
		var err error
		for _, name := range l.names {
			var ok bool
			if ok, err = path.Match(p, name); err != nil {
				break
			}
			if ok {
				found = true
				break
			}
			spent++
		}
		if found {
			spent = 0
		}
		switch {
		case err != nil:
			l.doc.fault(key, "%q is no pattern; want a channel's name in which * stands for any characters", p)
		case !found && l.complete():
			l.doc.fault(key, "no channel matches %q; %s", p, l.suggestChannel(p))
		}
	}
}

// complete tells whether every device could be built.
func (l *loader) complete() bool {
	for _, b := range l.built {
		if b == nil {
			return false
		}
	}
	return len(l.badDev) == len(l.c.devices)
}

// suggestChannel ends a message about an unknown channel.
func (l *loader) suggestChannel(name string) string {
	if l.doc.full() {
		return "see the faults before"
	}
	owner, quantity, _ := strings.Cut(name, ".")
	owners := append(l.c.BusNames(), l.c.DeviceNames()...)
	if !contains(owners, owner) {
		return suggest(owner, owners)
	}
	var of []string
	for _, n := range l.names {
		if q, ok := strings.CutPrefix(n, owner+"."); ok {
			of = append(of, q)
		}
	}
	if q, ok := nearest(quantity, of); ok {
		return fmt.Sprintf("did you mean %s.%s? %s has %s", owner, q, owner, list(of))
	}
	return fmt.Sprintf("%s has %s", owner, list(of))
}
