package cases

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"islet/engine"
	"islet/solvers/facet"
)

// small is a case without fault that the tests of errors change.
const small = `[study]
until_s = 1

[bus.a]
voltage_kV = 0.4

[bus.b]
voltage_kV = 0.4

[device.source]
kind = "grid"
bus = "a"
short_circuit_MVA = 10

[device.inv]
kind = "grid-following inverter"
bus = "b"
power_kVA = 20
p_kW = 10

[device.cable]
kind = "line"
from = "a"
to = "b"
length_m = 100
resistance_ohm_per_km = 0.2

[device.load]
kind = "load"
bus = "b"
power_kW = 5

[event.step]
at_s = 0.5
action = "set"
device = "load"
setpoint = "p"
value_kW = 7
`

func parse(t *testing.T, src string, ov ...Override) *Case {
	t.Helper()
	c, err := Parse("c.toml", []byte(src), ov...)
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// change replaces one line of small, or adds after it.
func change(t *testing.T, old, now string) string {
	t.Helper()
	if strings.Count(small, old) != 1 {
		t.Fatalf("%q stands %d times in the case", old, strings.Count(small, old))
	}
	return strings.Replace(small, old, now, 1)
}

func TestFaultsAreTold(t *testing.T) {
	for _, c := range []struct {
		name, old, now, want string
	}{
		{"unknown section", "[event.step]", "[evnt.step]", `c.toml:33: evnt: unknown; did you mean event?`},
		{"unknown key", "short_circuit_MVA = 10", "short_circuit_MVA = 10\nx_over_R0 = 1", `c.toml:14: device.source.x_over_R0 = 1: unknown key of a grid; did you mean x_over_r?`},
		{"unknown key, none near", "power_kVA = 20", "power_kVA = 20\nzzzzzzz = 1",
			`c.toml:19: device.inv.zzzzzzz = 1: unknown key of a grid-following inverter; there are power_kVA, voltage_kV, p_kW, q_kvar, pll_bandwidth_Hz, pll_damping, speed_limit_Hz, fixed_amplitude, voltage_filter_Hz, voltage_floor_percent, current_limit_percent, limit_priority and 26 more`},
		{"wrong unit in the name", "short_circuit_MVA", "short_circuit_kVA", "c.toml:13: device.source.short_circuit_kVA = 10: unknown key of a grid; did you mean short_circuit_MVA?"},
		{"wrong type", "power_kVA = 20", `power_kVA = "20"`, `c.toml:18: device.inv.power_kVA = "20": a string; want a number, more than 0, up to 1e7`},
		{"flag of wrong type", "power_kVA = 20", "power_kVA = 20\nl_filter = 1", `c.toml:19: device.inv.l_filter = 1: a number; want true or false`},
		{"date", "until_s = 1", "until_s = 2020-01-01", `c.toml:2: study.until_s = 2020-01-01: a date or time; want a number, more than 0, up to 1e6`},
		{"out of range", "length_m = 100", "length_m = -100", `c.toml:25: device.cable.length_m = -100: out of range; accepted is more than 0, up to 1e6`},
		{"not a number", "length_m = 100", "length_m = nan", `c.toml:25: device.cable.length_m = nan: out of range; accepted is more than 0, up to 1e6`},
		{"infinite", "length_m = 100", "length_m = inf", `c.toml:25: device.cable.length_m = inf: out of range; accepted is more than 0, up to 1e6`},
		{"missing key", "power_kVA = 20\n", "", `c.toml:15: device.inv: a grid-following inverter needs power_kVA (rating), more than 0, up to 1e7`},
		{"cross check of the nameplate", "p_kW = 10", "p_kW = 100", `c.toml:15: device.inv: grid-following inverter nameplate: P = 100000 W: want -40000 to 40000`},
		{"cross check of keys", "resistance_ohm_per_km = 0.2", "reactance_ohm_per_km = 1\ninductance_mH_per_km = 1", `c.toml:26: device.cable.reactance_ohm_per_km = 1: says the same as inductance_mH_per_km; want one of them`},
		{"dangling bus", `to = "b"`, `to = "bb"`, `c.toml:24: device.cable.to = "bb": no bus of that name; did you mean b?`},
		{"no bus", "from = \"a\"\n", "", `c.toml:21: device.cable: a line needs from and to, the name of a bus`},
		{"bus of wrong type", `from = "a"`, `from = 1`, `c.toml:23: device.cable.from = 1: a number; want the name of a bus`},
		{"one bus twice", `to = "b"`, `to = "a"`, "c.toml:21: device.cable: from and to are the same bus a; want two"},
		{"unlike voltages", "[bus.b]\nvoltage_kV = 0.4", "[bus.b]\nvoltage_kV = 11", `c.toml:21: device.cable: a line between bus a of 0.4 kV and bus b of 11 kV; want buses of one voltage, or a transformer`},
		{"unknown kind", `kind = "load"`, `kind = "laod"`, `c.toml:29: device.load.kind = "laod": unknown; did you mean load? accepted is one of grid, grid-forming inverter, grid-following inverter, line, transformer, breaker, reduced network, load, series load, shunt capacitor, fault, frequency meter`},
		{"no kind", "kind = \"load\"\n", "", `c.toml:28: device.load: a device needs kind; accepted is one of grid, grid-forming inverter, grid-following inverter, line, transformer, breaker, reduced network, load, series load, shunt capacitor, fault, frequency meter`},
		{"table twice", "[device.load]", "[device.cable]", "c.toml:28: device.cable: the same table is on line 21 already; names can be used once\nc.toml:36: event.step.device = \"load\": no device of that name; there are source, inv, cable"},
		{"key twice", "power_kW = 5", "power_kW = 5\npower_kW = 6", `c.toml:32: device.load.power_kW = 6: the same key is on line 31 already; names can be used once`},
		{"bus and device of one name", "[device.load]", "[device.a]", "c.toml:28: device.a: a bus has that name too; want another, so that channels can be told apart\nc.toml:36: event.step.device = \"load\": no device of that name; there are source, inv, cable, a"},
		{"unused bus", "[bus.b]", "[bus.c]\nvoltage_kV = 1\n[bus.b]", `c.toml:7: bus.c: no device is connected to it; connect one, or remove the bus`},
		{"bus without voltage", "[bus.b]\nvoltage_kV = 0.4", "[bus.b]", `c.toml:7: bus.b: a bus needs voltage_kV (rated voltage), more than 0, up to 2000`},
		{"no source", "kind = \"grid\"\nbus = \"a\"\nshort_circuit_MVA = 10", "kind = \"load\"\nbus = \"a\"\npower_kW = 1", `c.toml:4: bus.a: no source holds the voltage of a, b; connect a grid or a grid-forming inverter, close a breaker, or say dead = true if that is meant`},
		{"marked dead and isn't", "[bus.b]", "[bus.b]\ndead = true", `c.toml:8: bus.b.dead = true: the bus is connected to a source; remove the mark`},
		{"array of tables", "[bus.b]", "[[bus.b]]", "c.toml:7: bus.b: an array of tables; want named tables such as [bus.quay]\nc.toml:17: device.inv.bus = \"b\": no bus of that name; there are a\nc.toml:24: device.cable.to = \"b\": no bus of that name; there are a\nc.toml:30: device.load.bus = \"b\": no bus of that name; there are a"},
		{"bad name", "[event.step]", "[event.\"st.ep\"]", `c.toml:33: event."st.ep": not a name; accepted are up to 64 letters, digits, - and _`},
		{"event of unknown device", "device = \"load\"", "device = \"laod\"", `c.toml:36: event.step.device = "laod": no device of that name; did you mean load?`},
		{"unknown action", "action = \"set\"", "action = \"sett\"", `c.toml:35: event.step.action = "sett": unknown; accepted is one of set, open, close, close in sync, trip`},
		{"unknown setpoint", "setpoint = \"p\"", "setpoint = \"power\"", `c.toml:37: event.step.setpoint = "power": a load has no such setpoint; there are p`},
		{"no setpoint", "setpoint = \"p\"\n", "", `c.toml:33: event.step: action = "set" needs setpoint; a load has p`},
		{"value in another unit", "value_kW = 7", "value_Hz = 7", `c.toml:38: event.step.value_Hz = 7: setpoint p of a load is in another unit; want value_kW`},
		{"value out of range", "value_kW = 7", "value_kW = -7", `c.toml:38: event.step.value_kW = -7: out of range; accepted is 0.005 or more`},
		{"no value", "value_kW = 7\n", "", `c.toml:33: event.step: action = "set" needs value_kW, the new value of setpoint p`},
		{"two values", "value_kW = 7", "value_kW = 7\nvalue_kvar = 1", `c.toml:33: event.step: more than one value; want value_kW alone`},
		{"what can't be opened", "action = \"set\"\ndevice = \"load\"\nsetpoint = \"p\"\nvalue_kW = 7", "action = \"open\"\ndevice = \"load\"", `c.toml:36: event.step.device = "load": a load can't be opened or closed; accepted is a breaker or a fault`},
		{"key of another action", "value_kW = 7", "value_kW = 7\nangle_deg = 5", `c.toml:39: event.step.angle_deg = 5: goes with action = "close in sync" only`},
		{"event after the end", "at_s = 0.5", "at_s = 500", `c.toml:34: event.step.at_s = 500: lies after the end of the study; accepted is 0 to 1`},
		{"unknown channel", "[event.step]\nat_s = 0.5", "[condition.step]\nchannel = \"b.w\"\nbelow_kV = 0.3", `c.toml:34: condition.step.channel = "b.w": no channel of that name; b has v, frequency, angle, v_d, v_q, v_a, v_b, v_c`},
		{"channel of unknown owner", "[event.step]\nat_s = 0.5", "[condition.step]\nchannel = \"calbe.i\"\nabove_A = 30", `c.toml:34: condition.step.channel = "calbe.i": no channel of that name; did you mean cable?`},
		{"limit in another unit", "[event.step]\nat_s = 0.5", "[condition.step]\nchannel = \"b.v\"\nbelow_kW = 0.3", `c.toml:35: condition.step.below_kW = 0.3: channel b.v is in V line-line rms; want below_kV`},
		{"no limit", "[event.step]\nat_s = 0.5", "[condition.step]\nchannel = \"b.v\"", `c.toml:33: condition.step: a condition needs a limit; want above_kV or below_kV`},
		{"two limits", "[event.step]\nat_s = 0.5", "[condition.step]\nchannel = \"b.v\"\nbelow_kV = 0.3\nabove_kV = 1", `c.toml:33: condition.step: more than one limit; want one`},
		{"recorded channel", "until_s = 1", "until_s = 1\nrecord = [\"b.vv\"]", `c.toml:3: study.record = ["b.vv"]: no channel matches "b.vv"; did you mean b.v? b has v, frequency, angle, v_d, v_q, v_a, v_b, v_c`},
		{"record of wrong type", "until_s = 1", "until_s = 1\nrecord = \"b.v\"", `c.toml:3: study.record = "b.v": a string; want a list of strings`},
		{"rule for no device", "[event.step]", "[detail]\n\"lin-*\" = \"quasi-steady\"\n[event.step]", `c.toml:34: detail."lin-*" = "quasi-steady": no device matches "lin-*"; there are source, inv, cable, load`},
		{"rule with unknown level", "[event.step]", "[detail]\ncable = \"quasi\"\n[event.step]", `c.toml:34: detail.cable = "quasi": no device that "cable" matches offers the level "quasi"; accepted are full, quasi-steady`},
		{"rule with bad pattern", "[event.step]", "[detail]\n\"[\" = \"full\"\n[event.step]", `c.toml:34: detail."[" = "full": "[" is no pattern; want a name in which * stands for any characters, ? for one and [a-z] for a range`},
		{"not TOML", "until_s = 1", "until_s = ", "c.toml:2: not TOML 1.0: expected value but found '\\n' instead"},
		{"contact given twice", "[event.step]", "[device.k]\nkind = \"breaker\"\nfrom = \"a\"\nto = \"b\"\ncontact_resistance_mohm = 1\nR_ohm = 1\n[event.step]", `c.toml:38: device.k.R_ohm = 1: says the same as contact_resistance_mohm; want one of them`},
		{"vector group", "[event.step]", "[device.w]\nkind = \"transformer\"\nfrom = \"a\"\nto = \"b\"\npower_kVA = 10\nimpedance_percent = 4\nx_over_r = 3\nvector_group = \"Dy2\"\n[event.step]", `c.toml:40: device.w.vector_group = "Dy2": vector group "Dy2": clock number 2 can't come from these windings: want one like Yy0, Dyn11, YNd1`},
		{"rated voltage far from the bus's", "power_kW = 5", "power_kW = 5\nvoltage_kV = 11", `c.toml:32: device.load.voltage_kV = 11: the bus has 0.4 kV; accepted are 0.7 to 1.4 times that`},
		{"key of another control", "[event.step]", "[device.f]\nkind = \"grid-forming inverter\"\nbus = \"a\"\npower_kVA = 10\nH = 2\n[event.step]", `c.toml:37: device.f.H = 2: goes with control = "virtual machine" only`},
		{"section that is a value", "[event.step]\nat_s = 0.5\naction = \"set\"\ndevice = \"load\"\nsetpoint = \"p\"\nvalue_kW = 7\n", "[event]\nstep = 1\n", "c.toml:34: event.step = 1: a number; want named tables such as [event.islanding]"},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, err := Parse("c.toml", []byte(change(t, c.old, c.now)))
			if err == nil {
				t.Fatal("accepted")
			}
			want := strings.Split(c.want, "\n")
			got := strings.Split(err.Error(), "\n")
			if len(got) != len(want) {
				t.Fatalf("got\n%s\nwant\n%s", err, c.want)
			}
			for _, w := range want {
				if !contains(got, w) {
					t.Errorf("got\n%s\nwant\n%s", err, c.want)
				}
			}
			var f *Fault
			if !errors.As(err, &f) || f.File != "c.toml" {
				t.Errorf("no *Fault: %#v", err)
			}
		})
	}
}

