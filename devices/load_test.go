package devices

import (
	"fmt"
	"math"
	"math/cmplx"
	"testing"

	"islet/devices/devicetest"
	"islet/solvers"
)

var lowVoltage = devicetest.Options{Voltages: []float64{PeakVolts(400)}}

func TestLoadConforms(t *testing.T) {
	for name, p := range map[string]LoadParams{
		"R":    {R: 8},
		"L":    {L: 30e-3, RL: 0.5},
		"C":    {C: 50e-6},
		"RL":   {R: 8, L: 30e-3, RL: 0.5},
		"RC":   {R: 8, C: 50e-6},
		"LC":   {L: 30e-3, RL: 0.5, C: 50e-6},
		"RLC":  {R: 8, L: 30e-3, RL: 0.5, C: 50e-6},
		"RLC0": {R: 8, L: 30e-3, C: 50e-6},
	} {
		p.Voltage, p.Frequency = 400, 50
		t.Run(name, func(t *testing.T) {
			conform(t, func() (*Load, error) { return NewLoad(p) }, lowVoltage)
		})
	}
}

// TestLoadRating: the load must draw exactly its rating at rated voltage and
// frequency, whatever the quality factor takes.
func TestLoadRating(t *testing.T) {
	tests := []LoadRating{
		{P: 10e3},
		{P: 10e3, Q: 4e3},
		{P: 10e3, Q: -4e3},
		{P: 10e3, Q: 4e3, QCapacitive: 6e3},
		{P: 10e3, Q: -4e3, QCapacitive: 6e3, QualityFactor: 7},
		{P: 10e3, Q: 4e3, QualityFactor: math.Inf(1)},
		{P: 200, Q: 4e3}, // all of P in the inductor
		{P: 0, Q: 4e3, QualityFactor: math.Inf(1)}, // a lossless reactor
		{P: 0, Q: -4e3},
	}
	for _, r := range tests {
		r.Voltage, r.Frequency = 480, 60
		p, err := r.Params()
		if err != nil {
			t.Errorf("%+v: %v", r, err)
			continue
		}
		b := quasiSteady(t, must(NewLoad(p)), 2*math.Pi*60)
		v := cmplx.Rect(PeakVolts(480), 0.7)
		s := power(v, phasor(t, b, 0, nil, v)[0])
		if want := complex(r.P, r.Q); cmplx.Abs(s-want) > 1e-12*(cmplx.Abs(want)+r.QCapacitive) {
			t.Errorf("%+v: draws %v, want %v", r, s, want)
		}
	}
}

// TestAntiIslandingLoad: R, L and C of the test load of IEEE Std 1547.1, quality
// factor R sqrt(C/L) = 1, 100 kW at 400 V and 60 Hz, figures computed from
// R = V^2/P, L = V^2/(w P), C = P/(w V^2) independently of this code; and the
// voltage and frequency at which it takes a given P + jQ:
// V = sqrt(P R), Q = V^2 (1/(wL) - wC).
func TestAntiIslandingLoad(t *testing.T) {
	p := must(LoadRating{Voltage: 400, Frequency: 60, P: 100e3, QCapacitive: 100e3, QualityFactor: math.Inf(1)}.Params())
	near(t, "R", p.R, 1.6, 1e-12)
	near(t, "L", p.L, 4.244131816e-3, 1e-9)
	near(t, "C", p.C, 1657.863991e-6, 1e-9)
	tests := []struct{ p, q, volts, hertz float64 }{
		{100e3, 0, 400, 60},
		{90e3, 0, 379.4733192, 60},
		{90e3, 5e3, 379.4733192, 58.35647702},
		{110e3, -5e3, 419.5235393, 61.37913023},
	}
	l := must(NewLoad(p))
	for _, test := range tests {
		b := quasiSteady(t, l, 2*math.Pi*test.hertz)
		v := complex(PeakVolts(test.volts), 0)
		s := power(v, phasor(t, b, 0, nil, v)[0])
		near(t, "P", real(s), test.p, 1e-8)
		if math.Abs(imag(s)-test.q) > 1e-3 { // 1e-8 of the 100 kvar in L and C
			t.Errorf("Q = %v var at %v V, %v Hz: want %v", imag(s), test.volts, test.hertz, test.q)
		}
	}
}

