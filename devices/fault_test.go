package devices

import (
	"math"
	"testing"
)

func TestFaultConforms(t *testing.T) {
	for name, p := range map[string]FaultParams{
		"R":  {R: 0.01, RatedCurrent: 100},
		"RL": {R: 0.01, L: 30e-6, RatedCurrent: 100},
	} {
		t.Run(name, func(t *testing.T) {
			conform(t, func() (*Fault, error) { return NewFault(p) }, lowVoltage)
		})
	}
}

// TestThreePhaseFault: E = 1 behind 0.02 + j0.20 on a fault of 0.01 pu, base 20
// MVA, 11 kV: 4.944681764 pu at -81.46923439 degrees, 5190.569723 A, and
// 0.0494468176 pu left at the fault. (I = E/(Z1 + Zf); figures computed
// independently of this code.)
func TestThreePhaseFault(t *testing.T) {
	const w = 2 * math.Pi * 50
	base := BaseOhms(11e3, 20e6)
	near(t, "base current", RatedAmperes(20e6, 11e3), 1049.727762, 1e-9)
	g := quasiSteady(t, must(NewGrid(GridParams{Voltage: 11e3, Frequency: 50, R: 0.02 * base, L: 0.20 * base / w})), w)
	f := quasiSteady(t, must(NewFault(FaultParams{R: 0.01 * base, RatedCurrent: 1050, Closed: true})), w)
	delta := []float64{0}
	total := func(v complex128) complex128 {
		return phasor(t, g, 0, delta, v)[0] + phasor(t, f, 0, nil, v)[0]
	}
	z := -total(0) / (total(1) - total(0))
	v := []float64{real(z), imag(z)}
	near(t, "i", channel(t, f, "i", 0, v, nil), 5190.569723, 1e-9)
	near(t, "angle", degrees(phasor(t, f, 0, nil, z)[0]), -81.46923439, 1e-9)
	near(t, "v", abs(z)/PeakVolts(11e3), 0.0494468176, 1e-9)
}

// TestFaultPeak: the exact peak of a fully offset fault current,
// kappa = 1.80614961 sqrt(2) I for R/X = 0.07 at w t = 3.015134, closing at a
// voltage zero; IEC 60909-0's fit gives 1.814. (Maximum of
// sin(wt - phi) + sin(phi) e^{-Rt/L}, computed independently of this code.)
func TestFaultPeak(t *testing.T) {
	const w, v, x = 2 * math.Pi * 50, 100.0, 0.5
	f := must(NewFault(FaultParams{R: 0.07 * x, L: x / w, RatedCurrent: 100, Closed: true}))
	f.SetFrame(w)
	i := make([]float64, 2)
	rungeKutta(i, 0, 3.015134/w/2000, 2000, func(dst []float64, t float64, i []float64) {
		derivatives(f, dst, t, []float64{0, -v}, i) // a sine in phase a
	})
	got := real(pair(i, 0) * rotor(3.015134))
	near(t, "kappa", got/(v/(x*math.Hypot(1, 0.07))), 1.80614961, 1e-8)
}

func TestFaultClears(t *testing.T) {
	f := must(NewFault(FaultParams{R: 0.01, L: 1e-5, RatedCurrent: 100}))
	if f.Closed() {
		t.Error("a fault must start open unless it is told to be closed")
	}
	x := []float64{1000, -300}
	f.SetClosed(true)
	f.ApplyJumps(x)
	if x[0] != 1000 {
		t.Errorf("closing changed the current to %v", x)
	}
	f.SetClosed(false)
	f.ApplyJumps(x)
	if x[0] != 0 || x[1] != 0 {
		t.Errorf("current %v after clearing, want 0", x)
	}
}

func TestFaultFaults(t *testing.T) {
	_, err := NewFault(FaultParams{L: -1, RatedCurrent: math.NaN()})
	wantFaults(t, err, "R = 0", "L = -1", "RatedCurrent = NaN")
}
