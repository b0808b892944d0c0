package cases

import (
	"errors"
	"fmt"
	"math"
	"regexp"
	"strings"

	"islet/devices"
	"islet/engine"
	"islet/solvers/facet"
)

// AggregateOptions say which inverters [Aggregate] puts together.
type AggregateOptions struct {
	// Tolerance is the largest relative deviation of a parameter from the mean,
	// per unit of the rating, that is accepted (see [devices.Spread]); 0 accepts
	// proportional inverters alone, for which the sum is exact.
	Tolerance float64
}

// Aggregated is a case with fewer inverters, and how it came about.
type Aggregated struct {
	// Source is the aggregated case's text.
	Source []byte
	// Sums are the inverters that stand for several.
	Sums []Sum
	// Apart tells of inverters that stand beside others of their kind at a bus
	// and stay apart.
	Apart []ApartDevice
	// Notes tell of patterns of record and rules of detail that had to go.
	Notes []string
	// Devices and Unknowns count before and after.
	Devices, Unknowns [2]int
}

// Sum is an inverter that stands for several in parallel.
type Sum struct {
	Name, Bus string
	Of        []string
	Rating    float64 // VA
	Spread    devices.Spread
}

// ApartDevice is an inverter that stays apart, and why.
type ApartDevice struct {
	Device string
	Why    string
}

// inParallel is how devices says which of several inverters differ.
var inParallel = regexp.MustCompile(`^(devices: )?inverters 1 and \d+ in parallel (have )?`)

// maxAggregateTolerance bounds AggregateOptions.Tolerance: beyond it, a mean means
// little.
const maxAggregateTolerance = 0.5

// Aggregate puts inverters of one kind, control and level of detail that stand at
// one bus and are the same per unit of their ratings together to one of the summed
// rating, setpoints included; see [devices.ParallelForming]. The waveforms at the
// buses are the same, and those of the sum the sums. With a tolerance, inverters
// that are nearly so are put together too, which is an approximation.
//
// An inverter stays apart that an event, a condition, a channel to record or a rule
// of detail names.
//
// source, name and overrides are as for [Shrink]. The error joins the faults of the
// case, or of the options.
func Aggregate(name string, source []byte, o AggregateOptions, ov ...Override) (*Aggregated, error) {
	if !(o.Tolerance >= 0 && o.Tolerance <= maxAggregateTolerance) {
		return nil, fmt.Errorf("cases: tolerance %g of inverters to aggregate: want 0 to %g", o.Tolerance, maxAggregateTolerance)
	}
	c, err := Parse(name, source, ov...)
	if err != nil {
		return nil, err
	}
	if source, err = withOverrides(source, ov); err != nil {
		return nil, err
	}
	a := &aggregator{shrinker: shrinker{c: c, out: &Shrunk{}}, tolerance: math.Max(o.Tolerance, roundingSpread), out: &Aggregated{}}
	if err := a.prepare(); err != nil {
		return nil, err
	}
	a.find()
	if err := a.write(name, source); err != nil {
		return nil, err
	}
	return a.out, nil
}

// roundingSpread is the spread that writing parameters in decimals may leave.
const roundingSpread = 1e-9

// aggregator is a case whose inverters are put together; it uses what a shrinker
// knows of the case and of changing its text.
type aggregator struct {
	shrinker
	tolerance float64
	out       *Aggregated
}

// bundle is a group of inverters that go together.
type bundle struct {
	members   []int
	forming   []devices.GridFormingParams
	following []devices.GridFollowingParams
	spread    devices.Spread
}

// with returns the bundle with one inverter more, or says why it doesn't fit.
func (b *bundle) with(i int, dev engine.Device, tolerance float64) (*bundle, error) {
	out := &bundle{members: append(append([]int(nil), b.members...), i)}
	var err error
	switch d := dev.(type) {
	case *devices.GridForming:
		out.forming = append(append(out.forming, b.forming...), d.Params())
		_, out.spread, err = devices.ParallelForming(out.forming)
	case *devices.GridFollowing:
		out.following = append(append(out.following, b.following...), d.Params())
		_, out.spread, err = devices.ParallelFollowing(out.following)
	}
	if err != nil {
		return nil, err
	}
	if out.spread.Largest > tolerance {
		return nil, fmt.Errorf("%s deviates by %.2g from the mean per unit", out.spread.Parameter, out.spread.Largest)
	}
	return out, nil
}

