package compare

import (
	"math"
	"testing"
)

func TestGrowingAndUnsettledSwings(t *testing.T) {
	make := func(sigma, amplitude float64) (tt, x []float64) {
		for k := range 2001 {
			at := float64(k) * 1e-3
			tt = append(tt, at)
			v := 50.0
			if at >= 0.5 {
				v += amplitude * math.Exp(sigma*(at-0.5)) * math.Sin(70*(at-0.5))
			}
			x = append(x, v)
			if at == 0.5 { // the two sides of an event
				tt, x = append(tt, at), append(x, v)
			}
		}
		return tt, x
	}
	for _, c := range []struct {
		name             string
		sigma, amplitude float64
		grows, unsettled bool
	}{
		{"grows", +1.5, 0.1, true, true},
		{"decays", -10, 0.1, false, false},
		{"decays slowly", -0.5, 0.1, false, true},
		{"grows, but is nothing", +1, 1e-6, false, false},
		{"rests", 0, 0, false, false},
	} {
		tt, x := make(c.sigma, c.amplitude)
		if g, u := grows(tt, x), unsettled(tt, x); g != c.grows || u != c.unsettled {
			t.Errorf("%s: grows %v, unsettled %v, want %v and %v", c.name, g, u, c.grows, c.unsettled)
		}
	}
}
