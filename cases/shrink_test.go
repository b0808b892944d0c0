package cases

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"islet/devices"
	"islet/engine"
	"islet/engine/reduction"
)

// starCase is a joint of three legs of unlike R/L, with inverters at two of their
// ends and a load at the third that steps.
const starCase = `# A study of ours.
[study]
until_s = 0.4
sample_ms = 0.5

[bus.north]
voltage_kV = 0.4

[bus.south]
voltage_kV = 0.4

[bus.east]
voltage_kV = 0.4

# where the legs meet
[bus.joint]
voltage_kV = 0.4

[device.battery-north]
kind = "grid-forming inverter"
bus = "north"
power_kVA = 60
p_kW = 30

[device.battery-south]
kind = "grid-forming inverter"
bus = "south"
power_kVA = 40
p_kW = 20

[device.shop]
kind = "load"
bus = "east"
power_kW = 40
reactive_kvar = 10

# legs

[device.leg-north]
kind = "line"
from = "north"
to = "joint"
R_ohm = 0.5e-1 # mixed
L_H = 0.1e-3
rated_current_A = 120

[device.leg-south]
kind = "line"
from = "south"
to = "joint"
R_ohm = 0.02
L_H = 0.2e-3
rated_current_A = 150

[device.leg-east]
kind = "line"
from = "joint"
to = "east"
R_ohm = 0.01
L_H = 0.05e-3

[event.shop-opens]
at_s = 0.1
action = "set"
device = "shop"
setpoint = "p"
value_kW = 60

[event.north-trips]
at_s = 0.2
action = "trip"
device = "battery-north"
`