// TestLoadSetpoint: setpoint p must move the active power alone.
func TestLoadSetpoint(t *testing.T) {
	p := must(LoadRating{Voltage: 400, Frequency: 50, P: 10e3, Q: 4e3}.Params())
	l := must(NewLoad(p))
	if got := l.Setpoints(0)[0].Value; math.Abs(got-10e3) > 1e-9 {
		t.Errorf("p = %v W at start, want 10000", got)
	}
	if err := l.Set("p", 1, 16e3, 2); err != nil {
		t.Fatal(err)
	}
	b := quasiSteady(t, l, 2*math.Pi*50)
	v := complex(PeakVolts(400), 0)
	for _, test := range []struct{ t, p float64 }{{0.5, 10e3}, {1, 10e3}, {1.5, 11.5e3}, {3, 16e3}, {9, 16e3}} {
		s := power(v, phasor(t, b, test.t, nil, v)[0])
		near(t, fmt.Sprintf("P at %v s", test.t), real(s), test.p, 1e-12)
		near(t, fmt.Sprintf("Q at %v s", test.t), imag(s), 4e3, 1e-12)
	}
	// The inductor alone draws 4 kvar / 20 = 200 W, and 0.1 % of the
	// resistor's 9.8 kW stays.
	if got := l.Setpoints(0)[0].Min; math.Abs(got-209.8) > 1e-9 {
		t.Errorf("p can go down to %v W, want 209.8", got)
	}
	wantFaults(t, l.Set("p", 0, 200, 0), "p = 200 W in")
	wantFaults(t, l.Set("q", 0, 200, 0), `no setpoint "q"`, `"p"`)
	lr := must(NewLoad(LoadParams{Voltage: 400, Frequency: 50, L: 1e-3, RL: 1}))
	wantFaults(t, lr.Set("p", 0, 200, 0), `no setpoint "p"`)
}

// TestTrappedOffset: what the inductor holds at rest at zero voltage decays
// with quality/omega, the reason for the default.
func TestTrappedOffset(t *testing.T) {
	p := must(LoadRating{Voltage: 400, Frequency: 50, P: 10e3, Q: 4e3}.Params())
	l := must(NewLoad(p))
	x := []float64{10, 0}
	rungeKutta(x, 0, 1e-4, 3000, func(dst []float64, t float64, x []float64) {
		derivatives(l, dst, t, []float64{0, 0}, x)
	})
	near(t, "left of the offset after 0.3 s", x[0]/10, math.Exp(-0.3*2*math.Pi*50/20), 1e-9)
	if left := x[0] / 10; left > 0.01 {
		t.Errorf("%.3f of a trapped offset left after 0.3 s: DefaultQualityFactor promises less than 0.01", left)
	}
}

func TestLoadFaults(t *testing.T) {
	_, err := NewLoad(LoadParams{R: -1, L: math.NaN(), RL: -2, C: math.Inf(1)})
	wantFaults(t, err, "Voltage", "Frequency", "R = -1", "L = NaN", "RL = -2", "C = +Inf")
	_, err = NewLoad(LoadParams{Voltage: 400, Frequency: 50})
	wantFaults(t, err, "R, L and C are 0")
	_, err = NewLoad(LoadParams{Voltage: 400, Frequency: 50, R: 1, RL: 3})
	wantFaults(t, err, "RL = 3")
	_, err = LoadRating{Voltage: 400, Frequency: 50}.Params()
	wantFaults(t, err, "P, Q and QCapacitive are 0")
	_, err = LoadRating{Voltage: -400, P: -1, Q: math.NaN(), QCapacitive: -1, QualityFactor: -1}.Params()
	wantFaults(t, err, "Voltage", "Frequency", "P = -1", "Q = NaN", "QCapacitive = -1", "QualityFactor = -1")
	// 4 kvar at the default quality factor of 20 draw 200 W.
	_, err = LoadRating{Voltage: 400, Frequency: 50, P: 199, Q: 4e3}.Params()
	wantFaults(t, err, "P = 199", "200 W")
}

func ExampleNewLoad() {
	p, err := LoadRating{Voltage: 400, Frequency: 50, P: 12e3, Q: 5e3}.Params()
	if err != nil {
		fmt.Println(err)
		return
	}
	l, err := NewLoad(p)
	if err != nil {
		fmt.Println(err)
		return
	}
	var b solvers.Block = l
	ports, own := b.Dims()
	fmt.Printf("R %.3f ohm, L %.2f mH with %.3f ohm; %d port components, %d unknowns\n", p.R, p.L*1e3, p.RL, ports, own)
	// Output: R 13.617 ohm, L 101.61 mH with 1.596 ohm; 2 port components, 2 unknowns
}
