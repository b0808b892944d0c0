package main

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// want runs islet and wants its code and texts in what it prints.
func want(t *testing.T, code int, texts []string, args ...string) string {
	t.Helper()
	got, out, err := islet(args...)
	if got != code {
		t.Errorf("islet %v: code %d, want %d\n%s%s", args, got, code, out, err)
	}
	for _, w := range texts {
		if !strings.Contains(out+err, w) {
			t.Errorf("islet %v: lacks %q:\n%s%s", args, w, out, err)
		}
	}
	return out
}

func TestModes(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "modes")
	want(t, exitOK, []string{
		"30 states", "stable; rightmost is", "common turn of battery-1's island", "Hz", "scale", "for a bandwidth of 2 Hz", "voltage loop       yes",
		"phasors, 1/s", "licensed engineer", "eigenvalues.svg",
	}, "modes", "starter", "--bandwidth", "2", "--against", "phasors: *=quasi-steady", "--out", dir)
	for _, name := range []string{"modes.txt", "modes.csv", "modes.json", "participation.csv", "match.txt", "match.csv", "proposal.csv", "eigenvalues.svg"} {
		if st, err := os.Stat(filepath.Join(dir, name)); err != nil || st.Size() < 200 {
			t.Errorf("%s: %v", name, err)
		}
	}
	var v map[string]any
	if err := json.Unmarshal([]byte(want(t, exitOK, nil, "modes", "starter", "--json")), &v); err != nil {
		t.Error(err)
	}
	if out := want(t, exitOK, nil, "modes", "starter", "--csv"); strings.Count(out, "\n") != 17 || strings.Contains(out, "engineer") {
		t.Errorf("as CSV:\n%s", out)
	}
	// In the island, after the tie has opened, and while the pump starts: two
	// islands, so two common turns.
	for _, at := range []string{"0.9", "1.003"} {
		want(t, exitOK, []string{"modes at t = " + at + " s", "stable", "not a steady state", "common turn of grid's island", "common turn of battery-hill's island"}, "modes", "harbour", "--at", at)
	}
	want(t, exitOK, []string{"battery-2        device or bus", "state (power filter)"}, "modes", "starter", "--mode", "2")
	if err := json.Unmarshal([]byte(want(t, exitOK, nil, "modes", "starter", "--against", "phasors: *=quasi-steady", "--json")), &v); err != nil || len(v["pairs"].([]any)) == 0 {
		t.Errorf("match as JSON: %v, %v", err, v["pairs"])
	}
	// A large system: some modes, unless all are asked for.
	want(t, exitOK, []string{"all modes found decay"}, "modes", "mesh-100", "--near", "3", "--count", "5")
}

// The critical gain of the shipped case is that of the published three-inverter
// network: m = 1.827116e-4 rad/s/W for all three (see bench.TestPublishedCriticalGains
// for the source).
func TestModesCriticalGain(t *testing.T) {
	dir := t.TempDir()
	want(t, exitOK, []string{"root locus over device.inverter-1.m", "UNSTABLE", "critical value 0.000182712", "10.65 Hz", "root-locus.svg"},
		"modes", "short-lines", "--vary", "device.inverter-1.m,device.inverter-2.m,device.inverter-3.m=5e-5:3e-4:5", "--out", dir)
	want(t, exitOK, []string{"stable at all 2 values from 5e-05 to 0.0001"},
		"modes", "short-lines", "--vary", "device.inverter-1.m,device.inverter-2.m,device.inverter-3.m=5e-5:1e-4:2")
	var v struct {
		Critical []struct{ Value float64 }
		Points   []struct{ Stable bool }
	}
	out := want(t, exitOK, nil, "modes", "short-lines", "--vary", "device.inverter-1.m,device.inverter-2.m,device.inverter-3.m=5e-5:3e-4:2", "--json")
	if err := json.Unmarshal([]byte(out), &v); err != nil || len(v.Critical) != 1 || math.Abs(v.Critical[0].Value/1.827116e-4-1) > 1e-6 || !v.Points[0].Stable || v.Points[1].Stable {
		t.Errorf("root locus as JSON: %v, %+v", err, v)
	}
}

func TestModesResponses(t *testing.T) {
	dir := t.TempDir()
	want(t, exitOK, []string{"battery-2.p / battery-1.p", "response.svg"}, "modes", "starter", "--response", "battery-1.p:battery-2.p", "--points", "9", "--out", dir)
	want(t, exitOK, []string{"impedance.csv"}, "modes", "harbour", "--impedance", "quay-11", "--points", "9", "--out", dir)
	export := filepath.Join(dir, "matrices")
	want(t, exitOK, []string{"30 states, 10 inputs, 33 outputs written"}, "modes", "starter", "--export", export)
	for _, name := range []string{"A.mtx", "B.mtx", "C.mtx", "D.mtx", "names.csv"} {
		if _, err := os.Stat(filepath.Join(export, name)); err != nil {
			t.Error(err)
		}
	}
}

func TestModesWrongUse(t *testing.T) {
	for _, c := range []struct {
		text string
		args []string
	}{
		{"want PATH=FROM:TO", []string{"--vary", "device.battery-1.m"}},
		{"want PATH=FROM:TO", []string{"--vary", "device.battery-1.m=1:1"}},
		{"unknown key", []string{"--vary", "device.battery-1.nonsense=1:2"}},
		{"not with --at", []string{"--vary", "device.battery-1.m=1e-5:1e-4", "--at", "1"}},
		{"want a frequency in Hz", []string{"--near", "fast"}},
		{"want at least 1", []string{"--count", "0"}},
		{"want a time in s", []string{"--at", "-1"}},
		{"no bus \"quai\"", []string{"--impedance", "quai"}},
		{"want SETPOINT:CHANNEL", []string{"--response", "battery-1.p"}},
		{"want NAME: PATTERN=LEVEL", []string{"--against", "quasi-steady"}},
		{"--bandwidth -1", []string{"--bandwidth", "-1"}},
		{"give one of them alone", []string{"--impedance", "office", "--export", "x"}},
		{"give one of them alone", []string{"--vary", "device.battery-1.m=1e-5:1e-4", "--response", "battery-1.p:battery-2.p"}},
		{"no mode 99, want 1 to 16", []string{"--mode", "99"}},
		{"from < to", []string{"--impedance", "jetty", "--from", "10", "--to", "1"}},
	} {
		want(t, exitUsage, []string{c.text}, append([]string{"modes", "starter"}, c.args...)...)
	}
}

// compare tells loudly where a reduction changes the verdict.
func TestCompareModes(t *testing.T) {
	set := []string{"--until", "0.02", "--repeat", "1", "--setting", "fast: kind:line=quasi-steady", "--setting", "slow: *=primary only"}
	for _, k := range []string{"1", "2", "3"} {
		set = append(set, "--set", "device.inverter-"+k+".m=2.2e-4")
	}
	out := want(t, exitOK, []string{"modes at the operating point", "WARNING: STABILITY DIFFERS: as given is UNSTABLE, slow stable"}, append([]string{"compare", "short-lines"}, set...)...)
	if strings.Contains(out, "fast stable") {
		t.Errorf("quasi-steady lines alone hide the instability:\n%s", out)
	}
	if out := want(t, exitOK, nil, append([]string{"compare", "short-lines", "--no-modes"}, set...)...); strings.Contains(out, "modes at the operating point") {
		t.Error("--no-modes is ignored")
	}
}
