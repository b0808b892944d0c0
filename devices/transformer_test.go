package devices

import (
	"fmt"
	"math"
	"math/cmplx"
	"testing"

	"islet/devices/devicetest"
	"islet/solvers"
)

func group(s string) VectorGroup { return must(ParseVectorGroup(s)) }

// distribution is a 400 kVA, 20/0.4 kV transformer of the usual proportions:
// 4 %, 4.6 kW load loss, 0.8 % no-load current, 610 W no-load loss.
var distribution = TransformerRating{
	VA: 400e3, HV: 20e3, LV: 400, Frequency: 50, Group: VectorGroup{HV: 'D', LV: 'y', LVNeutral: true, Clock: 11},
	Impedance: 4, Resistance: 1.15, NoLoadCurrent: 0.8, NoLoadLoss: 610,
}

func TestTransformerConforms(t *testing.T) {
	ratings := map[string]func(r *TransformerRating){
		"core and flux":  func(r *TransformerRating) {},
		"Dyn1":           func(r *TransformerRating) { r.Group = group("Dyn1") },
		"lossless flux":  func(r *TransformerRating) { r.QualityFactor = math.Inf(1) },
		"flux alone":     func(r *TransformerRating) { r.NoLoadLoss = 0 },
		"lossy flux":     func(r *TransformerRating) { r.NoLoadLoss = 100 },
		"core alone":     func(r *TransformerRating) { r.NoLoadLoss = 3200 },
		"no magnetising": func(r *TransformerRating) { r.NoLoadCurrent, r.NoLoadLoss = 0, 0 },
		"no resistance":  func(r *TransformerRating) { r.Resistance, r.XR = 0, math.Inf(1) },
		"neither, Yy6": func(r *TransformerRating) {
			*r = TransformerRating{VA: 1e5, HV: 1e3, LV: 400, Frequency: 50, Group: group("Yy6"), Impedance: 5, XR: 5}
		},
		"step up, YNd5": func(r *TransformerRating) { r.HV, r.LV, r.Group = 400, 20e3, group("YNd5") },
	}
	for name, change := range ratings {
		r := distribution
		change(&r)
		t.Run(name, func(t *testing.T) {
			p, err := r.Params()
			if err != nil {
				t.Fatal(err)
			}
			conform(t, func() (*Transformer, error) { return NewTransformer(p) },
				devicetest.Options{Voltages: []float64{PeakVolts(r.HV), PeakVolts(r.LV)}})
		})
	}
}

func distributionAt(t *testing.T, change func(*TransformerRating)) (*Transformer, solvers.Block) {
	t.Helper()
	r := distribution
	if change != nil {
		change(&r)
	}
	w := must(NewTransformer(must(r.Params())))
	return w, quasiSteady(t, w, 2*math.Pi*50)
}

// TestTransformerTests makes the two tests of IEC 60076-1 and reads the
// nameplate back: with the low-voltage side shorted, the short-circuit voltage
// drives the rated current and the load loss; open, rated voltage drives the
// no-load current and loss.
func TestTransformerTests(t *testing.T) {
	for name, quality := range map[string]float64{"default": 0, "7": 7, "lossless": math.Inf(1)} {
		_, b := distributionAt(t, func(r *TransformerRating) { r.QualityFactor = quality })

		v := []float64{0, 0.04 * PeakVolts(20e3), 0, 0}
		near(t, name+": short-circuit current", channel(t, b, "i_to", 0, v, nil), 400e3/(math.Sqrt(3)*400), 1e-12)
		// At 4 % of the voltage the core draws 0.16 % of its no-load loss.
		near(t, name+": load loss", channel(t, b, "p_from", 0, v, nil), 4600+0.04*0.04*610, 1e-12)

		v = []float64{PeakVolts(20e3), 0, 0, 0}
		setPair(v, 2, b.(*Transformer).OpenRatio(0, 1)*pair(v, 0))
		near(t, name+": no-load current", channel(t, b, "i_from", 0, v, nil), 0.008*400e3/(math.Sqrt(3)*20e3), 1e-10)
		near(t, name+": no-load loss", channel(t, b, "p_from", 0, v, nil), 610, 1e-9)
		if i := channel(t, b, "i_to", 0, v, nil); i > 1e-9 {
			t.Errorf("%s: %v A at the open terminal", name, i)
		}
	}
}

// TestTransformerXR gives the same transformer by X/R.
func TestTransformerXR(t *testing.T) {
	byLoss := must(distribution.Params())
	r := distribution
	r.XR, r.Resistance = math.Sqrt(4*4-1.15*1.15)/1.15, 0
	byXR := must(r.Params())
	near(t, "R", byXR.R, byLoss.R, 1e-14)
	near(t, "L", byXR.L, byLoss.L, 1e-14)
}

