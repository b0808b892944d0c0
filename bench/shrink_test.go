package bench

import (
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"islet/cases"
	"islet/engine"
	"islet/engine/modes"
)

// shrunkPair returns a case and what is left of it.
func shrunkPair(t testing.TB, name string, source []byte, o cases.ShrinkOptions, ov ...cases.Override) (full, small *cases.Case, s *cases.Shrunk) {
	t.Helper()
	full, err := cases.Parse(name, source, ov...)
	if err != nil {
		t.Fatal(err)
	}
	if s, err = cases.Shrink(name, source, o, ov...); err != nil {
		t.Fatal(err)
	}
	if small, err = cases.Parse(name, s.Source); err != nil {
		t.Fatal(err)
	}
	return full, small, s
}

// largestDeviation runs both cases and returns the largest deviation of a bus
// voltage or a source's power, relative to its range, and whose it is.
func largestDeviation(t testing.TB, full, small *cases.Case, tolerance float64) (worst float64, where string, times [2]time.Duration, steps [2]int) {
	t.Helper()
	var channels []string
	for _, b := range small.BusNames() {
		channels = append(channels, b+".v")
	}
	for _, d := range small.DeviceNames() {
		if k := small.Kind(d); strings.HasPrefix(k, "grid") {
			channels = append(channels, d+".p", d+".q")
		}
	}
	var traces [2]*engine.Trace
	for k, c := range []*cases.Case{full, small} {
		sim, err := c.Start(&engine.Options{Record: channels, Sample: 1e-3, Tolerance: tolerance, NoLedger: true, FixedFrame: true})
		if err != nil {
			t.Fatal(err)
		}
		begin := time.Now()
		if traces[k], err = sim.Run(context.Background(), c.Until); err != nil {
			t.Fatal(err)
		}
		times[k], steps[k] = time.Since(begin), sim.Stats().Steps
	}
	for _, name := range channels {
		a, b := traces[0].Column(name), traces[1].Column(name)
		if len(a) != len(b) {
			t.Fatalf("%s: %d rows against %d", name, len(a), len(b))
		}
		lo, hi, off := a[0], a[0], 0.0
		for k := range a {
			lo, hi = math.Min(lo, a[k]), math.Max(hi, a[k])
			off = math.Max(off, math.Abs(a[k]-b[k]))
		}
		if r := off / math.Max(hi-lo, 1e-3*math.Abs(hi)); r > worst || r != r {
			worst, where = r, name
		}
	}
	return worst, where, times, steps
}

// eigenvalues of a case's linearisation at its start.
func eigenvalues(t testing.TB, c *cases.Case) []complex128 {
	t.Helper()
	sim, err := c.Start(nil)
	if err != nil {
		t.Fatal(err)
	}
	linear, err := sim.Linearise(nil)
	if err != nil {
		t.Fatal(err)
	}
	report, err := modes.Analyse(linear, nil)
	if err != nil {
		t.Fatal(err)
	}
	var out []complex128
	for _, m := range report.Modes {
		out = append(out, m.Value)
	}
	return out
}

// Shipped cases without the buses that can go have the same waveforms through
// islanding, steps, ramps and resynchronisation, and their modes are modes of the
// full case.
func TestShippedCasesShrunk(t *testing.T) {
	for _, c := range []struct {
		name     string
		loads    bool
		removed  int
		accuracy float64
	}{
		// The solver's tolerance is 1e-7; the plain feeder's source has one
		// microhm, by which voltages of rounding size make currents.
		{"cigre-lv", false, 10, 1e-6},
		{"cigre-lv-plain", false, 12, 1e-4},
		{"cigre-lv-plain", true, 16, 1e-4},
		{"harbour", false, 7, 2e-6},
		{"harbour", true, 14, 2e-6},
	} {
		source, err := cases.Source(c.name)
		if err != nil {
			t.Fatal(err)
		}
		full, small, s := shrunkPair(t, c.name, source, cases.ShrinkOptions{LoadsAsImpedances: c.loads})
		what := fmt.Sprintf("%s, loads %v", c.name, c.loads)
		if got := len(s.Removed()); got != c.removed {
			t.Errorf("%s: %d buses taken out, want %d", what, got, c.removed)
		}
		worst, where, _, steps := largestDeviation(t, full, small, 1e-7)
		t.Logf("%s: unknowns %v, steps %v, largest deviation %.2g of range (%s)", what, s.Unknowns, steps, worst, where)
		if !(worst < c.accuracy) {
			t.Errorf("%s: %s deviates by %g of its range", what, where, worst)
		}
		all := eigenvalues(t, full)
		for _, e := range eigenvalues(t, small) {
			nearest := math.Inf(1)
			for _, a := range all {
				nearest = math.Min(nearest, cmplx.Abs(a-e)/math.Max(1, cmplx.Abs(a)))
			}
			if !(nearest < 1e-6) {
				t.Errorf("%s: mode %.6g 1/s is none of the full case; the nearest is off by %g", what, e, nearest)
			}
		}
	}
}

