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

// With a part first: that part within +-I_max, the magnitude no more than I_max and
// equal to it where the limit acts, the slope the derivative, kinks as declared.
func TestPriorities(t *testing.T) {
	rnd := rand.New(rand.NewPCG(1, 3))
	for _, priority := range []LimitPriority{DFirst, QFirst} {
		lim := limiter{max: 15, priority: priority}
		kinks := make([]float64, 2)
		for range 300 {
			i := complex(20*rnd.NormFloat64(), 20*rnd.NormFloat64())
			turned := i // the part that goes first as the real one
			if priority == QFirst {
				turned = complex(imag(i), real(i))
			}
			first, second := math.Max(-15, math.Min(15, real(turned))), 0.0
			rest := math.Sqrt(225 - first*first)
			second = math.Max(-rest, math.Min(rest, imag(turned)))
			want := complex(first, second)
			if priority == QFirst {
				want = complex(second, first)
			}
			l := lim.apply(i)
			if cmplx.Abs(l.out-want) > 1e-12 {
				t.Fatalf("%s: %v limited to %v, want %v", priority, i, l.out, want)
			}
			if n := lim.evalKinks(kinks, i); n != 2 || (kinks[0] > 0) != (l.out != i) || (kinks[1] > 0) != (math.Abs(real(turned)) > 15) {
				t.Fatalf("%s: kinks %v at %v", priority, kinks, i)
			}
			if math.Abs(kinks[0]) < 0.05 || math.Abs(kinks[1]) < 0.5 {
				continue // a kink between the differences, or an unbounded slope
			}
			d := complex(rnd.NormFloat64(), rnd.NormFloat64())
			const h = 1e-4
			diff := (lim.apply(i+h*d).out - lim.apply(i-h*d).out) / (2 * h)
			if e := cmplx.Abs(l.slope(d) - diff); e > 1e-6 {
				t.Fatalf("%s: slope at %v off by %g", priority, i, e)
			}
		}
	}
}

// What the comment of GridFormingNameplate says of the recovery from a dip.
func TestRecovery(t *testing.T) {
	const h = 1e-5
	type result struct {
		back          bool    // at the old point from 0.45 s after the dip on
		slipped       bool    // by a turn, and at the old point otherwise
		volts, bridge float64 // largest after the dip, per unit
		stillLimiting bool
	}
	run := func(plate GridFormingNameplate, scr, until float64) result {
		p, err := plate.Params()
		if err != nil {
			t.Fatal(err)
		}
		r, x := SplitXR(BaseOhms(plateVolts, plateVA)/scr, 3) // a line to the stiff voltage
		p.Filter.Rg += r
		p.Filter.Lg += x / RadPerSecond(50)
		g := mustForming(t, p)
		g.SetFrame(p.Omega0)
		_, own := g.Dims()
		y := make([]float64, own)
		g.Guess(y, 0, []float64{p.V0, 0})
		angle := y[0]
		ch := make([]float64, len(g.Channels()))
		g.Measure(ch, 0, []float64{p.V0, 0}, y)
		volts := ch[4]
		if err := rk4(g, y, 0, 0.15, int(0.15/h), func(float64) complex128 { return complex(0.2*p.V0, 0) }); err != nil {
			t.Fatal(err)
		}
		out := result{back: true}
		const step = 0.001
		for at := 0.0; at < until; at += step {
			if err := rk4(g, y, at, step, int(step/h), func(float64) complex128 { return complex(p.V0, 0) }); err != nil {
				t.Fatal(err)
			}
			g.Measure(ch, at, []float64{p.V0, 0}, y)
			out.volts = math.Max(out.volts, ch[4]/plateVolts)
			out.bridge = math.Max(out.bridge, ch[7]/RatedAmperes(plateVA, plateVolts))
			there := math.Abs(ch[4]-volts) < 0.03*plateVolts
			if at > 0.45 && !(there && math.Abs(y[0]-angle) < 0.01) {
				out.back = false
			}
			out.slipped = there && math.Abs(math.Abs(y[0]-angle)-2*math.Pi) < 0.05
			out.stillLimiting = out.stillLimiting || at > until-0.1 && ch[8] > 1e-3
		}
		return out
	}
	impedance := func(n *GridFormingNameplate) { n.LimitThreshold = new(1.1) }
	ways := []struct {
		name string
		edit func(*GridFormingNameplate)
	}{
		{"angle kept", func(n *GridFormingNameplate) { n.Priority = AngleKept }},
		{"d first", func(n *GridFormingNameplate) { n.Priority = DFirst }},
		{"q first", func(n *GridFormingNameplate) { n.Priority = QFirst }},
		{"impedance", impedance},
	}
	kinds := []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl}
	for _, scr := range []float64{5, 20} {
		for _, kind := range kinds {
			for k, way := range ways {
				for _, p := range []float64{0.5, 1} {
					oscillates := kind == OscillatorControl
					if p == 1 && !(oscillates && k == 0 || !oscillates && k == 1) {
						continue
					}
					plate := formingPlate()
					plate.Control, plate.P = kind, p*plateVA
					way.edit(&plate)
					got := run(plate, scr, 0.7)
					highest := 1.2
					if p == 1 && !oscillates {
						highest = 1.4
					}
					if !got.back || got.volts > highest || got.bridge > 1.65 {
						t.Errorf("%s, %s, SCR %g, P* %g: back %v, |v_c| up to %.3f, i_f up to %.3f",
							kind, way.name, scr, p, got.back, got.volts, got.bridge)
					}
				}
			}
		}
	}
	// What the comment warns of.
	plate := formingPlate()
	plate.P = plateVA
	if got := run(plate, 20, 1.8); !got.slipped {
		t.Error("angle kept at the rating, SCR 20: slips no pole: the warning is out of date")
	}
	plate.Priority = QFirst
	for _, scr := range []float64{5, 20} {
		if got := run(plate, scr, 1.8); !got.slipped {
			t.Errorf("q first at the rating, SCR %g: slips no pole: the warning is out of date", scr)
		}
	}
	plate = formingPlate()
	plate.P = plateVA
	impedance(&plate)
	plate.LimitXR = new(5.0)
	if got := run(plate, 5, 0.7); got.back || !got.stillLimiting {
		t.Error("limiting impedance of X/R = 5: no swing: the warning is out of date")
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
