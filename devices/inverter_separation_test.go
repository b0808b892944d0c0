package devices

import (
	"math"
	"math/cmplx"
	"strings"
	"testing"
)

// The current loop by itself, at nominal speed: L_f s^2 + (K_pc + R_f) s + K_ic, for
// each axis.
func TestSeparationCurrentLoop(t *testing.T) {
	for _, kic := range []float64{9e3, 90, 9e5} {
		p := testForming()
		p.Kic = kic
		s, err := mustForming(t, p).Separation(CurrentLoopGone, 326)
		if err != nil {
			t.Fatal(err)
		}
		b, c := complex((p.Kpc+p.Filter.Rf)/p.Filter.Lf, 0), complex(kic/p.Filter.Lf, 0)
		root := cmplx.Sqrt(b*b/4 - c)
		if len(s.Dropped) != 4 || len(s.Kept) != 9 {
			t.Fatalf("%d modes dropped, %d kept", len(s.Dropped), len(s.Kept))
		}
		for _, want := range []complex128{-b/2 + root, -b/2 - root} {
			near := 0
			for _, got := range s.Dropped {
				if cmplx.Abs(got-want) < 1e-6*cmplx.Abs(want) {
					near++
				}
			}
			if near < 2 {
				t.Errorf("K_ic = %g: dropped %v, want %v twice", kic, s.Dropped, want)
			}
		}
	}
}

// The inverter's modes without those dropped are those kept, the better the more
// they differ: with loops ten thousand times as fast, to a part in a thousand.
func TestSeparationShift(t *testing.T) {
	p := testForming()
	p.Filter = LCL{Lf: 1.5e-6, Rf: 0.12, Cf: 30e-9, Lg: 5e-3, Rg: 0.5}
	p.Kpc, p.Kic = 8, 9e6
	p.Kpv, p.Kiv = 0.06, 2e5
	g := mustForming(t, p)
	s, err := g.Separation(InnerLoopsGone, 326)
	if err != nil {
		t.Fatal(err)
	}
	if s.Poor() || s.Shift > 1e-2 || !strings.Contains(s.String(), "well separated") {
		t.Errorf("fast loops: %v", s)
	}
	// A slow integrator of the current loop, K_ic/K_pc = 6 1/s, is among the modes
	// of the droop.
	p = testForming()
	p.Kic = 50
	if s, err = mustForming(t, p).Separation(CurrentLoopGone, 326); err != nil {
		t.Fatal(err)
	}
	if !s.Poor() || !strings.Contains(s.String(), "poorly separated, 9 of 9 kept modes") {
		t.Errorf("slow integrator: %v", s)
	}
	if _, err := g.Separation("coarse", 326); err == nil {
		t.Error("unknown detail accepted")
	}
	if g.Detail() != Full {
		t.Error("the receiver has changed")
	}
}

// Any block that tags its unknowns: R/L = 500 1/s against 1/T = 10 1/s.
func TestCompareDynamics(t *testing.T) {
	s, err := CompareDynamics(source{true}, "coil gone", []string{"coil"}, []float64{310, 5})
	if err != nil {
		t.Fatal(err)
	}
	if len(s.Dropped) != 2 || cmplx.Abs(s.Dropped[0]+500) > 1e-4 || len(s.Kept) != 1 || cmplx.Abs(s.Kept[0]+10) > 1e-6 ||
		math.Abs(s.Ratio-50) > 1e-4 || s.Shift > 1e-6 || s.Poor() {
		t.Errorf("%+v", s)
	}
	s, err = CompareDynamics(source{true}, "meter gone", []string{"meter"}, []float64{310, 5})
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(s.Ratio-0.02) > 1e-6 || !s.Poor() {
		t.Errorf("%+v", s)
	}
	if _, err := CompareDynamics(source{true}, "none", []string{"wire"}, []float64{310, 5}); err == nil {
		t.Error("unknown group accepted")
	}
	// Without a steady state there is nothing to compare, and it says so.
	p := followingPlate()
	p.SpeedLimit = 0.1
	g := plateFollowing(t, p)
	g.SetFrame(RadPerSecond(51)) // beyond the PLL's limit
	if _, err := g.Separation(PrimaryOnly, 326); err == nil || !strings.Contains(err.Error(), "no steady state") {
		t.Errorf("no steady state: error %v", err)
	}
}
