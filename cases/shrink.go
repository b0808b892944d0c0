package cases

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"path"
	"sort"
	"strings"

	"islet/devices"
	"islet/engine"
	"islet/engine/reduction"
	"islet/solvers/facet"
)

// ShrinkOptions say what [Shrink] may take out.
type ShrinkOptions struct {
	// Keep names the buses to keep, all others go if they can; nil means that
	// every bus goes that can.
	Keep []string
	// LoadsAsImpedances takes loads of resistance and inductance into the reduced
	// network, so that their buses can go too. Such loads are impedances already:
	// nothing but their own channels and setpoints is lost.
	LoadsAsImpedances bool
	// PlainBranches writes lines and series loads that have the right phasors at
	// the nominal frequency, in place of the exact circuits. See Group.Deviations
	// for the error. Where no such line exists the exact form is kept.
	PlainBranches bool
}

// Shrunk is a case with fewer buses, and how it came about.
type Shrunk struct {
	// Source is the reduced case's text.
	Source []byte
	// Groups are what was taken out, connected parts one by one.
	Groups []Group
	// Stay are the buses that stay, in order of the file.
	Stay []StayingBus
	// Notes tell of patterns of record and rules of detail that had to go.
	Notes []string
	// Buses, Devices and Unknowns count before and after.
	Buses, Devices, Unknowns [2]int
}

// Group is a connected part of the network that was taken out.
type Group struct {
	Removed  []string // buses
	Absorbed []string // devices that went with them
	Kept     []string // buses around it
	Became   []string // devices that stand for it; none for a dead end
	Kind     string   // "line", "reduced network", ... of those; "" for none
	// Rates are R/L of the exact circuits, 1/s: the rates at which currents decay
	// with the kept voltages at zero. Without inductance there are none.
	Rates []float64
	// Uniform tells that all branches share one ratio R/L.
	Uniform bool
	// Plain tells that plain branches stand for it, with Deviations as the error
	// of their admittance; PlainFault why they couldn't.
	Plain      bool
	Deviations []reduction.Deviation
	PlainFault string
}

// StayingBus is a bus that stays.
type StayingBus struct {
	Bus string
	// Asked tells that Keep names it.
	Asked bool
	// Reasons say why it can't go; none if it could.
	Reasons []string
}

// Removed lists all buses taken out.
func (s *Shrunk) Removed() []string {
	var out []string
	for _, g := range s.Groups {
		out = append(out, g.Removed...)
	}
	return out
}

// Shrink takes buses without injection out of a case: connected groups of buses
// at which nothing but lines and transformers (and, if asked, loads) of resistance
// and inductance meet are replaced by what they are from the buses around them. Two
// buses of one voltage around a group are joined by lines, one alone gets series
// loads; more get a reduced network, or plain lines if asked. All but plain lines is exact: the waveforms
// at the buses that stay are the same, as is the energy ledger.
//
// A bus stays that has anything else, a line with shunt capacitance, or is named by
// an event, a condition or a channel to record, or whose lines and loads do so. A
// pattern of channels holds a bus if it names it: "quay.*" does, "*.v" doesn't.
//
// source is the case's text, which name is for messages; overrides are written into
// it first. The text that isn't concerned stays as it is. The error joins the faults
// of the case, or of the options.
func Shrink(name string, source []byte, o ShrinkOptions, ov ...Override) (*Shrunk, error) {
	c, err := Parse(name, source, ov...)
	if err != nil {
		return nil, err
	}
	if source, err = withOverrides(source, ov); err != nil {
		return nil, err
	}
	s := &shrinker{c: c, o: o, out: &Shrunk{}}
	if err := s.prepare(); err != nil {
		return nil, err
	}
	s.reasons()
	s.groups()
	if err := s.write(name, source); err != nil {
		return nil, err
	}
	return s.out, nil
}

// shrinker is a case being shrunk.
type shrinker struct {
	c     *Case
	o     ShrinkOptions
	out   *Shrunk
	built []engine.Device // as built
	level []string        // "" for as built
	busAt map[string]int
	asked []bool
	why   [][]string // reasons of each bus
	// what events, conditions and channels to record name a device or bus
	named map[string][]string

	goneBus, goneDevice []bool
	text                map[int]string // what stands for a group, by its first device
	rules               []DetailRule   // for new devices
	added               map[string]bool
}