func TestAllFaultsAtOnce(t *testing.T) {
	src := `[study]
until_s = 0
[bus.a]
voltage_kV = 0.4
[bus.a]
voltage_kV = 11
[bus.b]
[device.l]
kind = "line"
from = "a"
to = "c"
length = 5
[device.g]
kind = "grid"
bus = "a"
short_circuit_MVA = 1e9
[event.e]
at_s = -1
action = "trip"
device = "h"
`
	_, err := Parse("x", []byte(src))
	want := `x:2: study.until_s = 0: out of range; accepted is more than 0, up to 1e6
x:5: bus.a: the same table is on line 3 already; names can be used once
x:7: bus.b: a bus needs voltage_kV (rated voltage), more than 0, up to 2000
x:7: bus.b: no device is connected to it; connect one, or remove the bus
x:11: device.l.to = "c": no bus of that name; there are a, b
x:12: device.l.length = 5: unknown key of a line; did you mean length_m?
x:16: device.g.short_circuit_MVA = 1e9: out of range; accepted is more than 0, up to 1e6
x:18: event.e.at_s = -1: out of range; accepted is 0 to 1e6
x:20: event.e.device = "h": no device of that name; there are l, g`
	if err == nil || err.Error() != want {
		t.Errorf("got\n%v\nwant\n%s", err, want)
	}
}

