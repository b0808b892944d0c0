package main

import (
	"context"
	"encoding/csv"
	"fmt"
	"math"
	"path"
	"slices"
	"strconv"
	"strings"

	"islet/cases"
	"islet/devices"
	"islet/engine/perunit"
)

// perunitOptions are the options of islet perunit.
type perunitOptions struct {
	power, frequency float64
	voltage          list
	time             string
	base             list
	device           string
	from             list
}

func perunitFlags(c *call) {
	p := &c.perunit
	c.fs.Var(&c.sets, "set", "`PATH=VALUE`: override a value of the case first; may be repeated")
	c.fs.StringVar(&p.device, "device", "*", "devices to show, a `PATTERN` of names")
	c.fs.Float64Var(&p.power, "power-base", 0, "base power of all devices, `kVA` (default: each one's own rating)")
	c.fs.Var(&p.voltage, "voltage-base", "base voltage, kV line-to-line rms, of all devices at a voltage level: `LEVEL=kV` with the rated voltage of its buses, or kV alone where there is one level; may be repeated (default: each device's own rated voltage, or its bus's)")
	c.fs.Float64Var(&p.frequency, "frequency-base", 0, "base frequency, `Hz`: 1 per unit of the speeds that controls order, and the radian of --time radian (default: the case's)")
	c.fs.StringVar(&p.time, "time", "second", "base of time: `second`, or radian of the base frequency, in which inductances are reactances")
	c.fs.Var(&p.base, "base", "`SIGNAL=VALUE`: base value, in SI, of a control signal ("+strings.Join(cases.ControlSignals(), ", ")+"); may be repeated (default: the base frequency for w, else that of its unit)")
	c.fs.Var(&p.from, "from", "`KEY=VALUE,...`: per-unit values of the devices shown, as a maker gives them, taken into SI; may be repeated")
	c.fs.BoolVar(&c.asCSV, "csv", false, "print as CSV")
}

// voltageBases reads base voltages by level, and checks them against the levels of
// the devices shown. Both are V line-to-line rms.
func voltageBases(given []string, shown []cases.PerUnitDevice) (map[float64]float64, error) {
	var levels []float64
	for _, d := range shown {
		for _, v := range []float64{d.Level, d.HighLevel} {
			if v > 0 && !slices.Contains(levels, v) {
				levels = append(levels, v)
			}
		}
	}
	slices.Sort(levels)
	var names []string
	for _, v := range levels {
		names = append(names, fmt.Sprintf("%g", v/1e3))
	}
	out := make(map[float64]float64)
	for _, s := range given {
		name, text, two := strings.Cut(s, "=")
		if !two {
			name, text = "", s
		}
		v, err := strconv.ParseFloat(strings.TrimSpace(text), 64)
		if err != nil || !(v > 0) || math.IsInf(v, 0) {
			return nil, fmt.Errorf("--voltage-base %q: want kV, or LEVEL=kV, with a positive value", s)
		}
		level := levels[0]
		if two {
			at := slices.Index(names, strings.TrimSpace(name))
			if at < 0 {
				return nil, fmt.Errorf("--voltage-base %q: the devices shown are at %s kV; want LEVEL=kV with one of them", s, strings.Join(names, ", "))
			}
			level = levels[at]
		} else if len(levels) > 1 {
			return nil, fmt.Errorf("--voltage-base %q: the devices shown are at %s kV; say which with LEVEL=kV", s, strings.Join(names, ", "))
		}
		out[level] = v * 1e3
	}
	return out, nil
}

