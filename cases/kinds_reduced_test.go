package cases

import (
	"strings"
	"testing"
)

const reducedCase = `[study]
until_s = 0.1
[bus.a]
voltage_kV = 0.4
[bus.b]
voltage_kV = 0.4
[bus.c]
voltage_kV = 0.4
[bus.h]
voltage_kV = 11
[device.g]
kind = "grid"
bus = "a"
short_circuit_MVA = 2
[device.t]
kind = "transformer"
from = "h"
to = "a"
power_kVA = 100
impedance_percent = 4
x_over_r = 3
[device.load-b]
kind = "load"
bus = "b"
power_kW = 10
[device.load-c]
kind = "load"
bus = "c"
power_kW = 20
[device.net]
kind = "reduced network"
buses = ["a", "b", "c"]
R_ohm = [0.2, 0.4]
L_H = [1e-4, 5e-4]
drive = [[1, -1, 0], [1, 0, -1]]
`

// A reduced network written by hand (two lines from a) is a case like any other.
func TestReducedNetworkInACase(t *testing.T) {
	c, err := Parse("r", []byte(reducedCase))
	if err != nil {
		t.Fatal(err)
	}
	if _, err := c.Start(nil); err != nil {
		t.Fatal(err)
	}
	if _, err := c.Start(nil, DetailRule{"net", "quasi-steady"}); err != nil {
		t.Fatal(err)
	}
	within, err := reach(c.devices, c.buses, "b", 1)
	if err != nil || !within[0] || !within[2] {
		t.Errorf("one reduced network away from b: %v, %v", within, err)
	}
}

func TestReducedNetworkFaults(t *testing.T) {
	for _, test := range []struct{ from, to, want string }{
		{`buses = ["a", "b", "c"]`, `buses = "a"`, `r:32: device.net.buses = "a": a string; want a list of the names of its buses`},
		{`buses = ["a", "b", "c"]`, `buses = []`, `no buses; want a list`},
		{`buses = ["a", "b", "c"]`, `buses = ["a", "b", 3]`, `a number; want the name of a bus`},
		{`buses = ["a", "b", "c"]`, `buses = ["a", "b", "x"]`, `no bus of that name`},
		{`buses = ["a", "b", "c"]`, `buses = ["a", "b", "a"]`, `bus a is listed twice`},
		{`buses = ["a", "b", "c"]`, `buses = ["a", "b", "h"]`, `bus 3 has 11 kV and bus 1 has 0.4 kV, which doesn't go with a ratio of 1 to 1`},
		{`R_ohm = [0.2, 0.4]`, "R_ohm = [0.2, 0.4]\nratio = [1, 2]", `2 numbers, and buses has 3`},
		{`R_ohm = [0.2, 0.4]`, "R_ohm = [0.2, 0.4]\nshift_deg = [30]", `1 numbers, and buses has 3`},
		{`R_ohm = [0.2, 0.4]`, "R_ohm = [0.2, 0.4]\nratio = [1, 0, 1]", `holds 0; accepted are > 0`},
		{`buses = ["a", "b", "c"]`, ``, `needs buses, a list of the names of its buses`},
		{`R_ohm = [0.2, 0.4]`, `R_ohm = [0.2, -0.4]`, `holds -0.4; accepted are 0 to`},
		{`L_H = [1e-4, 5e-4]`, `L_H = [1e-4, 0]`, `holds 0; accepted are > 0 to`},
		{`L_H = [1e-4, 5e-4]`, `L_H = [1e-4]`, `1 circuits, and R_ohm has 2`},
		{`L_H = [1e-4, 5e-4]`, `L_H = 1e-4`, `want a list of numbers`},
		{`L_H = [1e-4, 5e-4]`, `L_H = [1e-4, "x"]`, `holds a string; want a list of numbers`},
		{`drive = [[1, -1, 0], [1, 0, -1]]`, `drive = [[1, -1], [1, 0, -1]]`, `2 numbers for circuit 1, and buses has 3`},
		{`drive = [[1, -1, 0], [1, 0, -1]]`, `drive = [1, -1]`, `want a list of lists of numbers`},
		{`drive = [[1, -1, 0], [1, 0, -1]]`, `drive = [[1, -1, 0], [2, -2, 0]]`, `want circuits that tie all terminals together`},
		{`drive = [[1, -1, 0], [1, 0, -1]]`, `drive = [[1, -1, nan], [1, 0, -1]]`, `holds NaN`},
		{`R_ohm = [0.2, 0.4]`, ``, `a reduced network needs R_ohm`},
	} {
		src := strings.Replace(reducedCase, test.from, test.to, 1)
		_, err := Parse("r", []byte(src))
		if err == nil || !strings.Contains(err.Error(), test.want) {
			t.Errorf("%s\n got %v\nwant %s", test.to, err, test.want)
		}
	}
}