func TestEmptyFile(t *testing.T) {
	_, err := Parse("x", nil)
	want := "x: no table [study]; want one with until_s, the end of the study\nx: no buses; want tables such as [bus.quay]\nx: no devices; want tables such as [device.battery-1]"
	if err == nil || err.Error() != want {
		t.Errorf("got %v", err)
	}
}

func TestLimits(t *testing.T) {
	many := func(n int, format string) string {
		var b strings.Builder
		for i := range n {
			fmt.Fprintf(&b, format, i, i)
		}
		return b.String()
	}
	for _, c := range []struct{ name, src, want string }{
		{"bytes", strings.Repeat("#", MaxBytes+1), "x: 1048577 bytes; accepted are 1048576"},
		{"nesting of lists", "a = " + strings.Repeat("[", 9), "x:1: keys, arrays or inline tables are nested too deep; accepted are 8 levels"},
		{"nesting of keys", "\na" + strings.Repeat(".a", 8) + " = 1", "x:2: keys, arrays or inline tables are nested too deep; accepted are 8 levels"},
		{"keys", strings.Repeat("a=1\n", maxKeys+1), "x: too many keys; accepted are 200000"},
		{"buses", "[study]\nuntil_s = 1\n[device.g]\nkind = \"grid\"\nbus = \"b1\"\nshort_circuit_MVA = 1\n" + many(MaxBuses+1, "[bus.b%d]\nvoltage_kV = 1 # %d\n"), "x:7: bus: 5001 tables; accepted are 5000"},
		{"devices", "[study]\nuntil_s = 1\n[bus.a]\nvoltage_kV = 1\n" + many(MaxDevices+1, "[device.d%d]\nbus = \"a\" # %d\n"), "x:5: device: 10001 tables; accepted are 10000"},
		{"events", small + many(MaxEvents+1, "[event.e%d]\nat_s = 0.1 # %d\n"), "x:33: event: 2002 tables; accepted are 2000"},
		{"name", strings.Replace(small, "[event.step]", "[event."+strings.Repeat("n", 65)+"]", 1), "not a name; accepted are up to 64 letters, digits, - and _"},
		{"string", strings.Replace(small, "until_s = 1", "until_s = 1\ntitle = \""+strings.Repeat("n", 5000)+"\"", 1), "5000 bytes; accepted are 4096"},
	} {
		_, err := Parse("x", []byte(c.src))
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %.300v\nwant %s", c.name, err, c.want)
		}
	}
	_, err := Parse("x", []byte(small+many(300, "[bus.b%d]\nvoltage_kV = 1 # %d\n")))
	if err == nil || len(causes(err)) != maxReported+1 || !strings.HasSuffix(err.Error(), "x: 200 more faults") {
		t.Errorf("300 faults: %d told, ending %.80q", len(causes(err)), err.Error()[max(0, len(err.Error())-80):])
	}
}

