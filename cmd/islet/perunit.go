package main

import (
	"context"
	"encoding/csv"
	"fmt"
	"math"
	"path"
	"sort"
	"strconv"
	"strings"

	"islet/cases"
	"islet/devices"
	"islet/engine/perunit"
)

// perunitOptions are the options of islet perunit.
type perunitOptions struct {
	power, voltage float64
	time           string
	base           list
	device         string
	from           list
}

func perunitFlags(c *call) {
	p := &c.perunit
	c.fs.Var(&c.sets, "set", "`PATH=VALUE`: override a value of the case first; may be repeated")
	c.fs.StringVar(&p.device, "device", "*", "devices to show, a `PATTERN` of names")
	c.fs.Float64Var(&p.power, "power-base", 0, "base power of all devices, `kVA` (default: each one's own rating)")
	c.fs.Float64Var(&p.voltage, "voltage-base", 0, "base voltage of all devices, `kV` line-to-line rms (default: each one's own rated voltage, or its bus's)")
	c.fs.StringVar(&p.time, "time", "second", "base of time: `second`, or radian of the nominal frequency, in which inductances are reactances")
	c.fs.Var(&p.base, "base", "`SIGNAL=VALUE`: base value, in SI, of a control signal ("+strings.Join(cases.ControlSignals(), ", ")+"); may be repeated (default: that of its unit)")
	c.fs.Var(&p.from, "from", "`KEY=VALUE,...`: per-unit values of the devices shown, as a maker gives them, taken into SI; may be repeated")
	c.fs.BoolVar(&c.asCSV, "csv", false, "print as CSV")
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
	if !(p.power >= 0) || math.IsInf(p.power, 0) || !(p.voltage >= 0) || math.IsInf(p.voltage, 0) {
		return bad("--power-base %g, --voltage-base %g: want positive values", p.power, p.voltage)
	}
	seconds := 1.0
	switch p.time {
	case "second":
	case "radian":
		seconds = 1 / devices.RadPerSecond(k.Frequency)
	default:
		return bad("--time %q: want second or radian", p.time)
	}
	if _, err := path.Match(p.device, ""); err != nil {
		return bad("--device %q: %v", p.device, err)
	}
	free := make(map[string]float64)
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
			v, err := strconv.ParseFloat(strings.TrimSpace(text), 64)
			if err != nil || math.IsNaN(v) {
				return bad("--from %q: want KEY=VALUE", one)
			}
			from[strings.TrimSpace(key)] = v
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
	w := csv.NewWriter(c.stdout)
	if c.asCSV {
		w.Write([]string{"device", "symbol", "key", "si_value", "unit", "per_unit", "base"})
	} else {
		fmt.Fprintf(c.stdout, "%s: %s\nunits are derived from the signals a gain connects; per-unit values from scaling the equations it stands in\n", k.Name, k.Title)
	}
	used := make(map[string]bool)
	for _, d := range shown {
		b := perunit.Bases{Power: d.Rating, Voltage: d.Volts, Time: seconds}
		if p.power > 0 {
			b.Power = p.power * 1e3
		}
		if p.voltage > 0 {
			b.Voltage = devices.PeakVolts(p.voltage * 1e3)
		}
		own := ""
		if b.Power == 0 {
			b.Power, own = 100e3, " (it has no rating of its own)"
		}
		if err := b.Check(); err != nil {
			return bad("%s: %v", d.Name, err)
		}
		if !c.asCSV {
			fmt.Fprintf(c.stdout, "\n%s (%s): base %.6g kVA%s, %.6g V peak phase (%.6g V line-to-line), %.6g A peak, %.6g ohm, time %s\n",
				d.Name, d.Kind, b.Power/1e3, own, b.Voltage, devices.LineVolts(b.Voltage), b.Current(), b.Voltage/b.Current(), timeBase(seconds))
			if signals := d.ControlSignals(); len(signals) > 0 {
				var text []string
				for _, s := range signals {
					text = append(text, fmt.Sprintf("%s %.6g %s", s.Name, s.Base(b, free), s.Of))
				}
				fmt.Fprintf(c.stdout, "  1 per unit of its control signals: %s\n", strings.Join(text, ", "))
			}
			fmt.Fprintf(c.stdout, "  %-10s %14s %-16s %14s  %s\n", "symbol", "SI", "unit", "per unit", "meaning")
		}
		for _, g := range d.Gains {
			base := g.Base(b, free)
			value := g.Value
			if v, ok := from[g.Key]; ok && g.Key != "" {
				value, used[g.Key] = v*base, true
			} else if len(from) > 0 {
				continue
			}
			if value == 0 && len(from) == 0 {
				continue // an element that isn't there
			}
			if c.asCSV {
				f := func(x float64) string { return strconv.FormatFloat(x, 'g', 12, 64) }
				w.Write([]string{d.Name, g.Symbol, g.Key, f(value), g.Dimension().String(), f(value / base), f(base)})
				continue
			}
			fmt.Fprintf(c.stdout, "  %-10s %14.7g %-16s %14.7g  %s\n", g.Symbol, value, g.Dimension(), value/base, g.Meaning)
		}
		if len(from) > 0 && !c.asCSV {
			fmt.Fprintf(c.stdout, "  for the case file:\n    [device.%s]\n", d.Name)
			for _, g := range d.Gains {
				if v, ok := from[g.Key]; ok && g.Key != "" {
					fmt.Fprintf(c.stdout, "    %s = %s\n", g.Key, strconv.FormatFloat(v*g.Base(b, free), 'g', 10, 64))
				}
			}
		}
	}
	var missing []string
	for key := range from {
		if !used[key] {
			missing = append(missing, key)
		}
	}
	if len(missing) > 0 {
		sort.Strings(missing)
		return bad("--from: the devices shown have no parameter %s", strings.Join(missing, ", "))
	}
	w.Flush()
	return w.Error()
}

func timeBase(seconds float64) string {
	if seconds == 1 {
		return "in seconds"
	}
	return fmt.Sprintf("in radians (1 is %.6g ms)", seconds*1e3)
}
