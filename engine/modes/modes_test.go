package modes_test

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/engine"
	"islet/engine/modes"
)

const w50 = 100 * math.Pi

// stiff is one droop source on a stiff bus, power-checks J1 and J2: V = 380 V
// line-line rms at both ends, no load, impedance R + jwL in all. The published
// quantities are power-invariant: voltages and n times sqrt(2/3). The
// impedance is split between source and bus, so that the bus has a hidden
// current law.
func stiff(t *testing.T, r, l, m, n float64, quasi bool) *engine.Simulation {
	t.Helper()
	const v = 380
	c := math.Sqrt(2.0 / 3)
	s := newNet(t, 50)
	s.add("inverter", &machine{v0: v * c, r: 0.3 * r, l: 0.6 * l, w0: w50, m: m, n: n * c, quasi: quasi}, "bus")
	s.add("grid", &machine{v0: v * c, r: 0.7 * r, l: 0.4 * l, w0: w50, quasi: quasi}, "bus")
	return s.start(nil)
}

// hasMode fails unless the report has an eigenvalue within tol of the wanted.
func hasMode(t *testing.T, r *modes.Report, want complex128, tol float64) {
	t.Helper()
	best := cmplx.Inf()
	for _, m := range r.Modes {
		if cmplx.Abs(m.Value-want) < cmplx.Abs(best-want) {
			best = m.Value
		}
	}
	if !(cmplx.Abs(best-want) <= tol) {
		t.Errorf("no eigenvalue %.12g within %.1g; the nearest is %.12g", want, tol, best)
	}
}

// Closed form of one droop inverter on a stiff bus, full network: roots of s (s
// + wc)[(R + sL)^2 + X^2] + m wc V^2 X = 0; and of zero order: s (s + wc) + m wc
// V^2 X/Z^2 = 0. Figures: power-checks J1 (derived there by Routh's scheme), R +
// jX = 0.35 + j0.58 ohm, m = 9.4e-5.
func TestDroopOnStiffBus(t *testing.T) {
	const m = 9.4e-5
	l := linear(t, stiff(t, 0.35, 0.58/w50, m, 0, false), nil)
	r := analyse(t, l, nil)
	hasMode(t, r, complex(-14.94396617, 17.76409945), 1e-7)
	hasMode(t, r, complex(-190.33990086, 313.68716884), 1e-7)
	// delta, P, Q and one current are left of eight unknowns with a
	// derivative: two angles, P, Q, two currents of two components of which
	// the bus's law takes one. Two complex pairs, the filter of Q, the
	// common turn.
	if r.Independent != 6 || len(r.Modes) != 4 || len(r.Dependent) != 2 {
		t.Errorf("%d independent states, %d modes, dependent %v; want 6, 4 and two", r.Independent, len(r.Modes), r.Dependent)
	}
	if z := r.Modes[0]; !z.Zero || z.Value != 0 || z.Island != "grid" && z.Island != "inverter" {
		t.Errorf("the first mode is %s, want the common turn", &z)
	}
	zero := analyse(t, linear(t, stiff(t, 0.35, 0.58/w50, m, 0, true), nil), nil)
	hasMode(t, zero, complex(-15.705, 17.09412818), 1e-7)
	if zero.Independent != 4 {
		t.Errorf("zero order has %d states, want 4", zero.Independent)
	}
}

