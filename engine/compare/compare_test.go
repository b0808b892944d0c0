package compare_test

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"strings"
	"testing"

	"islet/engine"
	"islet/engine/compare"
)

// supply is a 325 V source behind R and L that holds the bus.
type supply struct{ wf float64 }

func (s *supply) Describe() engine.Description {
	return engine.Description{Kind: "toy supply",
		Terminals: []engine.Terminal{{Name: "terminal", Flow: engine.FlowState}},
		Unknowns: []engine.Unknown{
			{Name: "delta", Unit: "rad", Base: 1, Frame: engine.Angle},
			{Name: "i.d", Unit: "A", Base: 10, Frame: engine.PairD},
			{Name: "i.q", Unit: "A", Base: 10, Frame: engine.PairQ},
		}}
}
func (s *supply) Dims() (int, int)                        { return 2, 3 }
func (s *supply) Mass(port, own []float64)                { clear(port); own[0], own[1], own[2] = 1, 1e-3, 1e-3 }
func (s *supply) SetFrame(w float64)                      { s.wf = w }
func (s *supply) AngleUnknown() int                       { return 0 }
func (s *supply) Speed(t float64, v, x []float64) float64 { return 100 * math.Pi }
func (s *supply) Weight() float64                         { return 1e4 }
func (s *supply) Eval(flow, rate []float64, t float64, v, x []float64) error {
	sin, cos := math.Sincos(x[0])
	rate[0] = 100*math.Pi - s.wf
	rate[1] = v[0] - 325*cos - 0.1*x[1] + s.wf*1e-3*x[2]
	rate[2] = v[1] - 325*sin - 0.1*x[2] - s.wf*1e-3*x[1]
	flow[0], flow[1] = x[1], x[2]
	return nil
}

// heater is a 10 ohm load with a thermostat: T x' = u - x, u its setpoint. At
// T = 0 it is reduced: x = u.
type heater struct{ t, u float64 }

func (h *heater) Describe() engine.Description {
	return engine.Description{Kind: "toy heater",
		Terminals: []engine.Terminal{{Name: "terminal", Flow: engine.FlowHeld}},
		Unknowns:  []engine.Unknown{{Name: "x", Unit: "W", Base: 1}}}
}
func (h *heater) Dims() (int, int)         { return 2, 1 }
func (h *heater) Mass(port, own []float64) { clear(port); own[0] = h.t }
func (h *heater) Eval(flow, rate []float64, t float64, v, x []float64) error {
	rate[0] = h.u - x[0]
	flow[0], flow[1] = v[0]/10, v[1]/10
	return nil
}
func (h *heater) Channels() []engine.Channel {
	return []engine.Channel{{Name: "p", Unit: "W in"}, {Name: "limiting", Unit: "1"}}
}
func (h *heater) Measure(dst []float64, t float64, v, x []float64) {
	dst[0], dst[1] = x[0], math.Max(0, x[0]-0.9999)
}
func (h *heater) Setpoints(t float64) []engine.Setpoint {
	return []engine.Setpoint{{Name: "u", Unit: "W", Min: 0, Max: 10, Value: h.u}}
}
func (h *heater) Set(name string, t, value, ramp float64) error {
	h.u = value
	return nil
}

func setting(name string, tau float64) compare.Setting {
	return compare.Setting{Name: name, Start: func(o *engine.Options) (*engine.Simulation, error) {
		s := engine.NewSystem(50)
		b := s.Bus("bus", 400)
		if err := s.Add("supply", &supply{}, b); err != nil {
			return nil, err
		}
		if err := s.Add("heater", &heater{t: tau}, b); err != nil {
			return nil, err
		}
		m, err := engine.Start(s, o)
		if err != nil {
			return nil, err
		}
		return m, m.At(0.1, engine.Set("heater", "u", 0.9995))
	}}
}

