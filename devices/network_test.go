package devices

import (
	"errors"
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"islet/devices/devicetest"
	"islet/solvers"
	"islet/solvers/facet"
)

// Helpers for the tests of network elements.

// must returns the value, or panics: for tests' constructors.
func must[T any](value T, err error) T {
	if err != nil {
		panic(err)
	}
	return value
}

// conform runs the conformance kit.
func conform[T solvers.Block](t *testing.T, make func() (T, error), o devicetest.Options) {
	t.Helper()
	if _, err := make(); err != nil {
		t.Fatal(err)
	}
	devicetest.Run(t, func() solvers.Block { return must(make()) }, o)
}

// near fails unless got is want to the relative tolerance.
func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance*math.Abs(want)) {
		t.Errorf("%s = %.12g, want %.12g (off by %.2g)", what, got, want, got/want-1)
	}
}

// phasor returns the currents into a block without dynamic unknowns but
// angles, at time t: its flows with terminal voltages v.
func phasor(t *testing.T, b solvers.Block, time float64, x []float64, v ...complex128) []complex128 {
	t.Helper()
	ports, own := b.Dims()
	volts, flow, rate := make([]float64, ports), make([]float64, ports), make([]float64, own)
	for k, z := range v {
		setPair(volts, 2*k, z)
	}
	if err := b.Eval(flow, rate, time, volts, x); err != nil {
		t.Fatal(err)
	}
	i := make([]complex128, ports/2)
	for k := range i {
		i[k] = pair(flow, 2*k)
	}
	return i
}

// quasiSteady returns the block's phasor model in a frame of the given speed.
func quasiSteady(t *testing.T, b facet.Detailed, speed float64) solvers.Block {
	t.Helper()
	c, err := b.WithDetail(QuasiSteady)
	if err != nil {
		t.Fatal(err)
	}
	c.(facet.Framed).SetFrame(speed)
	return c
}

// channel returns the value of a channel.
func channel(t *testing.T, b solvers.Block, name string, time float64, v, x []float64) float64 {
	t.Helper()
	m := b.(facet.Measurer)
	for k, c := range m.Channels() {
		if c.Name == name {
			dst := make([]float64, len(m.Channels()))
			m.Measure(dst, time, v, x)
			return dst[k]
		}
	}
	t.Fatalf("no channel %q", name)
	return 0
}

// rungeKutta integrates y' = f(t, y) over n steps of the classical method of
// order four, overwriting y.
func rungeKutta(y []float64, t, h float64, n int, f func(dst []float64, t float64, y []float64)) {
	m := len(y)
	k1, k2, k3, k4, z := make([]float64, m), make([]float64, m), make([]float64, m), make([]float64, m), make([]float64, m)
	for range n {
		f(k1, t, y)
		for k := range z {
			z[k] = y[k] + h/2*k1[k]
		}
		f(k2, t+h/2, z)
		for k := range z {
			z[k] = y[k] + h/2*k2[k]
		}
		f(k3, t+h/2, z)
		for k := range z {
			z[k] = y[k] + h*k3[k]
		}
		f(k4, t+h, z)
		for k := range y {
			y[k] += h / 6 * (k1[k] + 2*k2[k] + 2*k3[k] + k4[k])
		}
		t += h
	}
}

// derivatives divides a block's rates by its masses: x' for given v.
func derivatives(b solvers.Block, dst []float64, t float64, v, x []float64) {
	ports, own := b.Dims()
	port, mass := make([]float64, ports), make([]float64, own)
	b.Mass(port, mass)
	if err := b.Eval(port, dst, t, v, x); err != nil {
		panic(err)
	}
	for k, m := range mass {
		dst[k] /= m
	}
}

// wantFaults fails unless err names all the parameters given.
func wantFaults(t *testing.T, err error, names ...string) {
	t.Helper()
	if err == nil {
		t.Errorf("accepted, want faults of %q", names)
		return
	}
	for _, name := range names {
		if !strings.Contains(err.Error(), name) {
			t.Errorf("error %q doesn't name %q", err, name)
		}
	}
	for line := range strings.Lines(err.Error()) {
		if !strings.HasPrefix(line, "devices: ") {
			t.Errorf("error line %q lacks the package prefix", line)
		}
	}
}

func degrees(z complex128) float64 { return cmplx.Phase(z) * 180 / math.Pi }