func cmdPerunit(_ context.Context, c *call) error {
	k, err := c.openCase()
	if err != nil {
		return err
	}
	p := &c.perunit
	bad := func(format string, a ...any) error {
		return fmt.Errorf("%w: %s", errUsage, fmt.Sprintf(format, a...))
	}
	for _, o := range []struct {
		name  string
		value float64
	}{{"--power-base", p.power}, {"--frequency-base", p.frequency}} {
		if !(o.value >= 0) || math.IsInf(o.value, 0) {
			return bad("%s %g: want a positive value", o.name, o.value)
		}
	}
	if p.frequency == 0 {
		p.frequency = k.Frequency
	}
	speed := devices.RadPerSecond(p.frequency)
	seconds := 1.0
	switch p.time {
	case "second":
	case "radian":
		seconds = 1 / speed
	default:
		return bad("--time %q: want second or radian", p.time)
	}
	if _, err := path.Match(p.device, ""); err != nil {
		return bad("--device %q: %v", p.device, err)
	}
	free := map[string]float64{"w": speed}
	for _, s := range p.base {
		name, text, _ := strings.Cut(s, "=")
		v, err := strconv.ParseFloat(strings.TrimSpace(text), 64)
		name = strings.TrimSpace(name)
		known := false
		for _, n := range cases.ControlSignals() {
			known = known || n == name
		}
		if err != nil || !(v > 0) || math.IsInf(v, 0) || !known {
			return bad("--base %q: want SIGNAL=VALUE with a positive value and one of the signals %s", s, strings.Join(cases.ControlSignals(), ", "))
		}
		free[name] = v
	}
	from := make(map[string]float64)
	for _, s := range p.from {
		for _, one := range strings.Split(s, ",") {
			key, text, _ := strings.Cut(one, "=")
			key = strings.TrimSpace(key)
			v, err := strconv.ParseFloat(strings.TrimSpace(text), 64)
			if err != nil || math.IsNaN(v) || math.IsInf(v, 0) || key == "" {
				return bad("--from %q: want KEY=VALUE with a finite value", one)
			}
			if _, twice := from[key]; twice {
				return bad("--from %q: %s is given twice", one, key)
			}
			from[key] = v
		}
	}
	list, err := k.Gains()
	if err != nil {
		return fmt.Errorf("%w: %w", errInput, err)
	}
	var shown []cases.PerUnitDevice
	for _, d := range list {
		if ok, _ := path.Match(p.device, d.Name); ok {
			shown = append(shown, d)
		}
	}
	if len(shown) == 0 {
		return bad("--device %q: no device of that name", p.device)
	}
	volts, err := voltageBases(p.voltage, shown)
	if err != nil {
		return bad("%v", err)
	}
	if err := knownKeys(from, shown); err != nil {
		return bad("%v", err)
	}
	w := csv.NewWriter(c.stdout)
	if c.asCSV {
		w.Write([]string{"device", "symbol", "key", "si_value", "unit", "per_unit", "base"})
	} else {
		fmt.Fprintf(c.stdout, "%s: %s\nbase frequency %g Hz, time %s\nunits are derived from the signals a gain connects; per-unit values from scaling the equations it stands in\n",
			k.Name, k.Title, p.frequency, timeBase(seconds))
	}
	for _, d := range shown {
		var rows []cases.Gain
		for _, g := range d.Gains {
			_, given := from[g.Key]
			if given || len(from) == 0 && g.Value != 0 { // a value of 0 is an element that isn't there
				rows = append(rows, g)
			}
		}
		if len(rows) == 0 {
			continue
		}
		b := cases.PerUnitBases{Bases: perunit.Bases{Power: d.Rating, Voltage: d.Volts, Time: seconds}, HighVoltage: d.HighVolts, Signals: free}
		own := ""
		if b.Power == 0 {
			b.Power, own = 100e3, " (it has no rating of its own)"
		}
		if p.power > 0 {
			b.Power, own = p.power*1e3, ""
		}
		if v, ok := volts[d.Level]; ok {
			b.Voltage = devices.PeakVolts(v)
		}
		if v, ok := volts[d.HighLevel]; ok && d.HighLevel > 0 {
			b.HighVoltage = devices.PeakVolts(v)
		}
		if err := b.Check(); err != nil {
			return bad("%s: %v", d.Name, err)
		}
		if !c.asCSV {
			high := ""
			if b.HighVoltage > 0 {
				high = fmt.Sprintf("; high side %.6g V peak phase (%.6g V line-to-line)", b.HighVoltage, devices.LineVolts(b.HighVoltage))
			}
			fmt.Fprintf(c.stdout, "\n%s (%s)\n  base %.6g kVA%s, %.6g V peak phase (%.6g V line-to-line), %.6g A peak, %.6g ohm%s\n",
				d.Name, d.Kind, b.Power/1e3, own, b.Voltage, devices.LineVolts(b.Voltage), b.Current(), b.Voltage/b.Current(), high)
			if signals := d.ControlSignals(); len(signals) > 0 {
				var text []string
				for _, s := range signals {
					text = append(text, fmt.Sprintf("%s %.6g %s", s.Name, s.Base(b), s.Of))
				}
				fmt.Fprintf(c.stdout, "  1 per unit of its control signals: %s\n", strings.Join(text, ", "))
			}
			fmt.Fprintf(c.stdout, "  %-12s %14s %-16s %14s  %s\n", "symbol", "SI", "unit", "per unit", "meaning")
		}
		for _, g := range rows {
			base := g.Base(b)
			value := g.Value
			if len(from) > 0 {
				value = from[g.Key] * base
			}
			if c.asCSV {
				f := func(x float64) string { return strconv.FormatFloat(x, 'g', 12, 64) }
				w.Write([]string{d.Name, g.Symbol, g.Key, f(value), g.Dimension().String(), f(value / base), f(base)})
				continue
			}
			if math.IsInf(value, 1) {
				fmt.Fprintf(c.stdout, "  %-12s %14s %-16s %14s  %s\n", g.Symbol, "none", g.Dimension(), "none", g.Meaning)
				continue
			}
			fmt.Fprintf(c.stdout, "  %-12s %14.7g %-16s %14.7g  %s\n", g.Symbol, value, g.Dimension(), value/base, g.Meaning)
		}
		if len(from) > 0 && !c.asCSV {
			for _, g := range rows {
				if storage := g.Integrations == -1 && g.From.Of != g.To.Of; storage && seconds == 1 {
					fmt.Fprintf(c.stdout, "  note: with time in seconds %s = %.7g per unit is that many seconds; for %.7g per unit at %g Hz use --time radian\n", g.Key, from[g.Key], from[g.Key], p.frequency)
				}
			}
			fmt.Fprintf(c.stdout, "  for the case file:\n    [device.%s]\n", d.Name)
			for _, g := range rows {
				fmt.Fprintf(c.stdout, "    %s = %s\n", g.Key, strconv.FormatFloat(from[g.Key]*g.Base(b), 'g', 10, 64))
			}
		}
	}
	w.Flush()
	return w.Error()
}

// knownKeys checks that each of the keys of from is a parameter of one of the devices
// shown. The error names all that are not, and what there is.
func knownKeys(from map[string]float64, shown []cases.PerUnitDevice) error {
	var have, missing []string
	for _, d := range shown {
		for _, g := range d.Gains {
			if g.Key != "" && !slices.Contains(have, g.Key) {
				have = append(have, g.Key)
			}
		}
	}
	for key := range from {
		if !slices.Contains(have, key) {
			missing = append(missing, key)
		}
	}
	if len(missing) == 0 {
		return nil
	}
	slices.Sort(missing)
	slices.Sort(have)
	return fmt.Errorf("--from: the devices shown have no parameter %s; they have %s", strings.Join(missing, ", "), strings.Join(have, ", "))
}

func timeBase(seconds float64) string {
	if seconds == 1 {
		return "in seconds: inductances and capacitances per unit are too (--time radian gives reactances)"
	}
	return fmt.Sprintf("in radians (1 is %.6g ms)", seconds*1e3)
}
