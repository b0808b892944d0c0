package engine_test

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"

	"islet/engine"
	"islet/solvers"
)

// odd is a resistive load with one awkward unknown of its own, for faults and
// kinks: x' = f(t, x).
type odd struct {
	f     func(t, x float64) (float64, error)
	guess float64
	limit float64 // > 0: a kink where x passes it
	mass  float64
}

func (o *odd) Describe() engine.Description {
	return engine.Description{Kind: "odd load",
		Terminals: []engine.Terminal{{Name: "ac", Flow: engine.FlowHeld}},
		Unknowns:  []engine.Unknown{{Name: "x", Unit: "1", Base: 1}}}
}
func (o *odd) Dims() (int, int)                          { return 2, 1 }
func (o *odd) Mass(port, own []float64)                  { clear(port); own[0] = o.mass }
func (o *odd) Guess(x []float64, t float64, v []float64) { x[0] = o.guess }
func (o *odd) Eval(flow, rate []float64, t float64, v, x []float64) error {
	flow[0], flow[1] = v[0]/30, v[1]/30
	var err error
	rate[0], err = o.f(t, x[0])
	return err
}
func (o *odd) Kinks() []string {
	if o.limit == 0 {
		return nil
	}
	return []string{"limit of x"}
}
func (o *odd) EvalKinks(dst []float64, t float64, v, x []float64) {
	if o.limit != 0 {
		dst[0] = x[0] - o.limit
	}
}

func withOdd(t *testing.T, o *odd) *engine.System {
	t.Helper()
	s := twoSources(t, &shunt{r: 15})
	b, _ := s.FindBus("b")
	if err := s.Add("odd", o, b); err != nil {
		t.Fatal(err)
	}
	return s
}

func TestFailedStepIsNamed(t *testing.T) {
	broken := errors.New("the sensor fell off")
	s := withOdd(t, &odd{mass: 1, f: func(now, x float64) (float64, error) {
		if now > 0.25 {
			return 0, broken
		}
		return -x, nil
	}})
	m := start(t, s, nil)
	tr, err := m.Run(context.Background(), 1)
	var re *engine.RunError
	if !errors.As(err, &re) || !errors.Is(err, broken) || re.At != `device "odd"` {
		t.Fatalf("error %v, want a RunError that names the device and wraps the cause", err)
	}
	if end := tr.Time[len(tr.Time)-1]; end <= 0 || end > 0.25 {
		t.Errorf("the trace ends at %g s, want the last good state", end)
	}
	if err := m.Step(); err == nil {
		t.Error("a failed run went on")
	}
	if _, err := m.Snapshot(); err == nil {
		t.Error("a snapshot of a failed run was taken")
	}
}

// x' = x^2 from x = 1 runs away at t = 1: the step size falls until the run
// stops, and the state is named.
func TestRunawayIsNamed(t *testing.T) {
	s := withOdd(t, &odd{mass: 1, guess: 0, f: func(now, x float64) (float64, error) {
		if now == 0 {
			return -x, nil // an equilibrium to start from
		}
		if math.Abs(x) > 1e100 {
			return 0, fmt.Errorf("overflow: %w", solvers.ErrReject)
		}
		return 1 + x*x, nil
	}})
	m := start(t, s, nil)
	_, err := m.Run(context.Background(), 10)
	var re *engine.RunError
	if !errors.As(err, &re) || !strings.Contains(re.Error(), `"odd"`) {
		t.Fatalf("error %v, want one that names the device", err)
	}
	if math.Abs(re.Time-math.Pi/2) > 1e-3 {
		t.Errorf("stopped at %g s, want pi/2 where tan t runs away", re.Time)
	}
}

func TestKinksAreToldAndLocated(t *testing.T) {
	s := withOdd(t, &odd{mass: 1, limit: 0.5, guess: 0, f: func(now, x float64) (float64, error) { return math.Cos(now) * math.Min(1, now*1e9), nil }})
	m := start(t, s, nil)
	run(t, m, 3.5)
	var told []string
	var when []float64
	for _, n := range m.Notes() {
		if n.Device == "odd" {
			told = append(told, n.Text)
			when = append(when, n.Time)
		}
	}
	// x = sin t passes 0.5 at pi/6 and 5 pi/6.
	if len(told) != 2 || told[0] != "odd reaches its limit of x" || told[1] != "odd leaves its limit of x" {
		t.Fatalf("told %q", told)
	}
	if math.Abs(when[0]-math.Pi/6) > 1e-5 || math.Abs(when[1]-5*math.Pi/6) > 1e-5 {
		t.Errorf("at %v, want pi/6 and 5 pi/6", when)
	}
}