func TestUnknownLevel(t *testing.T) {
	l := must(NewLine(LineParams{R: 1, RatedCurrent: 1}))
	if _, err := l.WithDetail("phasor"); err == nil || !strings.Contains(err.Error(), `"quasi-steady"`) {
		t.Errorf("WithDetail(phasor): error %v, want one that lists the levels", err)
	}
}

// A lossless inductor has no phasor model in a frame at rest: an error, since
// no shorter step would help, and no NaN.
func TestNoImpedance(t *testing.T) {
	rated := LoadParams{Voltage: 400, Frequency: 50, L: 1e-3}
	transformer := must(TransformerRating{
		VA: 1e5, HV: 1e4, LV: 400, Frequency: 50, Group: group("Dyn5"), Impedance: 4, XR: math.Inf(1),
	}.Params())
	for name, b := range map[string]facet.Detailed{
		"line":        must(NewLine(LineParams{L: 1e-3, RatedCurrent: 1})),
		"load":        must(NewLoad(rated)),
		"series load": must(NewSeriesLoad(SeriesLoadParams{Voltage: 400, Frequency: 50, L: 1e-3})),
		"transformer": must(NewTransformer(transformer)),
		"grid":        must(NewGrid(GridParams{Voltage: 400, Frequency: 50, L: 1e-3})),
	} {
		q := quasiSteady(t, b, 0)
		ports, own := q.Dims()
		v, flow := make([]float64, ports), make([]float64, ports)
		v[0] = 1
		err := q.Eval(flow, make([]float64, own), 0, v, make([]float64, own))
		if !errors.Is(err, errNoImpedance) || errors.Is(err, solvers.ErrReject) {
			t.Errorf("%s: error %v, want errNoImpedance", name, err)
		}
	}
}

// TestParams: a device gives its parameters back.
func TestParams(t *testing.T) {
	line := LineParams{R: 1, L: 2, C: 3, RatedCurrent: 4}
	load := LoadParams{Voltage: 1, Frequency: 2, R: 3, L: 4, RL: 5, C: 6}
	series := SeriesLoadParams{R: 1, L: 2, Voltage: 3, Frequency: 4}
	capacitor := ShuntCapacitorParams{C: 1, R: 2, Voltage: 3}
	transformer := must(distribution.Params())
	grid := GridParams{Voltage: 1, Frequency: 2, R: 3, L: 4, VA: 5}
	breaker := BreakerParams{Resistance: 1, Open: true}
	fault := FaultParams{R: 1, L: 2, RatedCurrent: 3, Closed: true}
	for _, test := range []struct{ got, want any }{
		{must(NewLine(line)).Params(), line},
		{must(NewLoad(load)).Params(), load},
		{must(NewSeriesLoad(series)).Params(), series},
		{must(NewShuntCapacitor(capacitor)).Params(), capacitor},
		{must(NewTransformer(transformer)).Params(), transformer},
		{must(NewGrid(grid)).Params(), grid},
		{must(NewBreaker(breaker)).Params(), breaker},
		{must(NewFault(fault)).Params(), fault},
	} {
		if test.got != test.want {
			t.Errorf("%+v, want %+v", test.got, test.want)
		}
	}
}

// Evaluation and Jacobian of the network elements, per device.
func BenchmarkNetworkElements(b *testing.B) {
	type device interface {
		solvers.Block
		solvers.Differentiable
	}
	for _, d := range []struct {
		name   string
		device device
	}{
		{"line", must(NewLine(LineParams{R: 0.3, L: 1e-3, C: 1e-7, RatedCurrent: 100}))},
		{"load", must(NewLoad(LoadParams{Voltage: 400, Frequency: 50, R: 10, L: 0.05, RL: 1, C: 1e-5}))},
		{"transformer", must(NewTransformer(must(distribution.Params())))},
		{"grid", must(NewGrid(GridParams{Voltage: 400, Frequency: 50, R: 0.01, L: 1e-4}))},
		{"meter", must(NewFrequencyMeter(FrequencyMeterParams{Voltage: 400, Frequency: 50}))},
	} {
		ports, own := d.device.Dims()
		v, x := make([]float64, ports), make([]float64, own)
		flow, rate := make([]float64, ports), make([]float64, own)
		jac := make([]float64, (ports+own)*(ports+own))
		for k := range v {
			v[k] = 300 - float64(k)
		}
		b.Run(d.name+"/Eval", func(b *testing.B) {
			for b.Loop() {
				if err := d.device.Eval(flow, rate, 0, v, x); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run(d.name+"/Jacobian", func(b *testing.B) {
			for b.Loop() {
				d.device.Jacobian(jac, 0, v, x)
			}
		})
	}
}
