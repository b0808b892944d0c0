package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

func TestShrink(t *testing.T) {
	file := filepath.Join(t.TempDir(), "reduced", "small.toml")
	code, out, err := islet("shrink", "cigre-lv", "--out", file, "--until", "0.1")
	if code != exitOK {
		t.Fatalf("code %d\n%s%s", code, out, err)
	}
	for _, w := range []string{
		"buses            20       10\n", "taken out  R3, R4, R5", "reduced-1, 4 RL circuits", "reduced-2 (line)", "exact at all frequencies",
		"feeder-breaker is a breaker", "battery-R9 is a grid-forming inverter", "176 against 136 unknowns", "voltage", "% of each waveform's range", "written to " + file,
	} {
		if !strings.Contains(out, w) {
			t.Errorf("report lacks %q:\n%s", w, out)
		}
	}
	for _, cmd := range [][]string{{"check", file}, {"run", file, "--until", "0.1"}, {"steady", file}, {"shrink", file}} {
		if code, out, err := islet(cmd...); code != exitOK {
			t.Errorf("islet %v: code %d\n%s%s", cmd, code, out, err)
		}
	}
	code, text, _ := islet("shrink", "cigre-lv", "--out", "-", "--set", "study.until_s=1.2")
	if code != exitOK || !strings.Contains(text, "until_s = 1.2\n") || strings.Contains(text, "taken out  ") {
		t.Errorf("--out -: code %d\n%s", code, text)
	}
}

func TestShrinkOptions(t *testing.T) {
	code, out, _ := islet("shrink", "harbour", "--loads-as-impedances", "--no-run")
	if code != exitOK || !strings.Contains(out, "series load") || strings.Contains(out, "both run") || !strings.Contains(out, "Not written; --out FILE") {
		t.Errorf("code %d\n%s", code, out)
	}
	code, out, _ = islet("shrink", "cigre-lv", "--keep", "R10,R2", "--keep", "R7", "--plain-branches", "--until", "0.05")
	for _, w := range []string{"R7                   asked for", "plain branches won't do", "licensed engineer"} {
		if code != exitOK || !strings.Contains(out, w) {
			t.Errorf("code %d, report lacks %q\n%s", code, w, out)
		}
	}
	code, out, _ = islet("shrink", "starter")
	if code != exitOK || !strings.Contains(out, "No bus can go; all 2 stay.") || !strings.Contains(out, "battery-1 is a grid-forming inverter") {
		t.Errorf("code %d\n%s", code, out)
	}
	code, out, _ = islet("shrink", "starter", "--out", filepath.Join(t.TempDir(), "x.toml"))
	if code != exitOK || !strings.Contains(out, "nothing to write") {
		t.Errorf("code %d\n%s", code, out)
	}
	// A star of unlike legs, by plain branches: the error is shown.
	star := filepath.Join(t.TempDir(), "star.toml")
	src := "[study]\nuntil_s = 0.05\n"
	for _, b := range []string{"a", "b", "c", "joint"} {
		src += "[bus." + b + "]\nvoltage_kV = 0.4\n"
	}
	for k, b := range []string{"a", "b", "c"} {
		src += "[device.load-" + b + "]\nkind = \"load\"\nbus = \"" + b + "\"\npower_kW = 10\n[device.leg-" + b + "]\nkind = \"line\"\nfrom = \"" + b + "\"\nto = \"joint\"\nR_ohm = " +
			[]string{"0.05", "0.02", "0.01"}[k] + "\nL_H = " + []string{"1e-4", "2e-4", "0.5e-4"}[k] + "\n"
	}
	src += "[device.grid]\nkind = \"grid\"\nbus = \"a\"\nshort_circuit_MVA = 5\n"
	if err := os.WriteFile(star, []byte(src), 0o666); err != nil {
		t.Fatal(err)
	}
	code, out, _ = islet("shrink", star, "--plain-branches")
	for _, w := range []string{"reduced-1-1, reduced-1-2, reduced-1-3 (lines)", "error    of the admittance of plain branches: 21 % at 0 Hz", "licensed engineer"} {
		if code != exitOK || !strings.Contains(out, w) {
			t.Errorf("code %d, report lacks %q\n%s", code, w, out)
		}
	}
}

func TestShrinkWrongUse(t *testing.T) {
	for _, c := range []struct {
		args []string
		want string
	}{
		{[]string{"shrink"}, "takes CASE"},
		{[]string{"shrink", "cigre-lv", "--keep", "R99"}, `no bus "R99" to keep; did you mean`},
		{[]string{"shrink", "cigre-lv", "--keep", " , "}, "want names of buses"},
		{[]string{"shrink", "cigre-lv", "--until", "-1"}, "want a positive time"},
		{[]string{"shrink", "cigre-lv", "--set", "x"}, "want PATH=VALUE"},
		{[]string{"shrink", "nowhere"}, "shipped cases are"},
		{[]string{"shrink", "cigre-lv", "--set", "device.R1-R2.length_m=-1"}, "out of range"},
	} {
		code, out, err := islet(c.args...)
		if code != exitUsage || !strings.Contains(err, c.want) {
			t.Errorf("islet %v: code %d, want %q\n%s%s", c.args, code, c.want, out, err)
		}
	}
}

func TestShrinkAggregate(t *testing.T) {
	file := filepath.Join(t.TempDir(), "sums.toml")
	code, out, err := islet("shrink", "mesh-10", "--aggregate", "--aggregate-tolerance", "5", "--until", "0.6", "--out", file)
	for _, w := range []string{
		"devices          15       12\n", "former-3-x2", "none: exact", "former-0                 event former-down acts on former-0",
		"138 against 100 unknowns", "licensed engineer", "written to " + file,
	} {
		if code != exitOK || !strings.Contains(out, w) {
			t.Errorf("code %d, report lacks %q:\n%s%s", code, w, out, err)
		}
	}
	if code, out, err := islet("run", file, "--until", "0.1"); code != exitOK {
		t.Errorf("code %d\n%s%s", code, out, err)
	}
	for _, o := range [][]string{{"--aggregate-tolerance", "5"}, {"--aggregate", "--aggregate-tolerance", "-1"}, {"--aggregate", "--aggregate-tolerance", "80"}} {
		if code, out, _ := islet(append([]string{"shrink", "mesh-10"}, o...)...); code == exitOK {
			t.Errorf("%v is taken:\n%s", o, out)
		}
	}
}
