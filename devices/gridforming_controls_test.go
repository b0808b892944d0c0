package devices

import (
	"math"
	"math/cmplx"
	"sort"
	"testing"
)

// formingAt returns an inverter of the given parameters at a level of detail.
func formingAt(t testing.TB, p GridFormingParams, level string) *GridForming {
	t.Helper()
	b, err := mustForming(t, p).WithDetail(level)
	if err != nil {
		t.Fatal(err)
	}
	g := b.(*GridForming)
	g.SetFrame(p.Omega0)
	return g
}

// plainForming is an inverter of 10 kVA whose voltage stands behind an inductance of
// xPU per unit alone, for closed forms.
func plainForming(control PrimaryControl, xPU float64) GridFormingParams {
	p := testForming()
	p.Primary, p.P, p.Q = control, 0, 0
	p.Filter.Rg = 0
	p.Filter.Lg = xPU * 1.5 * p.V0 * p.V0 / p.Rating / p.Omega0
	return p
}

// sharedModes fails the test unless the two lists hold the same eigenvalues.
func sharedModes(t *testing.T, what string, a, b []complex128) {
	t.Helper()
	if len(a) != len(b) {
		t.Errorf("%s: %d and %d modes", what, len(a), len(b))
		return
	}
	order := func(list []complex128) {
		sort.Slice(list, func(i, k int) bool {
			if r, s := cmplx.Abs(list[i]), cmplx.Abs(list[k]); math.Abs(r-s) > 1e-6*(r+s) {
				return r < s
			}
			return imag(list[i]) < imag(list[k])
		})
	}
	order(a)
	order(b)
	for k := range a {
		if cmplx.Abs(a[k]-b[k]) > 1e-6*(1+cmplx.Abs(a[k])) {
			t.Errorf("%s: modes %.9g and %.9g differ", what, a[k], b[k])
		}
	}
}

// Droop with a power filter is a virtual machine without one of M = 1/(m w_c),
// D = 1/m and T_v = 1/w_c: S. D'Arco, J. A. Suul, IEEE Trans. Smart Grid 5(1), 2014
// (from memory); the algebra holds for any psi. The droop of N. Pogaku et al., IEEE
// Trans. Power Electronics 22(2), 2007, has M = 338.6914318 W s^2/rad, H = 5.32015257
// s on 10 kVA.
func TestMachineEqualsDroop(t *testing.T) {
	p := publishedForming()
	d := p.Primary.(Droop)
	inertia := 1 / (d.M * d.OmegaC)
	h := p.Omega0 * inertia / (2 * p.Rating)
	if math.Abs(inertia-338.6914318) > 1e-7 || math.Abs(h-5.32015257) > 1e-8 {
		t.Fatalf("M = %.10g, H = %.10g", inertia, h)
	}
	for _, psi := range []float64{math.Pi / 2, 0.8, 0} {
		d.Psi = psi
		p.P, p.Q = 2e3, 1e3
		p.Primary = d
		q := p
		q.Primary = VirtualMachine{H: h, D: 1 / d.M, N: d.N, Tv: 1 / d.OmegaC, OmegaC: math.Inf(1), Psi: psi}
		for _, level := range []string{Full, CurrentLoopGone, InnerLoopsGone, PrimaryOnly} {
			a, b := formingAt(t, p, level), formingAt(t, q, level)
			// Modes, on a stiff voltage behind an impedance.
			var modes [2][]complex128
			for k, r := range []*rig{newRig(a).scr(466, p.Rating, 5, 3), newRig(b).scr(466, p.Rating, 5, 3)} {
				r.phasor = level == PrimaryOnly
				if err := r.steady(); err != nil {
					t.Fatal(err)
				}
				modes[k] = r.eigenvalues()
			}
			sharedModes(t, level, modes[0], modes[1])

			// A trajectory over a step of the stiff voltage.
			_, own := a.Dims()
			x, y := make([]float64, own), make([]float64, own)
			v := []float64{380 * math.Sqrt(2.0/3), 0}
			a.Guess(x, 0, v)
			b.Guess(y, 0, v)
			step := func(float64) complex128 { return cmplx.Rect(0.97*v[0], -0.05) }
			h := 1e-6
			if level == PrimaryOnly {
				h = 1e-4
			}
			const span = 0.02
			for _, c := range []struct {
				b *GridForming
				x []float64
			}{{a, x}, {b, y}} {
				if err := rk4(c.b, c.x, 0, span, int(math.Round(span/h)), step); err != nil {
					t.Fatal(err)
				}
			}
			for k, u := range a.Describe().Unknowns {
				got, want := y[k], x[k]
				switch u.Name {
				case "P", "Q": // the machine has domega and V in their places
					want = -d.M * (d.active(x[1]-p.P, x[2]-p.Q))
					if u.Name == "Q" {
						want = p.V0 - d.N*(d.reactive(x[1]-p.P, x[2]-p.Q))
					}
				}
				if math.Abs(got-want) > 1e-8*math.Max(u.Base, 1) {
					t.Errorf("%s, psi = %.3g: %s = %.10g by the machine, %.10g by droop", level, psi, u.Name, got, want)
				}
			}
		}
	}
}

