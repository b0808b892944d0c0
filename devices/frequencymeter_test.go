package devices

import (
	"fmt"
	"math"
	"testing"
)

func TestFrequencyMeterConforms(t *testing.T) {
	conform(t, func() (*FrequencyMeter, error) {
		return NewFrequencyMeter(FrequencyMeterParams{Voltage: 400, Frequency: 50})
	}, lowVoltage)
}

// meter is tuned by the settling rule Kp = 9.2/t_s, Ti = t_s zeta^2/2.3 for
// t_s = 0.1 s and zeta = 1/sqrt 2 (Teodorescu, Liserre, Rodriguez, Grid Converters
// for Photovoltaic and Wind Power Systems, Wiley 2011): Kp = 92, Ki = 4232.
func meter(t *testing.T) *FrequencyMeter {
	t.Helper()
	m := must(NewFrequencyMeter(FrequencyMeterParams{
		Voltage: 400, Frequency: 50, Bandwidth: math.Sqrt(4232) / (2 * math.Pi), Damping: math.Sqrt2 / 2,
	}))
	near(t, "Kp", m.kp, 92, 1e-12)
	near(t, "Ki", m.ki, 4232, 1e-12)
	m.SetFrame(2 * math.Pi * 50)
	return m
}

// follow runs the meter for a time on a voltage of given angle.
func follow(m *FrequencyMeter, x []float64, from, to float64, angle func(t float64) float64) {
	v := make([]float64, 2)
	rungeKutta(x, from, (to-from)/2000, 2000, func(dst []float64, t float64, x []float64) {
		setPair(v, 0, times(PeakVolts(400), rotor(angle(t))))
		derivatives(m, dst, t, v, x)
	})
}

// TestFrequencyMeterSteps compares the loop's angle error with the responses of
// that loop (gains 92 and 4232) to steps: closed forms for the small step of
// phase, e/step = e^{-zeta w_n t} (cos w_d t - zeta/sqrt(1 - zeta^2) sin w_d t); the
// pendulum equation's solution, computed independently of this code, for the
// large steps. The meter's voltage floor takes 5e-5 off the gains, which sets
// the tolerance.
func TestFrequencyMeterSteps(t *testing.T) {
	tests := []struct {
		name         string
		phase, speed float64 // steps, rad and rad/s
		scale        float64
		at, e        []float64
	}{
		{"small step of phase", 1e-4, 0, 1e-4, []float64{5e-3, 10e-3, 20e-3, 50e-3},
			[]float64{0.5924748654, 0.2854061078, -0.0756315268, -0.1415636058}},
		{"step of 120 degrees", 2 * math.Pi / 3, 0, 1, []float64{5e-3, 10e-3, 20e-3, 50e-3},
			[]float64{1.609681718, 1.018915671, 0.0688010168, -0.3455713702}},
		{"step of 5 Hz", 0, 10 * math.Pi, 1, []float64{5e-3, 10e-3, 20e-3, 50e-3},
			[]float64{0.1237477826, 0.1917408584, 0.2179118060, 0.0513902419}},
	}
	for _, test := range tests {
		m := meter(t)
		x := make([]float64, 3)
		from := 0.0
		angle := func(t float64) float64 { return test.phase + test.speed*t }
		for k, at := range test.at {
			follow(m, x, from, at, angle)
			from = at
			if e := (angle(at) - x[0]) / test.scale; math.Abs(e-test.e[k]) > 2e-4 {
				t.Errorf("%s: error %.6f rad after %v s, want %.6f", test.name, e, at, test.e[k])
			}
		}
	}
}

// TestFrequencyMeterRamp: on a ramp of 1 Hz/s the loop's angle lags by
// a/(Ki V) = 1.484684619e-3 rad (theory of the type-2 loop), and frequency and
// its rate of change come without error.
func TestFrequencyMeterRamp(t *testing.T) {
	m := meter(t)
	x := make([]float64, 3)
	angle := func(t float64) float64 { return math.Pi * t * t }
	follow(m, x, 0, 1.5, angle)
	near(t, "error of angle", angle(1.5)-x[0], 1.484684619e-3, 1e-4)
	v := make([]float64, 2)
	setPair(v, 0, times(PeakVolts(400), rotor(angle(1.5))))
	near(t, "frequency", channel(t, m, "frequency", 1.5, v, x), 51.5, 1e-9)
	near(t, "rocof", channel(t, m, "rocof", 1.5, v, x), 1, 1e-6)
	near(t, "v", channel(t, m, "v", 1.5, v, x), 400, 1e-12)
}

// On a dead bus the meter keeps its frequency.
func TestFrequencyMeterDeadBus(t *testing.T) {
	m := meter(t)
	x := []float64{1, 2 * math.Pi * 0.3, 2 * math.Pi * 0.3}
	rungeKutta(x, 0, 1e-3, 1000, func(dst []float64, t float64, x []float64) {
		derivatives(m, dst, t, []float64{0, 0}, x)
	})
	near(t, "frequency", channel(t, m, "frequency", 1, []float64{0, 0}, x), 50.3, 1e-12)
}

func TestFrequencyMeterFaults(t *testing.T) {
	_, err := NewFrequencyMeter(FrequencyMeterParams{Bandwidth: -1, Damping: math.NaN(), RocofFilter: math.Inf(1)})
	wantFaults(t, err, "Voltage", "Frequency", "Bandwidth = -1", "Damping = NaN", "RocofFilter = +Inf")
	p := must(NewFrequencyMeter(FrequencyMeterParams{Voltage: 400, Frequency: 50})).Params()
	if got := fmt.Sprintf("%v %.4f %v", p.Bandwidth, p.Damping, p.RocofFilter); got != "10 0.7071 2" {
		t.Errorf("defaults %s", got)
	}
}
