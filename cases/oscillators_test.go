package cases

import (
	"math"
	"strings"
	"testing"

	"islet/devices"
	"islet/engine"
	"islet/engine/screen"
)

// byHand is two sources, a lossless line in three pieces between them, no load, and
// voltage that Q doesn't move: every number by hand.
const byHand = `[study]
title = "By hand"
until_s = 1
[bus.a]
voltage_kV = 0.4
[bus.m]
voltage_kV = 0.4
[bus.n]
voltage_kV = 0.4
[bus.b]
voltage_kV = 0.4
[device.one]
kind = "grid-forming inverter"
bus = "a"
power_kVA = 100
p_kW = 60
n = 0.0
[device.two]
kind = "grid-forming inverter"
bus = "b"
power_kVA = 100
p_kW = -60
n = 0.0
[device.one-third]
kind = "line"
from = "a"
to = "m"
R_ohm = 0
L_H = 1.2e-3
rated_current_A = 300
[device.two-thirds]
kind = "line"
from = "m"
to = "n"
R_ohm = 0
L_H = 1.2e-3
rated_current_A = 300
[device.whole]
kind = "line"
from = "n"
to = "b"
R_ohm = 0
L_H = 1.2e-3
rated_current_A = 300
`

func TestOscillatorsByHand(t *testing.T) {
	c, err := Parse("by-hand", []byte(byHand))
	if err != nil {
		t.Fatal(err)
	}
	sim, err := c.Start(&engine.Options{Record: []string{}})
	if err != nil {
		t.Fatal(err)
	}
	q := sim.System().Device("one").(*devices.GridForming).Params()
	for _, rated := range []bool{false, true} {
		n, err := c.Oscillators(sim)
		w := sim.FrameSpeed("a")
		if rated {
			n, err = c.RatedOscillators(sim.System())
			w = 100 * math.Pi // nothing else is known before
		}
		y := 1 / (2*complex(q.Rv+q.Filter.Rg, q.Xv+w*q.Filter.Lg) + complex(0, w*3.6e-3))
		if err != nil {
			t.Fatal(err)
		}
		if len(n.Nodes) != 2 || len(n.Edges) != 1 || n.Rated != rated || len(n.Notes) != 0 {
			t.Fatalf("%+v", n)
		}
		// 1 % of 50 Hz at 100 kW.
		if d := n.Nodes[0].D; math.Abs(d-100e3/(2*math.Pi*0.5)) > 1e-6*d {
			t.Errorf("D is %g W s/rad", d)
		}
		// V0^2 b, with inner voltages that stand.
		if got, want := n.Edges[0].A, -1.5*q.V0*q.V0*imag(y); math.Abs(got-want) > 1e-6*want {
			t.Errorf("rated %v: the coupling is %g W, want %g", rated, got, want)
		}
		r, err := screen.Screen(&n.Network, nil)
		if err != nil {
			t.Fatal(err)
		}
		if rated {
			// No losses: set powers balance, and 60 kW go over.
			if math.Abs(r.Flows[0].P-60e3) > 1e-3 || math.Abs(hertzOf(r)-50) > 1e-12 {
				t.Errorf("%+v at %g Hz", r.Flows[0], hertzOf(r))
			}
			continue
		}
		f, err := sim.Value("a.frequency")
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(hertzOf(r)-f) > 1e-9 {
			t.Errorf("in step at %.12g Hz, in the simulation %.12g", hertzOf(r), f)
		}
		// The angle between the inner voltages, from the states of the simulation.
		angle := sim.State("one")["delta"] - sim.State("two")["delta"]
		if got := r.Flows[0].Angle; math.Abs(got-angle) > 1e-6 {
			t.Errorf("angle is %g rad, in the simulation %g", got, angle)
		}
	}
}

func hertzOf(r *screen.Result) float64 { return r.Speed / (2 * math.Pi) }

// Without an operating point the screen still answers: the line can carry (3/2) V^2 b,
// and twice that isn't carried.
func TestRatedOscillatorsBeyondTheEnd(t *testing.T) {
	c, err := Parse("by-hand", []byte(byHand), Override{"device.one.p_kW", "200"}, Override{"device.two.p_kW", "-200"})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := c.Start(&engine.Options{Record: []string{}}); err == nil {
		t.Fatal("there is an operating point")
	}
	sys, err := c.Build()
	if err != nil {
		t.Fatal(err)
	}
	n, err := c.RatedOscillators(sys)
	if err != nil {
		t.Fatal(err)
	}
	r, err := screen.Screen(&n.Network, nil)
	if err != nil {
		t.Fatal(err)
	}
	if want := n.Edges[0].A / 200e3; r.InStep || math.Abs(r.MarginLost-want) > 1e-6*want || want >= 1 {
		t.Errorf("%+v, want a margin of %g", r, want)
	}
}

// At rated voltages, without losses, the frequency of the shipped cases is that of the
// operating point but for what voltages and losses change: a few per cent of the load,
// and so of the deviation from nominal.
func TestRatedOscillatorsOfShippedCases(t *testing.T) {
	for _, name := range []string{"starter", "droop3", "short-lines", "mesh-10", "mesh-20"} {
		c, err := Open(name)
		if err != nil {
			t.Fatal(err)
		}
		sim, err := c.Start(&engine.Options{Record: []string{}})
		if err != nil {
			t.Fatal(err)
		}
		n, err := c.RatedOscillators(sim.System())
		if err != nil {
			t.Fatal(err)
		}
		if len(n.Notes) != 0 {
			t.Errorf("%s: %q", name, n.Notes)
		}
		r, err := screen.Screen(&n.Network, nil)
		if err != nil {
			t.Fatal(err)
		}
		want := sim.OperatingPoint().Frequencies[0]
		// 5 % of rated power is 5 % of 0.5 Hz.
		if math.Abs(hertzOf(r)-want) > 0.025 || !r.InStep {
			t.Errorf("%s: in step (%v) at %.6f Hz, the operating point is at %.6f", name, r.InStep, hertzOf(r), want)
		}
		t.Logf("%s: %.6f Hz at rated voltages, %.6f at the operating point", name, hertzOf(r), want)
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
