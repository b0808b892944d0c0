package output

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"islet/engine"
	"islet/engine/compare"
)

// battery is 325 V behind R and L that holds its bus and can be set to another
// voltage.
type battery struct{ e, wf float64 }

func (s *battery) Describe() engine.Description {
	return engine.Description{Kind: "toy battery",
		Terminals: []engine.Terminal{{Name: "ac", Flow: engine.FlowState}},
		Unknowns: []engine.Unknown{
			{Name: "delta", Unit: "rad", Base: 1, Frame: engine.Angle},
			{Name: "i.d", Unit: "A", Base: 10, Frame: engine.PairD},
			{Name: "i.q", Unit: "A", Base: 10, Frame: engine.PairQ},
		}}
}
func (s *battery) Dims() (int, int) { return 2, 3 }
func (s *battery) Mass(port, own []float64) {
	clear(port)
	own[0], own[1], own[2] = 1, 1e-3, 1e-3
}
func (s *battery) SetFrame(w float64)                      { s.wf = w }
func (s *battery) AngleUnknown() int                       { return 0 }
func (s *battery) Speed(t float64, v, x []float64) float64 { return 100 * math.Pi }
func (s *battery) Weight() float64                         { return 1e4 }
func (s *battery) CurrentLimit() (float64, int)            { return 50, 2 }
func (s *battery) Eval(flow, rate []float64, t float64, v, x []float64) error {
	sin, cos := math.Sincos(x[0])
	rate[0] = 100*math.Pi - s.wf
	rate[1] = v[0] - s.e*cos - 0.1*x[1] + s.wf*1e-3*x[2]
	rate[2] = v[1] - s.e*sin - 0.1*x[2] - s.wf*1e-3*x[1]
	flow[0], flow[1] = x[1], x[2]
	return nil
}
func (s *battery) Channels() []engine.Channel {
	return []engine.Channel{{Name: "p", Unit: "W generated"}, {Name: "q", Unit: "var generated"}, {Name: "i", Unit: "A rms"}}
}
func (s *battery) Measure(dst []float64, t float64, v, x []float64) {
	dst[0] = -1.5 * (v[0]*x[1] + v[1]*x[2])
	dst[1] = -1.5 * (v[1]*x[1] - v[0]*x[2])
	dst[2] = math.Hypot(x[1], x[2]) / math.Sqrt2
}
func (s *battery) Setpoints(t float64) []engine.Setpoint {
	return []engine.Setpoint{{Name: "e", Unit: "V", Min: 0, Max: 1e3, Value: s.e}}
}
func (s *battery) Set(name string, t, value, ramp float64) error { s.e = value; return nil }

// lamp is a 10 ohm load.
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

func start(o *engine.Options) (*engine.Simulation, error) {
	s := engine.NewSystem(50)
	b := s.Bus("bus", 400)
	s.Bus("spare", 400)
	if err := s.Add("battery", &battery{e: 325}, b); err != nil {
		return nil, err
	}
	if err := s.Add("lamp", &lamp{}, b); err != nil {
		return nil, err
	}
	m, err := engine.Start(s, o)
	if err != nil {
		return nil, err
	}
	return m, m.At(0.1, engine.Set("battery", "e", 330))
}

func ran(t *testing.T) *engine.Simulation {
	t.Helper()
	m, err := start(&engine.Options{Sample: 1e-3})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := m.Run(context.Background(), 0.3); err != nil {
		t.Fatal(err)
	}
	return m
}

func TestCSVReadsBackToTheSameBits(t *testing.T) {
	m := ran(t)
	tr := m.Trace()
	var b bytes.Buffer
	if err := WriteCSV(&b, tr); err != nil {
		t.Fatal(err)
	}
	if !strings.HasPrefix(b.String(), "t [s],bus.v [V line-line rms],") {
		t.Errorf("header %q", b.String()[:60])
	}
	names, units, cols, err := ReadCSV(&b)
	if err != nil {
		t.Fatal(err)
	}
	if names[0] != "t" || units[0] != "s" || len(cols) != len(tr.Channels)+1 || len(cols[0]) != tr.Rows() {
		t.Fatalf("%d columns of %d rows, first %s in %s", len(cols), len(cols[0]), names[0], units[0])
	}
	events := 0
	for k := range tr.Time {
		if cols[0][k] != tr.Time[k] {
			t.Fatalf("row %d: time %g, want %g", k, cols[0][k], tr.Time[k])
		}
		if k > 0 && cols[0][k] == cols[0][k-1] {
			events++
		}
		for i, ch := range tr.Channels {
			if names[i+1] != ch.Name || units[i+1] != ch.Unit || math.Float64bits(cols[i+1][k]) != math.Float64bits(tr.Values(i)[k]) {
				t.Fatalf("row %d, %s: %g, want %g", k, ch.Name, cols[i+1][k], tr.Values(i)[k])
			}
		}
	}
	if events != 1 {
		t.Errorf("%d pairs of rows of one time, want the event's", events)
	}
	for _, bad := range []string{"", "t\n", "t [s]\nx\n"} {
		if _, _, _, err := ReadCSV(strings.NewReader(bad)); err == nil {
			t.Errorf("%q was read without an error", bad)
		}
	}
}