func shrink(t *testing.T, src string, o ShrinkOptions) *Shrunk {
	t.Helper()
	s, err := Shrink("c.toml", []byte(src), o)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// sameWaveforms runs both cases at a tight tolerance and wants the same voltage at
// all buses of the smaller one, and the same powers of its sources, throughout.
//
// Frames keep their speed: when one is turned to a new speed depends on the steps,
// and quasi-steady elements have their reactance at the frame's speed.
func sameWaveforms(t *testing.T, what string, full, small []byte, tolerance float64) {
	t.Helper()
	traces := make([]*engine.Trace, 2)
	var channels []string
	for k, src := range [][]byte{small, full} {
		c, err := Parse("c.toml", src)
		if err != nil {
			t.Fatalf("%s: %v", what, err)
		}
		if k == 0 {
			for _, b := range c.BusNames() {
				channels = append(channels, b+".v", b+".v_a", b+".v_b")
			}
			for _, d := range c.DeviceNames() {
				if strings.HasPrefix(c.Kind(d), "grid") {
					channels = append(channels, d+".p", d+".q", d+".i")
				}
			}
		}
		sim, err := c.Start(&engine.Options{Tolerance: 1e-8, Sample: 0.5e-3, Record: channels, NoLedger: k == 1, FixedFrame: true})
		if err != nil {
			t.Fatalf("%s: %v", what, err)
		}
		if traces[k], err = sim.Run(context.Background(), c.Until); err != nil {
			t.Fatalf("%s: %v", what, err)
		}
		if k == 0 {
			if closure := sim.Energy().Closure(); !(math.Abs(closure) < 1e-6) {
				t.Errorf("%s: the reduced case's energy ledger closes to %g", what, closure)
			}
		}
	}
	small0, full0 := traces[0], traces[1]
	if full0.Rows() != small0.Rows() {
		t.Fatalf("%s: %d rows against %d", what, full0.Rows(), small0.Rows())
	}
	for _, name := range channels {
		a, b := full0.Column(name), small0.Column(name)
		lo, hi := a[0], a[0]
		for _, x := range a {
			lo, hi = math.Min(lo, x), math.Max(hi, x)
		}
		scale := math.Max(hi-lo, 1e-3*math.Abs(hi))
		for k := range a {
			if !(math.Abs(a[k]-b[k]) <= tolerance*scale) {
				t.Errorf("%s: %s at %g s is %.10g, in the reduced case %.10g (range %.4g)", what, name, full0.Time[k], a[k], b[k], hi-lo)
				break
			}
		}
	}
}

// The joint goes, and the case runs with the same waveforms: full, quasi-steady,
// with one ratio R/L, and with loads taken in.
func TestShrunkRunsTheSame(t *testing.T) {
	uniform := strings.NewReplacer("R_ohm = 0.5e-1 # mixed", "R_ohm = 0.01", "R_ohm = 0.01\nL_H = 0.05e-3", "R_ohm = 0.005\nL_H = 0.05e-3").Replace(starCase)
	behind := strings.Replace(starCase, `[bus.joint]`, `[bus.shed]
voltage_kV = 0.4
[device.shed-cable]
kind = "line"
from = "joint"
to = "shed"
length_m = 80
resistance_ohm_per_km = 0.4
reactance_ohm_per_km = 0.08
[device.shed-load]
kind = "load"
bus = "shed"
power_kW = 15
reactive_kvar = 4
[device.shed-motor]
kind = "series load"
bus = "shed"
power_kW = 5
reactive_kvar = 3
[bus.joint]`, 1)
	ohmic := strings.NewReplacer("R_ohm = 0.5e-1 # mixed\nL_H = 0.1e-3", "R_ohm = 0.05\nL_H = 0", "R_ohm = 0.01\nL_H = 0.05e-3", "R_ohm = 0.01\nL_H = 0").Replace(starCase)
	for _, c := range []struct {
		name, src string
		loads     bool
		removed   int
		circuits  int
		uniform   bool
	}{
		{"mixed ratios", starCase, false, 1, 2, false},
		{"one ratio", uniform, false, 1, 2, true},
		{"mixed ratios, quasi-steady", starCase + "[detail]\n\"leg-*\" = \"quasi-steady\"\n", false, 1, 2, false},
		{"load behind a cable", behind, true, 2, 5, false},
		{"load behind a cable, all quasi-steady", behind + "[detail]\n\"*\" = \"quasi-steady\"\n", true, 2, 5, false},
		{"dead end", strings.Replace(starCase, "[bus.joint]", "[bus.end]\nvoltage_kV = 0.4\n[device.stub]\nkind = \"line\"\nfrom = \"end\"\nto = \"joint\"\nR_ohm = 1\nL_H = 1e-3\n[bus.joint]", 1), false, 2, 2, false},
		{"one leg with inductance", ohmic, false, 0, 0, false},
	} {
		s := shrink(t, c.src, ShrinkOptions{LoadsAsImpedances: c.loads})
		if got := len(s.Removed()); got != c.removed {
			t.Errorf("%s: %d buses taken out, want %d; %+v", c.name, got, c.removed, s.Stay)
			continue
		}
		if c.removed == 0 {
			continue
		}
		if g := s.Groups[0]; len(g.Rates) != c.circuits || g.Uniform != c.uniform || g.Kind != "reduced network" {
			t.Errorf("%s: %+v, want %d circuits", c.name, g, c.circuits)
		}
		sameWaveforms(t, c.name, []byte(c.src), s.Source, 1e-5)
		if s.Unknowns[1] >= s.Unknowns[0] {
			t.Errorf("%s: unknowns %v", c.name, s.Unknowns)
		}
	}
}

// Random feeders of buses in a tree with rings, with sources at some and loads at
// others, some of which can be taken in.
func TestShrunkFeedersRunTheSame(t *testing.T) {
	rng := rand.New(rand.NewPCG(11, 12))
	total := 0
	for n := range 8 {
		var b strings.Builder
		p := func(format string, a ...any) { fmt.Fprintf(&b, format, a...) }
		p("[study]\nuntil_s = 0.15\nsample_ms = 0.5\n")
		buses := 6 + rng.IntN(10)
		line := func(a, c, k int) {
			p("[device.line-%d]\nkind = \"line\"\nfrom = \"bus-%d\"\nto = \"bus-%d\"\nR_ohm = %g\nL_H = %g\n", k, a, c, 0.01+0.1*rng.Float64(), 1e-5+1e-4*rng.Float64())
		}
		for k := range buses {
			p("[bus.bus-%d]\nvoltage_kV = 0.4\n", k)
			if k > 0 {
				line(k, rng.IntN(k), k)
			}
			switch {
			case k%5 == 0:
				p("[device.former-%d]\nkind = \"grid-forming inverter\"\nbus = \"bus-%d\"\npower_kVA = 50\np_kW = 10\n", k, k)
			case k%3 == 0:
				p("[device.load-%d]\nkind = \"load\"\nbus = \"bus-%d\"\npower_kW = %g\nreactive_kvar = %g\n", k, k, 2+5*rng.Float64(), 3*rng.Float64())
			}
		}
		for k := range 2 {
			a, c := rng.IntN(buses), rng.IntN(buses)
			if a != c {
				line(a, c, buses+k)
			}
		}
		p("[device.step]\nkind = \"load\"\nbus = \"bus-0\"\npower_kW = 10\n")
		p("[event.step]\nat_s = 0.02\naction = \"set\"\ndevice = \"step\"\nsetpoint = \"p\"\nvalue_kW = 30\n")
		for _, loads := range []bool{false, true} {
			s := shrink(t, b.String(), ShrinkOptions{LoadsAsImpedances: loads})
			total += len(s.Removed())
			sameWaveforms(t, fmt.Sprintf("feeder %d, loads %v", n, loads), []byte(b.String()), s.Source, 2e-5)
		}
	}
	if total < 40 {
		t.Errorf("only %d buses taken out in all", total)
	}
}

// The text keeps what isn't concerned, comments too.
func TestShrunkText(t *testing.T) {
	s := shrink(t, starCase, ShrinkOptions{})
	text := string(s.Source)
	for _, want := range []string{
		"# Made of the case c by islet shrink: 1 of 4 buses taken out.\n# A study of ours.\n[study]",
		"# legs\n\n# In place of lines leg-north, leg-south, leg-east, without joint: the same from outside exactly, in\n# transients too.\n[device.reduced-1]",
		"rated_current_A = 150\n",
		"buses = [\"north\", \"south\", \"east\"]",
		"[event.shop-opens]\nat_s = 0.1\naction = \"set\"\ndevice = \"shop\"\n",
	} {
		if !strings.Contains(text, want) {
			t.Errorf("text lacks %q:\n%s", want, text)
		}
	}
	for _, not := range []string{"where the legs meet", "device.leg-", "bus.joint", "# mixed"} {
		if strings.Contains(text, not) {
			t.Errorf("text still has %q", not)
		}
	}
	if s.Buses != [2]int{4, 3} || s.Devices != [2]int{6, 4} {
		t.Errorf("counts %v, %v", s.Buses, s.Devices)
	}
	again := shrink(t, text, ShrinkOptions{})
	if len(again.Groups) != 0 || string(again.Source) != text {
		t.Errorf("shrunk again it changes: %+v", again.Groups)
	}
}

// Lines in series become one line with the sums, exactly; a dead end goes.
func TestSeriesLinesBecomeOne(t *testing.T) {
	src := `[study]
until_s = 0.1
[bus.a]
voltage_kV = 0.4
[bus.b]
voltage_kV = 0.4
[bus.c]
voltage_kV = 0.4
[device.g]
kind = "grid"
bus = "a"
short_circuit_MVA = 5
[device.one]
kind = "line"
from = "a"
to = "b"
R_ohm = 0.1
L_H = 1e-4
[device.two]
kind = "line"
from = "c"
to = "b"
R_ohm = 0.3
L_H = 5e-4
[device.load]
kind = "load"
bus = "c"
power_kW = 10
`
	s := shrink(t, src, ShrinkOptions{})
	c, err := Parse("c", s.Source)
	if err != nil {
		t.Fatal(err)
	}
	found := false
	for i := range c.devices {
		if c.devices[i].name != "reduced-1" {
			continue
		}
		dev, err := c.devices[i].build()
		if err != nil {
			t.Fatal(err)
		}
		p := dev.(*devices.Line).Params()
		found = math.Abs(p.R-0.4) < 1e-12 && math.Abs(p.L-6e-4) < 1e-15
	}
	if !found {
		t.Errorf("no line of 0.4 ohm and 0.6 mH:\n%s", s.Source)
	}
	// With the load taken in nothing but a series load at the grid is left.
	s = shrink(t, src, ShrinkOptions{LoadsAsImpedances: true})
	if g := s.Groups[0]; len(g.Removed) != 2 || g.Kind != "series load" || len(g.Became) != 1 {
		t.Errorf("%+v", g)
	}
}

// Each bus that stays says why.
func TestShrinkReasons(t *testing.T) {
	for _, c := range []struct {
		name, from, to, bus, want string
	}{
		{"event", "[event.shop-opens]", "[event.line-trips]\nat_s = 0.3\naction = \"trip\"\ndevice = \"leg-east\"\n[event.shop-opens]", "joint", "event line-trips acts on leg-east"},
		{"condition", "[event.shop-opens]", "[condition.low]\nchannel = \"joint.v\"\nbelow_kV = 0.3\naction = \"trip\"\ndevice = \"shop\"\n[event.shop-opens]", "joint", "condition low watches joint.v"},
		{"condition on a line", "[event.shop-opens]", "[condition.high]\nchannel = \"leg-east.i\"\nabove_A = 300\naction = \"trip\"\ndevice = \"shop\"\n[event.shop-opens]", "joint", "condition high watches leg-east.i"},
		{"recording", "until_s = 0.4", "until_s = 0.4\nrecord = [\"*.p\", \"joint.v\"]", "joint", "joint.v is recorded"},
		{"recording of a line", "until_s = 0.4", "until_s = 0.4\nrecord = [\"leg-south.*\"]", "joint", "leg-south.* is recorded"},
		{"capacitance", "L_H = 0.2e-3", "L_H = 0.2e-3\nC_F = 1e-7", "joint", "leg-south has shunt capacitance"},
		{"load", "[event.shop-opens]", "[device.lamp]\nkind = \"load\"\nbus = \"joint\"\npower_kW = 1\n[event.shop-opens]", "joint", "lamp draws current"},
		{"bank", "[event.shop-opens]", "[device.bank]\nkind = \"shunt capacitor\"\nbus = \"joint\"\nreactive_kvar = 5\n[event.shop-opens]", "joint", "bank is a shunt capacitor"},
		{"fault", "[event.shop-opens]", "[device.short]\nkind = \"fault\"\nbus = \"joint\"\n[event.shop-opens]", "joint", "short is a fault"},
		{"meter", "[event.shop-opens]", "[device.meter]\nkind = \"frequency meter\"\nbus = \"joint\"\n[event.shop-opens]", "joint", "meter is a frequency meter"},
		{"levels", "[event.shop-opens]", "[detail]\nleg-south = \"quasi-steady\"\n[event.shop-opens]", "joint", "different levels of detail"},
		{"source", "", "", "north", "battery-north is a grid-forming inverter"},
	} {
		src := strings.Replace(starCase, c.from, c.to, 1)
		s := shrink(t, src, ShrinkOptions{})
		told := false
		for _, b := range s.Stay {
			told = told || b.Bus == c.bus && strings.Contains(strings.Join(b.Reasons, "; "), c.want)
		}
		if !told {
			t.Errorf("%s: %s doesn't stay because %q: %+v", c.name, c.bus, c.want, s.Stay)
		}
	}
	// A load that an event changes, or with a capacitor, isn't taken in.
	s := shrink(t, starCase, ShrinkOptions{LoadsAsImpedances: true})
	for _, b := range s.Stay {
		if b.Bus == "east" && strings.Join(b.Reasons, "; ") != "event shop-opens acts on shop" {
			t.Errorf("%+v", b)
		}
	}
	s = shrink(t, strings.NewReplacer("reactive_kvar = 10", "reactive_kvar = 10\ncapacitive_kvar = 2", "[event.shop-opens]\nat_s = 0.1\naction = \"set\"\ndevice = \"shop\"\nsetpoint = \"p\"\nvalue_kW = 60\n", "").Replace(starCase), ShrinkOptions{LoadsAsImpedances: true})
	for _, b := range s.Stay {
		if b.Bus == "east" && strings.Join(b.Reasons, "; ") != "shop has a capacitor" {
			t.Errorf("%+v", b)
		}
	}
}

// With buses to keep named, all others are to go, and those that can't say so.
func TestShrinkKeep(t *testing.T) {
	s := shrink(t, starCase, ShrinkOptions{Keep: []string{"joint", "north"}})
	if len(s.Groups) != 0 {
		t.Errorf("%+v", s.Groups)
	}
	for _, b := range s.Stay {
		if b.Asked != (b.Bus == "joint" || b.Bus == "north") || !b.Asked && len(b.Reasons) == 0 {
			t.Errorf("%+v", b)
		}
	}
	if _, err := Shrink("c", []byte(starCase), ShrinkOptions{Keep: []string{"nort", "x"}}); err == nil || !strings.Contains(err.Error(), `no bus "nort" to keep; did you mean north?`) || !strings.Contains(err.Error(), `no bus "x"`) {
		t.Errorf("error %v", err)
	}
	// A bus that is asked for and would be left alone keeps its line.
	src := strings.Replace(starCase, "[bus.joint]", "[bus.end]\nvoltage_kV = 0.4\n[bus.mid]\nvoltage_kV = 0.4\n[device.a]\nkind = \"line\"\nfrom = \"end\"\nto = \"mid\"\nR_ohm = 1\nL_H = 1e-3\n[device.b]\nkind = \"line\"\nfrom = \"mid\"\nto = \"joint\"\nR_ohm = 1\nL_H = 1e-3\n[bus.joint]", 1)
	s = shrink(t, src, ShrinkOptions{Keep: []string{"end", "north", "south", "east"}})
	if got := strings.Join(s.Removed(), " "); got != "mid joint" {
		t.Errorf("taken out: %s", got)
	}
	sameWaveforms(t, "end kept", []byte(src), s.Source, 1e-5)
}

// Rules of detail and lists of channels are kept as far as they mean something.
func TestShrinkRulesAndRecord(t *testing.T) {
	src := strings.Replace(starCase, "until_s = 0.4", "until_s = 0.4\nrecord = [\"*.p\", \"leg-*.i\"]", 1) +
		"[detail]\n\"leg-*\" = \"quasi-steady\"\n\"near:north:1\" = \"full\"\n\"kind:line\" = \"quasi-steady\"\n\"near:south:1\" = \"quasi-steady\"\n"
	s := shrink(t, src, ShrinkOptions{})
	if len(s.Removed()) != 1 {
		t.Fatalf("%+v", s.Stay)
	}
	text := string(s.Source)
	for _, want := range []string{`record = ["*.p"]`, `"near:north:1" = "full"`} {
		if !strings.Contains(text, want) {
			t.Errorf("text lacks %q:\n%s", want, text)
		}
	}
	for _, not := range []string{`"leg-*" = `, `"kind:line" = `} {
		if strings.Contains(text, not) {
			t.Errorf("text still has %q:\n%s", not, text)
		}
	}
	if len(s.Notes) != 4 {
		t.Errorf("notes %q", s.Notes)
	}
	small, err := Parse("c", s.Source)
	if err != nil {
		t.Fatal(err)
	}
	now, before := &shrinker{c: small}, &shrinker{c: mustParse(t, src)}
	for _, x := range []*shrinker{now, before} {
		if err := x.prepare(); err != nil {
			t.Fatal(err)
		}
	}
	for i, d := range small.devices {
		want := "quasi-steady"
		for k, was := range before.c.devices {
			if was.name == d.name {
				want = before.detail(k)
			}
		}
		if got := now.detail(i); got != want {
			t.Errorf("%s is at %q, want %q:\n%s", d.name, got, want, text)
		}
	}
	sameWaveforms(t, "quasi-steady by rules", []byte(src), s.Source, 1e-5)
}

func mustParse(t *testing.T, src string) *Case {
	t.Helper()
	c, err := Parse("c", []byte(src))
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// Overrides are written into the text.
func TestShrinkOverrides(t *testing.T) {
	s, err := Shrink("c", []byte(starCase), ShrinkOptions{},
		Override{"device.leg-north.R_ohm", "0.07"}, Override{"study.until_s", "0.25"}, Override{"study.title", "of mine"},
		Override{"detail.battery-*", "primary only"}, Override{"device.shop.voltage_kV", "0.41"})
	if err != nil {
		t.Fatal(err)
	}
	text := string(s.Source)
	for _, want := range []string{"until_s = 0.25\n", "title = \"of mine\"\n", "[detail]\n\"battery-*\" = \"primary only\"\n", "[device.shop]\nvoltage_kV = 0.41\nkind"} {
		if !strings.Contains(text, want) {
			t.Errorf("text lacks %q:\n%s", want, text)
		}
	}
	with, err := Parse("c", []byte(starCase), Override{"device.leg-north.R_ohm", "0.07"})
	if err != nil {
		t.Fatal(err)
	}
	if with.Until != 0.4 {
		t.Errorf("until %g", with.Until)
	}
	if _, err := Shrink("c", []byte(starCase), ShrinkOptions{}, Override{"device.nothing.R_ohm", "1"}); err == nil {
		t.Error("override of nothing accepted")
	}
}

// Plain branches carry their error; one ratio R/L has none; where a branch would be
// negative the exact form stays.
func TestShrinkPlainBranches(t *testing.T) {
	s := shrink(t, starCase, ShrinkOptions{PlainBranches: true})
	g := s.Groups[0]
	if !g.Plain || len(g.Became) != 3 || g.Kind != "line" || len(g.Deviations) != 4 {
		t.Fatalf("%+v", g)
	}
	// The same star as in package reduction, a tenth of it: the outside values of
	// the 50 Hz mesh there, testdata/SOURCES.md, power-checks, section E3.
	c, err := Parse("c", s.Source)
	if err != nil {
		t.Fatal(err)
	}
	r, l := []float64{0.212696, 0.075920, 0.027207}, []float64{0.78652013, 0.16580003, 0.31558607}
	k := 0
	for i := range c.devices {
		if !strings.HasPrefix(c.devices[i].name, "reduced-1") {
			continue
		}
		dev, err := c.devices[i].build()
		if err != nil {
			t.Fatal(err)
		}
		p := dev.(*devices.Line).Params()
		if math.Abs(p.R-r[k]) > 6e-7 || math.Abs(p.L*1e3-l[k]) > 6e-9 {
			t.Errorf("line %d: %g ohm, %g mH, want %g and %g", k, p.R, p.L*1e3, r[k], l[k])
		}
		k++
	}
	for _, d := range g.Deviations {
		if d.Relative < 0.01 || d.Relative > 0.5 {
			t.Errorf("deviation %g at %g Hz", d.Relative, d.Frequency)
		}
	}
	negative := strings.NewReplacer("R_ohm = 0.5e-1 # mixed\nL_H = 0.1e-3", "R_ohm = 0.5\nL_H = 1e-6", "R_ohm = 0.02\nL_H = 0.2e-3", "R_ohm = 0.5\nL_H = 1e-6", "R_ohm = 0.01\nL_H = 0.05e-3", "R_ohm = 1e-3\nL_H = 5e-3").Replace(starCase)
	g = shrink(t, negative, ShrinkOptions{PlainBranches: true}).Groups[0]
	if g.Plain || g.Kind != "reduced network" || !strings.Contains(g.PlainFault, "north to south would need") {
		t.Errorf("%+v", g)
	}
}

// Where two buses are joined by resistances alone beside circuits, the exact form
// has both.
func TestShrinkResistances(t *testing.T) {
	net := reduction.Network{Nodes: 3, Branches: []reduction.Branch{{From: 0, To: 1, R: 1}, {From: 1, To: 2, R: 2}, {From: 0, To: 1, R: 1, L: 1e-3}}}
	r, err := reduction.Reduce(net, []int{0, 2})
	if err != nil {
		t.Fatal(err)
	}
	if b, ok := asBranches(r); !ok || len(b) != 2 {
		t.Errorf("%v, %v", b, ok)
	}
	src := strings.Replace(starCase, "[event.shop-opens]", "[bus.shed]\nvoltage_kV = 0.4\n[device.wire]\nkind = \"line\"\nfrom = \"east\"\nto = \"shed\"\nR_ohm = 0.1\nL_H = 0\n[device.heater]\nkind = \"load\"\nbus = \"shed\"\nR_ohm = 20\n[event.shop-opens]", 1)
	s := shrink(t, src, ShrinkOptions{LoadsAsImpedances: true})
	found := false
	for _, g := range s.Groups {
		found = found || g.Kind == "load" && strings.Contains(string(s.Source), "R_ohm = 20.1\n")
	}
	if !found {
		t.Errorf("no load of 20.1 ohm:\n%s", s.Source)
	}
	sameWaveforms(t, "heater", []byte(src), s.Source, 1e-5)
}

// A path without inductance between buses that stay, beside circuits that tie them
// too, becomes a line of its own.
func TestShrinkResistiveBesideCircuits(t *testing.T) {
	src := strings.NewReplacer(
		"R_ohm = 0.5e-1 # mixed\nL_H = 0.1e-3", "R_ohm = 0.05\nL_H = 0",
		"R_ohm = 0.02\nL_H = 0.2e-3", "R_ohm = 0.02\nL_H = 0",
		"[event.shop-opens]", `[bus.second]
voltage_kV = 0.4
[device.second-north]
kind = "line"
from = "north"
to = "second"
R_ohm = 0.03
L_H = 1e-4
[device.second-south]
kind = "line"
from = "south"
to = "second"
R_ohm = 0.05
L_H = 1e-4
[device.second-joint]
kind = "line"
from = "joint"
to = "second"
R_ohm = 0.02
L_H = 3e-4
[event.shop-opens]`).Replace(starCase)
	s := shrink(t, src, ShrinkOptions{})
	if got := strings.Join(s.Removed(), " "); got != "joint second" {
		t.Fatalf("taken out: %s; %+v", got, s.Stay)
	}
	if text := string(s.Source); !strings.Contains(text, "[device.reduced-1-resistive-1]\nkind = \"line\"\nfrom = \"north\"\nto = \"south\"\nR_ohm = 0.07\n") {
		t.Errorf("no line of 0.07 ohm:\n%s", text)
	}
	sameWaveforms(t, "resistive path", []byte(src), s.Source, 1e-5)
}

// stationCase is a ring of three stations at 11 kV, each with a transformer to a
// board, one of them magnetised, and a feeder at one.
const stationCase = `[study]
until_s = 0.3
sample_ms = 0.5
[bus.supply]
voltage_kV = 11
[bus.one]
voltage_kV = 11
[bus.two]
voltage_kV = 11
[bus.board-one]
voltage_kV = 0.4
[bus.board-two]
voltage_kV = 0.4
[bus.shed]
voltage_kV = 0.4
[device.grid]
kind = "grid"
bus = "supply"
short_circuit_MVA = 60
x_over_r = 4
[device.ring-1]
kind = "line"
from = "supply"
to = "one"
R_ohm = 0.4
L_H = 1e-3
[device.ring-2]
kind = "line"
from = "one"
to = "two"
R_ohm = 0.5
L_H = 0.8e-3
[device.ring-3]
kind = "line"
from = "two"
to = "supply"
R_ohm = 0.2
L_H = 1.5e-3
[device.transformer-one]
kind = "transformer"
from = "one"
to = "board-one"
power_kVA = 250
vector_group = "Dyn11"
impedance_percent = 4
x_over_r = 3
no_load_current_percent = 1
no_load_loss_kW = 0.5
[device.transformer-two]
kind = "transformer"
from = "two"
to = "board-two"
power_kVA = 400
vector_group = "Dyn11"
impedance_percent = 4
x_over_r = 3
lv_kV = 0.41
[device.cable]
kind = "line"
from = "board-two"
to = "shed"
R_ohm = 0.02
L_H = 2e-5
[device.battery]
kind = "grid-forming inverter"
bus = "board-one"
power_kVA = 100
p_kW = 20
[device.shop]
kind = "load"
bus = "shed"
power_kW = 60
reactive_kvar = 20
[event.shop-opens]
at_s = 0.1
action = "set"
device = "shop"
setpoint = "p"
value_kW = 100
`

// Transformers are taken out with their stations: ratios, phase shifts and no-load
// currents stay.
func TestShrunkStationsRunTheSame(t *testing.T) {
	s := shrink(t, stationCase, ShrinkOptions{})
	if got := strings.Join(s.Removed(), " "); got != "one two board-two" {
		t.Fatalf("taken out: %s; %+v", got, s.Stay)
	}
	text := string(s.Source)
	for _, want := range []string{"shift_deg = [0, 30, 30]\n", "power_kVA = 650\n", "ratio = [1, 0.0363636363636364, 0.0372727272727273]"} {
		if !strings.Contains(text, want) {
			t.Errorf("text lacks %q:\n%s", want, text)
		}
	}
	sameWaveforms(t, "stations", []byte(stationCase), s.Source, 1e-5)
	// The same with a load that can be taken in, and with other buses kept.
	calm := stationCase[:strings.Index(stationCase, "[event.")] + "[event.grid]\nat_s = 0.1\naction = \"set\"\ndevice = \"grid\"\nsetpoint = \"voltage\"\nvalue_kV = 10.5\n"
	for _, o := range []ShrinkOptions{{}, {Keep: []string{"supply", "board-two"}, LoadsAsImpedances: true}, {LoadsAsImpedances: true, PlainBranches: true}} {
		s := shrink(t, calm, o)
		if len(s.Removed()) < 3 {
			t.Errorf("%+v: taken out %v", o, s.Removed())
		}
		if o.PlainBranches && (s.Groups[0].Plain || s.Groups[0].PlainFault == "") {
			t.Errorf("%+v", s.Groups[0])
		}
		sameWaveforms(t, fmt.Sprintf("%+v", o), []byte(calm), s.Source, 1e-5)
	}
	quasi := stationCase + "[detail]\n\"kind:line\" = \"quasi-steady\"\n\"kind:transformer\" = \"quasi-steady\"\n"
	sameWaveforms(t, "quasi-steady", []byte(quasi), shrink(t, quasi, ShrinkOptions{}).Source, 1e-5)
	// Transformers in a loop that don't agree hold what they are part of.
	odd := strings.Replace(stationCase, "[device.cable]", "[device.tie]\nkind = \"line\"\nfrom = \"board-one\"\nto = \"board-two\"\nR_ohm = 0.1\nL_H = 1e-4\n[device.cable]", 1)
	told := false
	for _, b := range shrink(t, odd, ShrinkOptions{}).Stay {
		told = told || b.Bus == "one" && strings.Contains(strings.Join(b.Reasons, " "), "don't agree")
	}
	if !told {
		t.Error("transformers in a loop that don't agree aren't told")
	}
	// A lone board behind a transformer, loads taken in, is loads at the station.
	s = shrink(t, calm, ShrinkOptions{LoadsAsImpedances: true})
	if len(s.Groups) != 1 || s.Groups[0].Kind != "reduced network" {
		t.Errorf("%+v", s.Groups)
	}
}

// A table written in another form is said to be in the way.
func TestShrinkInlineTables(t *testing.T) {
	src := strings.Replace(starCase, "# where the legs meet\n[bus.joint]\nvoltage_kV = 0.4\n", "", 1) + "\n[bus]\njoint = { voltage_kV = 0.4 }\n"
	_, err := Shrink("c", []byte(src), ShrinkOptions{})
	if err == nil || !strings.Contains(err.Error(), "bus joint has no table [bus.joint] of its own") {
		t.Errorf("error %v", err)
	}
}

func TestReadSource(t *testing.T) {
	if name, data, err := ReadSource("starter"); err != nil || name != "starter.toml" || len(data) == 0 {
		t.Errorf("%s, %d bytes, %v", name, len(data), err)
	}
	if _, _, err := ReadSource("startr"); err == nil || !strings.Contains(err.Error(), "did you mean starter?") {
		t.Errorf("error %v", err)
	}
}

// Whatever line a case lacks or repeats: if it is a case, so is what is left of it.
func TestShrinkMutated(t *testing.T) {
	lines := strings.Split(strings.TrimRight(everything+starCase[strings.Index(starCase, "[bus.north]"):], "\n"), "\n")
	shrunk := 0
	for i := range lines {
		variants := [][]string{nil, {lines[i], "# a comment"}, {"", lines[i], ""}}
		if i%8 != 0 {
			variants = variants[:1]
		}
		for _, now := range variants {
			src := strings.Join(append(append(append([]string(nil), lines[:i]...), now...), lines[i+1:]...), "\n")
			if _, err := Parse("m", []byte(src)); err != nil {
				continue
			}
			for _, o := range []ShrinkOptions{{}, {LoadsAsImpedances: true, PlainBranches: true}} {
				s, err := Shrink("m", []byte(src), o)
				if err != nil {
					t.Errorf("line %d %q as %q: %v", i+1, lines[i], now, err)
					continue
				}
				shrunk += len(s.Groups)
			}
		}
	}
	if shrunk < 50 {
		t.Errorf("only %d groups taken out: the mutations miss their aim", shrunk)
	}
}

// The buses of the benchmark feeder at which nothing but cables meet go.
func ExampleShrink() {
	name, source, err := ReadSource("cigre-lv")
	if err != nil {
		fmt.Println(err)
		return
	}
	s, err := Shrink(name, source, ShrinkOptions{Keep: []string{"R9"}})
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("%d of %d buses, %d of %d unknowns\n", s.Buses[1], s.Buses[0], s.Unknowns[1], s.Unknowns[0])
	for _, g := range s.Groups {
		fmt.Println(g.Kind, "between", g.Kept)
	}
	c, err := Parse("reduced", s.Source)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Println(c.Kind("reduced-1"))
	// Output:
	// 10 of 20 buses, 136 of 176 unknowns
	// reduced network between [R2 R9 R11 R15 R16]
	// line between [R9 R18]
	// reduced network
}