// Critical droop gains to six digits by bisection. Figures: power-checks J1
// (Routh) and J2 (computed there from its five state equations).
func TestCriticalDroop(t *testing.T) {
	for _, c := range []struct{ r, l, n, want, omega float64 }{
		{0.23, 0.10 / w50, 0, 1.926370441e-3, 114.9175001},
		{0.35, 0.58 / w50, 0, 1.818275770e-3, 101.4898167},
		{0.26, 0.21 / w50, 0, 1.204827910e-3, 98.49831504},
		{0.195, 0.61e-3, 1.3e-3, 3.636036932e-4, 0},
		{0.26, 0.6684507610e-3, 1.3e-3, 4.008656448e-4, 0},
		{0.60, 0.50e-3, 1.3e-3, 5.721020388e-4, 0},
	} {
		build := func(m float64) (*engine.Simulation, error) { return stiff(t, c.r, c.l, m, c.n, false), nil }
		k, err := modes.FindCritical(context.Background(), 1e-4, 3e-3, build, nil)
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(k.Value/c.want-1) > 1e-8 || k.Lost != nil {
			t.Errorf("R = %g ohm, n = %g: critical m = %.10g, want %.10g (lost: %v)", c.r, c.n, k.Value, c.want, k.Lost)
		}
		if c.omega != 0 && math.Abs(imag(k.Mode.Value)/c.omega-1) > 1e-6 {
			t.Errorf("R = %g ohm: crosses at %.10g rad/s, want %.10g", c.r, imag(k.Mode.Value), c.omega)
		}
		if k.Evaluations > 30 {
			t.Errorf("R = %g ohm: %d evaluations", c.r, k.Evaluations)
		}
	}
	// m = 1e-3 on 0.195 ohm, 0.61 mH: +16.06632 +- j115.167; without the
	// network's dynamics -2.47257 +- j115.65 (same source, digits as
	// printed).
	full := analyse(t, linear(t, stiff(t, 0.195, 0.61e-3, 1e-3, 1.3e-3, false), nil), nil)
	zero := analyse(t, linear(t, stiff(t, 0.195, 0.61e-3, 1e-3, 1.3e-3, true), nil), nil)
	hasMode(t, full, complex(16.06632, 115.167), 6e-4)
	hasMode(t, zero, complex(-2.47257, 115.65), 6e-3)
	// That must be told loudly.
	c := modes.Match("full", full, "zero order", zero, modes.MatchOptions{})
	if len(c.Warnings) < 2 || !strings.Contains(c.Warnings[0], "verdict") || !strings.Contains(c.Warnings[0], "full is UNSTABLE") {
		t.Errorf("warnings: %q, want the verdict first and the mode", c.Warnings)
	}
	shared := false
	for _, p := range c.Pairs {
		a, b := full.Modes[p.A-1].Value, zero.Modes[p.B-1].Value
		shared = shared || imag(a) > 115 && imag(b) > 115 && p.Warning != ""
	}
	if !shared {
		t.Errorf("the swing is not among the pairs: %+v", c.Pairs)
	}
	var text bytes.Buffer
	if err := c.WriteText(&text); err != nil || !strings.HasPrefix(text.String(), "WARNING: the verdict") {
		t.Errorf("comparison reads (%v):\n%s", err, &text)
	}
	// A system agrees with itself.
	same := modes.Match("a", full, "b", full, modes.MatchOptions{})
	if len(same.Warnings) != 0 || len(same.OnlyA) != 0 || len(same.OnlyB) != 0 {
		t.Errorf("matched with itself: %+v", same)
	}
	for _, p := range same.Pairs {
		if p.A != p.B || p.Distance != 0 || math.Abs(p.Correlation-1) > 1e-12 {
			t.Errorf("matched with itself: pair %+v", p)
		}
	}
}

// star is a source and shunt coils on one bus that nothing else is at.
func star(t *testing.T, hz, e float64, r, l []float64) *engine.Simulation {
	t.Helper()
	s := newNet(t, hz)
	s.add("leg-1", &machine{v0: e, r: r[0], l: l[0], w0: 2 * math.Pi * hz}, "node")
	for k := 1; k < len(r); k++ {
		s.add([]string{"leg-2", "leg-3", "leg-4"}[k-1], &coil{r: r[k], l: l[k]}, "node")
	}
	return s.start(nil)
}

// An inductive star, power-checks E3 (computed there): the modes are the roots
// of sum 1/(R_k + s L_k) = 0, and in a rotating frame those turn with it. The
// hidden law leaves no zero behind.
func TestStarHasNoFalseZero(t *testing.T) {
	for _, c := range []struct{ r, l, want []float64 }{
		{[]float64{0.5, 0.2, 0.1}, []float64{1e-3, 2e-3, 0.5e-3}, []float64{-118.424443881, -410.1469846904}},
		{[]float64{0.4, 0.3, 0.2, 0.1}, []float64{1e-3, 2e-3, 3e-3, 0.5e-3}, []float64{-79.1411781003, -159.906262425, -343.5612551269}},
	} {
		l := linear(t, star(t, 50, 100, c.r, c.l), nil)
		for _, o := range []*modes.Options{nil, {Shifts: []complex128{complex(-100, 250)}}} {
			r := analyse(t, l, o)
			if len(r.Modes) != 1+len(c.want) {
				t.Errorf("%d modes, want %d and the common turn", len(r.Modes), len(c.want))
			}
			for _, w := range c.want {
				hasMode(t, r, complex(w, w50), 1e-7)
			}
			if !r.Modes[0].Zero || !r.Stable {
				t.Errorf("first mode %s, stable %v", &r.Modes[0], r.Stable)
			}
		}
	}
}