// Files made to be slow are refused in a bearable time: about 2 s at most where
// this was written, with room for a busy machine.
func TestHostileFilesAreQuick(t *testing.T) {
	head := "[study]\nuntil_s = 1\n"
	name := func(i int) string { return fmt.Sprintf("%060d", i) }
	var keys, dangling, rules, many strings.Builder
	keys.WriteString(head + "[bus.a]\n")
	for i := range 15000 {
		fmt.Fprintf(&keys, "k%s = 1\n", name(i))
	}
	dangling.WriteString(head)
	for i := range 4000 {
		fmt.Fprintf(&dangling, "[bus.%s]\nvoltage_kV = 1\n[device.d%d]\nkind = \"load\"\nbus = \"%s\"\n", name(i), i, name(900000+i))
	}
	rules.WriteString(head + "[bus.a]\nvoltage_kV = 1\n[device.g]\nkind = \"grid\"\nbus = \"a\"\nshort_circuit_MVA = 1\n")
	for i := range 5000 {
		fmt.Fprintf(&rules, "[device.%s]\nkind = \"load\"\nbus = \"a\"\npower_kW = 1\n", name(i))
	}
	many.WriteString(rules.String())
	rules.WriteString("[detail]\n")
	record := ""
	for i := range 100 {
		fmt.Fprintf(&rules, "\"*%s*\" = \"x\"\n", name(900000+i))
		record += fmt.Sprintf("\"*%s*.*\", ", name(900000+i))
	}
	for what, src := range map[string]string{
		"keys": keys.String(), "dangling buses": dangling.String(), "rules": rules.String(),
		"record": strings.Replace(many.String(), "until_s = 1\n", "until_s = 1\nrecord = ["+record+"]\n", 1),
		"quotes": "a = " + strings.Repeat("\"", MaxBytes-10), "lines": strings.Repeat("x", MaxBytes), "brackets": strings.Repeat("[a]\n", MaxBytes/4),
	} {
		begin := time.Now()
		if _, err := Parse("x", []byte(src)); err == nil {
			t.Errorf("%s: accepted", what)
		}
		if d := time.Since(begin); d > 20*time.Second {
			t.Errorf("%s: %v", what, d)
		}
	}
}

