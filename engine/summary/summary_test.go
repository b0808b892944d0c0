package summary

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"strings"
	"testing"

	"islet/engine"
)

func sampled(n int, dt float64, f func(t float64) float64) (t, x []float64) {
	for k := range n {
		t = append(t, float64(k)*dt)
		x = append(x, f(t[k]))
	}
	return t, x
}

// The mean slope of -D (1 - exp(-t/T)) over the first w seconds is
// -D (1 - exp(-w/T))/w, and steeper there than anywhere else.
func TestSteepestOfAnExponential(t *testing.T) {
	const depth, tau = 0.95, 0.2546
	times, x := sampled(1001, 1e-3, func(t float64) float64 { return 50 - depth*(1-math.Exp(-t/tau)) })
	for _, w := range []float64{0.1, 0.02} {
		got, when, ok := steepest(times, x, w)
		want := -depth * (1 - math.Exp(-w/tau)) / w
		if !ok || math.Abs(got-want) > 1e-9 || math.Abs(when-w) > 1e-9 {
			t.Errorf("window %g: %g at %g, want %g at %g", w, got, when, want, w)
		}
	}
	if _, _, ok := steepest(times[:50], x[:50], 0.1); ok {
		t.Error("a window longer than the rows gave a slope")
	}
	times, x = sampled(500, 1.7e-3, func(t float64) float64 { return 50 + 1.5*t })
	if got, _, _ := steepest(times, x, 0.1); math.Abs(got-1.5) > 1e-9 {
		t.Errorf("slope of a ramp off the grid %g, want 1.5", got)
	}
}

// exp(-t/T) from 1 to (nearly) 0 enters a band of 2 % of its range at T ln 50.
func TestSettlingOfAnExponential(t *testing.T) {
	const tau = 0.05
	times, x := sampled(2001, 1e-3, func(t float64) float64 { return math.Exp(-t / tau) })
	if got, want := settling(times, x, 0), tau*math.Log(50); math.Abs(got-want) > 1.01e-3 {
		t.Errorf("settled after %g, want %g", got, want)
	}
	if got, want := settling(times, x, 0.1), tau*math.Log(10); math.Abs(got-want) > 1.01e-3 {
		t.Errorf("with a floor of 0.1 settled after %g, want %g", got, want)
	}
	times, x = sampled(1001, 1e-3, func(t float64) float64 { return math.Sin(50 * t) })
	if got := settling(times, x, 0); got < 0.9 {
		t.Errorf("an undamped swing settled after %g of 1 s", got)
	}
	if got := settling([]float64{1}, []float64{2}, 0); got != 0 {
		t.Errorf("one row settles after %g", got)
	}
}

func TestTimeAbove(t *testing.T) {
	if got := timeAbove([]float64{0, 0.1, 0.3, 0.6}, []float64{0, 0.5, 0, 1}); math.Abs(got-0.2) > 1e-12 {
		t.Errorf("%g, want 0.2", got)
	}
}

func TestNumbersAsPeopleWriteThem(t *testing.T) {
	for _, c := range []struct{ got, want string }{
		{num(-0.0001, 2), "0.00"}, {num(-0.06, 1), "-0.1"}, {num(49.99996, 4), "50.0000"},
		{figures(0), "0"}, {figures(0.0012345), "0.00123"}, {figures(123.456), "123"}, {figures(-2.5), "-2.50"},
	} {
		if c.got != c.want {
			t.Errorf("%q, want %q", c.got, c.want)
		}
	}
}

// cell is 325 V behind R and L at a speed that falls with its voltage setting,
// so that an event moves frequency, voltage and power in a known way.
type cell struct{ e, wf float64 }

func (s *cell) speed() float64 { return 100*math.Pi + 2*math.Pi*(s.e-325)/100 }
func (s *cell) Describe() engine.Description {
	return engine.Description{Kind: "toy cell",
		Terminals: []engine.Terminal{{Name: "ac", Flow: engine.FlowState}},
		Unknowns: []engine.Unknown{
			{Name: "delta", Unit: "rad", Base: 1, Frame: engine.Angle},
			{Name: "i.d", Unit: "A", Base: 10, Frame: engine.PairD},
			{Name: "i.q", Unit: "A", Base: 10, Frame: engine.PairQ},
		}}
}
func (s *cell) Dims() (int, int) { return 2, 3 }
func (s *cell) Mass(port, own []float64) {
	clear(port)
	own[0], own[1], own[2] = 1, 1e-3, 1e-3
}
func (s *cell) SetFrame(w float64)                      { s.wf = w }
func (s *cell) AngleUnknown() int                       { return 0 }
func (s *cell) Speed(t float64, v, x []float64) float64 { return s.speed() }
func (s *cell) Weight() float64                         { return 1e4 }
func (s *cell) CurrentLimit() (float64, int)            { return 50, 1 }
func (s *cell) Eval(flow, rate []float64, t float64, v, x []float64) error {
	sin, cos := math.Sincos(x[0])
	rate[0] = s.speed() - s.wf
	rate[1] = v[0] - s.e*cos - 0.1*x[1] + s.wf*1e-3*x[2]
	rate[2] = v[1] - s.e*sin - 0.1*x[2] - s.wf*1e-3*x[1]
	flow[0], flow[1] = x[1], x[2]
	return nil
}
func (s *cell) Channels() []engine.Channel {
	return []engine.Channel{{Name: "p", Unit: "W generated"}, {Name: "i", Unit: "A rms"}, {Name: "limiting", Unit: "1"}}
}
func (s *cell) Measure(dst []float64, t float64, v, x []float64) {
	dst[0] = -1.5 * (v[0]*x[1] + v[1]*x[2])
	dst[1] = math.Hypot(x[1], x[2]) / math.Sqrt2
	dst[2] = math.Max(0, s.e-329)
}
func (s *cell) Setpoints(t float64) []engine.Setpoint {
	return []engine.Setpoint{{Name: "e", Unit: "V", Min: 0, Max: 1e3, Value: s.e}}
}
func (s *cell) Set(name string, t, value, ramp float64) error { s.e = value; return nil }

