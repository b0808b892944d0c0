package main

import "testing"

func TestScreen(t *testing.T) {
	want(t, exitOK, []string{
		"2 sources, 4 nodes, 3 branches, a tree", "yes, at 49.801", "in a tree that is exact", "times as large", "fall short of what is drawn",
		"in proportion to rating", "battery-1", "39.7 %", `simulation at "phase only"`, "CONFIRMED: in step", "CAUTION: where R exceeds X", "licensed engineer",
	}, "screen", "starter")
	want(t, exitOK, []string{"with loops", "norm of B' L^+ P", "grid", "holds speed", "every source gives what is set", `simulation at "primary only"`, "CONFIRMED: in step"},
		"screen", "harbour", "--confirm", "primary only")
	// In the island, no grid holds the speed.
	want(t, exitOK, []string{"5 sources", "leave --at out"}, "screen", "harbour", "--at", "0.9")
	want(t, exitOK, []string{`simulation at "full"`, "CONFIRMED: in step"}, "screen", "mesh-10", "--confirm", "full")
	// Unstable in full, which phase oscillators don't see.
	args := []string{"screen", "short-lines", "--confirm", "full"}
	for _, k := range []string{"1", "2", "3"} {
		args = append(args, "--set", "device.inverter-"+k+".m=3e-4")
	}
	want(t, exitOK, []string{"yes, at", "NOT CONFIRMED"}, args...)
	want(t, exitUsage, []string{"no device of the case offers that level"}, "screen", "starter", "--confirm", "nonsense")
	want(t, exitUsage, []string{"want a time in s"}, "screen", "starter", "--at", "-2")
}
