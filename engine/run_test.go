package engine_test

import (
	"context"
	"errors"
	"math"
	"strings"
	"sync"
	"testing"

	"islet/engine"
	"islet/solvers"
)

// tied is a stiff grid and a droop source joined by a switch, each with a
// load.
func tied(t *testing.T, open bool) *engine.System {
	t.Helper()
	s := engine.NewSystem(50)
	a, b := s.Bus("a", 400), s.Bus("b", 400)
	for _, x := range []struct {
		name string
		d    engine.Device
		at   []engine.Bus
	}{
		{"grid", &source{e: 326.6, r: 0.05, l: 0.3e-3, w: w50}, []engine.Bus{a}},
		{"unit", &source{e: 328, r: 0.05, l: 1e-3, w: w50 * 1.0005, m: 1e-4}, []engine.Bus{b}},
		{"tie", newContact(1e-3, open), []engine.Bus{a, b}},
		{"load-a", &shunt{r: 20}, []engine.Bus{a}},
		{"load-b", &shunt{r: 25, l: 10e-3}, []engine.Bus{b}},
	} {
		if err := s.Add(x.name, x.d, x.at...); err != nil {
			t.Fatal(err)
		}
	}
	return s
}

func at(t *testing.T, m *engine.Simulation, when float64, e engine.Event) {
	t.Helper()
	if err := m.At(when, e); err != nil {
		t.Fatal(err)
	}
}

func run(t *testing.T, m *engine.Simulation, until float64) *engine.Trace {
	t.Helper()
	tr, err := m.Run(context.Background(), until)
	if err != nil {
		t.Fatal(err)
	}
	return tr
}

// The frame is a choice of coordinates: one that turns with the island and
// one that stays at the nominal speed give the same physical waveforms, and so
// do the other linear solver and another method.
func TestFramesSolversAndMethodsAgree(t *testing.T) {
	tight := solvers.Options{RelTol: 1e-8}
	traces := make(map[string]*engine.Trace)
	steps := make(map[string]int)
	for name, o := range map[string]*engine.Options{
		"following":   {Solver: tight},
		"fixed frame": {Solver: tight, FixedFrame: true},
		"general LU":  {Solver: tight, GeneralLU: true},
		"Rodas4P":     {Solver: tight, Method: solvers.Rodas4P},
		"trapezoidal": {Solver: solvers.Options{RelTol: 1e-8, MaxStep: 5e-6}, Method: solvers.Trapezoidal},
	} {
		o.Sample = 1e-3
		o.Record = []string{"b.v_a", "b.v", "unit.p", "unit.P", "tie.to.i_b"}
		m := start(t, tied(t, false), o)
		at(t, m, 0.05, engine.Set("unit", "e", 335))
		at(t, m, 0.15, engine.Open("tie"))
		traces[name] = run(t, m, 1)
		steps[name] = m.Stats().Steps
	}
	if steps["following"] >= steps["fixed frame"] {
		t.Errorf("a frame that follows took %d steps, a fixed one %d", steps["following"], steps["fixed frame"])
	}
	ref := traces["following"]
	for name, tr := range traces {
		tol := 2e-6
		if name == "trapezoidal" {
			tol = 2e-5 // its own error at 5 us: order 2
		}
		for _, ch := range ref.Channels {
			lo, hi, worst := math.Inf(1), math.Inf(-1), 0.0
			for k, tt := range ref.Time {
				v := ref.Column(ch.Name)[k]
				lo, hi = math.Min(lo, v), math.Max(hi, v)
				if !ref.Before[k] {
					worst = math.Max(worst, math.Abs(v-tr.At(ch.Name, tt)))
				}
			}
			if worst > tol*(hi-lo) {
				t.Errorf("%s: %s differs by %.3g of its range", name, ch.Name, worst/(hi-lo))
			}
		}
	}
}