// active and reactive are the turned powers, written out once more.
func (d Droop) active(p, q float64) float64   { return math.Sin(d.Psi)*p - math.Cos(d.Psi)*q }
func (d Droop) reactive(p, q float64) float64 { return math.Cos(d.Psi)*p + math.Sin(d.Psi)*q }

// An island of 3 kW more on a machine of 10 kVA, H = 2 s, D = 500 W s/rad: M =
// 127.3239545 and dw(t) = -(dP/D)(1 - e^{-D t/M}), figures computed from the closed
// form.
func TestMachineLoadStep(t *testing.T) {
	p := plainForming(VirtualMachine{H: 2, D: 500, Tv: 1, OmegaC: math.Inf(1), Psi: math.Pi / 2}, 0.1)
	p.P = 2000
	g := formingAt(t, p, PrimaryOnly)
	// The conductance G behind jX that takes 5 kW from V_0:
	// p = (3/2) V_0^2 G/(1 + X^2 G^2)
	x := p.Omega0 * p.Filter.Lg
	s := 1.5 * p.V0 * p.V0
	load := (s - math.Sqrt(s*s-4*5000*5000*x*x)) / (2 * 5000 * x * x)
	volts := func(_ float64, y []float64) complex128 {
		return cmplx.Rect(p.V0, y[0]) / complex(1, x*load)
	}
	y := []float64{0, 0, p.V0}
	rate, flow := make([]float64, 3), make([]float64, 2)
	v := make([]float64, 2)
	setPair(v, 0, volts(0, y))
	if err := g.Eval(flow, rate, 0, v, y); err != nil {
		t.Fatal(err)
	}
	if got := Hertz(rate[1]); math.Abs(got+3.75) > 1e-9 {
		t.Errorf("rate of change of frequency %.10f, want -3.75 Hz/s", got)
	}
	at := 0.0
	for _, c := range []struct{ t, hertz, tol float64 }{
		{0.05, -0.170240125, 1e-9},
		{0.1, -0.3101306845, 1e-9},
		{0.25, -0.5971597817, 1e-9},
		{0.5, -0.820889121, 1e-9},
		{1, -0.9361148008, 1e-9},
		{10, -0.9549296586, 1e-9},
	} {
		if err := march(g, y, at, c.t-at, int(2000*(c.t-at)), volts); err != nil {
			t.Fatal(err)
		}
		at = c.t
		if got := Hertz(y[1]); math.Abs(got-c.hertz) > c.tol {
			t.Errorf("%g s: %.10f Hz, want %.10f", at, got, c.hertz)
		}
	}
}

// infiniteBus is a machine of H = 2 s at P = 0.6 per unit behind X = 0.3 on a
// stiff rated voltage, with damping in per unit (rated power by nominal speed).
func infiniteBus(t *testing.T, damping float64) (*GridForming, GridFormingParams) {
	p := plainForming(nil, 0.3)
	p.P = 0.6 * p.Rating
	p.Primary = VirtualMachine{H: 2, D: damping * p.Rating / p.Omega0, Tv: 1, OmegaC: math.Inf(1), Psi: math.Pi / 2}
	return formingAt(t, p, PrimaryOnly), p
}