// The star in a frame at standstill (1e-9 Hz): input matrix, step response and
// impedance against the closed forms of power-checks E3.
func TestStarMatrices(t *testing.T) {
	r, l := []float64{0.5, 0.2, 0.1}, []float64{1e-3, 2e-3, 0.5e-3}
	lin := linear(t, star(t, 1e-9, 0, r, l), &engine.LinearOptions{Inputs: []string{"leg-1.e"}, Outputs: []string{"leg-*.i.d", "node.v_d"}})
	s, err := modes.Reduce(lin, false)
	if err != nil {
		t.Fatal(err)
	}
	outputs := []string{"node.v_d", "leg-1.i.d", "leg-2.i.d", "leg-3.i.d"}
	for k, o := range s.Outputs {
		if o.Name != outputs[k] {
			t.Fatalf("outputs %v, want %v", s.Outputs, outputs)
		}
	}
	// Currents into the legs' far ends are minus those into the node.
	var cb mat.Dense
	cb.Mul(s.C, s.B)
	for k, want := range []float64{714.2857142857, -142.8571428571, -571.4285714286} {
		if got := -cb.At(1+k, 0); math.Abs(got/want-1) > 1e-9 {
			t.Errorf("d i_%d/dt per volt = %.10g, want %.10g", k+1, got, want)
		}
	}
	if got := 100 * s.D.At(0, 0); math.Abs(got-28.5714285714) > 1e-8 {
		t.Errorf("node voltage at once: %.10g, want 28.5714285714 V", got)
	}
	y, err := s.Step(0, 100, 1e-3, 11)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		ms   int
		want [3]float64
	}{
		{1, [3]float64{58.6408580733, -12.2090532529, -46.4318048204}},
		{5, [3]float64{152.3864746048, -36.9365366787, -115.4499379261}},
		{10, [3]float64{172.6074573464, -48.0868882455, -124.5205691010}},
	} {
		for k, want := range c.want {
			if got := -y.At(c.ms, 1+k); math.Abs(got-want) > 2e-7 {
				t.Errorf("i_%d(%d ms) = %.10f, want %.10f", k+1, c.ms, got, want)
			}
		}
	}
	if got := y.At(5, 0); math.Abs(got-14.4544011288) > 1e-7 {
		t.Errorf("node voltage at 5 ms = %.10f, want 14.4544011288", got)
	}
	// The node's impedance is the legs' in parallel, also far up, where it is
	// that of the inductors: its current law holds no resistor.
	parallel := func(jw complex128) complex128 {
		y := complex(0, 0)
		for k := range r {
			y += 1 / (complex(r[k], 0) + jw*complex(l[k], 0))
		}
		return 1 / y
	}
	z, err := modes.BusImpedance(lin, "node", []float64{1, 50, 1e4})
	if err != nil {
		t.Fatal(err)
	}
	for k, f := range z.Hz {
		want := parallel(complex(0, 2*math.Pi*f))
		if got := z.Z[k][0][0]; cmplx.Abs(got-want) > 1e-8*cmplx.Abs(want) || cmplx.Abs(z.Z[k][1][0]) > 1e-8*cmplx.Abs(want) {
			t.Errorf("%g Hz: Z = %.10g, want %.10g", f, z.Z[k], want)
		}
	}
	// In a frame at 50 Hz: Sequence gives it at 50 Hz plus and minus.
	z, err = modes.BusImpedance(linear(t, star(t, 50, 100, r, l), nil), "node", []float64{1, 30, 170})
	if err != nil {
		t.Fatal(err)
	}
	for k, f := range z.Hz {
		above, below, coupling := z.Sequence(k)
		a, b := parallel(complex(0, 2*math.Pi*(50+f))), parallel(complex(0, 2*math.Pi*(50-f)))
		if cmplx.Abs(above-a) > 1e-8*cmplx.Abs(a) || cmplx.Abs(below-b) > 1e-8*cmplx.Abs(b) || cmplx.Abs(coupling) > 1e-8*cmplx.Abs(a) {
			t.Errorf("%g Hz: %.10g and %.10g, coupling %.3g; want %.10g and %.10g", f, above, below, coupling, a, b)
		}
	}
}

// two is an island of two droop sources, a resistive load between them, and a
// bus with nothing but inductors.
func two(t *testing.T) *net {
	t.Helper()
	s := newNet(t, 50)
	s.add("left", &machine{v0: 326, r: 0.05, l: 1e-3, w0: w50, m: 1e-4, n: 1e-3}, "a")
	s.add("right", &machine{v0: 322, r: 0.08, l: 1.5e-3, w0: w50, m: 2e-4, n: 2e-3}, "c")
	s.add("line-1", &branch{r: 0.1, l: 0.5e-3}, "a", "b")
	s.add("line-2", &branch{r: 0.2, l: 0.4e-3}, "b", "c")
	s.add("load", &coil{r: 12}, "b")
	s.add("motor", &coil{r: 9, l: 20e-3}, "c")
	return s
}

