package main

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// islet runs the command as a user would and returns what it printed.
func islet(args ...string) (code int, stdout, stderr string) {
	var out, err bytes.Buffer
	code = run(context.Background(), args, &out, &err)
	return code, out.String(), err.String()
}

func TestHelp(t *testing.T) {
	for _, args := range [][]string{nil, {"--help"}, {"help"}} {
		code, out, _ := islet(args...)
		if code != exitOK || !strings.Contains(out, "run      CASE") || !strings.Contains(out, "licensed engineer") {
			t.Errorf("islet %v: code %d\n%s", args, code, out)
		}
	}
	for _, c := range commands() {
		code, out, _ := islet(c.name, "--help")
		if code != exitOK || !strings.Contains(out, "example: islet "+c.name) {
			t.Errorf("islet %s --help: code %d\n%s", c.name, code, out)
		}
		if code, again, _ := islet("help", c.name); code != exitOK || again != out {
			t.Errorf("islet help %s differs from --help", c.name)
		}
	}
}

func TestWrongUse(t *testing.T) {
	bad := filepath.Join(t.TempDir(), "bad.toml")
	if err := os.WriteFile(bad, []byte("[study]\ntitle = \"x\"\nfrequency_Hz = -50\nuntil_s = 1\n\n[bus.a]\nrated_kVV = 0.4\n"), 0o666); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		args []string
		want []string
	}{
		{[]string{"frobnicate"}, []string{`no command "frobnicate"`}},
		{[]string{"run"}, []string{"takes CASE, 0 arguments"}},
		{[]string{"run", "starter", "extra"}, []string{"2 arguments"}},
		{[]string{"run", "starter", "--colour"}, []string{"-colour", "--help lists"}},
		{[]string{"run", "no-such-case"}, []string{`"no-such-case"`, "shipped cases are", "starter"}},
		{[]string{"run", "starter", "--set", "nonsense"}, []string{"want PATH=VALUE"}},
		{[]string{"run", "starter", "--detail", "x"}, []string{"want PATTERN=LEVEL"}},
		{[]string{"run", "starter", "--method", "euler"}, []string{"want Rodas5P, Rodas4P or Trapezoidal"}},
		{[]string{"run", "starter", "--method", "Trapezoidal"}, []string{"--step 20e-6"}},
		{[]string{"run", "starter", "--until", "-1"}, []string{"--until -1"}},
		{[]string{"run", "starter", "--record", "nothing.at.all"}, []string{"no channel matches"}},
		{[]string{"check", bad}, []string{"bad.toml:3", "bad.toml:7", "rated_kV"}},
		{[]string{"compare", "starter", "--setting", "x"}, []string{"want NAME: PATTERN=LEVEL"}},
		{[]string{"compare", "starter", "--windows", "x"}, []string{"want two times"}},
		{[]string{"compare", "starter", "--windows", "0.3,0.1"}, []string{"ascending"}},
		{[]string{"compare", "starter", "--repeat", "0"}, []string{"want at least 1"}},
		{[]string{"keys", "no such kind"}, []string{"no such kind"}},
	} {
		code, out, err := islet(c.args...)
		if code != exitUsage {
			t.Errorf("islet %v: code %d, want %d\n%s%s", c.args, code, exitUsage, out, err)
		}
		for _, w := range c.want {
			if !strings.Contains(err, w) {
				t.Errorf("islet %v: message lacks %q: %s", c.args, w, err)
			}
		}
	}
}

