package devices

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// The limit keeps the angle and caps the magnitude, and its slope is the
// derivative, on both sides.
func TestSaturate(t *testing.T) {
	rnd := rand.New(rand.NewPCG(1, 2))
	lim := limiter{max: 15}
	for range 200 {
		i := complex(20*rnd.NormFloat64(), 20*rnd.NormFloat64())
		l := lim.apply(i)
		if want := math.Min(15, cmplx.Abs(i)); math.Abs(cmplx.Abs(l.out)-want) > 1e-12*want {
			t.Fatalf("|%v| limited to %g, want %g", i, cmplx.Abs(l.out), want)
		}
		if d := cmplx.Phase(l.out / i); math.Abs(d) > 1e-14 {
			t.Fatalf("angle moved by %g", d)
		}
		if math.Abs(cmplx.Abs(i)-15) < 0.01 {
			continue // the kink is between the differences
		}
		d := complex(rnd.NormFloat64(), rnd.NormFloat64())
		const h = 1e-4
		want := (lim.apply(i+h*d).out - lim.apply(i-h*d).out) / (2 * h)
		if e := cmplx.Abs(l.slope(d) - want); e > 1e-7 {
			t.Fatalf("slope at %v off by %g", i, e)
		}
	}
	if l := lim.apply(0); l.out != 0 || l.scale != 1 {
		t.Errorf("0 is limited to %v", l.out)
	}
}

// While the limit acts, K_aw moves K_iv phi against the excess with the time
// constant 1/(K_iv K_aw), and a steady state has |i_f| = I_max and the voltage
// v_ref - K_aw (1/s - 1) i_ref'.
func TestLimitSteadyState(t *testing.T) {
	plate := formingPlate()
	p, err := plate.Params()
	if err != nil {
		t.Fatal(err)
	}
	g := mustForming(t, p)
	r := newRig(g).scr(plateVolts, plateVA, 20, 3)
	r.grid *= 0.6 // a dip: 40 % of rated voltage over about 0.2 per unit
	if err := r.steady(); err != nil {
		t.Fatal(err)
	}
	ch := make([]float64, len(g.Channels()))
	g.Measure(ch, 0, r.v, r.x[0])
	limit, channel := g.CurrentLimit()
	if got := ch[channel]; math.Abs(got-RMSAmperes(limit)) > 1e-9*limit {
		t.Errorf("i_converter = %.9f, want the limit %.9f A", got, RMSAmperes(limit))
	}
	s := 1 - ch[8]
	if !(s < 0.999) {
		t.Fatalf("limiting = %g: the case doesn't reach the limit", ch[8])
	}
	x := r.x[0]
	d := p.Primary.(Droop)
	iG := pair(x, 11) * cmplx.Rect(1, -x[0])
	vRef := complex(p.V0-d.N*x[2], 0) - complex(p.Rv, p.Xv)*iG
	iF := pair(x, 7)
	want := vRef - complex(p.Kaw*(1/s-1), 0)*iF
	if got := pair(x, 9); cmplx.Abs(got-want) > 1e-7 {
		t.Errorf("v_c = %.9f, want %.9f V", got, want)
	}
}

// What the comment of GridFormingNameplate says of the limit and the angle.
func TestLimitAngle(t *testing.T) {
	for _, c := range []struct {
		scr    float64
		stable bool
	}{{20, true}, {2, false}} {
		g := plateForming(t, formingPlate())
		r := newRig(g).scr(plateVolts, plateVA, c.scr, 3)
		r.grid *= 0.5
		if err := r.steady(); err != nil {
			t.Fatal(err)
		}
		ch := make([]float64, len(g.Channels()))
		g.Measure(ch, 0, r.v, r.x[0])
		if !(ch[8] > 0.01) {
			t.Errorf("SCR %g: limiting = %g: the case doesn't reach the limit", c.scr, ch[8])
		}
		if e := r.eigenvalues()[0]; (real(e) < 0) != c.stable {
			t.Errorf("SCR %g: rightmost eigenvalue %.3f 1/s, stable: want %v", c.scr, e, c.stable)
		}
	}
}

// After a deep dip the voltage loop of an inverter with anti-windup is where it
// was at once; without, phi has integrated the error of the dip.
func TestAntiWindup(t *testing.T) {
	recovery := func(kaw float64) (phi, after float64) {
		p, err := formingPlate().Params()
		if err != nil {
			t.Fatal(err)
		}
		p.Kaw *= kaw
		// a line to the stiff voltage, so that the bus has one of its own
		p.Filter.Lg *= 3
		p.Filter.Rg *= 3
		g := mustForming(t, p)
		g.SetFrame(p.Omega0)
		x := make([]float64, 13)
		g.Guess(x, 0, []float64{p.V0, 0})
		v := func(t float64) complex128 {
			if t < 0.1 {
				return complex(0.1*p.V0, 0)
			}
			return complex(p.V0, 0)
		}
		if err := rk4(g, x, 0, 0.1, 10000, v); err != nil {
			t.Fatal(err)
		}
		phi = cmplx.Abs(pair(x, 3)) * p.Kiv / p.IMax
		if err := rk4(g, x, 0.1, 0.02, 2000, v); err != nil {
			t.Fatal(err)
		}
		return phi, cmplx.Abs(pair(x, 9)) / p.V0
	}
	phi, after := recovery(1)
	wound, bad := recovery(0)
	t.Logf("K_iv |phi|/I_max at the end of the dip: %.3f with, %.3f without; |v_c| after 20 ms: %.4f, %.4f", phi, wound, after, bad)
	if !(phi < 2) {
		t.Errorf("K_iv phi = %.3g I_max at the end of the dip", phi)
	}
	if !(math.Abs(after-1) < 0.05) {
		t.Errorf("|v_c| = %.4f per unit 20 ms after the dip", after)
	}
	if !(wound > 10*phi) {
		t.Errorf("without anti-windup phi reaches %.3g I_max, with it %.3g: the case proves nothing", wound, phi)
	}
}
