package bench

import (
	"context"
	"encoding/csv"
	"math"
	"strings"
	"testing"
	"time"

	"islet/engine"
	"islet/solvers"
)

func TestCompareTraces(t *testing.T) {
	s := MicrogridStudy(4)
	s.Until = 1
	quiet := Study{Until: 1, Start: func(o *engine.Options) (*engine.Simulation, error) {
		g, err := Microgrid(4)
		if err != nil {
			return nil, err
		}
		return engine.Start(g, o)
	}}
	with := Setup{Solver: solvers.Options{RelTol: 1e-6}}
	run := func(s Study, sample float64) *engine.Trace {
		tr, _, err := s.Waveforms(context.Background(), with, []string{"bus-0.v", "load-0.p"}, sample)
		if err != nil {
			t.Fatal(err)
		}
		return tr
	}
	a, b := run(s, 0.01), run(quiet, 0.01)
	if d := Compare(a, a, 0.01, flatChannel); d.Largest != 0 || d.Channels != 2 || d.Samples != 101 {
		t.Errorf("a trace differs from itself: %+v", d)
	}
	// Every 20 ms is in both.
	if d := Compare(run(s, 0.02), a, 0.02, flatChannel); d.Largest > 1e-3 || d.Samples != 51 {
		t.Errorf("another sampling differs: %+v", d)
	}
	// The load gains 40 % in the one run alone: that is its whole range, and
	// shows from the step at 0.5 s on.
	d := Compare(b, a, 0.01, flatChannel)
	if d.Largest < 0.9 || d.Largest > 1.1 || d.Time < 0.5 {
		t.Errorf("a load step differs by %+v, want about 1 of the range", d)
	}
	// Against a reference that doesn't move, flat magnitudes count: 40 % is
	// 400 times a thousandth, and at most the voltage's drop off that.
	if d := Compare(a, b, 0.01, flatChannel); d.Channel != "load-0.p" || d.Largest < 300 || d.Largest > 500 {
		t.Errorf("a load step against none: %+v", d)
	}
}

func TestTables(t *testing.T) {
	rows := []Row{
		{Study: "s", Setup: "m, n", RelTol: 1e-3, Difference: Difference{Largest: 0.25, Channel: "c"},
			Stats: solvers.Stats{Steps: 7}, Times: []time.Duration{3e6, 1e6, 2e6}},
	}
	if m := rows[0].Median(); m != 2e6 {
		t.Errorf("median of 1, 2, 3 ms is %v", m)
	}
	var b strings.Builder
	if err := WriteCSV(&b, rows); err != nil {
		t.Fatal(err)
	}
	lines, err := csv.NewReader(strings.NewReader(b.String())).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(lines) != 4 || lines[1][1] != "m, n" || lines[1][4] != "7" || lines[3][12] != "0.002" {
		t.Errorf("raw data: %v", lines)
	}
	b.Reset()
	if err := WriteTable(&b, rows); err != nil {
		t.Fatal(err)
	}
	if !strings.Contains(b.String(), "2.50e-01") || !strings.Contains(b.String(), "2.00") {
		t.Errorf("table: %s", b.String())
	}
}

// Both times and work come out of a short table, whatever the method.
func TestWorkPrecision(t *testing.T) {
	s := MicrogridStudy(4)
	s.Until = 0.6
	ctx := context.Background()
	ref, _, err := s.Waveforms(ctx, Setup{Solver: solvers.Options{RelTol: 1e-9}}, nil, 0.01)
	if err != nil {
		t.Fatal(err)
	}
	rows, err := s.WorkPrecision(ctx, []Setup{{Name: "a"}, {Name: "b", Method: solvers.Rodas4P, GeneralLU: true, TurningFrame: true}}, []float64{1e-3, 1e-6}, ref, nil, 0.01, 3)
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) != 4 {
		t.Fatalf("%d rows, want 4", len(rows))
	}
	for k, r := range rows {
		if len(r.Times) != 3 || r.Median() <= 0 || r.Stats.Steps == 0 || math.IsNaN(r.Difference.Largest) {
			t.Errorf("row %d: %+v", k, r)
		}
	}
	for k := range 2 {
		if !(rows[2+k].Difference.Largest < rows[k].Difference.Largest) || rows[2+k].Difference.Largest > 1e-2 {
			t.Errorf("%s: error %g at 1e-6, %g at 1e-3", rows[k].Setup, rows[2+k].Difference.Largest, rows[k].Difference.Largest)
		}
	}
}
