package devices

import (
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