func TestOverrides(t *testing.T) {
	c := parse(t, small, Override{"device.load.power_kW", "8"}, Override{"study.title", "another"}, Override{"study.sample_ms", "2"}, Override{"event.step.value_kW", "9"})
	if c.Title != "another" || c.Sample != 2e-3 || c.Events[0].Event.Value != 9000 {
		t.Errorf("title %q, sample %g, value %g", c.Title, c.Sample, c.Events[0].Event.Value)
	}
	sys, err := c.Build()
	if err != nil {
		t.Fatal(err)
	}
	if p := sys.Device("load").(facet.Adjustable).Setpoints(0)[0].Value; p < 7999 || p > 8001 {
		t.Errorf("load draws %g W", p)
	}
	// A study cut short from outside leaves events out, and is no fault.
	c = parse(t, small, Override{"study.until_s", "0.1"})
	if c.Until != 0.1 || len(c.Events) != 1 {
		t.Errorf("until %g, %d events", c.Until, len(c.Events))
	}
	// Rules can be added where the file has no such table.
	c = parse(t, small, Override{"detail.cab*", "quasi-steady"})
	if len(c.Rules) != 1 || c.Rules[0] != (DetailRule{"cab*", "quasi-steady"}) {
		t.Errorf("rules %v", c.Rules)
	}
	for _, o := range []struct{ path, value, want string }{
		{"device.laod.power_kW", "8", "--set device.laod.power_kW=8: there is no table device.laod in the case; did you mean load?"},
		{"divice.load.power_kW", "8", "--set divice.load.power_kW=8: there is no table divice in the case; did you mean device?"},
		{"device.load.power_kw", "8", "--set device.load.power_kw=8: unknown key of a load; did you mean power_kW?"},
		{"device.load.power_kW", "-8", "--set device.load.power_kW=-8: out of range; accepted is 0 to 1e7"},
		{"device.load.power_kW", "much", "--set device.load.power_kW=much: a string; want a number, 0 to 1e7"},
		{"device.load", "8", "--set device.load=8: device.load is a table; name one of its keys"},
		{"device.load.power_kW.x", "8", "--set device.load.power_kW.x=8: device.load.power_kW is a value, not a table"},
		{"load", "8", "--set load=8: want a key in a table, like study.until_s"},
		{"a..b", "8", `--set a..b=8: "a..b" is no key; want one like device.battery-1.power_kVA`},
		{"device.cable.to", "c", "--set device.cable.to=c: no bus of that name; there are a, b"},
		{"study.until_s", "1\ntitle=2", "--set study.until_s=1 title=2: a string; want a number, more than 0, up to 1e6"},
	} {
		_, err := Parse("c.toml", []byte(small), Override{o.path, o.value})
		if err == nil || err.Error() != o.want {
			t.Errorf("%s=%s: got %v\nwant %s", o.path, o.value, err, o.want)
		}
	}
}