// TestTransformerPhaseShift: Dyn1 shifts the low-voltage side's positive
// sequence by -30 degrees, Dyn11 by +30, clock number c by -30 c (IEC 60076-1),
// and currents like voltages, so that power passes unchanged.
func TestTransformerPhaseShift(t *testing.T) {
	for name, shift := range map[string]float64{"Dyn1": -30, "Dyn11": 30, "Dyn5": -150, "Yd1": -30, "Yy0": 0, "Yyn6": 180} {
		w, b := distributionAt(t, func(r *TransformerRating) {
			r.Group = group(name)
			r.NoLoadCurrent, r.NoLoadLoss = 0, 0
		})
		ratio := w.OpenRatio(0, 1)
		if off := math.Remainder(degrees(ratio)-shift, 360); math.Abs(off) > 1e-9 {
			t.Errorf("%s: low-voltage side at %v degrees, want %v", name, degrees(ratio), shift)
		}
		near(t, name+": ratio", cmplx.Abs(ratio), 0.02, 1e-12)

		// A load draws current at the low-voltage side; without a magnetising
		// branch the two currents have the ratio and shift of the voltages.
		v1 := complex(PeakVolts(20e3), 0)
		i := phasor(t, b, 0, nil, v1, ratio*v1*cmplx.Rect(0.97, -0.01))
		turn := -i[1] / i[0]
		near(t, name+": current ratio", cmplx.Abs(turn), 50, 1e-12)
		if off := math.Remainder(degrees(turn)-shift, 360); math.Abs(off) > 1e-9 {
			t.Errorf("%s: low-voltage current at %v degrees, want %v", name, degrees(turn), shift)
		}
	}
}

// TestTransformerReferral: seen from the high-voltage side, an impedance at the
// low-voltage one appears times the ratio squared, in series with %Z of the
// high-voltage base.
func TestTransformerReferral(t *testing.T) {
	_, b := distributionAt(t, func(r *TransformerRating) { r.NoLoadCurrent, r.NoLoadLoss = 0, 0 })
	z := complex(0.5, 0.2) // ohm at 400 V
	base := 20e3 * 20e3 / 400e3
	want := 2500*z + complex(0.0115*base, base*math.Sqrt(0.04*0.04-0.0115*0.0115))
	// v2 follows from i2 + v2/z = 0, linear in v2.
	v1 := complex(PeakVolts(20e3), 0)
	i0 := phasor(t, b, 0, nil, v1, 0)[1]
	y := phasor(t, b, 0, nil, v1, 1)[1] - i0
	v2 := -i0 / (y + 1/z)
	got := v1 / phasor(t, b, 0, nil, v1, v2)[0]
	if cmplx.Abs(got-want) > 1e-9*cmplx.Abs(want) {
		t.Errorf("impedance seen from the high-voltage side %v ohm, want %v", got, want)
	}
}

func TestTransformerFaults(t *testing.T) {
	_, err := NewTransformer(TransformerParams{HV: -1, R: math.NaN(), CoreR: -1, MagnetisingL: -2, MagnetisingR: -3})
	wantFaults(t, err, "HV = -1", "LV = 0", "Group", "R = NaN", "L = 0", "CoreR = -1", "MagnetisingL = -2", "MagnetisingR = -3", "VA = 0")
	_, err = TransformerRating{}.Params()
	wantFaults(t, err, "VA", "HV", "LV", "Frequency", "Group", "Impedance", "XR = 0 and Resistance = 0")
	r := distribution
	r.XR = 4
	_, err = r.Params()
	wantFaults(t, err, "XR = 4 and Resistance = 1.15")
	r = distribution
	r.Resistance, r.NoLoadLoss, r.QualityFactor = 4, 3300, -1
	_, err = r.Params()
	wantFaults(t, err, "Resistance = 4 %", "NoLoadLoss = 3300 W", "3200 VA", "QualityFactor = -1")
	p := must(distribution.Params())
	p.MagnetisingL = 0
	_, err = NewTransformer(p)
	wantFaults(t, err, "MagnetisingR", "without MagnetisingL")
}

func ExampleTransformerRating() {
	g, _ := ParseVectorGroup("Dyn11")
	p, err := TransformerRating{
		VA: 630e3, HV: 20e3, LV: 400, Frequency: 50, Group: g,
		Impedance: 6, XR: 5.5, NoLoadCurrent: 0.6, NoLoadLoss: 800,
	}.Params()
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("%.3f mohm, %.2f uH at 400 V\n", p.R*1e3, p.L*1e6)
	// Output: 2.726 mohm, 47.72 uH at 400 V
}