// The deviation of the reduced heater is e^{-t/T} of the step, and its root
// mean square over the first 20 ms is known: closed forms.
func TestDeviationsAreTheClosedForm(t *testing.T) {
	const tau = 0.01
	c, err := compare.Run(context.Background(), []compare.Setting{setting("full", tau), setting("reduced", 0)},
		compare.Options{Until: 0.6, Sample: 1e-4, Repetitions: 3})
	if err != nil {
		t.Fatal(err)
	}
	if len(c.Events) != 1 || c.Events[0] != 0.1 {
		t.Errorf("events %v, want 0.1", c.Events)
	}
	r := c.Results[1]
	var p *compare.Channel
	for i := range r.Channels {
		if r.Channels[i].Name == "heater.p" {
			p = &r.Channels[i]
		}
	}
	if p == nil {
		t.Fatal("heater.p is not compared")
	}
	first := p.Windows[compare.Early]
	if math.Abs(first.Relative()-1) > 1e-6 || first.At != 0.1 {
		t.Errorf("largest deviation %g of range at %g s, want 1 at 0.1", first.Relative(), first.At)
	}
	q := math.Exp(-2 * 1e-4 / tau) // 200 samples: a geometric series
	want := math.Sqrt((1 - math.Pow(q, 200)) / (1 - q) / 200)
	if math.Abs(first.RelativeRMS()-want) > 1e-5*want {
		t.Errorf("rms %g, want %g", first.RelativeRMS(), want)
	}
	if got, want := p.Windows[compare.Middle].Relative(), math.Exp(-0.02/tau); math.Abs(got-want) > 1e-4 {
		t.Errorf("after 20 ms %g, want %g", got, want)
	}
	if got := p.Windows[compare.Rest].Relative(); got > 1e-5 {
		t.Errorf("in the rest %g", got)
	}
	if len(r.Changes) != 0 || r.Diverged {
		t.Errorf("changes %v, diverged %v", r.Changes, r.Diverged)
	}
	if r.Unknowns != 6 || c.Results[0].Time <= 0 || r.Speedup <= 0 {
		t.Errorf("unknowns %d, time %v, speed-up %g", r.Unknowns, c.Results[0].Time, r.Speedup)
	}
	text := c.Text()
	for _, s := range []string{"reduced keeps 6 of 6 unknowns", "no verdict changes", "first 20 ms"} {
		if !strings.Contains(text, s) {
			t.Errorf("text lacks %q:\n%s", s, text)
		}
	}
	var js, cs bytes.Buffer
	if err := c.WriteJSON(&js); err != nil || !json.Valid(js.Bytes()) {
		t.Errorf("JSON: %v", err)
	}
	if err := c.WriteCSV(&cs); err != nil {
		t.Error(err)
	}
	if rows, err := csv.NewReader(&cs).ReadAll(); err != nil || len(rows) < 10 {
		t.Errorf("CSV: %d rows, %v", len(rows), err)
	}
}

// A setting that can't be run, or fails on the way, is part of the result.
func TestFailureIsAResult(t *testing.T) {
	bad := compare.Setting{Name: "broken", Start: func(o *engine.Options) (*engine.Simulation, error) {
		return nil, fmt.Errorf("no such detail")
	}}
	c, err := compare.Run(context.Background(), []compare.Setting{setting("full", 0.01), bad}, compare.Options{Until: 0.2, Repetitions: 1})
	if err != nil {
		t.Fatal(err)
	}
	if r := c.Results[1]; !r.Diverged || !strings.Contains(r.Summary, "no such detail") {
		t.Errorf("result %+v", r)
	}
	if _, err := compare.Run(context.Background(), []compare.Setting{bad, setting("full", 0.01)}, compare.Options{Until: 0.2}); err == nil {
		t.Error("a reference that can't be run gave no error")
	}
	if _, err := compare.Run(context.Background(), nil, compare.Options{}); err == nil || !strings.Contains(err.Error(), "at least 2") || !strings.Contains(err.Error(), "positive time") {
		t.Errorf("wrong options: %v", err)
	}
}

// The same study at two settings of detail, from Go.
func ExampleRun() {
	c, err := compare.Run(context.Background(),
		[]compare.Setting{setting("full", 0.01), setting("reduced", 0)},
		compare.Options{Until: 0.6, Channels: []string{"heater.p"}, Repetitions: 1})
	if err != nil {
		fmt.Println(err)
		return
	}
	r := c.Results[1]
	for _, ch := range r.Channels {
		for w, d := range ch.Windows {
			fmt.Printf("%s, %s: %.1f %% of its range\n", ch.Name, c.WindowName(compare.Window(w)), 100*d.Relative())
		}
	}
	fmt.Println("changes of verdict:", len(r.Changes))
	// Output:
	// heater.p, first 20 ms: 100.0 % of its range
	// heater.p, 20 to 300 ms: 13.5 % of its range
	// heater.p, rest: 0.0 % of its range
	// changes of verdict: 0
}