// What must hold for every system: the eigenvalues' sum is the trace and their
// product the determinant; right and left vectors are eigenvectors and
// biorthogonal; participation sums to one; the zero mode is exactly zero; and
// the form relative to the leading source has the same other modes.
func TestIdentities(t *testing.T) {
	l := linear(t, two(t).start(nil), nil)
	r := analyse(t, l, nil)
	s, err := modes.Reduce(l, false)
	if err != nil {
		t.Fatal(err)
	}
	rel, err := modes.Reduce(l, true)
	if err != nil {
		t.Fatal(err)
	}
	if len(s.Zeros) != 1 || s.Zeros[0].Leader != "left" || len(rel.States) != len(s.States)-1 || !rel.Relative {
		t.Fatalf("zeros %+v, %d states of %d relative to the leader", s.Zeros, len(rel.States), len(s.States))
	}
	// The states: 2 angles, 2 P, 2 Q, six currents of two components, less two
	// laws of two components.
	if len(r.States) != 16 || r.Independent != 12 || len(s.States) != 12 {
		t.Errorf("%d states, %d independent, %d in the state space; want 16, 12, 12", len(r.States), r.Independent, len(s.States))
	}
	sum, product := complex(0, 0), complex(1, 0)
	for _, m := range r.Modes {
		sum += m.Value
		if imag(m.Value) != 0 {
			sum += cmplx.Conj(m.Value)
			product *= cmplx.Conj(m.Value)
		}
		if !m.Zero {
			product *= m.Value
		}
	}
	if tr := mat.Trace(s.A); math.Abs(real(sum)/tr-1) > 1e-12 {
		t.Errorf("eigenvalues sum to %.15g, trace is %.15g", real(sum), tr)
	}
	if det := mat.Det(rel.A); math.Abs(real(product)/det-1) > 1e-9 {
		t.Errorf("eigenvalues multiply to %.15g, determinant is %.15g", real(product), det)
	}
	at := make(map[string]int)
	for i, u := range r.States {
		at[u.Name] = i
	}
	for i := range r.Modes {
		m := &r.Modes[i]
		// Right vector over the independent states; the left one counts the
		// others as well, and meets them through the laws.
		worst, scale := 0.0, 0.0
		for k, u := range s.States {
			av := complex(0, 0)
			for j, x := range s.States {
				av += complex(s.A.At(k, j), 0) * m.Right[at[x.Name]]
				scale = math.Max(scale, math.Abs(s.A.At(k, j))*cmplx.Abs(m.Right[at[x.Name]])/u.Base)
			}
			worst = math.Max(worst, cmplx.Abs(av-m.Value*m.Right[at[u.Name]])/u.Base)
		}
		if worst > 1e-11*scale {
			t.Errorf("%s: A v - lambda v is %.3g of %.3g", m, worst, scale)
		}
		total := 0.0
		for _, p := range m.Participation {
			total += p
		}
		if math.Abs(total-1) > 1e-12 {
			t.Errorf("%s: participation sums to %.15g", m, total)
		}
		for j := range r.Modes {
			dot, size := complex(0, 0), 0.0
			for k, w := range m.Left {
				dot += w * r.Modes[j].Right[k]
				size += cmplx.Abs(w * r.Modes[j].Right[k])
			}
			want := complex(0, 0)
			if i == j {
				want = 1
			}
			if cmplx.Abs(dot-want) > 1e-9*math.Max(1, size) {
				t.Errorf("w_%d v_%d = %.3g, want %.0f", i+1, j+1, dot, real(want))
			}
		}
	}
	// The currents' laws hold in every mode.
	for _, m := range r.Modes {
		law := m.Right[at["left.i.d"]] + m.Right[at["line-1.i.d"]]
		if cmplx.Abs(law) > 1e-12 {
			t.Errorf("%s: currents into bus a sum to %g", &m, law)
		}
	}
	var e mat.Eigen
	if !e.Factorize(rel.A, mat.EigenNone) {
		t.Fatal("no eigenvalues")
	}
	for _, v := range e.Values(nil) {
		if imag(v) >= 0 {
			hasMode(t, r, v, 1e-8*cmplx.Abs(v))
		}
	}
}

// Participation is the derivative of the eigenvalue with respect to a diagonal
// entry (Perez-Arriaga et al., 1982): checked for states that no law ties.
func TestParticipationIsSensitivity(t *testing.T) {
	l := linear(t, two(t).start(nil), nil)
	r := analyse(t, l, nil)
	s, err := modes.Reduce(l, false)
	if err != nil {
		t.Fatal(err)
	}
	var swing *modes.Mode
	for i := range r.Modes {
		if m := &r.Modes[i]; imag(m.Value) > 0 && (swing == nil || cmplx.Abs(m.Value) < cmplx.Abs(swing.Value)) {
			swing = m
		}
	}
	for i, u := range r.States {
		if u.Dynamics == "network" {
			continue
		}
		for k := range s.States {
			if s.States[k].Name != u.Name {
				continue
			}
			a := mat.DenseCopyOf(s.A)
			const h = 1e-4
			a.Set(k, k, a.At(k, k)+h)
			var e mat.Eigen
			if !e.Factorize(a, mat.EigenNone) {
				t.Fatal("no eigenvalues")
			}
			best := cmplx.Inf()
			for _, v := range e.Values(nil) {
				if cmplx.Abs(v-swing.Value) < cmplx.Abs(best-swing.Value) {
					best = v
				}
			}
			got, want := swing.Left[i]*swing.Right[i], (best-swing.Value)/h
			if cmplx.Abs(got-want) > 1e-4*(cmplx.Abs(want)+0.1) {
				t.Errorf("%s in %s: %.6g, moving its diagonal gives %.6g", u.Name, swing, got, want)
			}
		}
	}
}

