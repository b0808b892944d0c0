package devices

import (
	"math"
	"math/cmplx"
	"testing"
)

func TestSeriesLoadConforms(t *testing.T) {
	for name, p := range map[string]SeriesLoadParams{
		"RL": {R: 8, L: 10e-3},
		"R":  {R: 8},
		"L":  {L: 10e-3},
	} {
		p.Voltage, p.Frequency = 400, 50
		t.Run(name, func(t *testing.T) {
			conform(t, func() (*SeriesLoad, error) { return NewSeriesLoad(p) }, lowVoltage)
		})
	}
}

func TestSeriesLoadRating(t *testing.T) {
	for _, r := range []SeriesLoadRating{{P: 10e3, Q: 4e3}, {P: 10e3}, {P: 1, Q: 5e3}} {
		r.Voltage, r.Frequency = 400, 50
		b := quasiSteady(t, must(NewSeriesLoad(must(r.Params()))), 2*math.Pi*50)
		v := cmplx.Rect(PeakVolts(400), -2)
		s := power(v, phasor(t, b, 0, nil, v)[0])
		if want := complex(r.P, r.Q); cmplx.Abs(s-want) > 1e-12*cmplx.Abs(want) {
			t.Errorf("%+v: draws %v", r, s)
		}
	}
}

func TestSeriesLoadFaults(t *testing.T) {
	_, err := NewSeriesLoad(SeriesLoadParams{R: -1, L: math.NaN()})
	wantFaults(t, err, "R = -1", "L = NaN", "Voltage", "Frequency")
	_, err = NewSeriesLoad(SeriesLoadParams{Voltage: 400, Frequency: 50})
	wantFaults(t, err, "R = 0 and L = 0")
	_, err = SeriesLoadRating{P: 0, Q: -1}.Params()
	wantFaults(t, err, "P = 0", "Q = -1", "Voltage", "Frequency")
}