// Opening a tie leaves two islands at their own frequencies; the synchronism
// check closes it again within its windows, and the waveforms stay continuous
// where they must.
func TestSynchronism(t *testing.T) {
	m := start(t, tied(t, false), &engine.Options{Record: []string{"*"}})
	at(t, m, 0.1, engine.Open("tie"))
	c := engine.SyncCheck{Voltage: 0.05, Frequency: 0.5, Angle: 0.05, Deadline: 60}
	at(t, m, 1, engine.CloseInSync("tie", c))
	tr := run(t, m, 30)
	closed := math.NaN()
	for _, n := range m.Notes() {
		if n.Text == "tie closes" {
			closed = n.Time
		}
	}
	if !(closed > 1) {
		t.Fatalf("the tie did not close: %+v", m.Notes())
	}
	// At the left side of the closing the angle between the islands is the
	// window's edge, as phase voltages show: take the angle between the
	// instantaneous space vectors (Clarke).
	k := 0
	for i := range tr.Time {
		if tr.Time[i] == closed && tr.Before[i] {
			k = i
		}
	}
	angle := func(bus string) float64 {
		a, b, c := tr.Column(bus + ".v_a")[k], tr.Column(bus + ".v_b")[k], tr.Column(bus + ".v_c")[k]
		return math.Atan2((b-c)/math.Sqrt(3), (2*a-b-c)/3)
	}
	d := math.Remainder(angle("a")-angle("b"), 2*math.Pi)
	if math.Abs(math.Abs(d)-0.05) > 1e-6 {
		t.Errorf("closed at an angle of %.9f rad, want the window's edge 0.05", d)
	}
	for _, ch := range []string{"load-b.terminal.i_a", "unit.terminal.i_a"} {
		l, r := tr.Column(ch)[k], tr.Column(ch)[k+1]
		if math.Abs(l-r) > 1e-6 {
			t.Errorf("%s jumps from %g to %g at the closing", ch, l, r)
		}
	}
	if f := tr.At("a.frequency", 30); math.Abs(f-50) > 0.05 {
		t.Errorf("frequency %g Hz after the closing", f)
	}
	if a, b := tr.At("a.frequency", 0.9), tr.At("b.frequency", 0.9); math.Abs(a-b) < 1e-3 {
		t.Errorf("the islands ran at %g and %g Hz, want two frequencies", a, b)
	}
	if c := m.Energy().Closure(); c > 1e-6 {
		t.Errorf("ledger closes to %g", c)
	}
}

func TestSynchronismDeadline(t *testing.T) {
	m := start(t, tied(t, true), nil)
	at(t, m, 0.1, engine.CloseInSync("tie", engine.SyncCheck{Voltage: 1e-6, Frequency: 0.5, Angle: 0.05, Deadline: 0.5}))
	run(t, m, 1)
	last := m.Notes()[len(m.Notes())-1]
	if math.Abs(last.Time-0.6) > 1e-12 || !strings.Contains(last.Text, "stays open") {
		t.Errorf("last note %+v, want a deadline missed at 0.6 s", last)
	}
}

// An undervoltage trip with a delay: the voltage falls below the limit at the
// closing of the switch, and the trip comes exactly one delay later; a dip
// shorter than the delay doesn't count.
func TestConditionWithDelay(t *testing.T) {
	build := func() *engine.Simulation {
		m := start(t, twoSources(t, &shunt{r: 15}), nil)
		at(t, m, 0.2, engine.Close("switch"))
		if err := m.When(engine.Condition{Channel: "b.v", Below: true, Limit: 380, For: 0.00005}, engine.Trip("extra")); err != nil {
			t.Fatal(err)
		}
		return m
	}
	m := build()
	tr := run(t, m, 0.4)
	var trip float64
	for _, n := range m.Notes() {
		if n.Text == "extra trips" {
			trip = n.Time
		}
	}
	if math.Abs(trip-0.20005) > 1e-12 {
		t.Errorf("trip at %.12g s, want 0.20005", trip)
	}
	if v := tr.At("b.v", 0.4); v < 380 {
		t.Errorf("%g V after the load has gone", v)
	}
	m = build()
	at(t, m, 0.20004, engine.Open("switch"))
	run(t, m, 0.4)
	for _, n := range m.Notes() {
		if n.Text == "extra trips" {
			t.Errorf("tripped at %g s although the dip was shorter than the delay", n.Time)
		}
	}
}

func TestCancellationKeepsWhatWasComputed(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	o := &engine.Options{Hooks: engine.Hooks{Progress: func(now, until float64) {
		if now > 0.3 {
			cancel()
		}
	}}}
	m := start(t, tied(t, false), o)
	at(t, m, 0.1, engine.Open("tie"))
	tr, err := m.Run(ctx, 10)
	if !errors.Is(err, context.Canceled) {
		t.Fatalf("error %v", err)
	}
	if end := tr.Time[len(tr.Time)-1]; end != m.Time() || end < 0.3 {
		t.Errorf("trace ends at %g s, the run at %g", end, m.Time())
	}
	// And it can go on.
	if _, err := m.Run(context.Background(), 10); err != nil || m.Time() != 10 {
		t.Errorf("can't go on: %v, t = %g", err, m.Time())
	}
}

