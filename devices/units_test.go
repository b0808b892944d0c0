package devices

import (
	"math"
	"testing"
)

func TestUnits(t *testing.T) {
	// 400 V line to line is 230.940 V to neutral, 326.599 V peak.
	near(t, "PeakVolts", PeakVolts(400), math.Sqrt2*400/math.Sqrt(3), 1e-15)
	near(t, "PeakVolts", PeakVolts(400), 326.598632371, 1e-11)
	near(t, "LineVolts", LineVolts(PeakVolts(11e3)), 11e3, 1e-15)
	near(t, "PeakAmperes", PeakAmperes(10), 14.1421356237, 1e-11)
	near(t, "RMSAmperes", RMSAmperes(PeakAmperes(10)), 10, 1e-15)
	// 20 MVA at 13.8 kV: 836.7395 A (Grainger and Stevenson, Power System
	// Analysis, chapter 12, worked example; recalled and recomputed).
	near(t, "RatedAmperes", RatedAmperes(20e6, 13.8e3), 836.7395, 1e-7)
	near(t, "BaseOhms", BaseOhms(380, 380*380/25.0), 25, 1e-15)
	near(t, "BaseOhms", BaseOhms(13.8e3, 20e6), 9.522, 1e-15)
	near(t, "RadPerSecond", RadPerSecond(50), 314.159265359, 1e-12)
	near(t, "Hertz", Hertz(RadPerSecond(60)), 60, 1e-15)
	// 0.10 ohm at 50 Hz is 0.318310 mH (line 1-2 of a published microgrid).
	near(t, "Henries", Henries(0.10, 50), 0.318310e-3, 1e-6)
	near(t, "FaradsFromVars", FaradsFromVars(6e6, 13.8e3, 60), 83.57222385e-6, 1e-9)
	// R = 0.1 ohm, X/R = 9.424777961: |Z| = 0.9477681130 ohm.
	r, x := SplitXR(0.9477681130, 9.424777961)
	near(t, "SplitXR: R", r, 0.1, 1e-9)
	near(t, "SplitXR: X", x, 0.9424777961, 1e-9)
	if r, x = SplitXR(2, math.Inf(1)); r != 0 || x != 2 {
		t.Errorf("SplitXR without resistance: %v, %v", r, x)
	}
}