func TestRunTellsAndWrites(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "results")
	code, out, err := islet("run", "starter", "--out", dir, "--set", "study.until_s=1")
	if code != exitOK {
		t.Fatalf("code %d\n%s%s", code, out, err)
	}
	for _, w := range []string{"starter", "real time", "licensed engineer", "written to"} {
		if !strings.Contains(out, w) {
			t.Errorf("report lacks %q:\n%s", w, out)
		}
	}
	f, e := os.Open(filepath.Join(dir, "waveforms.csv"))
	if e != nil {
		t.Fatal(e)
	}
	defer f.Close()
	if rows, e := csv.NewReader(f).ReadAll(); e != nil || len(rows) < 100 {
		t.Errorf("waveforms.csv: %d rows, %v", len(rows), e)
	}
	if data, e := os.ReadFile(filepath.Join(dir, "summary.json")); e != nil || !json.Valid(data) {
		t.Errorf("summary.json: %v", e)
	}
	if pictures, _ := filepath.Glob(filepath.Join(dir, "*.svg")); len(pictures) < 4 {
		t.Errorf("only %d pictures", len(pictures))
	}
	if code, out, _ := islet("run", "starter", "--json"); code != exitOK || !json.Valid([]byte(out)) {
		t.Errorf("run --json: code %d, valid %v", code, json.Valid([]byte(out)))
	}
}

func TestInterruptedRunKeepsItsResults(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	dir := t.TempDir()
	var out, errs bytes.Buffer
	code := run(ctx, []string{"run", "starter", "--out", dir, "--no-plots"}, &out, &errs)
	if code != exitInterrupted || !strings.Contains(out.String(), "ENDED EARLY") {
		t.Errorf("code %d\n%s%s", code, out.String(), errs.String())
	}
	if _, err := os.Stat(filepath.Join(dir, "waveforms.csv")); err != nil {
		t.Error(err)
	}
}

func TestSteady(t *testing.T) {
	code, out, _ := islet("steady", "starter")
	if code != exitOK || !strings.Contains(out, "led by battery-1") || !strings.Contains(out, "workshop") {
		t.Errorf("code %d\n%s", code, out)
	}
	code, out, _ = islet("steady", "starter", "--json")
	var doc struct {
		Values []pointValue `json:"values"`
	}
	if err := json.Unmarshal([]byte(out), &doc); code != exitOK || err != nil || len(doc.Values) < 20 {
		t.Errorf("steady --json: code %d, %v, %d values", code, err, len(doc.Values))
	}
	code, out, _ = islet("steady", "starter", "--csv")
	if rows, err := csv.NewReader(strings.NewReader(out)).ReadAll(); code != exitOK || err != nil || len(rows) < 20 {
		t.Errorf("steady --csv: code %d, %v", code, err)
	}
}

func TestCompare(t *testing.T) {
	dir := t.TempDir()
	code, out, err := islet("compare", "starter", "--repeat", "1", "--out", dir)
	if code != exitOK {
		t.Fatalf("code %d\n%s%s", code, out, err)
	}
	for _, w := range []string{"as given", "network quasi-steady", "primary only", "verdict"} {
		if !strings.Contains(out, w) {
			t.Errorf("table lacks %q:\n%s", w, out)
		}
	}
	for _, f := range []string{"comparison.txt", "comparison.csv", "comparison.json"} {
		if _, err := os.Stat(filepath.Join(dir, f)); err != nil {
			t.Error(err)
		}
	}
	code, out, _ = islet("compare", "starter", "--repeat", "1", "--json", "--setting", "slim: battery-*=primary only, kind:line=quasi-steady")
	if code != exitOK || !json.Valid([]byte(out)) || !strings.Contains(out, "slim") {
		t.Errorf("compare --json: code %d\n%s", code, out)
	}
}

func TestCasesAndKeys(t *testing.T) {
	code, out, _ := islet("cases")
	if code != exitOK || !strings.Contains(out, "harbour") {
		t.Errorf("code %d\n%s", code, out)
	}
	code, src, _ := islet("cases", "starter")
	if code != exitOK || !strings.Contains(src, "[study]") {
		t.Errorf("code %d\n%s", code, src)
	}
	// A copy of a shipped case is a case.
	mine := filepath.Join(t.TempDir(), "mine.toml")
	if err := os.WriteFile(mine, []byte(src), 0o666); err != nil {
		t.Fatal(err)
	}
	if code, out, err := islet("check", mine); code != exitOK || !strings.Contains(out, "no fault found") {
		t.Errorf("code %d\n%s%s", code, out, err)
	}
	if code, out, _ := islet("keys", "line"); code != exitOK || !strings.Contains(out, "ohm_per_km") {
		t.Errorf("code %d\n%s", code, out)
	}
}
