package solvers_test

import (
	"context"
	"math"
	"testing"

	"islet/solvers"
	tp "islet/solvers/testproblems"
)

// TestTrapezoidalRLStep compares the current of a resistance and an inductance
// with the closed form of the scheme: with x = hR/2L = 0.05, two backward Euler
// half steps multiply the distance from V/R by 1/(1 + x) each, every step of the
// trapezoidal rule multiplies it by r = (1 - x)/(1 + x) = 0.9047619048.
func TestTrapezoidalRLStep(t *testing.T) {
	const h, x, final = 1e-4, 0.05, 10.0
	c := tp.RLStep()
	s := begin(t, c, solvers.Trapezoidal, solvers.Options{RelTol: 1e-10, MaxStep: h})
	r := (1 - x) / (1 + x)
	i := []float64{0}
	for n := 1; n <= 50; n++ {
		if err := s.Step(c.End); err != nil {
			t.Fatal(err)
		}
		if at := float64(n) * h; math.Abs(s.Time()-at) > 1e-15 {
			t.Fatalf("step %d ends at %.17g, want %g", n, s.Time(), at)
		}
		i = append(i, s.State()[0])
		want := final * (1 - math.Pow(r, float64(n-1))/((1+x)*(1+x)))
		if math.Abs(i[n]-want) > 1e-12 {
			t.Errorf("i after %d steps is %.15g, want %.15g", n, i[n], want)
		}
	}
	// From the first step on, it is the trapezoidal rule from another start:
	// the figures that follow from its r for V/R = 10 (0.9523809524 after 1
	// step, 3.937223884 after 5, 6.324274576 after 10) must come out of the
	// way left. Formula: H.W. Dommel, IEEE Trans. PAS-88(4), 1969.
	for n, want := range map[int]float64{1: 0.9523809524, 5: 3.937223884, 10: 6.324274576} {
		if got := final * (i[1+n] - i[1]) / (final - i[1]); math.Abs(got-want) > 1e-9 {
			t.Errorf("%d steps of the trapezoidal rule cover %.10g of the way of 10, want %.10g", n, got, want)
		}
	}
	// The exact current is met to the second order: the half steps' error
	// h²/4 V R/L² = 0.025 dies away with the current's own.
	for n, v := range i {
		if e := math.Abs(v - final*(1-math.Exp(-2*x*float64(n)))); e > 0.025 {
			t.Errorf("error after %d steps is %.3g", n, e)
		}
	}
}

// TestTrapezoidalChopping opens an inductor carrying i0 by a resistance of
// R = 1e9 ohm. The trapezoidal rule alone leaves the voltage alternating between
// some ±2L i0/h = ±126 V, since x = hR/2L = 5e7 makes its factor
// (1 - x)/(1 + x) nearly -1. After the restart at the switch two backward Euler
// half steps divide the current by (1 + x) each: what alternates from there is
// -R i0/(1 + x)², less than 3e-6 V.
func TestTrapezoidalChopping(t *testing.T) {
	const h, l, r, v = 1e-4, 1e-3, tp.OpenedInductorResistance, 10.0
	const x = h * r / (2 * l)
	c := tp.OpenedInductor()
	s := begin(t, c, solvers.Trapezoidal, solvers.Options{RelTol: 1e-9, AbsTol: 1e-12, MaxStep: h})
	i0, n := 0.0, 0
	handlers := c.Handlers
	atStop := handlers.AtStop
	handlers.AtStop = func(t float64, y []float64) (solvers.Action, error) {
		i0 = y[0]
		return atStop(t, y)
	}
	handlers.AfterStep = func(s solvers.Stepper) error {
		y := s.State()
		if i0 == 0 {
			return nil
		}
		n++
		// Closed form of the scheme about the new steady current v/r.
		left := (i0 - v/r) / ((1 + x) * (1 + x)) * math.Pow((1-x)/(1+x), float64(n-1))
		if want := v/r + left; math.Abs(y[0]-want) > 1e-15 {
			t.Errorf("current %d steps after opening is %.9g, want %.9g", n, y[0], want)
		}
		// y[1] = v - r y[0] loses all digits below 1e-15 r = 1e-6 V.
		if math.Abs(y[1]) > math.Abs(r*left)+2e-6 {
			t.Errorf("voltage %d steps after opening is %g V, want %g V", n, y[1], -r*left)
		}
		return nil
	}
	if err := solvers.Integrate(context.Background(), s, c.End, &handlers); err != nil {
		t.Fatal(err)
	}
	// The current before: the scheme's own, see TestTrapezoidalRLStep.
	if want := v * (1 - math.Pow(0.95/1.05, 9)/(1.05*1.05)); math.Abs(i0-want) > 1e-9 {
		t.Errorf("the current opened is %.12g, want %.12g", i0, want)
	}
	if n != 10 {
		t.Errorf("%d steps after opening, want 10", n)
	}
}

