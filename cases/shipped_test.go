package cases_test

import (
	"context"
	"math"
	"math/cmplx"
	"path"
	"strings"
	"testing"

	"islet/cases"
	"islet/engine"
	"islet/solvers/facet"
)

// run opens and runs a shipped case.
func run(t *testing.T, name string, until float64, o *engine.Options, rules ...cases.DetailRule) (*cases.Case, *engine.Simulation, *engine.Trace) {
	t.Helper()
	c, err := cases.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	sim, err := c.Start(o, rules...)
	if err != nil {
		t.Fatal(err)
	}
	if until == 0 {
		until = c.Until
	}
	tr, err := sim.Run(context.Background(), until)
	if err != nil {
		t.Fatal(err)
	}
	return c, sim, tr
}

// told tells whether the story of a run has a line with the text, and when.
func told(sim *engine.Simulation, text string) (float64, bool) {
	for _, n := range sim.Notes() {
		if strings.Contains(n.Text, text) {
			return n.Time, true
		}
	}
	return 0, false
}

// Each shipped case starts in a steady state, runs to its end with every event
// told, and closes its ledger within ten times the tolerance.
func TestShippedCasesRun(t *testing.T) {
	infos := cases.Shipped()
	var names []string
	for _, i := range infos {
		names = append(names, i.Name)
		if i.Title == "" || i.Text == "" {
			t.Errorf("%s has title %q and text %q", i.Name, i.Title, i.Text)
		}
	}
	if got := strings.Join(names, " "); got != "cigre-lv cigre-lv-plain droop3 harbour short-lines starter mesh-N" {
		t.Errorf("shipped are %s", got)
	}
	for _, i := range infos {
		name := i.Name
		if name == "mesh-N" {
			name = "mesh-8" // the generated ones have a test of their own
		}
		t.Run(name, func(t *testing.T) {
			c, sim, tr := run(t, name, 0, nil)
			if p := sim.OperatingPoint(); p.Drift > 1e-4 || p.PseudoTransient {
				t.Errorf("operating point drifts at %g per unit per second at %s; %+v", p.Drift, p.Worst, p)
			}
			if sim.Time() != c.Until {
				t.Errorf("ended at %g s", sim.Time())
			}
			if e := sim.Energy(); e.Closure() > 10*c.Tolerance || len(e.LeftOut) > 0 {
				t.Errorf("ledger closes to %g: %+v", e.Closure(), e)
			}
			events := 0
			for _, n := range sim.Notes() {
				if n.Event {
					events++
				}
			}
			if events < len(c.Events) {
				t.Errorf("%d events told, %d planned", events, len(c.Events))
			}
			for _, ch := range tr.Channels {
				for k, x := range tr.Column(ch.Name) {
					if math.IsNaN(x) || math.IsInf(x, 0) {
						t.Fatalf("%s is %g at %g s", ch.Name, x, tr.Time[k])
					}
				}
			}
			// Nothing moves before the first event.
			for _, b := range c.BusNames() {
				v := tr.Column(b + ".v")
				for k, at := range tr.Time {
					if at < c.Events[0].Time && math.Abs(v[k]-v[0]) > 1e-5*v[0] {
						t.Fatalf("%s moves from %g to %g V before %g s", b, v[0], v[k], c.Events[0].Time)
					}
				}
			}
		})
	}
}