func TestOpen(t *testing.T) {
	dir := t.TempDir()
	file := filepath.Join(dir, "mine.toml")
	if err := os.WriteFile(file, []byte(small), 0o666); err != nil {
		t.Fatal(err)
	}
	c, err := Open(file)
	if err != nil || c.Name != "mine" {
		t.Errorf("%v, %v", c, err)
	}
	if c, err := Open("starter"); err != nil || c.Name != "starter" {
		t.Errorf("%v, %v", c, err)
	}
	_, err = Open("habour")
	if !errors.Is(err, os.ErrNotExist) || !strings.Contains(err.Error(), `no shipped case and no file "habour"; did you mean harbour? shipped cases are `) {
		t.Errorf("%v", err)
	}
	if _, err = Open(dir); err == nil {
		t.Error("a directory was opened")
	}
	if _, err = Source("../case"); err == nil {
		t.Error("a path was taken for a shipped case")
	}
	if err := os.WriteFile(file, make([]byte, 2*MaxBytes), 0o666); err != nil {
		t.Fatal(err)
	}
	if _, err := Load(file); err == nil || !strings.Contains(err.Error(), "bytes; accepted are") {
		t.Errorf("%v", err)
	}
}

func TestDetailRules(t *testing.T) {
	src := change(t, "[event.step]", "[detail]\n\"*\" = \"quasi-steady\"\n\"kind:*inverter\" = \"primary only\"\n[event.step]")
	c := parse(t, src)
	level := func(name string, rules ...DetailRule) string {
		t.Helper()
		sys, err := c.Build(rules...)
		if err != nil {
			t.Fatal(err)
		}
		return sys.Device(name).(facet.Detailed).Detail()
	}
	for _, w := range []struct {
		device, want string
		rules        []DetailRule
	}{
		{"cable", "quasi-steady", nil},
		{"load", "quasi-steady", nil},
		{"inv", "primary only", nil},
		{"cable", "full", []DetailRule{{"*", "full"}}},
		{"cable", "quasi-steady", []DetailRule{{"*", "full"}, {"kind:line", "quasi-steady"}}},
		{"load", "full", []DetailRule{{"*", "full"}, {"kind:line", "quasi-steady"}}},
		{"inv", "full", []DetailRule{{"i?v", "full"}}},
	} {
		if got := level(w.device, w.rules...); got != w.want {
			t.Errorf("%s with %v is at %q, want %q", w.device, w.rules, got, w.want)
		}
	}
	_, err := c.Build(DetailRule{"cable", "primary only"}, DetailRule{"x", "full"}, DetailRule{"kind:lines", "full"})
	want := `cases: detail cable=primary only: no device that "cable" matches offers the level "primary only"; accepted are full, quasi-steady
cases: detail x=full: no device matches "x"; there are source, inv, cable, load
cases: detail kind:lines=full: no device is of kind "lines"; did you mean line?`
	if err == nil || err.Error() != want {
		t.Errorf("got %v", err)
	}
	d := c.Details()
	if len(d) != 4 || fmt.Sprint(d["cable"]) != "[full quasi-steady]" || !contains(d["inv"], "primary only") {
		t.Errorf("details %v", d)
	}
	if c.Kind("inv") != "grid-following inverter" || c.Kind("x") != "" {
		t.Errorf("kinds %q, %q", c.Kind("inv"), c.Kind("x"))
	}
}

