package devices

import (
	"math"
	"testing"
)

// Source of the phase shifts: the clock-number rule of IEC 60076-1; Dyn1 shifts
// the low-voltage positive sequence by -30 degrees, Dyn11 by +30.
func TestVectorGroup(t *testing.T) {
	for text, lag := range map[string]float64{
		"Yy0": 0, "YNyn0": 0, "Yyn6": 180, "Dd0": 0, "Dd4": 120, "Dz6": 180,
		"Dyn11": -30, "Dyn1": 30, "Dyn5": 150, "Dy7": -150, "Yd1": 30, "YNd11": -30, "Yzn5": 150, "Yz11": -30,
	} {
		g, err := ParseVectorGroup(text)
		if err != nil {
			t.Errorf("%v", err)
			continue
		}
		off := math.Remainder(g.Lag()*180/math.Pi-lag, 360)
		if math.Abs(off) > 1e-9 {
			t.Errorf("%s: lags by %v degrees, want %v", text, g.Lag()*180/math.Pi, lag)
		}
		if g.String() != text {
			t.Errorf("%s: written as %s", text, g)
		}
		var again VectorGroup
		if err := again.UnmarshalText(must(g.MarshalText())); err != nil || again != g {
			t.Errorf("%s: read back as %v, error %v", text, again, err)
		}
	}
	for _, text := range []string{
		"", "D", "Dyn", "yd1", "Dyn12", "Dyn-1", "Dyn+1", "Dyn1 ", " Dyn1", "DNyn1", "Ydn1", "Zyn1", "Dyn2", "Yy1", "Dd11", "Yz0", "Dyn1.5",
	} {
		if g, err := ParseVectorGroup(text); err == nil {
			t.Errorf("accepted %q as %v", text, g)
		}
		kept := VectorGroup{HV: 'Y', LV: 'y'}
		if err := kept.UnmarshalText([]byte(text)); err == nil || kept.HV != 'Y' {
			t.Errorf("UnmarshalText(%q): error %v, value %v", text, err, kept)
		}
	}
}