// The harbour has the parts and the story it is meant to have, stays within
// plain engineering limits and settles.
func TestHarbour(t *testing.T) {
	c, sim, tr := run(t, "harbour", 0, nil)
	sys := sim.System()
	count := map[string]int{}
	for _, d := range sys.DeviceNames() {
		count[c.Kind(d)]++
	}
	if n := len(sys.BusNames()); n < 30 {
		t.Errorf("%d buses", n)
	}
	for kind, least := range map[string]int{"transformer": 3, "grid-forming inverter": 4, "grid-following inverter": 4, "load": 3, "series load": 3, "shunt capacitor": 1, "frequency meter": 1, "grid": 1} {
		if count[kind] < least {
			t.Errorf("%d of kind %s, want %d", count[kind], kind, least)
		}
	}
	island, ok := told(sim, "tie opens")
	if !ok || island != 0.6 {
		t.Errorf("islanding at %g, %v", island, ok)
	}
	closes, ok := told(sim, "tie closes")
	if !ok || closes < 1.5 || closes > 2.0 {
		t.Errorf("resynchronisation at %g, %v", closes, ok)
	}
	rated := make(map[string]float64)
	for _, b := range sys.BusNames() {
		switch {
		case b == "mainland":
			rated[b] = 33e3
		case strings.HasSuffix(b, "-11") || b == "landing" || b == "causeway" || b == "substation":
			rated[b] = 11e3
		default:
			rated[b] = 400
		}
	}
	// Steady before each event: the last moment before it.
	for _, at := range []float64{0.2, 0.35, 0.6, 1.0, 1.2, closes, 2.1, 2.5} {
		for b, v := range rated {
			x := tr.At(b+".v", at-1e-4) / v
			if b == "fire-pump" && at <= 1.0 {
				if x != 0 {
					t.Errorf("fire-pump has %g of its voltage at %g s", x, at)
				}
				continue
			}
			if x < 0.9 || x > 1.1 {
				t.Errorf("%s has %.3f of its voltage at %g s", b, x, at)
			}
		}
		if f := tr.At("substation.frequency", at-1e-4); f < 49.5 || f > 50.5 {
			t.Errorf("%g Hz at %g s", f, at)
		}
	}
	for _, d := range sys.DeviceNames() {
		size, ok := sys.Device(d).(facet.Sized)
		if !ok || !strings.HasSuffix(c.Kind(d), "inverter") {
			continue
		}
		limit, _ := size.CurrentLimit()
		peak := 0.0
		for _, x := range tr.Column(d + ".i_converter") {
			peak = math.Max(peak, x*math.Sqrt2)
		}
		if peak > limit*1.02 {
			t.Errorf("%s reaches %g A peak, its limit is %g A", d, peak, limit)
		}
		for _, at := range []float64{0.59, 0.99, 1.19, closes - 0.01, 2.09, 2.5} {
			if i := tr.At(d+".i_converter", at) * math.Sqrt2; i > limit/1.2 {
				t.Errorf("%s carries %g A peak at %g s, its limit is %g A", d, i, at, limit)
			}
		}
	}
	for _, at := range []float64{0.6, 1.0, 1.2, 2.5} {
		for _, ch := range []string{"battery-hill.p", "battery-quay.p", "substation.v"} {
			a, b := tr.At(ch, at-0.05), tr.At(ch, at-1e-4)
			if math.Abs(a-b) > 0.02*math.Abs(b) {
				t.Errorf("%s hasn't settled before %g s: %g, %g", ch, at, a, b)
			}
		}
	}
}

// The harbour runs at every level of detail that its devices offer.
func TestHarbourAtEveryLevel(t *testing.T) {
	for _, r := range []cases.DetailRule{
		{Pattern: "*", Level: "quasi-steady"}, {Pattern: "kind:*inverter", Level: "current loop gone"},
		{Pattern: "kind:*inverter", Level: "primary only"}, {Pattern: "solar-*", Level: "primary only"},
	} {
		_, sim, _ := run(t, "harbour", 0, &engine.Options{Sample: 5e-3}, r)
		if _, ok := told(sim, "tie closes"); !ok {
			t.Errorf("%v: no resynchronisation", r)
		}
	}
}

// The published network's equilibrium. Source: N. Pogaku et al., IEEE Trans.
// Power Electronics 22(2), 2007 (parameters), completed with purely resistive
// loads and recomputed by an independent script: P = 4491.61218 W each,
// Q = 19.708264, -531.884398, 594.23866 var, f = 49.93280295 Hz, delta to
// inverter 1 of 0.00110528585 and -0.0119555312 rad, vod = 380.974379,
// 381.69145, 380.22749 V (power-invariant).
func TestPublishedEquilibrium(t *testing.T) {
	_, sim, _ := run(t, "droop3", 0.05, nil)
	near := func(what string, got, want, tol float64) {
		t.Helper()
		if math.Abs(got-want) > tol {
			t.Errorf("%s is %.9g, want %.9g", what, got, want)
		}
	}
	names := []string{"inverter-1", "inverter-2", "inverter-3"}
	first := sim.State(names[0])["delta"]
	for k, n := range names {
		s := sim.State(n)
		near(n+": P", s["P"], 4491.61218, 1e-3)
		near(n+": Q", s["Q"], []float64{19.708264, -531.884398, 594.23866}[k], 1e-3)
		near(n+": delta", s["delta"]-first, []float64{0, 0.00110528585, -0.0119555312}[k], 1e-9)
		near(n+": v_c.d", s["v_c.d"]*math.Sqrt(1.5), []float64{380.974379, 381.69145, 380.22749}[k], 1e-5)
	}
	f, err := sim.Value("bus-1.frequency")
	if err != nil {
		t.Fatal(err)
	}
	near("frequency", f, 49.93280295, 1e-7)
}