// A small step of a setpoint, simulated and by the linear system.
func TestStepAgainstSimulation(t *testing.T) {
	const dt, n = 2e-3, 150
	record := []string{"*.v", "*.P", "*.Q", "left.i.*", "line-*.i.*", "*.p", "*.frequency", "*.delta", "line-1.to.i_d", "b.angle"}
	for _, c := range []struct {
		input, device, setpoint string
		value, step             float64
	}{
		{"left.e", "left", "e", 326, 0.05},
		{"load.g", "load", "g", 1.0 / 12, 1e-5},
	} {
		s := two(t)
		m := s.start(&engine.Options{Record: record, Sample: dt, FixedFrame: true, Tolerance: 1e-10})
		l := linear(t, m, &engine.LinearOptions{Inputs: []string{c.input}, Outputs: record})
		ss, err := modes.Reduce(l, false)
		if err != nil {
			t.Fatal(err)
		}
		y, err := ss.Step(0, c.step, dt, n)
		if err != nil {
			t.Fatal(err)
		}
		if err := m.At(0, engine.Set(c.device, c.setpoint, c.value+c.step)); err != nil {
			t.Fatal(err)
		}
		tr, err := m.Run(context.Background(), dt*(n-1))
		if err != nil {
			t.Fatal(err)
		}
		for k, o := range l.Outputs {
			size := 0.0
			for i := range n {
				size = math.Max(size, math.Abs(y.At(i, k)))
			}
			for i := 1; i < n; i++ {
				got := tr.At(o.Name, float64(i)*dt) - o.Value
				// Second order in the step, and what the solver leaves.
				if d := math.Abs(got - y.At(i, k)); d > 1e-3*size+1e-9*math.Abs(o.Value)+1e-9 {
					t.Errorf("%s step, %s at %g s: simulated %.9g, linear %.9g (of %.3g)", c.input, o.Name, float64(i)*dt, got, y.At(i, k), size)
					break
				}
			}
		}
	}
}

// The swing of a simulated disturbance decays and turns as its mode says, and
// the state linearised about may be any: here after a run.
func TestDecayAgainstSimulation(t *testing.T) {
	m := two(t).start(&engine.Options{Record: []string{"left.delta", "right.delta"}, Sample: 1e-3, Tolerance: 1e-11})
	if err := m.At(0, engine.Set("load", "g", 1/11.99)); err != nil {
		t.Fatal(err)
	}
	tr, err := m.Run(context.Background(), 3)
	if err != nil {
		t.Fatal(err)
	}
	swing := analyse(t, linear(t, m, nil), nil).Rightmost()
	// What is left of the difference of angles after the faster modes obeys
	// x[k+1] = a x[k] + b x[k-1]: least squares.
	var s11, s12, s22, r1, r2 float64
	angle := func(at float64) float64 {
		return tr.At("left.delta", at) - tr.At("right.delta", at) - (tr.At("left.delta", 3) - tr.At("right.delta", 3))
	}
	const h = 0.01
	for at := 0.3; at < 0.7; at += h {
		x, y, z := angle(at-h), angle(at), angle(at+h)
		s11, s12, s22 = s11+y*y, s12+x*y, s22+x*x
		r1, r2 = r1+y*z, r2+x*z
	}
	det := s11*s22 - s12*s12
	a, b := (r1*s22-r2*s12)/det, (s11*r2-s12*r1)/det
	sigma, omega := math.Log(-b)/2/h, math.Acos(a/2/math.Sqrt(-b))/h
	if math.Abs(sigma/real(swing.Value)-1) > 1e-3 || math.Abs(omega/imag(swing.Value)-1) > 1e-3 {
		t.Errorf("decays at %.6g 1/s and turns at %.6g rad/s, the mode is %.6g", sigma, omega, swing.Value)
	}
}

