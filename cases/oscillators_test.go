package cases

import (
	"math"
	"strings"
	"testing"

	"islet/devices"
	"islet/engine"
	"islet/engine/screen"
)

// A source of 10 kVA feeds 5 kW through a line to one bus: every number by hand.
func TestOscillatorsByHand(t *testing.T) {
	const text = `[study]
title = "By hand"
until_s = 1
[bus.a]
voltage_kV = 0.4
[bus.b]
voltage_kV = 0.4
[device.source]
kind = "grid-forming inverter"
bus = "a"
power_kVA = 10
p_kW = 5
[device.line]
kind = "line"
from = "a"
to = "b"
R_ohm = 0
L_H = 1e-3
rated_current_A = 30
[device.load]
kind = "load"
bus = "b"
power_kW = 5
`
	c, err := Parse("by-hand", []byte(text))
	if err != nil {
		t.Fatal(err)
	}
	sim, err := c.Start(&engine.Options{Record: []string{}})
	if err != nil {
		t.Fatal(err)
	}
	n, err := c.Oscillators(sim)
	if err != nil {
		t.Fatal(err)
	}
	if len(n.Nodes) != 3 || len(n.Edges) != 2 {
		t.Fatalf("%+v", n)
	}
	// 1 % of 50 Hz at 10 kW.
	if d := n.Nodes[2].D; math.Abs(d-10e3/(2*math.Pi*0.5)) > 1e-6*d {
		t.Errorf("D is %g W s/rad", d)
	}
	va, _ := sim.Value("a.v")
	vb, _ := sim.Value("b.v")
	// Three phases at line-to-line rms: V V/X.
	line := n.Edges[1]
	if line.Name != "line" {
		line = n.Edges[0]
	}
	if want := va * vb / (sim.FrameSpeed("a") * 1e-3); math.Abs(line.A-want) > 1e-9*want {
		t.Errorf("the line can carry %g W, want %g", line.A, want)
	}
	r, err := screen.Screen(&n.Network, nil)
	if err != nil {
		t.Fatal(err)
	}
	// The line has no losses: its angle is that of the simulation.
	angle := func(bus string) float64 {
		x, err := sim.Value(bus + ".angle")
		if err != nil {
			t.Fatal(err)
		}
		return x * math.Pi / 180
	}
	for _, f := range r.Flows {
		if f.Name != "line" {
			continue
		}
		if got, want := f.Angle, angle("a")-angle("b"); math.Abs(got-want) > 1e-7 {
			t.Errorf("angle across the line is %g rad, in the simulation %g", got, want)
		}
	}
	f, err := sim.Value("a.frequency")
	if err != nil {
		t.Fatal(err)
	}
	if got := r.Speed / (2 * math.Pi); math.Abs(got-f) > 1e-9 {
		t.Errorf("in step at %.12g Hz, in the simulation %.12g", got, f)
	}
}

// On the shipped cases the closed form gives the operating point's frequency, and
// what sources give: droop is linear, and loads and losses are taken from there.
func TestOscillatorsOfShippedCases(t *testing.T) {
	for _, name := range []string{"starter", "droop3", "harbour", "cigre-lv", "mesh-20"} {
		c, err := Open(name)
		if err != nil {
			t.Fatal(err)
		}
		sim, err := c.Start(&engine.Options{Record: []string{}})
		if err != nil {
			t.Fatal(err)
		}
		n, err := c.Oscillators(sim)
		if err != nil {
			t.Fatal(err)
		}
		for _, island := range n.Islands() {
			r, err := screen.Screen(island, nil)
			if err != nil {
				t.Fatal(err)
			}
			want := sim.OperatingPoint().Frequencies[0]
			// An oscillator's characteristic isn't linear.
			tol := 1e-7
			if name == "mesh-20" {
				tol = 2e-3
			}
			if got := r.Speed / (2 * math.Pi); math.Abs(got-want) > tol || !r.InStep {
				t.Errorf("%s: in step (%v) at %.9g Hz, the operating point is at %.9g", name, r.InStep, got, want)
			}
		}
	}
}

// What has no phase oscillator is said.
func TestOscillatorsNotes(t *testing.T) {
	source, err := Source("starter")
	if err != nil {
		t.Fatal(err)
	}
	run := func(set ...Override) (*OscillatorNetwork, error) {
		c, err := Parse("starter", source, set...)
		if err != nil {
			t.Fatal(err)
		}
		sim, err := c.Start(&engine.Options{Record: []string{}})
		if err != nil {
			t.Fatal(err)
		}
		return c.Oscillators(sim)
	}
	n, err := run(Override{"device.battery-1.psi_deg", "60"})
	if err != nil || len(n.Notes) != 1 || !strings.Contains(n.Notes[0], "psi = 60 degrees") {
		t.Errorf("notes %v, error %v", n.Notes, err)
	}
	if _, err := run(Override{"device.battery-1.control", string(devices.VirtualMachineControl)}, Override{"device.battery-1.D", "0.0"}); err == nil || !strings.Contains(err.Error(), "without damping") {
		t.Errorf("error %v", err)
	}
}