// TestTrapezoidalSine drives an inductor by V cos(w t) from the scheme's own
// steady state: the trapezoidal rule shows it as (2L/h) tan(wh/2), a frequency
// warped by tan(x)/x, x = wh/2, with no loss. At h = 50 us the ratio is
// 1.000020562 at 50 Hz and 1.008306663 at 1 kHz. Formula: Dommel 1969.
func TestTrapezoidalSine(t *testing.T) {
	for _, r := range []struct{ hz, ratio float64 }{{50, 1.000020562}, {1000, 1.008306663}} {
		const h, l, v = 50e-6, 1e-3, 10.0
		w := 2 * math.Pi * r.hz
		p := &solvers.Problem{
			N:    1,
			Mass: solvers.Diagonal(l),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = v * math.Cos(w*t)
				return nil
			},
			Pattern:  []solvers.Entry{},
			Jacobian: func(dst []float64, t float64, y []float64) error { return nil },
		}
		sys, err := p.System()
		if err != nil {
			t.Fatal(err)
		}
		s, err := solvers.Trapezoidal.NewStepper(sys, solvers.Options{RelTol: 1e-12, MaxStep: h})
		if err != nil {
			t.Fatal(err)
		}
		if err := s.Reset(0, []float64{0}); err != nil {
			t.Fatal(err)
		}
		// The half steps leave a constant current; the swing is the
		// reactance's.
		lo, hi := math.Inf(1), math.Inf(-1)
		period := math.Round(1 / (r.hz * h)) // steps, an exact number
		var first float64
		for n := 1.0; n <= 3*period; n++ {
			if err := s.Step(1); err != nil {
				t.Fatal(err)
			}
			i := s.State()[0]
			if n == period {
				first = i
			}
			if n > period {
				lo, hi = math.Min(lo, i), math.Max(hi, i)
			}
			if n == 3*period && math.Abs(i-first) > 1e-9*math.Abs(v/(w*l)) {
				t.Errorf("%g Hz: current drifts from %.12g to %.12g in two periods", r.hz, first, i)
			}
		}
		got := v / (w * l) / ((hi - lo) / 2)
		if math.Abs(got-r.ratio) > 2e-9 {
			t.Errorf("%g Hz: reactance is %.10g of w L, want %.10g", r.hz, got, r.ratio)
		}
	}
}

// TestTrapezoidalTransistor measures the order on the amplifier, whose mass
// matrix is singular without a zero row, against the published end state.
func TestTrapezoidalTransistor(t *testing.T) {
	var errs []float64
	for _, h := range []float64{8e-5, 4e-5, 2e-5} {
		c := tp.TransistorAmplifier()
		s := begin(t, c, solvers.Trapezoidal, solvers.Options{RelTol: 1e-9, AbsTol: 1e-9, MaxStep: h})
		reach(t, s, c.End)
		errs = append(errs, maxError(s.State(), c.At(c.End)))
	}
	if got := slope(errs); math.Abs(got-2) > 0.05 || errs[0] > 1e-3 {
		t.Errorf("order %.3f, want 2; errors %.3g", got, errs)
	}
}