func TestStepsAllocateNothing(t *testing.T) {
	m := start(t, tied(t, false), &engine.Options{Record: []string{}, Solver: solvers.Options{MaxStep: 1e-3}})
	at(t, m, 100, engine.Open("tie"))
	for range 50 {
		if err := m.Step(); err != nil {
			t.Fatal(err)
		}
	}
	if n := testing.AllocsPerRun(200, func() {
		if err := m.Step(); err != nil {
			t.Fatal(err)
		}
	}); n > 0.1 { // the trace's times grow now and then
		t.Errorf("%g allocations a step", n)
	}
}

func TestEventsAreChecked(t *testing.T) {
	m := start(t, tied(t, false), nil)
	for _, c := range []struct {
		e    engine.Event
		want string
	}{
		{engine.Open("nothing"), "no device of that name"},
		{engine.Open("grid"), "can't be opened"},
		{engine.Set("grid", "x", 1), `no setpoint "x"; there are e`},
		{engine.Set("grid", "e", -5), "want 0 to"},
		{engine.Set("grid", "e", math.NaN()), "value is NaN"},
		{engine.Ramp("grid", "e", 5, -1), "duration is -1"},
		{engine.Set("load-a", "e", 5), "no setpoints"},
		{engine.CloseInSync("tie", engine.SyncCheck{}), "want positive windows"},
	} {
		if err := m.At(1, c.e); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%v: error %v, want one with %q", c.e, err, c.want)
		}
	}
	if err := m.At(-1, engine.Open("tie")); err == nil {
		t.Error("an event in the past was accepted")
	}
	if err := m.When(engine.Condition{Channel: "b.w"}, engine.Trip("unit")); err == nil || !strings.Contains(err.Error(), "b has v, frequency") {
		t.Errorf("condition on an unknown channel: %v", err)
	}
}

// Trips of the last source leave the island dead, and say so.
func TestLastSourceTrips(t *testing.T) {
	m := start(t, tied(t, false), nil)
	at(t, m, 0.1, engine.Open("tie"))
	at(t, m, 0.2, engine.Trip("unit"))
	tr := run(t, m, 0.5)
	if v := tr.At("b.v", 0.4); v != 0 {
		t.Errorf("dead bus has %g V", v)
	}
	if v := tr.At("a.v", 0.4); math.Abs(v-400) > 5 {
		t.Errorf("the other island has %g V", v)
	}
	said := false
	for _, n := range m.Notes() {
		said = said || strings.Contains(n.Text, "no source left for b")
	}
	if !said {
		t.Errorf("nothing said of the dead island: %+v", m.Notes())
	}
	if c := m.Energy().Closure(); c > 1e-6 {
		t.Errorf("ledger closes to %g: %+v", c, m.Energy())
	}
}

// Independent simulations share nothing: run side by side they give the bits
// they give alone. The race detector runs this too.
func TestIndependentRunsSideBySide(t *testing.T) {
	one := func() *engine.Simulation {
		m := start(t, tied(t, false), nil)
		at(t, m, 0.1, engine.Open("tie"))
		return m
	}
	alone := run(t, one(), 0.5).Column("b.v")
	const n = 4
	sims, results := make([]*engine.Simulation, n), make([][]float64, n)
	for k := range sims {
		sims[k] = one()
	}
	var wait sync.WaitGroup
	for k := range sims {
		wait.Add(1)
		go func() {
			defer wait.Done()
			if tr, err := sims[k].Run(context.Background(), 0.5); err == nil {
				results[k] = tr.Column("b.v")
			}
		}()
	}
	wait.Wait()
	for k, got := range results {
		if len(got) != len(alone) {
			t.Fatalf("run %d has %d rows, alone %d", k, len(got), len(alone))
		}
		for i := range got {
			if math.Float64bits(got[i]) != math.Float64bits(alone[i]) {
				t.Fatalf("run %d differs from the one alone at row %d", k, i)
			}
		}
	}
}
