package cases

import (
	"context"
	"fmt"
	"math"
	"strings"
	"testing"

	"islet/engine"
)

// parallelCase is an island of n buses in a row with four inverters a bus, in turn
// droop, virtual machines, oscillators and followers, of 20, 30, 40 and 50 kVA, all
// the same per unit, and a load at each bus.
func parallelCase(n int, extra string) string {
	var b strings.Builder
	b.WriteString("[study]\ntitle = \"Inverters in parallel\"\nuntil_s = 0.6\nsample_ms = 2\n")
	for k := range n {
		fmt.Fprintf(&b, "[bus.b%d]\nvoltage_kV = 0.4\n", k)
	}
	for k := range n {
		for j, kva := range []float64{20, 30, 40, 50} {
			fmt.Fprintf(&b, "[device.inv-%d-%d]\nbus = \"b%d\"\npower_kVA = %g\np_kW = %g\n", k, j, k, kva, kva/2)
			switch k % 4 {
			case 3:
				b.WriteString("kind = \"grid-following inverter\"\n")
			default:
				fmt.Fprintf(&b, "kind = \"grid-forming inverter\"\ncontrol = %q\n", []string{"droop", "virtual machine", "oscillator"}[k%4])
			}
		}
		fmt.Fprintf(&b, "[device.load-%d]\nkind = \"load\"\nbus = \"b%d\"\npower_kW = 60\nreactive_kvar = 10\n", k, k)
		if k > 0 {
			fmt.Fprintf(&b, "[device.cable-%d]\nkind = \"line\"\nfrom = \"b%d\"\nto = \"b%d\"\nlength_m = 200\nresistance_ohm_per_km = 0.2\nreactance_ohm_per_km = 0.08\nrated_current_A = 400\n", k, k-1, k)
		}
	}
	b.WriteString("[event.step]\nat_s = 0.1\naction = \"set\"\ndevice = \"load-1\"\nsetpoint = \"p\"\nvalue_kW = 100\n")
	b.WriteString(extra)
	return b.String()
}

func aggregated(t *testing.T, source string, o AggregateOptions) *Aggregated {
	t.Helper()
	a, err := Aggregate("parallel", []byte(source), o)
	if err != nil {
		t.Fatal(err)
	}
	return a
}

// deviation runs both cases with the rules and returns the largest deviation of
// voltage and frequency at the buses, relative to rated voltage and to 1 Hz.
func deviation(t *testing.T, full, small string, rules ...DetailRule) float64 {
	t.Helper()
	run := func(text string) *engine.Trace {
		c, err := Parse("case", []byte(text))
		if err != nil {
			t.Fatal(err)
		}
		c.Rules = append(c.Rules, rules...)
		m, err := c.Start(&engine.Options{Tolerance: 1e-8, Record: []string{"b*.v", "b*.frequency"}})
		if err != nil {
			t.Fatal(err)
		}
		tr, err := m.Run(context.Background(), c.Until)
		if err != nil {
			t.Fatal(err)
		}
		return tr
	}
	a, b := run(full), run(small)
	worst := 0.0
	for i, ch := range a.Channels {
		y := b.Column(ch.Name)
		size := 400.0
		if strings.HasSuffix(ch.Name, ".frequency") {
			size = 1
		}
		for r, t0 := range a.Time {
			if k := math.Round(t0 / 2e-3); math.Abs(t0-k*2e-3) < 1e-12 {
				for q, t1 := range b.Time {
					if math.Abs(t1-t0) < 1e-12 && (q+1 == len(b.Time) || b.Time[q+1] > t1+1e-12) && (r+1 == len(a.Time) || a.Time[r+1] > t0+1e-12) {
						worst = math.Max(worst, math.Abs(a.Values(i)[r]-y[q])/size)
					}
				}
			}
		}
	}
	if worst == 0 {
		t.Error("nothing deviates at all: were the same cases run?")
	}
	return worst
}