func TestJSONIsValidOrRefused(t *testing.T) {
	var b bytes.Buffer
	if err := WriteJSON(&b, map[string]any{"x": 1.5, "y": []float64{1, 2}}); err != nil || !json.Valid(b.Bytes()) {
		t.Errorf("%v: %s", err, b.String())
	}
	type inner struct{ Low []float64 }
	err := WriteJSON(&b, struct{ Part inner }{inner{[]float64{1, math.NaN()}}})
	if err == nil || !strings.Contains(err.Error(), "Part.Low[1] is NaN") {
		t.Errorf("a NaN gave %v", err)
	}
}

func TestWriteAll(t *testing.T) {
	m := ran(t)
	dir := filepath.Join(t.TempDir(), "new", "results")
	files, err := WriteAll(dir, m, map[string]int{"x": 1}, true)
	if err != nil {
		t.Fatal(err)
	}
	want := []string{"waveforms.csv", "summary.json", "voltages.svg", "currents.svg", "powers.svg", "reactive-powers.svg", "frequencies.svg"}
	if strings.Join(files, " ") != strings.Join(want, " ") {
		t.Errorf("files %v, want %v", files, want)
	}
	entries, err := os.ReadDir(dir)
	if err != nil || len(entries) != len(want) {
		t.Errorf("%d entries in the directory, %v", len(entries), err)
	}
	svg, err := os.ReadFile(filepath.Join(dir, "powers.svg"))
	if err != nil || !strings.Contains(string(svg), "battery: e from 325 to 330 V") || !strings.Contains(string(svg), "Active power of sources") {
		t.Errorf("powers.svg lacks its event or title (%v)", err)
	}
	// A directory that can't be made, and a summary that can't be written.
	blocked := filepath.Join(dir, "summary.json", "x")
	if _, err := WriteAll(blocked, m, 1, false); err == nil {
		t.Error("writing below a file gave no error")
	}
	other := t.TempDir()
	if _, err := WriteAll(other, m, math.Inf(1), false); err == nil {
		t.Error("a summary that JSON can't hold gave no error")
	}
	left, _ := os.ReadDir(other)
	if len(left) != 1 || left[0].Name() != "waveforms.csv" {
		t.Errorf("%d files left behind, want the waveforms alone", len(left))
	}
}

func TestThinKeepsExtremesAndGaps(t *testing.T) {
	n := 10000
	x, y := make([]float64, n), make([]float64, n)
	for i := range x {
		x[i] = float64(i) / float64(n)
		y[i] = math.Sin(40 * x[i])
	}
	y[1234], y[7777] = 5, -5
	for i := 5000; i < 5100; i++ {
		y[i] = math.NaN()
	}
	parts := thin(x, y, 0, 1, 100)
	if len(parts) != 2 {
		t.Fatalf("%d stretches, want 2 around the gap", len(parts))
	}
	points, lo, hi := 0, 0.0, 0.0
	for _, p := range parts {
		points += len(p)
		for _, q := range p {
			lo, hi = math.Min(lo, q.Y), math.Max(hi, q.Y)
		}
	}
	if lo != -5 || hi != 5 || points > 500 {
		t.Errorf("%d points from %g to %g, want few and both spikes", points, lo, hi)
	}
}

func TestTicksSayWhatTheyMark(t *testing.T) {
	for _, r := range [][2]float64{{0.8109, 1.264}, {49.8, 50.2}, {0, 3500}, {1.19, 1.29}} {
		for _, m := range (ticks{}).Ticks(r[0], r[1]) {
			if m.Label == "" {
				continue
			}
			var v float64
			if err := json.Unmarshal([]byte(m.Label), &v); err != nil || math.Abs(v-m.Value) > 1e-5*(r[1]-r[0]) {
				t.Errorf("range %v: tick at %g is labelled %s", r, m.Value, m.Label)
			}
		}
	}
}

func TestComparisonPictures(t *testing.T) {
	c, err := compare.Run(context.Background(), []compare.Setting{
		{Name: "as given", Start: start},
		{Name: "again", Start: func(o *engine.Options) (*engine.Simulation, error) {
			m, err := start(o)
			if err != nil {
				return nil, err
			}
			return m, m.At(0.12, engine.Set("battery", "e", 320))
		}},
	}, compare.Options{Until: 0.3, Repetitions: 1})
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	files, err := WriteComparison(dir, c, true)
	if err != nil {
		t.Fatal(err)
	}
	if len(files) < 5 || !strings.HasPrefix(files[3], "again-") {
		t.Errorf("files %v, want tables and overlays", files)
	}
	var png bytes.Buffer
	if err := Overlays(c)[0].WritePNG(&png); err != nil || png.Len() < 1000 {
		t.Errorf("PNG of %d bytes, %v", png.Len(), err)
	}
}
