package devices

import (
	"fmt"
	"math"
	"testing"

	"islet/devices/devicetest"
)

func TestLineConforms(t *testing.T) {
	for name, p := range map[string]LineParams{
		"series":     {R: 0.32, L: 0.26e-3, RatedCurrent: 200},
		"pi":         {R: 0.32, L: 0.26e-3, C: 0.4e-6, RatedCurrent: 200},
		"lossless":   {L: 0.26e-3, RatedCurrent: 200},
		"resistor":   {R: 0.32, RatedCurrent: 200},
		"resistor C": {R: 0.32, C: 0.4e-6, RatedCurrent: 200},
	} {
		t.Run(name, func(t *testing.T) {
			// A resistor's levels are the same but for the capacitors.
			conform(t, func() (*Line, error) { return NewLine(p) }, devicetest.Options{Voltages: []float64{326.6, 326.6}})
		})
	}
}

// TestLineEnergisation closes an RL branch on v = Vm sin(wt + a) and compares
// phase a of the current with the closed form
// i(t) = (Vm/|Z|) [sin(wt + a - phi) - sin(a - phi) e^{-Rt/L}],
// any text on transients in power systems. The figures were computed from it
// independently of this code: Vm = 325 V, R = 0.1 ohm, L = 3 mH, 50 Hz.
func TestLineEnergisation(t *testing.T) {
	const vm, w = 325.0, 2 * math.Pi * 50
	phi := 83.94338941 * math.Pi / 180
	tests := []struct {
		t float64    // s
		i [3]float64 // A, closing angle 0, phi, 90 deg
	}{
		{0.001, [3]float64{16.69087454, 105.9652902, 104.7891379}},
		{0.005, [3]float64{324.8284427, 342.9108824, 310.3703418}},
		{0.010, [3]float64{585.3316823, 0, -62.10562039}},
		{0.020, [3]float64{-165.9232049, 0, 17.60499882}},
		{0.050, [3]float64{405.402775, 0, -43.01457039}},
	}
	for _, frame := range []float64{0, w, 2 * math.Pi * 60} {
		l := must(NewLine(LineParams{R: 0.1, L: 3e-3, RatedCurrent: 200}))
		l.SetFrame(frame)
		for k, angle := range []float64{0, phi, math.Pi / 2} {
			v, x := make([]float64, 4), make([]float64, 2)
			from := 0.0
			for _, test := range tests {
				const steps = 1000
				rungeKutta(x, from, (test.t-from)/steps, steps, func(dst []float64, t float64, x []float64) {
					// sin is the real part of e^{j(. - 90 deg)}, and phase a
					// of a dq value z is Re(z e^{j theta_f}).
					setPair(v, 0, times(vm, rotor((w-frame)*t+angle-math.Pi/2)))
					derivatives(l, dst, t, v, x)
				})
				from = test.t
				got := real(pair(x, 0) * rotor(frame*test.t))
				// Printed to ten digits of some 600 A; phi to ten digits.
				if math.Abs(got-test.i[k]) > 2e-6 {
					t.Errorf("frame %.0f rad/s, angle %.4f, t = %v s: i = %.9f A, want %.9f", frame, angle, test.t, got, test.i[k])
				}
			}
		}
	}
}

// TestLineWithCapacitor is the series RLC step: V = 100, L = 10 mH, C = 100 uF,
// from a line whose far half of the capacitance is the C (the near one hangs on
// the stiff source), in a frame at rest. Closed forms of any circuit text; the
// figures were computed from them independently.
func TestLineWithCapacitor(t *testing.T) {
	tests := []struct {
		r, t, vc, i float64
	}{
		{2, 1e-3, 43.10281091, 7.627576785},
		{2, 2e-3, 125.8070263, 7.516155021},
		{2, 5e-3, 90.14493324, -5.886967935},
		{2, 10e-3, 133.6851681, -1.853457070},
		{20, 1e-3, 26.42411177, math.NaN()},
		{20, 2e-3, 59.39941503, math.NaN()},
		{20, 5e-3, 95.9572318, math.NaN()},
		{50, 1e-3, 15.17838618, math.NaN()},
		{50, 2e-3, 31.12595914, math.NaN()},
		{50, 5e-3, 63.17608709, math.NaN()},
	}
	for _, test := range tests {
		l := must(NewLine(LineParams{R: test.r, L: 10e-3, C: 200e-6, RatedCurrent: 10}))
		port, own := make([]float64, 4), make([]float64, 2)
		l.Mass(port, own)
		// Unknowns: the current and the voltage at "to", where
		// (sum of masses) v' = -sum of flows.
		y := make([]float64, 4)
		const steps = 2000
		rungeKutta(y, 0, test.t/steps, steps, func(dst []float64, time float64, y []float64) {
			v := []float64{100, 0, y[2], y[3]}
			flow := make([]float64, 4)
			if err := l.Eval(flow, dst[:2], time, v, y[:2]); err != nil {
				t.Fatal(err)
			}
			for k := range 2 {
				dst[k] /= own[k]
				dst[2+k] = -flow[2+k] / port[2+k]
			}
		})
		near(t, fmt.Sprintf("R = %v, t = %v: v_c", test.r, test.t), y[2], test.vc, 1e-8)
		if !math.IsNaN(test.i) {
			near(t, fmt.Sprintf("R = %v, t = %v: i", test.r, test.t), y[0], test.i, 1e-8)
		}
	}
}

func TestLineData(t *testing.T) {
	// 0.5 km of a cable with 0.206 ohm/km, 0.0785 ohm/km at 50 Hz, 300 nF/km.
	p := must(LineData{Resistance: 0.206, Reactance: 0.0785, Frequency: 50, Capacitance: 300, Length: 0.5, RatedCurrent: 270}.Params())
	near(t, "R", p.R, 0.103, 1e-15)
	near(t, "X", p.L*2*math.Pi*50, 0.03925, 1e-15)
	near(t, "C", p.C, 150e-9, 1e-15)
	near(t, "RatedCurrent", p.RatedCurrent, 270, 0)

	p = must(LineData{Resistance: 1, Inductance: 0.3, Length: 2, RatedCurrent: 1}.Params())
	near(t, "L", p.L, 0.6e-3, 1e-15)
}

func TestLineFaults(t *testing.T) {
	_, err := NewLine(LineParams{R: -1, L: math.NaN(), C: math.Inf(1)})
	wantFaults(t, err, "R = -1", "L = NaN", "C = +Inf", "RatedCurrent = 0")
	_, err = NewLine(LineParams{RatedCurrent: 1})
	wantFaults(t, err, "R = 0 and L = 0")
	_, err = LineData{Inductance: 1, Reactance: 1}.Params()
	wantFaults(t, err, "Length", "want one of them", "Frequency")
	_, err = LineData{Length: 1}.Params()
	wantFaults(t, err, "R = 0 and L = 0", "RatedCurrent")
}