// Node voltages of the plain feeder. Source of the network: CIGRE Technical
// Brochure 575, 2014; voltages (per unit and degrees, constant impedances, ideal
// source behind the transformer, its phase shift taken out) computed by an
// independent load flow.
func TestFeederVoltages(t *testing.T) {
	want := map[string][2]float64{
		"R1": {0.982553, -1.54857}, "R2": {0.975028, -1.61747}, "R3": {0.967504, -1.68745}, "R4": {0.960552, -1.75309},
		"R5": {0.955496, -1.80070}, "R6": {0.950441, -1.84882}, "R7": {0.947426, -1.87761}, "R8": {0.944411, -1.90658},
		"R9": {0.941396, -1.93574}, "R10": {0.939671, -1.95252}, "R11": {0.965312, -1.65912}, "R12": {0.952021, -1.64502},
		"R13": {0.943493, -1.53500}, "R14": {0.934969, -1.42297}, "R15": {0.927665, -1.32530}, "R16": {0.942592, -1.74557},
		"R17": {0.936434, -1.86984}, "R18": {0.933032, -1.86417},
	}
	_, sim, _ := run(t, "cigre-lv-plain", 0.01, nil)
	phasor := func(bus string) complex128 {
		t.Helper()
		d, err := sim.Value(bus + ".v_d")
		if err != nil {
			t.Fatal(err)
		}
		q, err := sim.Value(bus + ".v_q")
		if err != nil {
			t.Fatal(err)
		}
		return complex(d, q)
	}
	// Dyn1: the low-voltage side lags by 30 degrees.
	source := phasor("R0") * cmplx.Rect(1, -math.Pi/6)
	for bus, w := range want {
		v := phasor(bus)
		pu := cmplx.Abs(v) / (400 * math.Sqrt(2.0/3))
		deg := cmplx.Phase(v/source) * 180 / math.Pi
		if math.Abs(pu-w[0]) > 1e-6 || math.Abs(deg-w[1]) > 1e-4 {
			t.Errorf("%s: %.6f at %.5f degrees, want %.6f at %.5f", bus, pu, deg, w[0], w[1])
		}
	}
}

// A case starts with its own settings unless others are given.
func TestStartSettings(t *testing.T) {
	c, err := cases.Open("starter", cases.Override{Path: "study.record", Value: `["battery-*.p", "workshop.v"]`}, cases.Override{Path: "study.sample_ms", Value: "50"})
	if err != nil {
		t.Fatal(err)
	}
	sim, err := c.Start(nil)
	if err != nil {
		t.Fatal(err)
	}
	tr, err := sim.Run(context.Background(), 0.25)
	if err != nil {
		t.Fatal(err)
	}
	if len(tr.Channels) != 3 || tr.Rows() != 6 {
		t.Errorf("%d channels, %d rows", len(tr.Channels), tr.Rows())
	}
	o := &engine.Options{Record: []string{"office.v"}, Sample: 0.1}
	if sim, err = c.Start(o); err != nil {
		t.Fatal(err)
	}
	if tr, err = sim.Run(context.Background(), 0.25); err != nil {
		t.Fatal(err)
	}
	if len(tr.Channels) != 1 || tr.Rows() != 4 || o.Solver.RelTol != 0 {
		t.Errorf("%d channels, %d rows, options %+v", len(tr.Channels), tr.Rows(), o)
	}
	if ok, _ := path.Match("office.*", tr.Channels[0].Name); !ok {
		t.Errorf("recorded %s", tr.Channels[0].Name)
	}
}

// A condition of a case file acts, after its delay.
func TestConditionActs(t *testing.T) {
	src, err := cases.Source("starter")
	if err != nil {
		t.Fatal(err)
	}
	src = append(src, "\n[condition.lights-out]\nchannel = \"office.frequency\"\nbelow_Hz = 49.72\nfor_ms = 100\naction = \"trip\"\ndevice = \"lights\"\n"...)
	c, err := cases.Parse("starter", src)
	if err != nil {
		t.Fatal(err)
	}
	sim, err := c.Start(nil)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := sim.Run(context.Background(), 1); err != nil {
		t.Fatal(err)
	}
	if at, ok := told(sim, "lights trips"); !ok || at < 0.4 || at > 0.6 {
		t.Errorf("trip at %g, %v: %v", at, ok, sim.Notes())
	}
}
