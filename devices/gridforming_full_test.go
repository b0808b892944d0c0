package devices

import (
	"math"
	"testing"
)

// What is written out for the full detail is the general form, limiting or not.
func TestFullAsGeneral(t *testing.T) {
	for _, control := range []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl} {
		for _, own := range []bool{false, true} {
			for _, priority := range []LimitPriority{AngleKept, DFirst, QFirst} {
				plate := formingPlate()
				plate.Control, plate.Priority = control, priority
				p, err := plate.Params()
				if err != nil {
					t.Fatal(err)
				}
				p.OwnSpeed = own
				g := mustForming(t, p)
				g.SetFrame(312)
				_, n := g.Dims()
				unknowns := g.Describe().Unknowns
				rnd := scatter(3)
				v, x := make([]float64, 2), make([]float64, n)
				limited := 0
				for k := range 64 {
					size := patternScale(k)
					for i := range v {
						v[i] = size * g.vBase * rnd.next()
					}
					for i := range x {
						x[i] = size * unknowns[i].Base * rnd.next()
					}
					f1, r1 := make([]float64, 2), make([]float64, n)
					f2, r2 := make([]float64, 2), make([]float64, n)
					if err := g.Eval(f1, r1, 0, v, x); err != nil {
						t.Fatal(err)
					}
					if err := g.evalGeneral(f2, r2, 0, v, x); err != nil {
						t.Fatal(err)
					}
					var pt formingPoint
					g.at(&pt, g.orders(0), v, x)
					if pt.lim.scale < 1 {
						limited++
					}
					for i := range f1 {
						if f1[i] != f2[i] {
							t.Errorf("flow %d is %v, in general %v", i, f1[i], f2[i])
						}
					}
					largest := 0.0
					for i := range r2 {
						largest = math.Max(largest, math.Abs(r2[i]))
					}
					for i := range r1 {
						if math.Abs(r1[i]-r2[i]) > 1e-13*largest {
							t.Errorf("%s, point %d: rate of %s is %v, in general %v", control, k, unknowns[i].Name, r1[i], r2[i])
						}
					}
				}
				if limited == 0 || limited == 64 {
					t.Errorf("%d of 64 points limit", limited)
				}
			}
		}
	}
}

// The error of sincos against math.Sincos in units of 1e-16, over turns by
// thousands, at multiples of pi/4 and beyond its own range.
func TestSincos(t *testing.T) {
	rnd := scatter(9)
	check := func(x float64) {
		s, c := sincos(x)
		ms, mc := math.Sincos(x)
		if math.Abs(s-ms) > 2.3e-16 || math.Abs(c-mc) > 2.3e-16 {
			t.Fatalf("sincos(%v) is %v, %v, want %v, %v", x, s, c, ms, mc)
		}
	}
	for k := range 200000 {
		check(math.Pow(10, float64(k%12)-6) * rnd.next())
	}
	for k := -1000; k <= 1000; k++ {
		check(float64(k) * math.Pi / 4)
		check(math.Nextafter(float64(k)*math.Pi/4, math.Inf(1)))
	}
	for _, x := range []float64{0, math.Copysign(0, -1), 1e6, -1e9, 1e300} {
		check(x)
	}
	for _, x := range []float64{math.NaN(), math.Inf(1), math.Inf(-1)} {
		if s, c := sincos(x); s == s || c == c {
			t.Errorf("sincos(%v) is %v, %v", x, s, c)
		}
	}
}
