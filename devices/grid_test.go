package devices

import (
	"math"
	"math/cmplx"
	"testing"

	"islet/devices/devicetest"
	"islet/solvers/facet"
)

func TestGridConforms(t *testing.T) {
	for name, p := range map[string]GridParams{
		"RL": {R: 0.05, L: 0.4e-3},
		"L":  {L: 0.4e-3},
		"R":  {R: 0.05},
	} {
		p.Voltage, p.Frequency = 400, 50
		t.Run(name, func(t *testing.T) {
			conform(t, func() (*Grid, error) { return NewGrid(p) }, lowVoltage)
		})
		t.Run(name+" off the frame's speed", func(t *testing.T) {
			conform(t, func() (*Grid, error) { return NewGrid(p) },
				devicetest.Options{Voltages: lowVoltage.Voltages, Frame: 2 * math.Pi * 49.7})
		})
	}
}

// TestGridRating: 10 kA at 13.8 kV, 60 Hz, without resistance, is 2.113427432 mH
// (worked case after IEEE C37.012; the figure is V/(sqrt 3 I w), computed
// independently of this code). Into a short circuit the grid drives its
// short-circuit current.
func TestGridRating(t *testing.T) {
	va := math.Sqrt(3) * 13.8e3 * 10e3
	p := must(GridRating{Voltage: 13.8e3, Frequency: 60, ShortCircuit: va, XR: math.Inf(1)}.Params())
	near(t, "L", p.L, 2.113427432e-3, 1e-9)
	if p.R != 0 {
		t.Errorf("R = %v ohm, want 0", p.R)
	}
	p = must(GridRating{Voltage: 13.8e3, Frequency: 60, ShortCircuit: va, XR: 12}.Params())
	near(t, "X/R", 2*math.Pi*60*p.L/p.R, 12, 1e-12)
	g := must(NewGrid(p))
	near(t, "Weight", g.Weight(), va, 1e-12)
	b := quasiSteady(t, g, 2*math.Pi*60)
	near(t, "i", channel(t, b, "i", 0, []float64{0, 0}, []float64{0.4}), 10e3, 1e-12)
}

// TestVoltageSag: a fault behind a feeder of 0.40 + j0.70 ohm leaves
// V = Z_l/(Z_s + Z_l) on a source of 0.05 + j0.40 ohm: 0.6783634654 of it, with a
// phase jump of -7.495857640 degrees. (The voltage divider of sag analysis, e.g.
// M. H. J. Bollen, Understanding Power Quality Problems, IEEE Press 2000;
// figures computed independently of this code.)
func TestVoltageSag(t *testing.T) {
	const w = 2 * math.Pi * 50
	g := quasiSteady(t, must(NewGrid(GridParams{Voltage: 400, Frequency: 50, R: 0.05, L: 0.40 / w})), w)
	l := quasiSteady(t, must(NewSeriesLoad(SeriesLoadParams{R: 0.40, L: 0.70 / w, Voltage: 400, Frequency: 50})), w)
	delta := []float64{0.3}
	total := func(v complex128) complex128 {
		return phasor(t, g, 0, delta, v)[0] + phasor(t, l, 0, nil, v)[0]
	}
	v := -total(0) / (total(1) - total(0)) // the current law, linear in v
	v /= cmplx.Rect(PeakVolts(400), 0.3)
	near(t, "voltage left", cmplx.Abs(v), 0.6783634654, 1e-9)
	near(t, "phase jump", degrees(v), -7.495857640, 1e-9)
}

// TestGridEnergisation takes two figures of the table of TestLineEnergisation, 5
// ms after closing, from a grid whose terminal is shorted, in a frame at rest: a
// source of 325 V behind 0.1 ohm and 3 mH.
func TestGridEnergisation(t *testing.T) {
	for angle, want := range map[float64]float64{0: 324.8284427, math.Pi / 2: 310.3703418} {
		g := must(NewGrid(GridParams{Voltage: LineVolts(325), Frequency: 50, R: 0.1, L: 3e-3}))
		x := []float64{angle - math.Pi/2, 0, 0} // a sine is 90 degrees behind the cosine
		rungeKutta(x, 0, 5e-6, 1000, func(dst []float64, t float64, x []float64) {
			derivatives(g, dst, t, []float64{0, 0}, x)
		})
		if got := -x[1]; math.Abs(got-want) > 2e-6 { // phase a, against the grid
			t.Errorf("closing angle %.3f: %.8f A after 5 ms, want %.8f", angle, got, want)
		}
		if math.Abs(x[0]-angle) > 1e-12 { // a quarter turn on
			t.Errorf("closing angle %.3f: delta %v after a quarter of a period, want %v", angle, x[0], angle)
		}
	}
}