// What the loader takes for the engine's channels must be just those.
func TestChannelsAreTheEngines(t *testing.T) {
	data, err := Source("harbour")
	if err != nil {
		t.Fatal(err)
	}
	d, err := decode("harbour", data)
	if err != nil {
		t.Fatal(err)
	}
	l := &loader{doc: d, c: &Case{}}
	l.load()
	sim, err := l.c.Start(nil)
	if err != nil {
		t.Fatal(err)
	}
	if got, want := strings.Join(l.names, " "), strings.Join(sim.ChannelNames(), " "); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
	sys, err := l.c.Build()
	if err != nil {
		t.Fatal(err)
	}
	sim, err = engine.Start(sys, &engine.Options{Record: []string{"*"}})
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range sim.Trace().Channels {
		if l.channel[c.Name] != c.Unit {
			t.Errorf("%s is in %q, the engine has %q", c.Name, l.channel[c.Name], c.Unit)
		}
	}
}

func TestNearest(t *testing.T) {
	known := []string{"power_kVA", "power_filter_Hz", "p_kW", "psi_deg", "length_m"}
	for name, want := range map[string]string{
		"power_kva": "power_kVA", "powerkVA": "power_kVA", "pwoer_kVA": "power_kVA", "power_MVA": "power_kVA",
		"psi": "psi_deg", "length": "length_m", "q": "", "resistance": "", "": "", "lenght_m": "length_m",
	} {
		if got, _ := nearest(name, known); got != want {
			t.Errorf("nearest to %q is %q, want %q", name, got, want)
		}
	}
	if d := distance("ca", "abc"); d != 3 {
		t.Errorf("distance %d, want 3 (optimal string alignment)", d)
	}
}