// Against a stiff voltage: sin d0 = P X and s^2 + (K_d/2H) s + K w_0/(2H) = 0, K =
// cos d0/X; for K_d = 20 the roots are -2.5 +- j 15.85160296 (closed form).
func TestMachineInfiniteBus(t *testing.T) {
	g, p := infiniteBus(t, 20)
	v, x := []float64{p.V0, 0}, make([]float64, 3)
	g.Guess(x, 0, v)
	if math.Abs(x[0]-0.1809864512) > 1e-9 {
		t.Errorf("angle %.10f, want 0.1809864512 rad", x[0])
	}
	jac := make([]float64, 25)
	g.Jacobian(jac, 0, v, x)
	at := func(i, k int) float64 { return jac[(2+i)*5+2+k] }
	trace, det := at(0, 0)+at(1, 1), at(0, 0)*at(1, 1)-at(0, 1)*at(1, 0)
	root := cmplx.Sqrt(complex(trace*trace/4-det, 0))
	if got := complex(trace/2, 0) + root; cmplx.Abs(got-complex(-2.5, 15.85160296)) > 1e-7 {
		t.Errorf("root %.9f, want -2.5 + j 15.85160296", got)
	}
	if wn := math.Sqrt(det); math.Abs(wn-16.04753303) > 1e-7 || math.Abs(-trace/2/wn-0.1557871852) > 1e-9 {
		t.Errorf("w_n = %.9f, zeta = %.10f", wn, -trace/2/wn)
	}
	// largest power at 90 degrees, 3.333333333 per unit, with V held at V_0
	x[0] = math.Pi / 2
	ch := make([]float64, len(g.Channels()))
	g.Measure(ch, 0, v, x)
	if pu := ch[0] / p.Rating; math.Abs(pu-3.333333333) > 1e-8 {
		t.Errorf("largest power %.9f per unit", pu)
	}
}

// A bolted fault at the terminal, no damping: by the equal-area criterion the
// critical angle is 2.075256646 rad and the critical time 0.283540692 s.
func TestMachineCriticalTime(t *testing.T) {
	for _, c := range []struct {
		clear  float64
		stable bool
	}{{0.283540692 * (1 - 1e-4), true}, {0.283540692 * (1 + 1e-4), false}} {
		g, p := infiniteBus(t, 0)
		x := make([]float64, 3)
		g.Guess(x, 0, []float64{p.V0, 0})
		if err := rk4(g, x, 0, c.clear, 2000, func(float64) complex128 { return 0 }); err != nil {
			t.Fatal(err)
		}
		if math.Abs(x[0]-2.075256646) > 1e-3 {
			t.Errorf("angle at clearing %.6f, want about 2.075256646 rad", x[0])
		}
		peak := 0.0
		for s := range 200 {
			if err := rk4(g, x, float64(s)*0.01, 0.01, 50, func(float64) complex128 { return complex(p.V0, 0) }); err != nil {
				t.Fatal(err)
			}
			peak = math.Max(peak, x[0])
		}
		// The saddle is at pi - d0 = 2.960606 rad.
		if (peak < 2.9606062) != c.stable {
			t.Errorf("cleared after %.6f s: angle up to %.4f rad, stable: want %v", c.clear, peak, c.stable)
		}
	}
}

// dispatched is the oscillator of eta = 0.02 w_0 and alpha = 10, both per unit, at
// p* = 0.5, q* = 0, v* = 1.
func dispatched(psi float64) GridFormingParams {
	p := plainForming(nil, 0.1)
	p.P = 0.5 * p.Rating
	y := p.Rating / (1.5 * p.V0 * p.V0) // base admittance
	p.Primary = Oscillator{Eta: 6.283185307 / y, Alpha: 10 * y, Psi: psi}
	return p
}

