package cases

import (
	"strings"
	"testing"
)

// everything holds a device of each kind, most keys, and an event of each kind.
const everything = `[study]
title = "t"
text = "x"
frequency_Hz = 60
until_s = 1
sample_ms = 1
tolerance = 1e-5
record = ["a.v", "inv-*.p"]
[bus.h]
voltage_kV = 11
[bus.a]
voltage_kV = 0.4
[bus.b]
voltage_kV = 0.4
[bus.c]
voltage_kV = 0.4
dead = true
[device.g]
kind = "grid"
bus = "h"
short_circuit_MVA = 50
x_over_r = 5
voltage_percent = 101
power_MVA = 1
[device.t]
kind = "transformer"
from = "h"
to = "a"
power_kVA = 400
hv_kV = 11.2
lv_kV = 0.4
vector_group = "Dyn11"
impedance_percent = 4
resistance_percent = 1
no_load_current_percent = 1
no_load_loss_kW = 0.6
quality_factor = 30
[device.l]
kind = "line"
from = "a"
to = "b"
length_m = 100
resistance_ohm_per_km = 0.2
inductance_mH_per_km = 0.3
capacitance_nF_per_km = 300
rated_current_A = 200
[device.k]
kind = "breaker"
from = "b"
to = "c"
open = true
contact_resistance_mohm = 2
[device.r]
kind = "reduced network"
buses = ["a", "b"]
R_ohm = [0.1, 0.2]
L_H = [1e-4, 3e-4]
drive = [[1, -1], [0.5, 1]]
rated_current_A = 200
[device.inv-1]
kind = "grid-forming inverter"
bus = "b"
power_kVA = 50
control = "droop"
p_kW = 10
q_kvar = 1
frequency_droop_percent = 1
voltage_droop_percent = 3
psi_deg = 80
power_filter_Hz = 4
virtual_impedance_percent = 8
current_limit_percent = 140
limit_priority = "d first"
Kpv = 0.2
Lf_H = 1e-3
own_speed = true
[device.inv-2]
kind = "grid-following inverter"
bus = "b"
power_kVA = 20
p_kW = 10
pll_bandwidth_Hz = 8
l_filter = true
Kpc = 10
[device.load-1]
kind = "load"
bus = "a"
power_kW = 20
reactive_kvar = 5
capacitive_kvar = 2
[device.load-2]
kind = "series load"
bus = "c"
power_kW = 5
reactive_kvar = 3
[device.bank]
kind = "shunt capacitor"
bus = "a"
reactive_kvar = 10
R_ohm = 0.1
[device.short]
kind = "fault"
bus = "b"
R_ohm = 0.05
X_ohm = 0.01
[device.meter]
kind = "frequency meter"
bus = "b"
bandwidth_Hz = 12
[event.e1]
at_s = 0.1
action = "close"
device = "k"
[event.e2]
at_s = 0.2
action = "set"
device = "g"
setpoint = "phase"
value_deg = 10
ramp_ms = 20
[event.e3]
at_s = 0.3
action = "close in sync"
device = "k"
voltage_percent = 5
frequency_Hz = 0.1
angle_deg = 10
deadline_s = 0.1
[condition.c1]
channel = "b.v"
below_kV = 0.3
for_ms = 20
action = "trip"
device = "inv-2"
[detail]
"load-*" = "quasi-steady"
"kind:line" = "full"
`

// Every line of a case is left out, doubled, and given every sort of value:
// the loader never panics, and what it accepts starts or says why not.
func TestEveryLineMutated(t *testing.T) {
	c, err := Parse("everything", []byte(everything))
	if err != nil {
		t.Fatal(err)
	}
	if _, err := c.Start(nil); err != nil {
		t.Fatal(err)
	}
	values := []string{"0", "-1", "1", "1e-300", "1e300", "nan", "inf", "-inf", `""`, `"b"`, `"full"`, "true", "[]", `["a"]`, "{}", "{ x = 1 }", "07:32:00", "'\\'", "9223372036854775807", "0.5"}
	lines := strings.Split(strings.TrimRight(everything, "\n"), "\n")
	accepted, refused := 0, 0
	try := func(src []string) {
		t.Helper()
		c, err := Parse("m", []byte(strings.Join(src, "\n")))
		if err != nil {
			refused++
			for _, e := range causes(err) {
				if s := e.Error(); strings.Contains(s, "%!") || !strings.HasPrefix(s, "m:") || strings.Contains(s, "devices:") {
					t.Errorf("badly told: %s", s)
				}
			}
			return
		}
		accepted++
		if sim, err := c.Start(nil); err == nil && sim == nil || err != nil && err.Error() == "" {
			t.Errorf("neither a simulation nor an error for %q", src)
		}
	}
	with := func(i int, now ...string) []string {
		return append(append(append([]string(nil), lines[:i]...), now...), lines[i+1:]...)
	}
	for i, line := range lines {
		try(with(i))
		try(with(i, line, line))
		try(with(i, line, "zz = 1"))
		key, _, ok := strings.Cut(line, " = ")
		if !ok {
			try(with(i, line+"x"))
			try(with(i, "["+line+"]"))
			continue
		}
		for _, v := range values {
			try(with(i, key+" = "+v))
		}
	}
	if accepted < 200 || refused < 1000 {
		t.Errorf("%d accepted, %d refused: the mutations miss their aim", accepted, refused)
	}
}