func FuzzParse(f *testing.F) {
	f.Add(small)
	f.Add(everything)
	for _, name := range shippedNames() {
		if data, err := Source(name); err == nil {
			f.Add(string(data))
		}
	}
	f.Add("[study]\nuntil_s=1\n[bus.a]\nvoltage_kV=1\n[device.f]\nkind='grid forming inverter'\nbus='a'\npower_kVA=1\nLf_H=1e-3\nI_max_A=inf\n[device.r]\nkind='load'\nbus='a'\nR_ohm=1\nL_H=1\nC_F=1e-6\n[condition.c]\nchannel='a.v'\nbelow=1\naction='trip'\ndevice='r'\nfor_ms=1\n[detail]\n'*'='full'")
	f.Fuzz(func(t *testing.T, src string) {
		c, err := Parse("fuzz", []byte(src))
		if err != nil {
			if strings.Contains(err.Error(), "%!") {
				t.Errorf("badly formatted: %v", err)
			}
			return
		}
		if _, err := c.Build(); err != nil && err.Error() == "" {
			t.Error("an empty error")
		}
	})
}

// Rules by distance: the harbour's devices within two buses of the tie, and all
// others, share the devices out between them.
func TestDetailByDistance(t *testing.T) {
	c, err := Open("harbour")
	if err != nil {
		t.Fatal(err)
	}
	reduced := func(rules ...DetailRule) map[string]bool {
		t.Helper()
		s, err := c.Build(rules...)
		if err != nil {
			t.Fatal(err)
		}
		out := make(map[string]bool)
		for _, n := range s.DeviceNames() {
			if d, ok := s.Device(n).(facet.Detailed); ok && d.Detail() == "quasi-steady" {
				out[n] = true
			}
		}
		return out
	}
	far, near, all := reduced(DetailRule{"far:tie:2", "quasi-steady"}), reduced(DetailRule{"near:tie:2", "quasi-steady"}), reduced(DetailRule{"*", "quasi-steady"})
	for n := range all {
		if far[n] == near[n] {
			t.Errorf("%s is near: %v, far: %v", n, near[n], far[n])
		}
	}
	// The tie joins causeway and landing; the town's load hangs at landing, the
	// cranes several boards away.
	if !near["landing-town"] || !far["crane-1"] || len(far) == 0 || len(near) == 0 {
		t.Errorf("near %v, far %v", near, far)
	}
	for _, bad := range []struct{ pattern, want string }{
		{"near:tie", "want near:NAME:N"}, {"far:tie:-1", "want far:NAME:N"}, {"near:tye:2", "did you mean tie"},
	} {
		if _, err := c.Build(DetailRule{bad.pattern, "full"}); err == nil || !strings.Contains(err.Error(), bad.want) {
			t.Errorf("%s: %v, want %q", bad.pattern, err, bad.want)
		}
	}
}