// Steady states of the oscillator, from the closed form (real and imaginary part of
// the published complex equation at i = (p - jq) v/|v|^2), digits as printed.
func TestOscillatorSteadyState(t *testing.T) {
	for _, c := range []struct{ psi, p, q, v, hertz float64 }{
		{90, 0.8, 0.3, 0.9843990939, -0.3255579738},
		{90, 0.2, -0.3, 1.014470434, 0.3056649185},
		{60, 0.8, 0.3, 0.9777428609, -0.1348022077},
		{45, 0.8, 0.3, 0.9766302148, -0.0171228023},
		{0, 0.8, 0.3, 0.9835116422, 0.3101431863},
	} {
		p := dispatched(c.psi * math.Pi / 180)
		// the terminal voltage at which u of that size gives that power
		u := c.v * p.V0
		i := complex(c.p, -c.q) * complex(p.Rating/(1.5*u), 0)
		term := complex(u, 0) - complex(0, p.Omega0*p.Filter.Lg)*i
		v := []float64{real(term), imag(term)}
		for _, level := range []string{InnerLoopsGone, PrimaryOnly, PhaseOnly} {
			g := formingAt(t, p, level)
			_, own := g.Dims()
			x, flow, rate := make([]float64, own), make([]float64, 2), make([]float64, own)
			if level != PhaseOnly {
				x[1] = u
			}
			if level == InnerLoopsGone {
				setPair(x, 2, i)
			}
			if err := g.Eval(flow, rate, 0, v, x); err != nil {
				t.Fatal(err)
			}
			if hz := Hertz(g.Speed(0, v, x)) - 50; math.Abs(hz-c.hertz) > 2e-8 {
				t.Errorf("%s, psi = %g, p, q = %g, %g: %.10f Hz off nominal, want %.10f", level, c.psi, c.p, c.q, hz, c.hertz)
			}
			// u settles at 2 eta alpha = 126 1/s: what ten digits leave
			if level != PhaseOnly && math.Abs(rate[1]) > 130*1e-9*p.V0 {
				t.Errorf("%s, psi = %g: du/dt = %.3g V/s at the steady state", level, c.psi, rate[1])
			}
			ch := make([]float64, len(g.Channels()))
			g.Measure(ch, 0, v, x)
			if got := ch[4] / LineVolts(p.V0); math.Abs(got-c.v) > 2e-9 {
				t.Errorf("%s, psi = %g: |v| = %.10f, want %.10f", level, c.psi, got, c.v)
			}
			if math.Abs(ch[5]/p.Rating-c.p) > 1e-8 || math.Abs(ch[6]/p.Rating-c.q) > 1e-8 {
				t.Errorf("%s, psi = %g: acts on %.9f, %.9f, want %g, %g", level, c.psi, ch[5]/p.Rating, ch[6]/p.Rating, c.p, c.q)
			}
		}
	}
}

// P* and Q* are met exactly at u = V*, behind the virtual impedance, at any psi.
func TestOscillatorDispatch(t *testing.T) {
	for _, psi := range []float64{math.Pi / 2, 0.7, 0} {
		p := testForming()
		p.Primary = oscillatorOf(psi)
		p.Rv, p.Xv = 0.5, 0.8
		g := formingAt(t, p, Full)
		i := complex(p.P, -p.Q) / complex(1.5*p.V0, 0)
		term := complex(p.V0, 0) - (complex(p.Rv, p.Xv)+g.gridImpedance())*i
		v, x := []float64{real(term), imag(term)}, make([]float64, g.own)
		g.Guess(x, 0, v)
		rate := make([]float64, g.own)
		if err := g.Eval(make([]float64, 2), rate, 0, v, x); err != nil {
			t.Fatal(err)
		}
		for k, u := range g.Describe().Unknowns {
			if math.Abs(rate[k]) > 1e-6*math.Max(1, u.Base) {
				t.Errorf("psi = %.3g: rate of %s = %.3g", psi, u.Name, rate[k])
			}
		}
		ch := make([]float64, len(g.Channels()))
		g.Measure(ch, 0, v, x)
		drop := complex(p.Rv, p.Xv) * i // from u to the filter capacitor
		for _, c := range []struct {
			name      string
			got, want float64
		}{
			{"u", x[1], p.V0}, {"P at u", ch[5], p.P}, {"Q at u", ch[6], p.Q},
			{"v_c", ch[4], LineVolts(cmplx.Abs(complex(p.V0, 0) - drop))},
			{"p", ch[0], p.P - 1.5*(p.Rv+p.Filter.Rg)*real(i*cmplx.Conj(i))},
		} {
			if math.Abs(c.got-c.want) > 1e-6*math.Abs(c.want) {
				t.Errorf("psi = %.3g: %s = %.9g, want %.9g", psi, c.name, c.got, c.want)
			}
		}
	}
}