// longFeeder is a network of the given number of 0.4 kV buses in a tree with a few
// rings, cables of five cross-sections, invented: a source at every tenth bus, half
// of them followers; a load with each source, one of which steps.
func longFeeder(buses int) []byte {
	rng := rand.New(rand.NewPCG(21, 22))
	var b strings.Builder
	p := func(format string, a ...any) { fmt.Fprintf(&b, format, a...) }
	p("[study]\nuntil_s = 0.6\nsample_ms = 1\n")
	ohms := []float64{0.822, 0.51, 0.32, 0.162, 0.063} // per km, X about 0.08 throughout
	line := func(name string, a, c int) {
		p("[device.%s]\nkind = \"line\"\nfrom = \"bus-%d\"\nto = \"bus-%d\"\nresistance_ohm_per_km = %g\nreactance_ohm_per_km = 0.08\nlength_m = %.0f\n", name, a, c, ohms[rng.IntN(5)], 10+40*rng.Float64())
	}
	for k := range buses {
		p("[bus.bus-%d]\nvoltage_kV = 0.4\n", k)
		if k > 0 {
			line(fmt.Sprintf("cable-%d", k), max(0, k-1-rng.IntN(3)), k)
		}
		if k%10 != 0 {
			continue
		}
		p("[device.load-%d]\nkind = \"load\"\nbus = \"bus-%d\"\npower_kW = %g\nreactive_kvar = 2\n", k, k, 5+5*rng.Float64())
		if k%20 == 0 {
			p("[device.former-%d]\nkind = \"grid-forming inverter\"\nbus = \"bus-%d\"\npower_kVA = 40\np_kW = 10\n", k, k)
		} else {
			p("[device.follower-%d]\nkind = \"grid-following inverter\"\nbus = \"bus-%d\"\npower_kVA = 20\np_kW = 5\n", k, k)
		}
	}
	for k := range buses / 20 {
		a := rng.IntN(buses - 10)
		line(fmt.Sprintf("ring-%d", k), a, a+5)
	}
	p("[event.step]\nat_s = 0.1\naction = \"set\"\ndevice = \"load-0\"\nsetpoint = \"p\"\nvalue_kW = 30\n")
	return []byte(b.String())
}

// 200 buses become 20.
func TestLongFeederShrunk(t *testing.T) {
	full, small, s := shrunkPair(t, "feeder", longFeeder(200), cases.ShrinkOptions{})
	if s.Buses != [2]int{200, 20} {
		t.Errorf("buses %v, want 200 and 20", s.Buses)
	}
	worst, where, times, steps := largestDeviation(t, full, small, 1e-7)
	t.Logf("unknowns %v, devices %v, %d groups, steps %v, %v, largest deviation %.2g of range (%s)", s.Unknowns, s.Devices, len(s.Groups), steps, times, worst, where)
	if !(worst < 1e-5) {
		t.Errorf("%s deviates by %g of its range", where, worst)
	}
}

func BenchmarkShrink(b *testing.B) {
	source := longFeeder(200)
	for b.Loop() {
		if _, err := cases.Shrink("feeder", source, cases.ShrinkOptions{}); err != nil {
			b.Fatal(err)
		}
	}
}

// BenchmarkLongFeeder runs the feeder with 200 buses and with 20.
func BenchmarkLongFeeder(b *testing.B) {
	full, small, _ := shrunkPair(b, "feeder", longFeeder(200), cases.ShrinkOptions{})
	for _, c := range []struct {
		name string
		c    *cases.Case
	}{{"200 buses", full}, {"20 buses", small}} {
		b.Run(c.name, func(b *testing.B) {
			for b.Loop() {
				sim, err := c.c.Start(&engine.Options{Record: []string{}, NoLedger: true})
				if err != nil {
					b.Fatal(err)
				}
				if _, err := sim.Run(context.Background(), c.c.Until); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
