package devicetest

import (
	"fmt"
	"strings"
	"testing"

	"islet/solvers"
)

// recorder keeps what a check reports, in place of a *testing.T.
type recorder struct{ faults []string }

func (r *recorder) Helper() {}

func (r *recorder) Errorf(format string, args ...any) {
	r.faults = append(r.faults, fmt.Sprintf(format, args...))
}

func makers(bug string) map[string]struct {
	make func() solvers.Block
	o    Options
} {
	return map[string]struct {
		make func() solvers.Block
		o    Options
	}{
		"toy":      {func() solvers.Block { return newToy(bug) }, Options{Voltages: []float64{toyVolts, toyVolts}}},
		"coupler":  {func() solvers.Block { return &coupler{bug, 0.5 + 0.2i} }, Options{Voltages: []float64{300, 160}, QuasiSteady: true}},
		"injector": {func() solvers.Block { return &injector{bug: bug} }, Options{Voltages: []float64{300}}},
	}
}

// TestSoundDevices runs the kit on devices that are right: it must be content.
func TestSoundDevices(t *testing.T) {
	for name, m := range makers("") {
		t.Run(name, func(t *testing.T) { Run(t, m.make, m.o) })
	}
}

// TestKitFindsFaults runs each check on devices made wrong in one place.
func TestKitFindsFaults(t *testing.T) {
	tests := []struct{ check, bug string }{
		{"description", "no kind"},
		{"description", "terminal missing"},
		{"description", "unknown missing"},
		{"description", "unknown twice"},
		{"description", "no unit"},
		{"description", "no base"},
		{"description", "q part missing"},
		{"description", "flow undeclared"},
		{"description", "tie to nowhere"},
		{"description", "mass of one axis"},
		{"description", "negative mass"},
		{"description", "channel named as an unknown"},
		{"description", "guess not finite"},
		{"description", "angle unknown is none"},
		{"description", "no weight"},
		{"description", "limit of a power"},
		{"description", "unknowns change when switched"},
		{"description", "channels change when switched"},
		{"description", "mass changes when switched"},
		{"jacobian", "jacobian off by a millionth"},
		{"jacobian", "jacobian sign"},
		{"jacobian", "jacobian entry not written"},
		{"jacobian", "jacobian writes outside"},
		{"jacobian", "pattern out of range"},
		{"jacobian", "pattern entry twice"},
		{"jacobian", "pattern too small"},
		{"jacobian", "changes its arguments"},
		{"jacobian", "not a function"},
		{"jacobian", "never in its domain"},
		{"time derivative", "time derivative wrong"},
		{"time derivative", "time derivative denied"},
		{"time derivative", "time derivative overwrites"},
		{"energy", "energy without the capacitor"},
		{"energy", "energy of one phase"},
		{"energy", "loss left out"},
		{"energy", "supply of the wrong sign"},
		{"rotation", "saliency"},
		{"rotation", "pair taken for invariants"},
		{"rotation", "angle taken for an invariant"},
		{"rotation", "energy of one axis"},
		{"frame speed", "capacitor in a fixed frame"},
		{"frame speed", "inductor in a fixed frame"},
		{"frame speed", "injector deaf to the frame"},
		{"flows", "state taken for held"},
		{"flows", "state taken for none"},
		{"flows", "held taken for state"},
		{"flows", "held taken for injected"},
		{"flows", "flow depends on voltage"},
		{"flows", "flow with an offset"},
		{"flows", "tie that carries nothing"},
		{"flows", "coupler with a leak"},
		{"flows", "coupler with the inverse ratio"},
		{"flows", "injector with a conductance"},
		{"flows", "injector off"},
		{"flows", "injector taken for state"},
		{"flows", "injector taken for held"},
		{"measure", "channel without sign"},
		{"measure", "channel without factor 3/2"},
		{"measure", "channel peak for rms"},
		{"measure", "channel not written"},
		{"measure", "channel sign"},
		{"measure", "speed without offset"},
		{"setpoints", "setpoint outside its range"},
		{"setpoints", "changes before it checks"},
		{"setpoints", "takes any name"},
		{"setpoints", "takes NaN"},
		{"setpoints", "takes a negative ramp"},
		{"setpoints", "ramp jumps"},
		{"setpoints", "ramp forgets the ramp before"},
		{"memory", "snapshot overwrites"},
		{"memory", "snapshot in single precision"},
		{"memory", "restores half before it fails"},
		{"memory", "takes damaged snapshots"},
		{"memory", "forgets its setpoints"},
		{"memory", "forgets its switch"},
		{"detail", "coarse level with another reactance"},
		{"detail", "takes any level"},
		{"detail", "level change forgets setpoints"},
		{"detail", "level change of the receiver"},
		{"open ratio", "coupler with one ratio for both ways"},
		{"allocations", "allocates"},
	}
	tested := map[string]bool{}
	for _, test := range tests {
		tested[test.check] = true
		t.Run(test.check+"/"+test.bug, func(t *testing.T) {
			device, _, _ := strings.Cut(test.bug, " ")
			m, ok := makers(test.bug)[device]
			if !ok {
				m = makers(test.bug)["toy"]
			}
			var found recorder
			for _, v := range variants(m.make()) {
				s, err := newSubject(m.make, v, m.o)
				if err != nil {
					t.Fatal(err)
				}
				for _, c := range checks {
					if c.name == test.check {
						c.run(&found, s)
					}
				}
			}
			if len(found.faults) == 0 {
				t.Errorf("not found")
			}
			for _, f := range found.faults[:min(1, len(found.faults))] {
				t.Log(f)
			}
		})
	}
	for _, c := range checks {
		if !tested[c.name] {
			t.Errorf("check %q has no faulty device that proves it", c.name)
		}
	}
}