// Unloaded, |v|^2 = v*^2/(1 + (v*^2/v0^2 - 1) e^{-2 eta alpha t}); from v0 = 0.1 and
// the 10 to 90 % rise time 3.022565/(eta alpha) as computed from it.
func TestOscillatorStart(t *testing.T) {
	p := dispatched(math.Pi / 2)
	g := formingAt(t, p, PrimaryOnly)
	open := func(_ float64, x []float64) complex128 { return cmplx.Rect(x[1], x[0]) }
	x := []float64{0.3, 0.1 * p.V0}
	at := 0.0
	for _, c := range []struct{ t, v float64 }{
		{0.005, 0.136316062}, {0.010, 0.185133307}, {0.020, 0.332977300}, {0.030, 0.551959351}, {0.050, 0.918678170},
	} {
		if err := march(g, x, at, c.t-at, 1000, open); err != nil {
			t.Fatal(err)
		}
		at = c.t
		if got := x[1] / p.V0; math.Abs(got-c.v) > 2e-9 {
			t.Errorf("%g s: |v| = %.10f, want %.9f", at, got, c.v)
		}
	}
	// from far below, through the floor of 1/u; the growth has no part in it
	x = []float64{0, 1e-5 * p.V0}
	cross := func(level float64) float64 {
		const h = 2e-5
		for {
			before := x[1] / p.V0
			if err := march(g, x, at, h, 1, open); err != nil {
				t.Fatal(err)
			}
			at += h
			if now := x[1] / p.V0; now >= level {
				// the growth is exponential within a step, to its second order
				return at - h*math.Log(now/level)/math.Log(now/before)
			}
		}
	}
	rise := -cross(0.1)
	if rise += cross(0.9); math.Abs(rise-48.10561563e-3) > 1e-8 {
		t.Errorf("rise time %.10f s, want 0.04810561563", rise)
	}
}

// With all loops, into a load, from a hundredth of the voltage and from nothing
// like a voltage at all: the oscillator comes up to the steady state of its law.
func TestOscillatorBlackStart(t *testing.T) {
	for _, start := range []float64{1e-2, 1e-6} {
		plate := formingPlate()
		plate.Control, plate.P = OscillatorControl, 5e3
		g := plateForming(t, plate)
		p := g.Params()
		g.SetFrame(p.Omega0)
		load := 0.5 / BaseOhms(plateVolts, plateVA)
		l := &g.layout
		volts := func(_ float64, x []float64) complex128 { return times(1/load, pair(x, l.iG)) }
		_, own := g.Dims()
		x := make([]float64, own)
		x[1] = start * p.V0
		// Unloaded it takes ln(1/start)/(eta alpha) to grow; the load slows it.
		o := p.Primary.(Oscillator)
		span := 0.3 + 3*math.Log(1/start)/(o.Eta*o.Alpha)
		if err := march(g, x, 0, span, int(span/1e-5), volts); err != nil {
			t.Fatal(err)
		}
		r := newRig(plateForming(t, plate))
		r.load = load
		if err := r.steady(); err != nil {
			t.Fatal(err)
		}
		if u := r.x[0][1]; math.Abs(x[1]/u-1) > 1e-3 {
			t.Errorf("from %g: u = %.3f V after %.2f s, want %.3f", start, x[1], span, u)
		}
	}
}