func TestNoOperatingPoint(t *testing.T) {
	// Two stiff sources at different frequencies have no steady state.
	s := engine.NewSystem(50)
	a := s.Bus("a", 400)
	for name, d := range map[string]engine.Device{
		"one": &source{e: 326, r: 0.1, l: 1e-3, w: w50},
		"two": &source{e: 326, r: 0.1, l: 1e-3, w: w50 * 1.01},
	} {
		if err := s.Add(name, d, a); err != nil {
			t.Fatal(err)
		}
	}
	if err := s.Add("load", &shunt{r: 20}, a); err != nil {
		t.Fatal(err)
	}
	_, err := engine.Start(s, nil)
	var op *engine.OperatingPointError
	if !errors.As(err, &op) || len(op.Worst) == 0 || !strings.Contains(err.Error(), "worst balanced") {
		t.Fatalf("error %v, want an OperatingPointError with the worst balanced parts", err)
	}
	// An equation without a root.
	s = withOdd(t, &odd{mass: 1, f: func(now, x float64) (float64, error) { return 1 + x*x, nil }})
	if _, err = engine.Start(s, nil); !errors.As(err, &op) || !strings.Contains(err.Error(), `"odd"`) {
		t.Fatalf("error %v, want one that names the device", err)
	}
}

// An equation on which Newton's method stalls from its guess, and which a
// pseudo-transient follows down to its root: x' = -(x^3 - 2x + 2) has the root
// -1.7692923542386314 (real root of the cubic, by Cardano's formula), and a
// local minimum of its modulus near 0.8165 that traps a damped iteration
// started above it.
func TestPseudoTransient(t *testing.T) {
	s := withOdd(t, &odd{mass: 1, guess: 3, f: func(now, x float64) (float64, error) { return -(x*x*x - 2*x + 2), nil }})
	m := start(t, s, nil)
	if !m.OperatingPoint().PseudoTransient {
		t.Error("Newton's method found it alone: this test shows nothing")
	}
	if x := m.State("odd")["x"]; math.Abs(x+1.7692923542386314) > 1e-9 {
		t.Errorf("x = %.12g", x)
	}
}

// Energisation from rest: the line current of a source closed onto an R-L
// load at t = 0 is the closed form of an R-L circuit in the rotating frame:
// i = (E/Z)(1 - exp(-(R + j w L) t/L)), the textbook case of power-checks F1.
func TestFromRest(t *testing.T) {
	s := engine.NewSystem(50)
	a := s.Bus("a", 400)
	if err := s.Add("grid", &source{e: 325, r: 0.04, l: 1e-3, w: w50}, a); err != nil {
		t.Fatal(err)
	}
	if err := s.Add("load", &shunt{r: 0.06, l: 2e-3}, a); err != nil {
		t.Fatal(err)
	}
	m := start(t, s, &engine.Options{FromRest: true, Sample: 1e-3, Solver: solvers.Options{RelTol: 1e-9}, Record: []string{"load.ac.*", "load.terminal.*"}[1:]})
	tr := run(t, m, 0.05)
	// 325 V, 0.1 ohm, 3 mH: phase a closes at the voltage's peak, the table's
	// column a = 90 degrees.
	for _, c := range []struct{ t, i float64 }{{1e-3, 104.7891379}, {5e-3, 310.3703418}, {10e-3, -62.10562039}, {20e-3, 17.60499882}, {50e-3, -43.01457039}} {
		if got := tr.At("load.terminal.i_a", c.t); math.Abs(got-c.i) > 1e-4 {
			t.Errorf("i_a(%g) = %.8g, want %.8g", c.t, got, c.i)
		}
	}
}

func TestFaultsOfConstruction(t *testing.T) {
	s := engine.NewSystem(-50)
	s.Bus("a", 400)
	s.Bus("a", -1)
	s.Bus("b.c", 400)
	_, err := engine.Start(s, &engine.Options{Sample: -1})
	for _, want := range []string{"nominal frequency is -50", `bus "a" is there already`, "rated voltage is -1", `"b.c" holds a dot`, "no device", "Sample is -1"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error lacks %q: %v", want, err)
		}
	}
	s = engine.NewSystem(50)
	other := engine.NewSystem(50)
	a, x := s.Bus("a", 400), other.Bus("x", 400)
	load := &shunt{r: 10}
	if err := s.Add("load", load, a); err != nil {
		t.Fatal(err)
	}
	err = s.Add("load", load, a, x)
	for _, want := range []string{"one of that name", "in the system already", "1 terminals, 2 buses", "another system"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error lacks %q: %v", want, err)
		}
	}
	s = twoSources(t, load2())
	if _, err := engine.Start(s, &engine.Options{Record: []string{"b.voltage", "zzz.*"}}); err == nil || !strings.Contains(err.Error(), "b has v, frequency") || !strings.Contains(err.Error(), "buses and devices are") {
		t.Errorf("patterns that match nothing: %v", err)
	}
}

func load2() *shunt { return &shunt{r: 15} }