// Linearising changes nothing: a run with it continues bit by bit as without.
func TestLineariseLeavesTheRunAlone(t *testing.T) {
	run := func(look bool) *engine.Trace {
		m := two(t).start(nil)
		if err := m.At(0.1, engine.Set("load", "g", 0.1)); err != nil {
			t.Fatal(err)
		}
		if _, err := m.Run(context.Background(), 0.15); err != nil {
			t.Fatal(err)
		}
		if look {
			l := linear(t, m, nil)
			if len(l.Notes) == 0 || !(l.Drift > 1e-3) {
				t.Errorf("in the middle of a swing: drift %g, notes %q", l.Drift, l.Notes)
			}
		}
		tr, err := m.Run(context.Background(), 0.3)
		if err != nil {
			t.Fatal(err)
		}
		return tr
	}
	a, b := run(false), run(true)
	if a.Rows() != b.Rows() {
		t.Fatalf("%d rows, with a linearisation %d", a.Rows(), b.Rows())
	}
	for k := range a.Channels {
		for i, v := range a.Values(k) {
			if b.Values(k)[i] != v {
				t.Fatalf("%s differs in row %d", a.Channels[k].Name, i)
			}
		}
	}
}

// Frequency response from the sparse system and from the reduced matrices.
func TestFrequencyResponse(t *testing.T) {
	l := linear(t, two(t).start(nil), nil)
	hz := modes.LogSpace(0.1, 1000, 9)
	r, err := modes.FrequencyResponse(l, hz)
	if err != nil {
		t.Fatal(err)
	}
	for _, relative := range []bool{false, true} {
		s, err := modes.Reduce(l, relative)
		if err != nil {
			t.Fatal(err)
		}
		n := len(s.States)
		for k, f := range hz {
			// (jw - A) x = b as (w^2 + A^2) Re x = -A b, w Im x = A Re x + ...
			// done the plain way: real form of twice the order.
			w := 2 * math.Pi * f
			m := mat.NewDense(2*n, 2*n, nil)
			for i := range n {
				for j := range n {
					m.Set(i, j, -s.A.At(i, j))
					m.Set(n+i, n+j, -s.A.At(i, j))
				}
				m.Set(i, n+i, -w)
				m.Set(n+i, i, w)
			}
			for in := range s.Inputs {
				b, x := mat.NewVecDense(2*n, nil), mat.NewVecDense(2*n, nil)
				for i := range n {
					b.SetVec(i, s.B.At(i, in))
				}
				if err := x.SolveVec(m, b); err != nil {
					if _, warning := err.(mat.Condition); !warning {
						t.Fatal(err)
					}
				}
				for out, o := range s.Outputs {
					if relative && strings.HasSuffix(o.Name, ".angle") {
						continue
					}
					h := complex(s.D.At(out, in), 0)
					for i := range n {
						h += complex(s.C.At(out, i), 0) * complex(x.AtVec(i), x.AtVec(n+i))
					}
					if got := r.H[k][out][in]; cmplx.Abs(got-h) > 1e-7*(cmplx.Abs(h)+1e-6) {
						t.Errorf("%s / %s at %.4g Hz: %.9g, reduced (relative %v) %.9g", o.Name, s.Inputs[in].Name, f, got, relative, h)
					}
				}
			}
		}
	}
	if _, err := modes.FrequencyResponse(l, []float64{0, -1, 50}); err == nil || strings.Count(err.Error(), "frequency is") != 2 {
		t.Errorf("frequencies 0 and -1 Hz: %v, want both refused", err)
	}
	if _, err := modes.BusImpedance(l, "nowhere", []float64{50}); err == nil || !strings.Contains(err.Error(), `no bus "nowhere"`) {
		t.Errorf("unknown bus: %v", err)
	}
}