// The published design of a single unit: 120 V phase, 3 kVA, 0.5 Hz at rated power
// and 5 % at rated vars give k_v k_i/C with C = 0.3183098862 F (k_v = 120, k_i =
// 0.12) and xi = 17.8512261; V(3 kvar) is 114.0 V, and no steady state exists beyond
// 8523.332623 var (M. Lu et al., ECCE 2019; figures computed from the design).
func TestOscillatorDesign(t *testing.T) {
	const kv, ki, vn, power = 120, 0.12, 120, 3000
	v0 := vn * math.Sqrt2
	o := OscillatorOfRange(power, math.Pi, 0.05, v0, math.Pi/2)
	c := kv * ki / o.Eta
	xi := o.Alpha * kv * kv * kv * ki / (2 * vn * vn * c)
	if math.Abs(c-0.3183098862) > 1e-10 || math.Abs(xi-17.8512261) > 1e-7 {
		t.Errorf("C = %.10f F, xi = %.7f", c, xi)
	}
	law := o.build(rated{power, 314, v0})
	u := orders{v: v0, omega: 314}
	// At P, Q and voltage v the current is (2/3)(P - jQ)/v.
	at := func(q, v float64) stimulus { return stimulus{q: q, i: complex(0, -q/(1.5*v))} }
	if _, v := law.law(u, at(3000, 114*math.Sqrt2), 114*math.Sqrt2); math.Abs(v-114*math.Sqrt2) > 1e-9 {
		t.Errorf("114 V at 3 kvar is off by %g V", v-114*math.Sqrt2)
	}
	speed, _ := law.law(u, stimulus{p: 3000, i: complex(3000/(1.5*v0), 0)}, v0)
	if got := Hertz(speed - 314); math.Abs(got+0.5) > 1e-12 {
		t.Errorf("%.12f Hz at rated power, want -0.5", got)
	}
	// The largest Q, over x = (V/V_n)^2, of the steady states of the law.
	most := 0.0
	for x := 0.3; x < 1; x += 1e-4 {
		v := v0 * math.Sqrt(x)
		lo, hi := 0.0, 2e4
		for range 60 { // du/dt falls with Q
			q := (lo + hi) / 2
			if _, w := law.law(u, at(q, v), v); w > v {
				lo = q
			} else {
				hi = q
			}
		}
		most = math.Max(most, lo)
	}
	if math.Abs(most-8523.332623) > 1e-3 {
		t.Errorf("largest Q %.6f var, want 8523.332623", most)
	}
}