// find makes the groups.
func (a *aggregator) find() {
	c := a.c
	for _, r := range c.Rules {
		name := r.Pattern
		if side, rest, ok := strings.Cut(name, ":"); ok && (side == "near" || side == "far") {
			name, _, _ = strings.Cut(rest, ":")
		}
		name = strings.TrimSpace(name)
		if !strings.ContainsAny(name, `*?[\`) {
			a.named[name] = append(a.named[name], fmt.Sprintf("the rule of detail %q names it", r.Pattern))
		}
	}
	for b, bus := range c.buses {
		var bundles []*bundle
		var misfit []error // of each bundle: why the last one didn't fit
		alone := make(map[int]string)
		kinds := make(map[string]int)
		for i := range c.devices {
			spec := &c.devices[i]
			if len(spec.at) != 1 || spec.at[0] != b {
				continue
			}
			switch a.built[i].(type) {
			case *devices.GridForming, *devices.GridFollowing:
			default:
				continue
			}
			kinds[spec.kind.name]++
			if why := a.named[spec.name]; len(why) > 0 {
				alone[i] = why[0]
				continue
			}
			placed := false
			var last error
			for k, g := range bundles {
				first := g.members[0]
				if c.devices[first].kind != spec.kind {
					continue
				}
				if x, y := a.detail(first), a.detail(i); x != y {
					last = fmt.Errorf("%s is at detail %q, %s at %q", spec.name, y, c.devices[first].name, x)
					continue
				}
				more, err := g.with(i, a.built[i], a.tolerance)
				if err != nil {
					last = fmt.Errorf("beside %s: %s", c.devices[first].name, inParallel.ReplaceAllString(plain(err), ""))
					continue
				}
				bundles[k], placed = more, true
				break
			}
			if !placed {
				g, err := (&bundle{}).with(i, a.built[i], a.tolerance)
				if err != nil {
					alone[i] = err.Error()
					continue
				}
				bundles, misfit = append(bundles, g), append(misfit, last)
			}
		}
		for k, g := range bundles {
			if len(g.members) > 1 {
				a.put(bus.name, g)
			} else if i := g.members[0]; misfit[k] != nil {
				alone[i] = misfit[k].Error()
			}
		}
		for i := range c.devices {
			if why, ok := alone[i]; ok && kinds[c.devices[i].kind.name] > 1 {
				a.out.Apart = append(a.out.Apart, ApartDevice{c.devices[i].name, why})
			}
		}
	}
}

// put puts a group together.
func (a *aggregator) put(bus string, g *bundle) {
	c := a.c
	first := g.members[0]
	s := Sum{Bus: bus, Spread: g.spread}
	s.Name = a.name(fmt.Sprintf("%s-x%d", c.devices[first].name, len(g.members)))
	for _, i := range g.members {
		s.Of = append(s.Of, c.devices[i].name)
		a.goneDevice[i] = true
	}
	var b strings.Builder
	how := "the same at the bus"
	if g.spread.Largest > roundingSpread {
		how = fmt.Sprintf("nearly the same at the bus: %s deviates by up to %.2g", g.spread.Parameter, g.spread.Largest)
	}
	b.WriteString(comment(fmt.Sprintf("In place of %s: %s.", strings.Join(s.Of, ", "), how)))
	fmt.Fprintf(&b, "[device.%s]\nkind = %q\nbus = %q\n", s.Name, c.devices[first].kind.name, bus)
	if len(g.forming) > 0 {
		p, _, _ := devices.ParallelForming(g.forming)
		s.Rating = p.Rating
		writeForming(&b, p)
	} else {
		p, _, _ := devices.ParallelFollowing(g.following)
		s.Rating = p.Rating
		writeFollowing(&b, p)
	}
	b.WriteByte('\n')
	a.text[first] = b.String()
	if d, ok := a.built[first].(facet.Detailed); ok {
		a.rules = append(a.rules, DetailRule{s.Name, d.Detail()})
		if a.level[first] != "" {
			a.rules[len(a.rules)-1].Level = a.level[first]
		}
	}
	a.out.Sums = append(a.out.Sums, s)
}

// symbolKey is a key with its value in the key's unit.
type symbolKey struct {
	name  string
	value float64
}

func writeKeys(b *strings.Builder, keys []symbolKey) {
	for _, k := range keys {
		v := digits(k.value)
		if math.IsInf(k.value, 1) {
			v = "inf"
		} else if !strings.ContainsAny(v, ".e") {
			v += ".0"
		}
		fmt.Fprintf(b, "%s = %s\n", k.name, v)
	}
}

// writeForming writes every symbol of an inverter.
func writeForming(b *strings.Builder, p devices.GridFormingParams) {
	writeKeys(b, []symbolKey{{"power_kVA", p.Rating / 1e3}, {"p_kW", p.P / 1e3}, {"q_kvar", p.Q / 1e3}, {"V_0", p.V0}, {"w_0", p.Omega0}})
	switch c := p.Primary.(type) {
	case devices.Droop:
		fmt.Fprintf(b, "control = %q\n", devices.DroopControl)
		writeKeys(b, []symbolKey{{"m", c.M}, {"n", c.N}, {"w_c", c.OmegaC}, {"psi_deg", c.Psi * 180 / math.Pi}})
	case devices.VirtualMachine:
		fmt.Fprintf(b, "control = %q\n", devices.VirtualMachineControl)
		writeKeys(b, []symbolKey{{"H", c.H}, {"D", c.D}, {"n", c.N}, {"T_v", c.Tv}, {"w_c", c.OmegaC}, {"psi_deg", c.Psi * 180 / math.Pi}})
	case devices.Oscillator:
		fmt.Fprintf(b, "control = %q\n", devices.OscillatorControl)
		writeKeys(b, []symbolKey{{"eta", c.Eta}, {"alpha", c.Alpha}, {"psi_deg", c.Psi * 180 / math.Pi}})
	}
	writeKeys(b, []symbolKey{
		{"Rv_ohm", p.Rv}, {"Xv_ohm", p.Xv}, {"Kpv", p.Kpv}, {"Kiv", p.Kiv}, {"F", p.F}, {"Kaw", p.Kaw}, {"Kpc", p.Kpc}, {"Kic", p.Kic},
		{"I_max_A", p.IMax}, {"Lf_H", p.Filter.Lf}, {"Rf_ohm", p.Filter.Rf}, {"Cf_F", p.Filter.Cf}, {"Lg_H", p.Filter.Lg}, {"Rg_ohm", p.Filter.Rg},
	})
	if l := p.LimitImpedance; l.Gain > 0 {
		writeKeys(b, []symbolKey{{"limit_I_t_A", l.Threshold}, {"limit_k", l.Gain}, {"limit_XR", l.XR}})
	}
	if p.Priority != "" {
		fmt.Fprintf(b, "limit_priority = %q\n", p.Priority)
	}
	if p.OwnSpeed {
		b.WriteString("own_speed = true\n")
	}
}

// writeFollowing writes every symbol of an inverter.
func writeFollowing(b *strings.Builder, p devices.GridFollowingParams) {
	l := p.Filter.Cf == 0 && p.Filter.Lg == 0
	writeKeys(b, []symbolKey{
		{"power_kVA", p.Rating / 1e3}, {"p_kW", p.P / 1e3}, {"q_kvar", p.Q / 1e3}, {"V_0", p.V0}, {"w_0", p.Omega0},
		{"Kp", p.Kp}, {"Ki", p.Ki}, {"w_limit", p.SpeedLimit}, {"w_v", p.OmegaV}, {"v_floor", p.VFloor},
		{"Kpc", p.Kpc}, {"Kic", p.Kic}, {"Kff", p.Kff}, {"I_max_A", p.IMax}, {"Lf_H", p.Filter.Lf}, {"Rf_ohm", p.Filter.Rf},
	})
	if l {
		b.WriteString("l_filter = true\n")
	} else {
		writeKeys(b, []symbolKey{{"Cf_F", p.Filter.Cf}, {"Lg_H", p.Filter.Lg}, {"Rg_ohm", p.Filter.Rg}})
	}
	if p.FixedAmplitude {
		b.WriteString("fixed_amplitude = true\n")
	}
	if p.OmitCapacitor {
		b.WriteString("omit_capacitor = true\n")
	}
	if p.Priority != "" {
		fmt.Fprintf(b, "limit_priority = %q\n", p.Priority)
	}
}

// write makes the aggregated case's text, and counts.
func (a *aggregator) write(name string, source []byte) error {
	c, out := a.c, a.out
	e := newSourceEdit(source)
	var errs []error
	for i, spec := range c.devices {
		if text := a.text[i]; text != "" {
			e.insertBefore(text, "device", spec.name)
		}
		if a.goneDevice[i] && !e.remove("device", spec.name) {
			errs = append(errs, fmt.Errorf("cases: %s: device %s has no table [device.%s] of its own that could be taken out; write it as one", c.file, spec.name, spec.name))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return err
	}
	if len(out.Sums) > 0 {
		e.prepend(fmt.Sprintf("# Made of the case %s by islet shrink: inverters in parallel put together.\n", baseName(name)))
		a.record(e)
	}
	text := e.apply()
	if len(out.Sums) > 0 {
		var err error
		if text, err = a.pinLevels(name, text); err != nil {
			return err
		}
	}
	small, err := Parse(name, text)
	if err != nil {
		return fmt.Errorf("cases: the aggregated case is at fault: %w", err)
	}
	out.Source, out.Notes = text, a.shrinker.out.Notes
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
