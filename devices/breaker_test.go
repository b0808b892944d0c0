package devices

import (
	"math"
	"testing"

	"islet/devices/devicetest"
)

func TestBreakerConforms(t *testing.T) {
	conform(t, func() (*Breaker, error) {
		return NewBreaker(BreakerParams{Resistance: DefaultContactResistance})
	}, devicetest.Options{Voltages: []float64{PeakVolts(400), PeakVolts(400)}})
}

func TestBreaker(t *testing.T) {
	b := must(NewBreaker(BreakerParams{Resistance: 1e-3}))
	if !b.Closed() || must(NewBreaker(BreakerParams{Resistance: 1, Open: true})).Closed() {
		t.Error("a breaker must start closed unless it is told to be open")
	}
	// 32 A rms through 1 mohm lose 3 I^2 R = 3.072 W.
	v := []float64{PeakVolts(400), 0, PeakVolts(400) - math.Sqrt2*32*1e-3, 0}
	near(t, "i", channel(t, b, "i", 0, v, nil), 32, 1e-9)
	near(t, "loss", b.Energy(0, v, nil).Dissipated, 3.072, 1e-9)
	near(t, "p", channel(t, b, "p", 0, v, nil), math.Sqrt(3)*400*32, 1e-9)
	b.SetClosed(false)
	if i := channel(t, b, "i", 0, v, nil); i != 0 || b.Energy(0, v, nil).Dissipated != 0 || len(b.Pattern()) != 0 {
		t.Errorf("open: current %v A, pattern %v", i, b.Pattern())
	}
	wantFaults(t, b.UnmarshalBinary([]byte{2}), "snapshot")
}

func TestBreakerFaults(t *testing.T) {
	for _, r := range []float64{0, -1, math.NaN(), math.Inf(1)} {
		_, err := NewBreaker(BreakerParams{Resistance: r})
		wantFaults(t, err, "Resistance")
	}
}