// The frequency and voltage of a steady state over the powers at the capacitor, in
// closed form. They are found again at the inverter, full equations included, by
// putting it at the terminal voltage and speed that go with them.
func TestSurfaces(t *testing.T) {
	const m, n = 3e-4, 1.5e-3
	base := testForming()
	base.Rv, base.Xv = 0, 0
	base.IMax = math.Inf(1)
	for _, psi := range []float64{math.Pi / 2, math.Pi / 3, math.Pi / 4, 0.2, 0} {
		s, c := math.Sin(psi), math.Cos(psi)
		o := OscillatorOfDroop(m, n, base.V0, psi)
		linear := func(p, q float64) (omega, v float64) {
			return base.Omega0 - m*(s*(p-base.P)-c*(q-base.Q)), base.V0 - n*(c*(p-base.P)+s*(q-base.Q))
		}
		// Re and Im of e^{j psi} ((2/3)(P* - jQ*)/V*^2 - (2/3)(P - jQ)/V^2), x = V^2/V*^2:
		// a - b/x + alpha (1 - x) = 0, the upper root.
		hopf := func(p, q float64) (omega, v float64) {
			k := cmplx.Rect(1/(1.5*base.V0*base.V0), psi)
			a, b := k*complex(base.P, -base.Q), k*complex(p, -q)
			h := real(a) + o.Alpha
			x := (h + math.Sqrt(h*h-4*o.Alpha*real(b))) / (2 * o.Alpha)
			return base.Omega0 + o.Eta*(imag(a)-imag(b)/x), base.V0 * math.Sqrt(x)
		}
		for _, control := range []struct {
			name string
			ctl  PrimaryControl
			law  func(p, q float64) (omega, v float64)
		}{
			{"droop", Droop{M: m, N: n, OmegaC: 40, Psi: psi}, linear},
			{"machine", VirtualMachine{H: 1, D: 1 / m, N: n, Tv: 0.02, OmegaC: 40, Psi: psi}, linear},
			{"prompt machine", VirtualMachine{H: 1, D: 1 / m, N: n, Tv: 0.02, OmegaC: math.Inf(1), Psi: psi}, linear},
			{"oscillator", o, hopf},
		} {
			p := base
			p.Primary = control.ctl
			for _, level := range []string{Full, CurrentLoopGone, InnerLoopsGone, PrimaryOnly, PhaseOnly} {
				g := formingAt(t, p, level)
				_, own := g.Dims()
				x, flow, rate := make([]float64, own), make([]float64, 2), make([]float64, own)
				for _, pw := range []float64{-6e3, 0, 3e3, 7e3} {
					for _, qv := range []float64{-5e3, 1e3, 4e3} {
						omega, volts := control.law(pw, qv)
						g.SetFrame(omega)
						i := complex(pw, -qv) / complex(1.5*volts, 0)
						v := make([]float64, 2)
						setPair(v, 0, complex(volts, 0)-g.gridImpedance()*i)
						g.Guess(x, 0, v)
						if err := g.Eval(flow, rate, 0, v, x); err != nil {
							t.Fatal(err)
						}
						ch := make([]float64, len(g.Channels()))
						g.Measure(ch, 0, v, x)
						at := func(what string, got, want, tol float64) {
							if !(math.Abs(got-want) <= tol) {
								t.Errorf("%s, %s, psi = %.3g, P, Q = %g, %g: %s %.10g, want %.10g", control.name, level, psi, pw, qv, what, got, want)
							}
						}
						at("speed", RadPerSecond(ch[3]), omega, 1e-8)
						at("voltage", ch[4], LineVolts(volts), 1e-6)
						at("P", ch[5], pw, 1e-4)
						at("Q", ch[6], qv, 1e-4)
						for k, u := range g.Describe().Unknowns {
							at("rate of "+u.Name, rate[k], 0, 1e-6*math.Max(u.Base, 1))
						}
					}
				}
			}
		}
		// Dispatched to nothing, the oscillator touches the linear laws: half the way
		// off, a quarter of the distance.
		base := base
		base.P, base.Q = 0, 0
		off := func(reach float64) (speed, volts float64) {
			for k := range 8 {
				dir := cmplx.Rect(reach, float64(k)*math.Pi/4)
				k := cmplx.Rect(1/(1.5*base.V0*base.V0), psi) * cmplx.Conj(dir)
				x := (1 + math.Sqrt(1-4*real(k)/o.Alpha)) / 2
				w := m * (s*real(dir) - c*imag(dir))
				v := n * (c*real(dir) + s*imag(dir))
				speed = math.Max(speed, math.Abs(o.Eta*imag(k)/x-w))
				volts = math.Max(volts, math.Abs(base.V0*math.Sqrt(x)-(base.V0-v)))
			}
			return speed, volts
		}
		w1, v1 := off(1e3)
		w2, v2 := off(2e3)
		t.Logf("psi = %.3g: oscillator off the linear laws by up to %.3g rad/s of %.3g and %.3g V of %.3g at 2 kVA", psi, w2, m*2e3, v2, n*2e3)
		if !(w2 < 0.05*m*2e3 && v2 < 0.05*n*2e3) {
			t.Errorf("psi = %.3g: oscillator off the linear laws by %.3g rad/s and %.3g V at 2 kVA", psi, w2, v2)
		}
		for _, r := range []float64{w1 / w2, v1 / v2} {
			if r < 0.23 || r > 0.27 {
				t.Errorf("psi = %.3g: distance at half the way %.3f of that at the whole: want a quarter", psi, r)
			}
		}
	}
}
