package engine_test

import (
	"context"
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"islet/engine"
	"islet/solvers"
)

const w50 = 100 * math.Pi

// twoSources: source - branch - load bus - branch - source, 400 V class.
func twoSources(t *testing.T, load *shunt) *engine.System {
	t.Helper()
	s := engine.NewSystem(50)
	a, b, c := s.Bus("a", 400), s.Bus("b", 400), s.Bus("c", 400)
	must := func(err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	must(s.Add("left", &source{e: 326.6, r: 0.05, l: 1e-3, w: w50, m: 1e-4}, a))
	must(s.Add("right", &source{e: 326.6, r: 0.05, l: 1e-3, w: w50, m: 2e-4}, c))
	must(s.Add("line-a", &branch{r: 0.1, l: 0.5e-3}, a, b))
	must(s.Add("line-c", &branch{r: 0.2, l: 0.4e-3}, b, c))
	must(s.Add("load", load, b))
	must(s.Add("switch", newContact(0.01, true), b, s.Bus("d", 400)))
	must(s.Add("extra", &shunt{r: 20}, busNamed(s, "d")))
	return s
}

func busNamed(s *engine.System, name string) engine.Bus {
	b, _ := s.FindBus(name)
	return b
}

func start(t *testing.T, s *engine.System, o *engine.Options) *engine.Simulation {
	t.Helper()
	m, err := engine.Start(s, o)
	if err != nil {
		t.Fatal(err)
	}
	return m
}

// Sharing of two droop sources: power-checks B1 (closed form): with zero
// setpoints dw = -P/sum(1/m), P_i = -dw/m_i, here P the load and the losses.
func TestIslandSharesByDroop(t *testing.T) {
	m := start(t, twoSources(t, &shunt{r: 15}), nil)
	left, right := m.State("left")["P"], m.State("right")["P"]
	if r := left / right; math.Abs(r-2) > 1e-9 {
		t.Errorf("shares are %g and %g W, ratio %.12g, want 2", left, right, r)
	}
	f, err := m.Value("b.frequency")
	if err != nil {
		t.Fatal(err)
	}
	want := 50 - 1e-4*left/(2*math.Pi)
	if math.Abs(f-want) > 1e-9 {
		t.Errorf("frequency %.12g Hz, want %.12g", f, want)
	}
	if p := m.OperatingPoint(); p.Drift > 1e-6 || p.PseudoTransient {
		t.Errorf("operating point: %+v", p)
	}
	// A steady state stays where it is.
	tr, err := m.Run(context.Background(), 1)
	if err != nil {
		t.Fatal(err)
	}
	v := tr.Column("b.v")
	if d := math.Abs(v[len(v)-1]/v[0] - 1); d > 1e-8 {
		t.Errorf("voltage moved by %g of itself in 1 s", d)
	}
}

func TestSwitchingBalancesEnergy(t *testing.T) {
	for _, load := range []*shunt{{r: 15}, {r: 12, l: 10e-3}} {
		m := start(t, twoSources(t, load), &engine.Options{Record: []string{"*"}})
		for _, e := range []struct {
			t float64
			e engine.Event
		}{{0.1, engine.Close("switch")}, {0.3, engine.Open("switch")}, {0.4, engine.Set("left", "e", 330)}, {0.5, engine.Trip("line-c")}} {
			if err := m.At(e.t, e.e); err != nil {
				t.Fatal(err)
			}
		}
		tr, err := m.Run(context.Background(), 1)
		if err != nil {
			t.Fatal(err)
		}
		b := m.Energy()
		if c := b.Closure(); c > 1e-6 {
			t.Errorf("load %+v: ledger closes to %g: %+v", load, c, b)
		}
		// Kirchhoff's law at the load bus holds at every row.
		for k := range tr.Time {
			sum := tr.Column("line-a.to.i_d")[k] + tr.Column("line-c.from.i_d")[k] + tr.Column("load.terminal.i_d")[k] + tr.Column("switch.from.i_d")[k]
			if math.Abs(sum) > 1e-9*20 {
				t.Fatalf("load %+v: t = %g: currents into bus b sum to %g A", load, tr.Time[k], sum)
			}
		}
		if m.Energy().Destroyed <= 0 {
			t.Errorf("opening an inductive path destroyed %g J", m.Energy().Destroyed)
		}
	}
}

// A source that feeds nothing but a series R-L load through a branch: the
// operating point is the phasor solution (Ohm's law).
func TestOperatingPointIsThePhasorSolution(t *testing.T) {
	s := engine.NewSystem(50)
	a, b := s.Bus("a", 400), s.Bus("b", 400)
	for name, d := range map[string]struct {
		d  engine.Device
		at []engine.Bus
	}{
		"grid": {&source{e: 326.6, r: 0.05, l: 1e-3, w: w50}, []engine.Bus{a}},
		"line": {&branch{r: 0.1, l: 0.5e-3}, []engine.Bus{a, b}},
		"load": {&shunt{r: 10, l: 20e-3}, []engine.Bus{b}},
	} {
		if err := s.Add(name, d.d, d.at...); err != nil {
			t.Fatal(err)
		}
	}
	m := start(t, s, nil)
	i := 326.6 / (complex(10.15, w50*21.5e-3))
	vb := i * complex(10, w50*20e-3)
	got, _ := m.Value("b.v")
	if want := cmplx.Abs(vb) * math.Sqrt(1.5); math.Abs(got-want) > 1e-9*want {
		t.Errorf("voltage %.12g, want %.12g", got, want)
	}
}

func TestRefusesInjectionIntoInductors(t *testing.T) {
	s := twoSources(t, &shunt{r: 12, l: 10e-3})
	b, _ := s.FindBus("b")
	if err := s.Add("follower", &injection{i: 3}, b); err != nil {
		t.Fatal(err)
	}
	_, err := engine.Start(s, nil)
	if err == nil || !strings.Contains(err.Error(), `"follower"`) || !strings.Contains(err.Error(), "shunt capacitor") {
		t.Fatalf("error %v, want one that names the follower and the remedy", err)
	}
}

func TestDeadIsland(t *testing.T) {
	s := twoSources(t, &shunt{r: 15})
	m := start(t, s, nil)
	if v, _ := m.Value("d.v"); v != 0 {
		t.Errorf("bus behind an open switch has %g V", v)
	}
	if len(m.Notes()) != 1 || !strings.Contains(m.Notes()[0].Text, "bus d is dead") {
		t.Errorf("notes %+v, want one that tells of bus d", m.Notes())
	}
	if err := m.Apply(engine.Close("switch")); err != nil {
		t.Fatal(err)
	}
	// At first the inductors' currents pass through 15 and 20.01 ohm in
	// parallel, and the voltage is what that makes of them.
	before := m.Trace().Column("b.v")[0]
	if v, _ := m.Value("b.v"); math.Abs(v/before-20.01/35.01) > 1e-9 {
		t.Errorf("voltage falls to %.10g of its value as the switch closes, want 20.01/35.01", v/before)
	}
	if _, err := m.Run(context.Background(), 0.5); err != nil {
		t.Fatal(err)
	}
	if v, _ := m.Value("d.v"); v < 390 {
		t.Errorf("bus d has %g V half a second after the switch closed", v)
	}
}

func TestSnapshotContinuesWithTheSameBits(t *testing.T) {
	build := func(o *engine.Options) *engine.Simulation {
		m := start(t, twoSources(t, &shunt{r: 12, l: 10e-3}), o)
		for _, e := range []struct {
			t float64
			e engine.Event
		}{{0.1, engine.Close("switch")}, {0.35, engine.Set("left", "e", 330)}} {
			if err := m.At(e.t, e.e); err != nil {
				t.Fatal(err)
			}
		}
		if err := m.When(engine.Condition{Channel: "b.v", Below: true, Limit: 396, For: 0.05}, engine.Trip("extra")); err != nil {
			t.Fatal(err)
		}
		return m
	}
	ctx := context.Background()
	for _, o := range []*engine.Options{
		{},
		{Method: solvers.Rodas4P, FixedFrame: true, GeneralLU: true},
		{Method: solvers.Trapezoidal, Solver: solvers.Options{MaxStep: 1e-4}},
	} {
		a := build(o)
		if _, err := a.Run(ctx, 0.2); err != nil {
			t.Fatal(err)
		}
		snap, err := a.Snapshot()
		if err != nil {
			t.Fatal(err)
		}
		data, err := snap.MarshalBinary()
		if err != nil {
			t.Fatal(err)
		}
		if _, err := a.Run(ctx, 0.6); err != nil {
			t.Fatal(err)
		}
		b := build(o)
		var copied engine.Snapshot
		if err := copied.UnmarshalBinary(data); err != nil {
			t.Fatal(err)
		}
		if err := b.Restore(&copied); err != nil {
			t.Fatal(err)
		}
		if _, err := b.Run(ctx, 0.6); err != nil {
			t.Fatal(err)
		}
		ta, tb := a.Trace(), b.Trace()
		off := ta.Rows() - tb.Rows()
		for i := range ta.Channels {
			ca, cb := ta.Values(i), tb.Values(i)
			for k := 1; k <= 20; k++ {
				if x, y := ca[len(ca)-k], cb[len(cb)-k]; math.Float64bits(x) != math.Float64bits(y) {
					t.Fatalf("%s differs %d rows before the end (offset %d): %.17g and %.17g", ta.Channels[i].Name, k, off, x, y)
				}
			}
		}
		if a.Energy().Mismatch != b.Energy().Mismatch || a.Energy().Supplied != b.Energy().Supplied {
			t.Errorf("ledgers differ: %+v and %+v", a.Energy(), b.Energy())
		}
	}
}