// A parameter whose operating point ends somewhere: the locus has a gap, and
// the critical value is where the point is lost.
func TestLocus(t *testing.T) {
	build := func(m float64) (*engine.Simulation, error) {
		if m > 1e-3 {
			return nil, errLost
		}
		return stiff(t, 0.35, 0.58/w50, m, 0, false), nil
	}
	l, err := modes.Trace(context.Background(), []float64{8e-5, 1e-4, 5e-4, 2e-3, 1e-3}, build, nil)
	if err != nil {
		t.Fatal(err)
	}
	if l.Points[3].Err == nil || l.Points[3].Report != nil || l.Points[4].Err != nil {
		t.Errorf("points: %+v", l.Points)
	}
	for _, b := range l.Branches {
		if len(b) != 5 || !cmplx.IsNaN(b[3]) {
			t.Errorf("branch %v, want a gap at the fourth value", b)
		}
		// Where it exists at both of two neighbours, a branch is continuous.
		if !cmplx.IsNaN(b[0]) && !cmplx.IsNaN(b[1]) && cmplx.Abs(b[0]-b[1]) > 20 {
			t.Errorf("branch jumps from %g to %g", b[0], b[1])
		}
	}
	k, err := modes.FindCritical(context.Background(), 1e-4, 2e-3, build, nil)
	if err != nil {
		t.Fatal(err)
	}
	if k.Lost == nil || math.Abs(k.Value/1e-3-1) > 1e-6 {
		t.Errorf("critical value %g, lost: %v; want 1e-3 and the reason", k.Value, k.Lost)
	}
	for _, c := range []struct {
		from, to float64
		want     string
	}{
		{1e-5, 1e-4, "stable at both ends"},
		{1.1e-3, 2e-3, "stable at neither end"},
		{math.NaN(), 1, "want finite ends"},
	} {
		if _, err := modes.FindCritical(context.Background(), c.from, c.to, build, nil); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("from %g to %g: %v, want %q", c.from, c.to, err, c.want)
		}
	}
	if err := l.FindEdges(context.Background(), build, nil); err != nil {
		t.Fatal(err)
	}
	// Lost above 1e-3, between the third point and the fourth, and found again
	// at the fifth.
	if len(l.Edges) != 2 || l.Edges[0].Lost == nil || l.Edges[1].Lost == nil {
		t.Errorf("edges: %+v", l.Edges)
	}
	var text, doc bytes.Buffer
	if err := errors.Join(l.WriteText(&text), l.WriteJSON(&doc)); err != nil || strings.Count(text.String(), "critical value 0.001 ") != 2 || !json.Valid(doc.Bytes()) {
		t.Errorf("%v\n%s\n%s", err, &text, &doc)
	}
	// An edge at zero, which has no digits to get right: a negative droop is
	// unstable.
	if k, err := modes.FindCritical(context.Background(), -1e-4, 3e-4, build, nil); err != nil || math.Abs(k.Value) > 1e-11 || k.Evaluations > 60 {
		t.Errorf("edge at zero: %+v, %v", k, err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := modes.Trace(ctx, []float64{1}, build, nil); err == nil {
		t.Error("a cancelled locus went on")
	}
}

var errLost = &engine.OperatingPointError{}

func TestBadOptions(t *testing.T) {
	l := linear(t, two(t).start(nil), nil)
	_, err := modes.Analyse(l, &modes.Options{Count: -1, Gap: 0.5, Shifts: []complex128{cmplx.NaN()}})
	for _, want := range []string{"Count is -1", "Gap is 0.5", "shift is"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v lacks %q", err, want)
		}
	}
	m := two(t).start(nil)
	_, err = m.Linearise(&engine.LinearOptions{Inputs: []string{"left.x", "load.g"}, Outputs: []string{"a.v_a", "b.v", "["}})
	for _, want := range []string{`setpoint in service that a linear system can hold matches "left.x"; there are left.e`, `matches "a.v_a"`, `pattern "["`} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v lacks %q", err, want)
		}
	}
	r := analyse(t, l, nil)
	if _, err := r.Propose(-1, modes.Separation{}); err == nil || !strings.Contains(err.Error(), "bandwidth is -1") {
		t.Errorf("bandwidth -1: %v", err)
	}
}

// The proposal drops the network for a bandwidth far below its modes and
// nothing for one above; the timescales lie apart by the gap.
func TestProposal(t *testing.T) {
	r := analyse(t, linear(t, stiff(t, 0.35, 0.58/w50, 9.4e-5, 0, false), nil), nil)
	p, err := r.Propose(10, modes.Separation{})
	if err != nil {
		t.Fatal(err)
	}
	if d := modes.Droppable(p); len(d) != 1 || d[0] != "network" {
		t.Errorf("for 10 rad/s it drops %q, want the network: %+v", d, p)
	}
	if p, err = r.Propose(1e3, modes.Separation{}); err != nil || len(modes.Droppable(p)) != 0 {
		t.Errorf("for 1000 rad/s it drops %q (%v), want nothing", modes.Droppable(p), err)
	}
	if len(r.Timescales) != 2 || r.Timescales[1].ByDynamics[0].Name != "network" {
		t.Errorf("timescales: %+v, want the network's apart", r.Timescales)
	}
	for k := 1; k < len(r.Timescales); k++ {
		if r.Timescales[k].Slowest < 3*r.Timescales[k-1].Fastest {
			t.Errorf("timescales %+v lie closer than the gap", r.Timescales)
		}
	}
}