type lamp struct{}

func (lamp) Describe() engine.Description {
	return engine.Description{Kind: "toy lamp", Terminals: []engine.Terminal{{Name: "ac", Flow: engine.FlowHeld}}}
}
func (lamp) Dims() (int, int)         { return 2, 0 }
func (lamp) Mass(port, own []float64) { clear(port) }
func (lamp) Eval(flow, rate []float64, t float64, v, x []float64) error {
	flow[0], flow[1] = v[0]/10, v[1]/10
	return nil
}

func summarised(t *testing.T, record []string) *Summary {
	t.Helper()
	s := engine.NewSystem(50)
	b := s.Bus("bus", 400)
	s.Bus("spare", 400)
	if err := s.Add("cell", &cell{e: 325}, b); err != nil {
		t.Fatal(err)
	}
	if err := s.Add("lamp", &lamp{}, b); err != nil {
		t.Fatal(err)
	}
	m, err := engine.Start(s, &engine.Options{Sample: 1e-3, Record: record})
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range []struct{ t, v float64 }{{0.2, 330}, {0.4, 328}} {
		if err := m.At(e.t, engine.Set("cell", "e", e.v)); err != nil {
			t.Fatal(err)
		}
	}
	if _, err := m.Run(context.Background(), 1); err != nil {
		t.Fatal(err)
	}
	sum, err := Summarise(m)
	if err != nil {
		t.Fatal(err)
	}
	return sum
}

func TestSegments(t *testing.T) {
	s := summarised(t, nil)
	if len(s.Segments) != 3 {
		t.Fatalf("%d segments, want 3", len(s.Segments))
	}
	for k, want := range []struct{ from, to, f, e float64 }{{0, 0.2, 50, 325}, {0.2, 0.4, 50.05, 330}, {0.4, 1, 50.03, 328}} {
		g := s.Segments[k]
		if g.From != want.from || g.To != want.to {
			t.Errorf("segment %d from %g to %g", k, g.From, g.To)
		}
		if math.Abs(g.Frequency.Value-want.f) > 1e-9 {
			t.Errorf("segment %d ends at %g Hz, want %g", k, g.Frequency.Value, want.f)
		}
		// Steady state by Ohm's law: 10 ohm behind 0.1 ohm and 1 mH, the
		// reactance at the segment's own frequency.
		z := math.Hypot(10.1, 2*math.Pi*want.f*1e-3)
		p := 1.5 * 10 * (want.e / z) * (want.e / z) / 1e3
		if got := g.Sources[0]; math.Abs(got.P-p) > 1e-5*p || math.Abs(*got.Loading-p/10) > 1e-5 {
			t.Errorf("segment %d ends at %+v, want %g kW", k, got, p)
		}
		if v := want.e * 10 / z * math.Sqrt(1.5) / 400; math.Abs(g.VoltageHigh.Value-v) > 2e-2 || len(g.Dead) != 1 || g.Dead[0] != "spare" {
			t.Errorf("segment %d: voltage %+v, want about %g; dead %v", k, g.VoltageHigh, v, g.Dead)
		}
		if k > 0 && (!g.Settled || g.Settling > 0.01 || len(g.Events) != 1 || g.Steps == 0) {
			t.Errorf("segment %d: %+v", k, g)
		}
	}
	if d := s.Segments[1].Limiting["cell"]; math.Abs(d-0.2) > 1e-9 {
		t.Errorf("limiting for %g s, want 0.2", d)
	}
	if c := s.Segments[1].Current; math.Abs(c.Value-330/math.Hypot(10.1, 2*math.Pi*50.05e-3)/50) > 1e-4 {
		t.Errorf("peak current %+v of limit", c)
	}
	if s.Closure > 1e-6 {
		t.Errorf("closure %g", s.Closure)
	}
	var b bytes.Buffer
	if err := s.WriteText(&b, 100); err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"0.2000 s cell: e from 325 to 330 V", "dead        spare", "limiting    cell 200.0 ms", "settled     after", "the whole run", "ledger closes"} {
		if !strings.Contains(b.String(), want) {
			t.Errorf("text lacks %q:\n%s", want, b.String())
		}
	}
	for _, line := range strings.Split(b.String(), "\n") {
		if len(line) > 130 {
			t.Errorf("a line of %d characters: %s", len(line), line)
		}
	}
	if _, err := json.Marshal(s); err != nil {
		t.Error(err)
	}
}

func TestWhatWasNotRecordedIsSaid(t *testing.T) {
	s := summarised(t, []string{"cell.p"})
	if got := strings.Join(s.NotRecorded, ", "); got != "frequencies, voltages, inverter currents" {
		t.Errorf("not recorded: %s", got)
	}
	var b bytes.Buffer
	if err := s.WriteText(&b, 100); err != nil || !strings.Contains(b.String(), "Not recorded, so not judged: frequencies") {
		t.Errorf("%v\n%s", err, b.String())
	}
}
