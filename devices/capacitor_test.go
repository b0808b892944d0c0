package devices

import (
	"math"
	"testing"

	"islet/devices/devicetest"
)

func TestShuntCapacitorConforms(t *testing.T) {
	for name, p := range map[string]ShuntCapacitorParams{
		"bare":   {C: 80e-6, Voltage: 400},
		"damped": {C: 80e-6, R: 1.5, Voltage: 400},
	} {
		t.Run(name, func(t *testing.T) {
			conform(t, func() (*ShuntCapacitor, error) { return NewShuntCapacitor(p) },
				devicetest.Options{Voltages: lowVoltage.Voltages})
		})
	}
}

// TestShuntCapacitorRating: a 6 Mvar bank at 13.8 kV, 60 Hz has 83.57222385 uF
// and draws 251.0218562 A (the bank of a worked case after IEEE C37.012,
// figures from C = Q/(w V^2), I = Q/(sqrt 3 V) independently of this code).
func TestShuntCapacitorRating(t *testing.T) {
	p := must(ShuntCapacitorRating{Vars: 6e6, Voltage: 13.8e3, Frequency: 60}.Params())
	near(t, "C", p.C, 83.57222385e-6, 1e-9)
	b := quasiSteady(t, must(NewShuntCapacitor(p)), 2*math.Pi*60)
	v := []float64{PeakVolts(13.8e3), 0}
	near(t, "i", channel(t, b, "i", 0, v, nil), 251.0218562, 1e-9)
	near(t, "q", channel(t, b, "q", 0, v, nil), -6e6, 1e-12)
}

// TestShuntCapacitorCharging: through its resistance the bank charges with the
// time constant RC, in a frame at rest.
func TestShuntCapacitorCharging(t *testing.T) {
	c := must(NewShuntCapacitor(ShuntCapacitorParams{C: 100e-6, R: 5, Voltage: 400}))
	x := make([]float64, 2)
	rungeKutta(x, 0, 1e-6, 700, func(dst []float64, t float64, x []float64) {
		derivatives(c, dst, t, []float64{100, -40}, x)
	})
	near(t, "v_c.d", x[0], 100*(1-math.Exp(-0.7e-3/0.5e-3)), 1e-9)
	near(t, "v_c.q", x[1], -40*(1-math.Exp(-0.7e-3/0.5e-3)), 1e-9)
}

func TestShuntCapacitorFaults(t *testing.T) {
	_, err := NewShuntCapacitor(ShuntCapacitorParams{C: -1, R: math.NaN()})
	wantFaults(t, err, "C = -1", "R = NaN", "Voltage")
	_, err = ShuntCapacitorRating{R: -1}.Params()
	wantFaults(t, err, "Vars", "Voltage", "Frequency", "R = -1")
}