// Four proportional inverters a bus run as one, with the same waveforms at the
// buses, at every level of detail.
func TestAggregateExactly(t *testing.T) {
	full := parallelCase(4, "")
	a := aggregated(t, full, AggregateOptions{})
	if len(a.Sums) != 4 || len(a.Apart) != 0 || a.Devices != [2]int{23, 11} {
		t.Fatalf("sums %+v, apart %+v, devices %v", a.Sums, a.Apart, a.Devices)
	}
	for _, s := range a.Sums {
		if math.Abs(s.Rating-140e3) > 1e-6 || len(s.Of) != 4 || s.Spread.Largest > roundingSpread {
			t.Errorf("sum %+v", s)
		}
	}
	rungs := [][]DetailRule{
		nil,
		{{"kind:grid-forming inverter", "inner loops gone"}, {"kind:grid-following inverter", "current loop gone"}},
		{{"kind:grid-forming inverter", "primary only"}, {"kind:grid-following inverter", "primary only"}, {"kind:line", "quasi-steady"}, {"kind:load", "quasi-steady"}},
		{{"kind:grid-forming inverter", "phase only"}, {"kind:grid-following inverter", "injection only"}, {"kind:line", "quasi-steady"}, {"kind:load", "quasi-steady"}},
	}
	for _, rules := range rungs {
		if d := deviation(t, full, string(a.Source), rules...); d > 2e-7 {
			t.Errorf("%v: waveforms at the buses deviate by %.2g", rules, d)
		}
	}
}

// A hundred inverters, four a bus, run as twenty-five.
func TestAggregateHundred(t *testing.T) {
	full := parallelCase(25, "")
	a := aggregated(t, full, AggregateOptions{})
	c, err := Parse("case", a.Source)
	if err != nil {
		t.Fatal(err)
	}
	inverters := 0
	for _, n := range c.DeviceNames() {
		if strings.HasSuffix(c.Kind(n), "inverter") {
			inverters++
		}
	}
	if len(a.Sums) != 25 || inverters != 25 {
		t.Errorf("%d sums, %d inverters", len(a.Sums), inverters)
	}
	if d := deviation(t, full, string(a.Source)); d > 2e-7 {
		t.Errorf("waveforms at the buses deviate by %.2g", d)
	}
}

// Inverters that differ, are named, or stand at another level stay apart, with the
// reason; with a tolerance those nearly alike go together, at a measured error.
func TestAggregateApart(t *testing.T) {
	full := parallelCase(4, "[event.set]\nat_s = 0.2\naction = \"set\"\ndevice = \"inv-0-0\"\nsetpoint = \"p\"\nvalue_kW = 5\n[detail]\n\"inv-1-1\" = \"primary only\"\n")
	full = strings.Replace(full, "[device.inv-2-1]\n", "[device.inv-2-1]\nfrequency_droop_percent = 1.1\n", 1)
	full = strings.Replace(full, "[device.inv-3-1]\n", "[device.inv-3-1]\nlimit_priority = \"q first\"\n", 1)
	a := aggregated(t, full, AggregateOptions{})
	if len(a.Sums) != 4 {
		t.Fatalf("sums %+v", a.Sums)
	}
	why := make(map[string]string)
	for _, d := range a.Apart {
		why[d.Device] = d.Why
	}
	for device, want := range map[string]string{
		"inv-0-0": "event", "inv-1-1": "rule of detail", "inv-2-1": "Oscillator.Eta deviates", "inv-3-1": "limit priorities",
	} {
		if !strings.Contains(why[device], want) {
			t.Errorf("%s stays apart for %q, want %q", device, why[device], want)
		}
	}
	near := aggregated(t, full, AggregateOptions{Tolerance: 0.2})
	for _, s := range near.Sums {
		if s.Bus == "b2" && (len(s.Of) != 4 || s.Spread.Largest < 0.01 || s.Spread.Largest > 0.2) {
			t.Errorf("sum %+v", s)
		}
	}
	exact, approximate := deviation(t, full, string(a.Source)), deviation(t, full, string(near.Source))
	if exact > 2e-7 || approximate < 100*exact || approximate > 1e-2 {
		t.Errorf("deviations %.2g and, nearly alike, %.2g", exact, approximate)
	}
}

// A case with nothing to put together stays as it is, and options and cases at
// fault are refused.
func TestAggregateNothing(t *testing.T) {
	source, err := Source("starter")
	if err != nil {
		t.Fatal(err)
	}
	a, err := Aggregate("starter", source, AggregateOptions{})
	if err != nil {
		t.Fatal(err)
	}
	if len(a.Sums) != 0 || string(a.Source) != string(source) {
		t.Errorf("sums %+v", a.Sums)
	}
	for _, tol := range []float64{-1, 0.6, math.NaN()} {
		if _, err := Aggregate("starter", source, AggregateOptions{Tolerance: tol}); err == nil || !strings.Contains(err.Error(), "want 0 to 0.5") {
			t.Errorf("tolerance %v: %v", tol, err)
		}
	}
	if _, err := Aggregate("broken", []byte("[bus.a]\nvoltage = 1\n"), AggregateOptions{}); err == nil {
		t.Error("a case at fault is taken")
	}
}