// TestGridSetpoints: a phase set at once jumps, one that ramps comes to the
// same angle by a deviation of frequency; from a ramp's middle too.
func TestGridSetpoints(t *testing.T) {
	g := must(NewGrid(GridParams{Voltage: 400, Frequency: 50, R: 0.1}))
	g.SetFrame(2 * math.Pi * 50)
	set := func(name string, t0, value, ramp float64) {
		t.Helper()
		if err := g.Set(name, t0, value, ramp); err != nil {
			t.Fatal(err)
		}
	}
	x := []float64{0.1}
	set("phase", 0, 0.5, 0)
	g.ApplyJumps(x)
	near(t, "delta after a jump", x[0], 0.6, 1e-15)
	g.ApplyJumps(x)
	near(t, "delta after no jump", x[0], 0.6, 1e-15)

	set("phase", 1, 0.9, 2)
	near(t, "speed within the ramp", g.Speed(2, nil, nil), 2*math.Pi*50+0.2, 1e-15)
	near(t, "speed at the ramp's end", g.Speed(3, nil, nil), 2*math.Pi*50, 1e-15)
	// At 2 s the ramp has done 0.2 of its 0.4; a jump to 0.1 goes 0.6 down.
	x[0] = 0.8
	set("phase", 2, 0.1, 0)
	g.ApplyJumps(x)
	near(t, "delta after a jump within a ramp", x[0], 0.2, 1e-14)
	near(t, "speed after it", g.Speed(2.5, nil, nil), 2*math.Pi*50, 1e-15)
	// A jump that no one has applied isn't lost to another.
	set("phase", 4, 0.3, 0)
	set("phase", 4, 0.4, 0)
	g.ApplyJumps(x)
	near(t, "delta after two jumps", x[0], 0.5, 1e-14)

	set("frequency", 5, 49, 2)
	near(t, "frequency", channel(t, g, "frequency", 6, []float64{0, 0}, x), 49.5, 1e-15)
	set("voltage", 5, 200, 0)
	near(t, "i at half the voltage", channel(t, g, "i", 6, []float64{0, 0}, x), 200/math.Sqrt(3)/0.1, 1e-12)
	wantFaults(t, g.Set("frequency", 0, 314, 0), "frequency = 314 Hz", "25 to 100")
	wantFaults(t, g.Set("voltage", 0, -1, -2), "voltage = -1 V", "ramp = -2 s")
	wantFaults(t, g.Set("angle", 0, 1, 0), `no setpoint "angle"`)

	if s := g.Setpoints(6); s[2].Value != 0.4 || s[0].Value != 200 {
		t.Errorf("setpoints %+v", s)
	}
}

// TestGridBase: the base of the current's error norm.
func TestGridBase(t *testing.T) {
	for va, want := range map[float64]float64{
		0:   math.Sqrt2 * 1e6 / 20 / (math.Sqrt(3) * 400),
		2e5: math.Sqrt2 * 2e5 / (math.Sqrt(3) * 400),
	} {
		g := must(NewGrid(must(GridRating{Voltage: 400, Frequency: 50, ShortCircuit: 1e6, XR: 3, VA: va}.Params())))
		near(t, "base", g.Describe().Unknowns[1].Base, want, 1e-12)
	}
	var _ facet.Former = (*Grid)(nil)
}

func TestGridFaults(t *testing.T) {
	_, err := NewGrid(GridParams{R: -1, L: math.NaN(), VA: -1})
	wantFaults(t, err, "Voltage", "Frequency", "R = -1", "L = NaN", "VA = -1")
	_, err = NewGrid(GridParams{Voltage: 1, Frequency: 1})
	wantFaults(t, err, "R = 0 and L = 0")
	_, err = GridRating{XR: -1, VA: -2}.Params()
	wantFaults(t, err, "Voltage", "Frequency", "ShortCircuit", "XR = -1", "VA = -2")
}