func (s *shrinker) prepare() error {
	c := s.c
	s.busAt = make(map[string]int)
	for b, spec := range c.buses {
		s.busAt[spec.name] = b
	}
	s.asked, s.why = make([]bool, len(c.buses)), make([][]string, len(c.buses))
	s.goneBus, s.goneDevice = make([]bool, len(c.buses)), make([]bool, len(c.devices))
	s.text, s.added = make(map[int]string), make(map[string]bool)
	var errs []error
	for _, k := range s.o.Keep {
		b, ok := s.busAt[k]
		if !ok {
			errs = append(errs, fmt.Errorf("cases: %s: no bus %q to keep; %s", c.file, k, suggest(k, c.BusNames())))
			continue
		}
		s.asked[b] = true
	}
	for i := range c.devices {
		dev, err := c.devices[i].build()
		if err != nil {
			errs = append(errs, fmt.Errorf("cases: device %s: %s", c.devices[i].name, plain(err)))
		}
		s.built = append(s.built, dev)
	}
	if err := errors.Join(errs...); err != nil {
		return err
	}
	s.level, _ = levels(c.devices, c.buses, s.built, c.Rules)
	s.named = make(map[string][]string)
	note := func(name, format string, a ...any) {
		s.named[name] = append(s.named[name], fmt.Sprintf(format, a...))
	}
	for _, e := range c.Events {
		note(e.Event.Device, "event %s acts on %s", e.Name, e.Event.Device)
	}
	for _, w := range c.Conditions {
		note(w.Event.Device, "condition %s acts on %s", w.Name, w.Event.Device)
		owner, _, _ := strings.Cut(w.When.Channel, ".")
		note(owner, "condition %s watches %s", w.Name, w.When.Channel)
	}
	for _, p := range c.Record {
		if owner, _, _ := strings.Cut(p, "."); !strings.ContainsAny(owner, `*?[\`) {
			note(owner, "%s is recorded", p)
		}
	}
	return nil
}

// element is a branch of a device, between its terminals 0 and 1 or to ground.
type element struct {
	reduction.Branch
	side int // the terminal to whose voltage R and L are referred
}

// branches are what a line, transformer or load is in a network of RL branches; nil
// if it is something else. wanting says why.
func (s *shrinker) branches(i int) (b []element, wanting string) {
	branch := func(from, to, side int, r, l float64) {
		b = append(b, element{reduction.Branch{From: from, To: to, R: r, L: l}, side})
	}
	spec := &s.c.devices[i]
	switch d := s.built[i].(type) {
	case *devices.Line:
		p := d.Params()
		if p.C > 0 {
			return nil, fmt.Sprintf("%s has shunt capacitance", spec.name)
		}
		branch(0, 1, 0, p.R, p.L)
		return b, ""
	case *devices.Transformer:
		p := d.Params()
		branch(0, 1, 1, p.R, p.L)
		if p.CoreR > 0 {
			branch(0, reduction.Ground, 0, p.CoreR, 0)
		}
		if p.MagnetisingL > 0 {
			branch(0, reduction.Ground, 0, p.MagnetisingR, p.MagnetisingL)
		}
		return b, ""
	case *devices.Load:
		p := d.Params()
		switch {
		case !s.o.LoadsAsImpedances:
			return nil, fmt.Sprintf("%s draws current", spec.name)
		case p.C > 0:
			return nil, fmt.Sprintf("%s has a capacitor", spec.name)
		}
		if p.R > 0 {
			branch(0, reduction.Ground, 0, p.R, 0)
		}
		if p.L > 0 {
			branch(0, reduction.Ground, 0, p.RL, p.L)
		}
		return b, ""
	case *devices.SeriesLoad:
		if !s.o.LoadsAsImpedances {
			return nil, fmt.Sprintf("%s draws current", spec.name)
		}
		p := d.Params()
		branch(0, reduction.Ground, 0, p.R, p.L)
		return b, ""
	}
	return nil, fmt.Sprintf("%s is %s", spec.name, spec.kind.what())
}

// reasons finds why buses stay.
func (s *shrinker) reasons() {
	for b, spec := range s.c.buses {
		s.why[b] = append(s.why[b], s.named[spec.name]...)
		if spec.dead {
			s.why[b] = append(s.why[b], "it has no source at the start")
		}
	}
	for i, spec := range s.c.devices {
		_, wanting := s.branches(i)
		for _, b := range spec.at {
			if wanting != "" {
				s.why[b] = append(s.why[b], wanting)
			}
			// A device that stays whatever happens gives its own reason.
			if wanting == "" {
				s.why[b] = append(s.why[b], s.named[spec.name]...)
			}
		}
	}
}

// goes tells whether a bus is to go.
func (s *shrinker) goes(b int) bool { return !s.asked[b] && len(s.why[b]) == 0 }

// groups takes out the connected groups of buses that can go.
func (s *shrinker) groups() {
	c := s.c
	u := newUnion(len(c.buses))
	for i, spec := range c.devices {
		if b, _ := s.branches(i); b != nil && len(spec.at) == 2 && s.goes(spec.at[0]) && s.goes(spec.at[1]) {
			u[u.find(spec.at[0])] = u.find(spec.at[1])
		}
	}
	members := make(map[int][]int)
	var order []int
	for b := range c.buses {
		if !s.goes(b) {
			continue
		}
		r := u.find(b)
		if members[r] == nil {
			order = append(order, r)
		}
		members[r] = append(members[r], b)
	}
	touching := make([]int, len(c.buses)) // devices left at each bus
	for _, spec := range c.devices {
		for _, b := range spec.at {
			touching[b]++
		}
	}
	for _, r := range order {
		if wanting := s.group(members[r], touching); wanting != "" {
			for _, b := range members[r] {
				s.why[b] = append(s.why[b], wanting)
			}
		}
	}
	for b, spec := range c.buses {
		if !s.goneBus[b] {
			s.out.Stay = append(s.out.Stay, StayingBus{Bus: spec.name, Asked: s.asked[b], Reasons: s.why[b]})
		}
	}
}

// cluster is a connected group of buses on its way out.
type cluster struct {
	buses, kept []int
	absorbed    []int // devices
	node        map[int]int
	// ratio is the voltage of each bus with no current flowing over that of the
	// first kept one; all is referred to that.
	ratio  map[int]complex128
	net    reduction.Network
	keep   []int   // nodes of kept
	level  string  // of detail
	what   string  // lines, transformers and loads
	rating float64 // of the transformers, VA
}

// surround finds what a group of buses absorbs, or says why it can't go.
func (s *shrinker) surround(buses []int) (k *cluster, wanting string) {
	c := s.c
	k = &cluster{buses: buses, node: make(map[int]int), ratio: make(map[int]complex128)}
	for _, b := range buses {
		k.node[b] = len(k.node)
	}
	inside := len(buses)
	var lines, transformers, loads bool
	for i, spec := range c.devices {
		touches := false
		for _, b := range spec.at {
			n, ok := k.node[b]
			touches = touches || ok && n < inside
		}
		if !touches {
			continue
		}
		k.absorbed = append(k.absorbed, i)
		for _, b := range spec.at {
			if _, ok := k.node[b]; !ok {
				k.node[b] = len(k.node)
				k.kept = append(k.kept, b)
			}
		}
		switch d := s.built[i].(type) {
		case *devices.Line:
			lines = true
		case *devices.Transformer:
			transformers = true
			k.rating += d.Params().VA
		default:
			loads = true
		}
	}
	if len(k.kept) == 0 {
		return nil, "nothing of its part of the network would be left"
	}
	sort.Ints(k.kept)
	for _, b := range k.kept {
		k.keep = append(k.keep, k.node[b])
	}
	var kinds []string
	for _, w := range []struct {
		there bool
		name  string
	}{{lines, "lines"}, {transformers, "transformers"}, {loads, "loads"}} {
		if w.there {
			kinds = append(kinds, w.name)
		}
	}
	k.what = strings.Join(kinds, ", ")
	if n := len(kinds); n > 1 {
		k.what = strings.Join(kinds[:n-1], ", ") + " and " + kinds[n-1]
	}
	if wanting := s.refer(k); wanting != "" {
		return nil, wanting
	}
	k.net.Nodes = len(k.node)
	for _, i := range k.absorbed {
		spec := &c.devices[i]
		elements, _ := s.branches(i)
		for _, e := range elements {
			if at := s.detail(i); e.L > 0 && k.level != at {
				if k.level != "" {
					return nil, fmt.Sprintf("what meets there is at different levels of detail (%s is %s)", spec.name, at)
				}
				k.level = at
			}
			// Power is the same on either side: i = i_referred / ratio*, so
			// that impedances are divided by |ratio|^2.
			r := cmplx.Abs(k.ratio[spec.at[e.side]])
			b := reduction.Branch{From: k.node[spec.at[e.From]], To: reduction.Ground, R: e.R / (r * r), L: e.L / (r * r)}
			if e.To != reduction.Ground {
				b.To = k.node[spec.at[e.To]]
			}
			k.net.Branches = append(k.net.Branches, b)
		}
	}
	return k, ""
}

// refer finds the ratios of the buses, or says that transformers in a loop don't
// agree.
func (s *shrinker) refer(k *cluster) (wanting string) {
	k.ratio[k.kept[0]] = 1
	for changed := true; changed; {
		changed = false
		for _, i := range k.absorbed {
			at := s.c.devices[i].at
			if len(at) != 2 {
				continue
			}
			rho := complex128(1)
			if t, ok := s.built[i].(*devices.Transformer); ok {
				rho = t.OpenRatio(0, 1)
			}
			from, isFrom := k.ratio[at[0]]
			to, isTo := k.ratio[at[1]]
			switch {
			case isFrom && !isTo:
				k.ratio[at[1]], changed = from*rho, true
			case isTo && !isFrom:
				k.ratio[at[0]], changed = to/rho, true
			case isFrom && cmplx.Abs(from*rho-to) > 1e-9*cmplx.Abs(to):
				return fmt.Sprintf("ratios or phase shifts of transformers around a loop with %s don't agree", s.c.devices[i].name)
			}
		}
	}
	return ""
}

// sides are the ratios of the kept buses, nil if all are 1.
func (k *cluster) sides() []complex128 {
	out := make([]complex128, len(k.kept))
	turned := false
	for j, b := range k.kept {
		out[j] = k.ratio[b]
		if cmplx.Abs(out[j]-1) < 1e-12 {
			out[j] = 1
		}
		turned = turned || out[j] != 1
	}
	if !turned {
		return nil
	}
	return out
}

// local refers branches between kept buses to their own voltage, or reports that
// some lie between different ones.
func local(branches []reduction.Branch, sides []complex128) ([]reduction.Branch, bool) {
	if sides == nil {
		return branches, true
	}
	out := make([]reduction.Branch, len(branches))
	for i, b := range branches {
		if b.To != reduction.Ground && cmplx.Abs(sides[b.From]-sides[b.To]) > 1e-12*cmplx.Abs(sides[b.To]) {
			return nil, false
		}
		r := cmplx.Abs(sides[b.From])
		b.R, b.L = b.R*r*r, b.L*r*r
		out[i] = b
	}
	return out, true
}

// group takes out one connected group of buses, or says why not. touching counts
// the devices at each bus.
func (s *shrinker) group(buses []int, touching []int) (wanting string) {
	c := s.c
	k, wanting := s.surround(buses)
	if wanting != "" {
		return wanting
	}
	var g Group
	for _, b := range k.buses {
		g.Removed = append(g.Removed, c.buses[b].name)
	}
	for _, b := range k.kept {
		g.Kept = append(g.Kept, c.buses[b].name)
	}
	for _, i := range k.absorbed {
		g.Absorbed = append(g.Absorbed, c.devices[i].name)
	}
	r, err := reduction.Reduce(k.net, k.keep)
	if err != nil {
		return strings.TrimPrefix(err.Error(), "reduction: ")
	}
	for _, ci := range r.Circuits {
		g.Rates = append(g.Rates, ci.Rate())
	}
	_, err = k.net.Ratio()
	g.Uniform = err == nil
	branches, plainly := asBranches(r)
	if plainly {
		branches, plainly = local(branches, k.sides())
	}
	if s.o.PlainBranches && (!plainly || len(branches) > 1 && len(k.keep) == 2) {
		b, dev, err := reduction.PlainBranches(k.net, k.keep, c.Frequency)
		if err != nil {
			g.PlainFault = s.plainFault(err, g.Kept)
		} else if own, ok := local(b.Branches, k.sides()); !ok {
			g.PlainFault = "buses of different voltage are around it"
		} else {
			branches, plainly, g.Plain, g.Deviations = own, true, true, dev
		}
	}
	// Would a bus be left with nothing?
	if plainly && len(branches) == 0 {
		left := append([]int(nil), touching...)
		for _, i := range k.absorbed {
			for _, b := range c.devices[i].at {
				left[b]--
			}
		}
		for _, b := range k.kept {
			if left[b] == 0 {
				return fmt.Sprintf("%s would be left without a device", c.buses[b].name)
			}
		}
	}
	text, err := s.standIn(&g, k, r, branches, plainly)
	if err != nil {
		return err.Error()
	}
	for _, b := range k.buses {
		s.goneBus[b] = true
	}
	for _, i := range k.absorbed {
		s.goneDevice[i] = true
		for _, b := range c.devices[i].at {
			touching[b]--
		}
	}
	for _, b := range k.kept {
		if text != "" {
			touching[b]++
		}
	}
	s.text[k.absorbed[0]] = text
	s.out.Groups = append(s.out.Groups, g)
	return ""
}

// detail is the level of detail of device i.
func (s *shrinker) detail(i int) string {
	if s.level[i] != "" {
		return s.level[i]
	}
	if d, ok := s.built[i].(facet.Detailed); ok {
		return d.Detail()
	}
	return ""
}

// asBranches reads circuits as branches between kept nodes and to ground, where
// each is one.
func asBranches(r *reduction.Reduced) ([]reduction.Branch, bool) {
	list := append([]reduction.Branch(nil), r.Resistive...)
	for _, c := range r.Circuits {
		b := reduction.Branch{From: reduction.Ground, To: reduction.Ground, R: c.R, L: c.L}
		for j, x := range c.Drive {
			const rounding = 1e-12
			switch {
			case x == 0:
			case x > 1-rounding && x < 1+rounding && b.From == reduction.Ground:
				b.From = j
			case x < rounding-1 && x > -1-rounding && b.To == reduction.Ground:
				b.To = j
			default:
				return nil, false
			}
		}
		list = append(list, b)
	}
	return list, true
}

// plainFault says between which buses there are no plain branches.
func (s *shrinker) plainFault(err error, kept []string) string {
	var parts []string
	for _, e := range causes(err) {
		var no *reduction.NoBranchError
		if !errors.As(e, &no) {
			parts = append(parts, strings.TrimPrefix(e.Error(), "reduction: "))
			continue
		}
		to := "ground"
		if no.To != reduction.Ground {
			to = kept[no.To]
		}
		parts = append(parts, fmt.Sprintf("%s to %s would need %.4g ohm and %.4g mH", kept[no.From], to, no.R, no.L*1e3))
	}
	return strings.Join(parts, ", ")
}

// name makes a name for a new device.
func (s *shrinker) name(base string) string {
	for n := 0; ; n++ {
		name := base
		if n > 0 {
			name = fmt.Sprintf("%s-%d", base, n+1)
		}
		_, bus := s.busAt[name]
		if !bus && !s.added[name] && !contains(s.c.DeviceNames(), name) {
			s.added[name] = true
			return name
		}
	}
}

// standIn writes the devices that stand for a group.
func (s *shrinker) standIn(g *Group, k *cluster, r *reduction.Reduced, branches []reduction.Branch, plainly bool) (string, error) {
	var b strings.Builder
	how := "exactly, in transients too"
	if g.Plain {
		how = fmt.Sprintf("as to phasors at %g Hz; transients deviate", s.c.Frequency)
	}
	b.WriteString(comment(fmt.Sprintf("In place of %s %s, without %s: the same from outside %s.",
		k.what, strings.Join(g.Absorbed, ", "), strings.Join(g.Removed, ", "), how)))
	number := len(s.out.Groups) + 1
	begin := func(name, kind string) {
		g.Became = append(g.Became, name)
		if g.Kind == "" {
			g.Kind = kind
		} else if g.Kind != kind {
			g.Kind = "lines and loads"
		}
		fmt.Fprintf(&b, "[device.%s]\nkind = %q\n", name, kind)
	}
	if plainly {
		for n, br := range branches {
			name := fmt.Sprintf("reduced-%d", number)
			if len(branches) > 1 {
				name = fmt.Sprintf("reduced-%d-%d", number, n+1)
			}
			name = s.name(name)
			if n > 0 {
				b.WriteByte('\n')
			}
			switch {
			case br.To == reduction.Ground && br.L == 0:
				begin(name, "load")
				fmt.Fprintf(&b, "bus = %q\nR_ohm = %s\n", g.Kept[br.From], digits(br.R))
			case br.To == reduction.Ground:
				begin(name, "series load")
				fmt.Fprintf(&b, "bus = %q\nR_ohm = %s\nL_H = %s\n", g.Kept[br.From], digits(br.R), digits(br.L))
			default:
				begin(name, "line")
				fmt.Fprintf(&b, "from = %q\nto = %q\nR_ohm = %s\nL_H = %s\nrated_current_A = %s\n", g.Kept[br.From], g.Kept[br.To], digits(br.R), digits(br.L), digits(k.ratedCurrent(br.From, s)))
			}
			if k.level != "" && br.L > 0 {
				s.rules = append(s.rules, DetailRule{name, k.level})
			}
		}
		if len(branches) == 0 {
			return "", nil // a dead end
		}
		b.WriteByte('\n')
		return b.String(), nil
	}
	rated := k.ratedCurrent(0, s)
	sides := k.sides()
	p := devices.ReducedNetworkParams{RatedCurrent: rated, Ratio: sides}
	for _, c := range r.Circuits {
		p.R, p.L, p.Drive = append(p.R, c.R), append(p.L, c.L), append(p.Drive, c.Drive)
	}
	if len(p.R) > MaxNumbers || len(g.Kept) > MaxNumbers {
		return "", fmt.Errorf("what stands for its surroundings would be too large: %d circuits between %d buses, accepted are %d", len(p.R), len(g.Kept), MaxNumbers)
	}
	if _, err := devices.NewReducedNetwork(p); err != nil {
		return "", errors.New("lines without inductance tie the buses around it together")
	}
	name := s.name(fmt.Sprintf("reduced-%d", number))
	begin(name, "reduced network")
	fmt.Fprintf(&b, "buses = %s\nR_ohm = %s\nL_H = %s\ndrive = [\n", quotes(g.Kept), digitsAll(p.R), digitsAll(p.L))
	for _, d := range p.Drive {
		fmt.Fprintf(&b, "  %s,\n", digitsAll(d))
	}
	b.WriteString("]\n")
	if sides != nil {
		ratio, shift := make([]float64, len(sides)), make([]float64, len(sides))
		for j, x := range sides {
			ratio[j], shift[j] = cmplx.Abs(x), cmplx.Phase(x)*180/math.Pi
			if d := math.Round(shift[j]); math.Abs(shift[j]-d) < 1e-9 {
				shift[j] = d + 0 // no minus sign of zero
			}
		}
		fmt.Fprintf(&b, "ratio = %s\nshift_deg = %s\n", digitsAll(ratio), digitsAll(shift))
	}
	if k.rating > 0 {
		fmt.Fprintf(&b, "power_kVA = %s\n", digits(k.rating/1e3))
	}
	fmt.Fprintf(&b, "rated_current_A = %s\n", digits(rated))
	s.rules = append(s.rules, DetailRule{name, k.level})
	resistive, ok := local(r.Resistive, sides)
	if !ok {
		return "", errors.New("lines without inductance tie the buses around it together")
	}
	for n, br := range resistive {
		b.WriteByte('\n')
		name := s.name(fmt.Sprintf("reduced-%d-resistive-%d", number, n+1))
		if br.To == reduction.Ground {
			begin(name, "load")
			fmt.Fprintf(&b, "bus = %q\nR_ohm = %s\n", g.Kept[br.From], digits(br.R))
		} else {
			begin(name, "line")
			fmt.Fprintf(&b, "from = %q\nto = %q\nR_ohm = %s\nL_H = 0\nrated_current_A = %s\n", g.Kept[br.From], g.Kept[br.To], digits(br.R), digits(k.ratedCurrent(br.From, s)))
		}
	}
	b.WriteByte('\n')
	return b.String(), nil
}

// ratedCurrent is what currents at a kept bus are measured by, A rms: the largest
// rating of the lines taken out, at their voltage, or of the transformers.
func (k *cluster) ratedCurrent(j int, s *shrinker) float64 {
	volts := s.c.buses[k.kept[j]].volts
	power := 0.0
	for _, i := range k.absorbed {
		switch d := s.built[i].(type) {
		case *devices.Line:
			power = max(power, d.Params().RatedCurrent*s.c.buses[s.c.devices[i].at[0]].volts)
		case *devices.Transformer:
			power = max(power, devices.RatedAmperes(d.Params().VA, 1))
		}
	}
	return power / volts
}

// comment writes a text as lines of comment.
func comment(text string) string {
	const widest = 100
	var b strings.Builder
	width := 0
	for i, word := range strings.Fields(text) {
		switch {
		case i == 0:
			b.WriteString("# ")
		case width+len(word) > widest:
			b.WriteString("\n# ")
			width = 0
		default:
			b.WriteByte(' ')
		}
		b.WriteString(word)
		width += len(word) + 1
	}
	return b.String() + "\n"
}

// write makes the reduced case's text, and counts.
func (s *shrinker) write(name string, source []byte) error {
	c, out := s.c, s.out
	e := newSourceEdit(source)
	var errs []error
	lost := func(what, name string) {
		errs = append(errs, fmt.Errorf("cases: %s: %s %s has no table [%s.%s] of its own that could be taken out; write it as one", c.file, what, name, what, name))
	}
	for i, spec := range c.devices {
		if text := s.text[i]; text != "" && !e.insertBefore(text, "device", spec.name) {
			lost("device", spec.name)
		}
		if s.goneDevice[i] && !e.remove("device", spec.name) {
			lost("device", spec.name)
		}
	}
	for b, spec := range c.buses {
		if s.goneBus[b] && !e.remove("bus", spec.name) {
			lost("bus", spec.name)
		}
	}
	if err := errors.Join(errs...); err != nil {
		return err
	}
	if len(out.Groups) > 0 {
		e.prepend(fmt.Sprintf("# Made of the case %s by islet shrink: %d of %d buses taken out.\n", baseName(name), len(out.Removed()), len(c.buses)))
	}
	s.record(e)
	for _, r := range c.Rules {
		if len(out.Groups) > 0 && !s.ruleStands(r) {
			e.unset("detail", r.Pattern)
			out.Notes = append(out.Notes, fmt.Sprintf("the rule of detail %q = %q means no device any more and is left out", r.Pattern, r.Level))
		}
	}
	text := e.apply()
	if len(out.Groups) > 0 {
		var err error
		if text, err = s.pinLevels(name, text); err != nil {
			return err
		}
	}
	small, err := Parse(name, text)
	if err != nil {
		return fmt.Errorf("cases: the case written out would be at fault: %w", err)
	}
	out.Source = text
	out.Buses = [2]int{len(c.buses), len(small.buses)}
	out.Devices = [2]int{len(c.devices), len(small.devices)}
	for k, one := range []*Case{c, small} {
		n, err := one.unknowns()
		if err != nil {
			return err
		}
		out.Unknowns[k] = n
	}
	return nil
}

// unknowns counts the unknowns of the case at its levels of detail: two of every
// bus, and the devices' own.
func (c *Case) unknowns() (int, error) {
	sys, err := c.Build()
	if err != nil {
		return 0, err
	}
	n := 2 * len(c.buses)
	for _, name := range sys.DeviceNames() {
		_, own := sys.Device(name).Dims()
		n += own
	}
	return n, nil
}

// record takes patterns out of the list of channels to record that match no
// channel any more.
func (s *shrinker) record(e *sourceEdit) {
	gone := make(map[string]bool)
	for b, spec := range s.c.buses {
		gone[spec.name] = s.goneBus[b]
	}
	for i, spec := range s.c.devices {
		gone[spec.name] = s.goneDevice[i]
	}
	names, _ := s.c.channelNames()
	var keep []string
	for _, p := range s.c.Record {
		stands, lost := false, false
		for _, n := range names {
			if ok, _ := path.Match(p, n); ok {
				owner, _, _ := strings.Cut(n, ".")
				stands = stands || !gone[owner]
				lost = lost || gone[owner]
			}
		}
		if stands || !lost {
			keep = append(keep, p)
			continue
		}
		s.out.Notes = append(s.out.Notes, fmt.Sprintf("nothing is left for %q to record, and it is left out", p))
	}
	switch {
	case len(keep) == len(s.c.Record):
	case len(keep) == 0:
		e.unset("study", "record")
	default:
		e.set(quotes(keep), "study", "record")
	}
}

// channelNames lists the channels of the case, as the loader knows them.
func (c *Case) channelNames() ([]string, error) {
	l := &loader{c: c}
	for i := range c.devices {
		dev, err := c.devices[i].build()
		if err != nil {
			return nil, err
		}
		l.built = append(l.built, dev)
	}
	l.channels()
	return l.names, nil
}

// ruleStands tells whether a rule of detail still means a device that offers its
// level.
func (s *shrinker) ruleStands(r DetailRule) bool {
	if side, rest, ok := strings.Cut(r.Pattern, ":"); ok && (side == "near" || side == "far") {
		name, _, _ := strings.Cut(rest, ":")
		name = strings.TrimSpace(name)
		if b, ok := s.busAt[name]; ok {
			if s.goneBus[b] {
				return false
			}
		} else if !s.remains(name) {
			return false
		}
	}
	means, err := r.selector(s.c.devices, s.c.buses)
	if err != nil {
		return false
	}
	for i := range s.c.devices {
		if d, ok := s.built[i].(facet.Detailed); ok && means(i) && !s.goneDevice[i] && contains(d.Details(), r.Level) {
			return true
		}
	}
	return false
}

// remains tells whether a device of that name stays.
func (s *shrinker) remains(device string) bool {
	for i := range s.c.devices {
		if s.c.devices[i].name == device {
			return !s.goneDevice[i]
		}
	}
	return false
}

// pinLevels adds rules for devices that the rules of the reduced case would put at
// another level than before, the new ones included.
func (s *shrinker) pinLevels(name string, text []byte) ([]byte, error) {
	small, err := Parse(name, text)
	if err != nil {
		return nil, fmt.Errorf("cases: the case written out would be at fault: %w", err)
	}
	want := make(map[string]string)
	for i := range s.c.devices {
		want[s.c.devices[i].name] = s.detail(i)
	}
	for _, r := range s.rules {
		want[r.Pattern] = r.Level
	}
	now := &shrinker{c: small}
	if err := now.prepare(); err != nil {
		return nil, err
	}
	e := newSourceEdit(text)
	changed := false
	for i := range small.devices {
		device := small.devices[i].name
		level, ok := want[device]
		if d, offers := now.built[i].(facet.Detailed); !ok || level == now.detail(i) || !offers || !contains(d.Details(), level) {
			continue
		}
		e.appendTo(dotted([]string{device})+" = "+quote(level)+"\n", "detail")
		changed = true
	}
	if !changed {
		return text, nil
	}
	return e.apply(), nil
}