// Two islands turn each for itself; two ideal sources in one island hold an
// angle between them that nothing moves, a neutral mode; a dead bus has no place
// in the system.
func TestIslandsAndIdealSources(t *testing.T) {
	for _, o := range []*modes.Options{nil, {Shifts: []complex128{-100}, Count: 50}} {
		s := two(t)
		s.add("far", &machine{v0: 326, r: 0.1, l: 1e-3, w0: 1.01 * w50, m: 1e-4}, "far-bus")
		s.add("far-load", &coil{r: 20}, "far-bus")
		s.add("nothing", &coil{r: 20}, "dead-bus")
		l := linear(t, s.start(nil), nil)
		if _, ok := l.BusUnknown("dead-bus"); ok || len(l.Islands) != 2 {
			t.Errorf("the dead bus is in service (%v), or %d islands are not two", ok, len(l.Islands))
		}
		var leaders []string
		for _, m := range analyse(t, l, o).Modes {
			if m.Zero {
				leaders = append(leaders, m.Island)
				for k, p := range m.Participation {
					if u := l.Unknowns; p > 1e-6 && (m.Island == "far") != strings.HasPrefix(u[stateIndex(l, k)].Name, "far") {
						t.Errorf("turn of %s's island: %s takes part by %g", m.Island, u[stateIndex(l, k)].Name, p)
					}
				}
			}
		}
		if len(leaders) != 2 {
			t.Errorf("options %+v: common turns of %q, want two", o, leaders)
		}

		s = newNet(t, 50)
		s.add("left", &machine{v0: 326, r: 0.1, l: 1e-3, w0: w50}, "bus")
		s.add("right", &machine{v0: 320, r: 0.2, l: 3e-3, w0: w50}, "bus")
		s.add("load", &coil{r: 20}, "bus")
		m := s.start(&engine.Options{FromRest: true, Tolerance: 1e-10})
		if _, err := m.Run(context.Background(), 0.5); err != nil {
			t.Fatal(err)
		}
		r := analyse(t, linear(t, m, nil), o)
		zeros, neutral := 0, 0
		for _, m := range r.Modes {
			if m.Zero {
				zeros++
			}
			if m.Neutral {
				neutral++
			}
		}
		if zeros != 1 || neutral != 1 || !r.Stable {
			t.Errorf("options %+v: %d rotational and %d neutral modes, stable %v; want 1, 1 and true", o, zeros, neutral, r.Stable)
		}
	}
}

// While all swings, the rates turn with the island: J Rotation = Turned, and
// the common turn is still told apart.
func TestTurnOfAMovingIsland(t *testing.T) {
	s := two(t)
	sim := s.start(nil)
	if err := sim.At(0.01, engine.Set("load", "g", 1.0/5)); err != nil {
		t.Fatal(err)
	}
	if _, err := sim.Run(context.Background(), 0.03); err != nil {
		t.Fatal(err)
	}
	l := linear(t, sim, nil)
	if !(l.Drift > 1e-2) {
		t.Fatalf("drift %g: nothing moves", l.Drift)
	}
	is := &l.Islands[0]
	got, terms := make([]float64, len(l.E)), make([]float64, len(l.E))
	for j, r := range is.Rotation {
		for p := l.J.P[j]; p < l.J.P[j+1]; p++ {
			got[l.J.I[p]] += r * l.J.X[p]
			terms[l.J.I[p]] += math.Abs(r * l.J.X[p])
		}
	}
	moving := false
	for i, v := range got {
		if math.Abs(v-is.Turned[i]) > 1e-7*terms[i]+1e-9 {
			t.Errorf("%s: J r = %g, the rate turns by %g", l.Unknowns[i].Name, v, is.Turned[i])
		}
		moving = moving || math.Abs(is.Turned[i]) > 1e-4*terms[i]
	}
	if !moving {
		t.Error("no rate turns by a measurable amount")
	}
	for _, o := range []*modes.Options{nil, {Shifts: []complex128{-20}, Count: 5}} {
		zeros := 0
		for _, m := range analyse(t, l, o).Modes {
			if m.Zero {
				zeros++
			}
		}
		if zeros != 1 {
			t.Errorf("options %+v: %d common turns, want 1", o, zeros)
		}
	}
}

// stateIndex is the unknown behind state k of a report.
func stateIndex(l *engine.Linear, k int) int {
	for i, e := range l.E {
		if e != 0 {
			if k == 0 {
				return i
			}
			k--
		}
	}
	return -1
}

// A system whose only state is the common angle has no other mode.
func TestNothingButTheTurn(t *testing.T) {
	s := newNet(t, 50)
	s.add("source", &machine{v0: 326, r: 0.1, l: 1e-3, w0: w50, quasi: true}, "bus")
	s.add("load", &coil{r: 20}, "bus")
	l := linear(t, s.start(nil), nil)
	for _, o := range []*modes.Options{nil, {Shifts: []complex128{0}}} {
		r := analyse(t, l, o)
		if len(r.Modes) != 1 || !r.Modes[0].Zero || !r.Stable || r.Rightmost() != nil {
			t.Errorf("modes: %+v", r.Modes)
		}
		var b bytes.Buffer
		if err := r.WriteText(&b); err != nil || !strings.Contains(b.String(), "no mode to judge") {
			t.Errorf("%v:\n%s", err, &b)
		}
	}
	if rel, err := modes.Reduce(l, true); err != nil || rel.A != nil || len(rel.States) != 0 {
		t.Errorf("relative: %+v, %v", rel, err)
	}
	full, err := modes.Reduce(l, false)
	if err != nil || full.A.At(0, 0) != 0 {
		t.Errorf("%+v, %v", full, err)
	}
}
