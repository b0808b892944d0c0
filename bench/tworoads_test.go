package bench

import (
	"context"
	"math"
	"testing"

	"islet/cases"
	"islet/devices"
	"islet/engine"
	"islet/solvers"
)

// TestTwoRoadsToAReduction runs a study with inverters in their closed reduced
// form, and with the full equations whose fast unknowns have lost their mass:
// operating points and trajectories agree to the solver's tolerance. The lines
// are quasi-steady in both, since coarser inverters need a network that takes
// given currents.
func TestTwoRoadsToAReduction(t *testing.T) {
	for _, c := range []struct {
		name, study, pattern string
		network              bool
	}{
		{"droop3", "droop3", "kind:*inverter", false},
		{"cigre-lv", "cigre-lv", "kind:*inverter", true},
	} {
		k, err := cases.Open(c.study)
		if err != nil {
			t.Fatal(err)
		}
		var base []cases.DetailRule
		if c.network {
			base = append(base, cases.DetailRule{Pattern: "*", Level: "quasi-steady"})
		}
		for _, level := range []string{devices.CurrentLoopGone, devices.InnerLoopsGone, devices.PrimaryOnly} {
			run := func(s *engine.System) (*engine.Trace, int) {
				t.Helper()
				m, err := engine.Start(s, &engine.Options{Sample: 1e-3, NoLedger: true, FixedFrame: true, Record: []string{"*.v", "*.P"}, Solver: solvers.Options{RelTol: 1e-9}})
				if err != nil {
					t.Fatalf("%s, %s: %v", c.name, level, err)
				}
				for _, e := range k.Events {
					if e.Time <= 0.4 {
						if err := m.At(e.Time, e.Event); err != nil {
							t.Fatal(err)
						}
					}
				}
				tr, err := m.Run(context.Background(), 0.5)
				if err != nil {
					t.Fatalf("%s, %s: %v", c.name, level, err)
				}
				return tr, m.Unknowns()
			}
			closed, err := k.Build(append(append([]cases.DetailRule(nil), base...), cases.DetailRule{Pattern: c.pattern, Level: level})...)
			if err != nil {
				t.Fatal(err)
			}
			full, err := k.Build(base...)
			if err != nil {
				t.Fatal(err)
			}
			zero, replaced := massless(t, full, level)
			a, na := run(closed)
			b, nb := run(zero)
			if replaced == 0 || na >= nb {
				t.Errorf("%s, %s: %d inverters replaced, %d unknowns in closed form and %d by zero mass", c.name, level, replaced, na, nb)
			}
			d := Compare(b, a, 1e-3, flatChannel)
			t.Logf("%s, %s: %d unknowns in closed form, %d by zero mass; they differ by %.1e of range (%s at %g s)", c.name, level, na, nb, d.Largest, d.Channel, d.Time)
			if !(d.Largest < 2e-6) {
				t.Errorf("%s, %s: the two roads differ by %.2e of range (%s)", c.name, level, d.Largest, d.Channel)
			}
			for _, ch := range a.Channels {
				if x, y := a.Column(ch.Name)[0], b.Column(ch.Name)[0]; math.Abs(x-y) > 1e-8*math.Abs(x) {
					t.Errorf("%s, %s: operating points differ at %s: %.12g and %.12g", c.name, level, ch.Name, x, y)
				}
			}
		}
	}
}

// massless rebuilds a system with the inverters' fast unknowns without mass, as
// far as they offer the level.
func massless(t *testing.T, s *engine.System, level string) (*engine.System, int) {
	t.Helper()
	out := engine.NewSystem(s.Frequency())
	for _, n := range s.BusNames() {
		b, _ := s.FindBus(n)
		out.Bus(n, b.Rated())
	}
	replaced := 0
	for _, n := range s.DeviceNames() {
		d := s.Device(n)
		type ladder interface {
			DroppedDynamics(level string) []string
			Details() []string
		}
		if l, ok := d.(ladder); ok {
			for _, offered := range l.Details() {
				if offered != level {
					continue
				}
				z, err := devices.ZeroMass(d, l.DroppedDynamics(level)...)
				if err != nil {
					t.Fatal(err)
				}
				d = z.(engine.Device)
				replaced++
			}
		}
		var at []engine.Bus
		for _, c := range s.Connections(n) {
			b, _ := out.FindBus(c)
			at = append(at, b)
		}
		if err := out.Add(n, d, at...); err != nil {
			t.Fatal(err)
		}
	}
	return out, replaced
}
