package reduction

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"sort"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// Outside values: testdata/SOURCES.md, power-checks, section E, and where else a
// source stands beside them. They were computed there to ten digits.

const ten = 1e-9 // relative tolerance for ten printed digits

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance*math.Max(1, math.Abs(want))) {
		t.Errorf("%s = %.12g, want %.12g", what, got, want)
	}
}

func nearC(t *testing.T, what string, got, want complex128, tolerance float64) {
	t.Helper()
	if !(cmplx.Abs(got-want) <= tolerance*math.Max(1, cmplx.Abs(want))) {
		t.Errorf("%s = %.12g, want %.12g", what, got, want)
	}
}

// star is a star of legs from nodes 0.. to the centre, the last node, which is
// eliminated.
func star(r, l []float64) (Network, []int) {
	n := Network{Nodes: len(r) + 1}
	var keep []int
	for k := range r {
		n.Branches = append(n.Branches, Branch{From: k, To: len(r), R: r[k], L: l[k]})
		keep = append(keep, k)
	}
	return n, keep
}

func mixedStar() (Network, []int) {
	return star([]float64{0.5, 0.2, 0.1}, []float64{1e-3, 2e-3, 0.5e-3})
}

func evenStar() (Network, []int) { // R/L = 100 1/s
	return star([]float64{0.1, 0.2, 0.05}, []float64{1e-3, 2e-3, 0.5e-3})
}

// E1: the example of J. J. Grainger, W. D. Stevenson, Power System Analysis,
// McGraw-Hill 1994, chapters 7 and 8.
func TestKronPhasorTextbook(t *testing.T) {
	b := [][]float64{
		{-16.75, 11.75, 2.50, 2.50},
		{11.75, -19.25, 2.50, 5.00},
		{2.50, 2.50, -5.80, 0},
		{2.50, 5.00, 0, -8.30},
	}
	y := mat.NewCDense(4, 4, nil)
	for i := range b {
		for j := range b {
			y.Set(i, j, complex(0, b[i][j]))
		}
	}
	for _, c := range []struct {
		keep []int
		want [][]float64
	}{
		{[]int{2, 3}, [][]float64{{-3.7830508475, 2.9830508475}, {2.9830508475, -3.7830508475}}},
		{[]int{0, 2, 3}, [][]float64{
			{-9.5779220779, 4.0259740260, 5.5519480519},
			{4.0259740260, -5.4753246753, 0.6493506494},
			{5.5519480519, 0.6493506494, -7.0012987013},
		}},
	} {
		r, err := KronPhasor(y, c.keep)
		if err != nil {
			t.Fatal(err)
		}
		for i := range c.want {
			for j := range c.want {
				nearC(t, fmt.Sprintf("keep %v: Y[%d][%d]", c.keep, i, j), r.At(i, j), complex(0, c.want[i][j]), ten)
			}
		}
	}
	// The bus impedance matrix: each bus alone, seen with all others eliminated,
	// is 1/Z_kk; the book prints 0.73128, 0.71966, 0.69890, 0.69890.
	for k, z := range []float64{0.7312825651, 0.7196593186, 0.6988977956, 0.6988977956} {
		r, err := KronPhasor(y, []int{k})
		if err != nil {
			t.Fatal(err)
		}
		nearC(t, fmt.Sprintf("Z[%d][%d]", k, k), 1/r.At(0, 0), complex(0, z), ten)
	}
}

// The star-delta formulas of any text on circuits: a star of admittances Y_k is
// the delta Y_i Y_j / (sum of Y); A. E. Kennelly, The equivalence of triangles
// and three-pointed stars in conducting networks, Electrical World 34, 1899. The
// textbook figures: a star of 10, 20 and 30 ohm is a delta of 36.667, 55 and 110
// ohm (value from memory: R_ab = R_a + R_b + R_a R_b/R_c).
func TestStarDelta(t *testing.T) {
	n, keep := star([]float64{10, 20, 30}, []float64{0, 0, 0})
	r, err := Reduce(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	if len(r.Circuits) != 0 || len(r.Resistive) != 3 {
		t.Fatalf("%d circuits and %d resistive branches, want 0 and 3", len(r.Circuits), len(r.Resistive))
	}
	want := map[[2]int]float64{{0, 1}: 10 + 20 + 10*20/30.0, {0, 2}: 10 + 30 + 10*30/20.0, {1, 2}: 20 + 30 + 20*30/10.0}
	for _, b := range r.Resistive {
		near(t, fmt.Sprintf("R between %d and %d", b.From, b.To), b.R, want[[2]int{b.From, b.To}], 1e-12)
	}
	if r.Grounded() {
		t.Error("a star without ground counts as grounded")
	}
}

// The star-mesh transformation of any number of legs: Y_ij = y_i y_j / (sum of y),
// A. Rosen, A new network theorem, J. IEE 62, 1924 (from memory); and the modes of a
// star are the roots of sum 1/(R_k + s L_k) = 0, one between each two neighbouring
// R_k/L_k.
func TestStarMesh(t *testing.T) {
	rng := rand.New(rand.NewPCG(13, 14))
	for range 20 {
		legs := 3 + rng.IntN(6)
		r, l, ratio := make([]float64, legs), make([]float64, legs), make([]float64, legs)
		for k := range r {
			r[k], l[k] = math.Exp(rng.NormFloat64()), 1e-3*math.Exp(rng.NormFloat64())
			ratio[k] = r[k] / l[k]
		}
		sort.Float64s(ratio)
		n, keep := star(r, l)
		red, err := Reduce(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range []complex128{0, complex(0, 100*math.Pi), complex(-20, 3000)} {
			sum, y := complex(0, 0), make([]complex128, legs)
			for k := range y {
				y[k] = 1 / (complex(r[k], 0) + s*complex(l[k], 0))
				sum += y[k]
			}
			got := red.Admittance(s)
			for i := range legs {
				for j := range i {
					want := -y[i] * y[j] / sum
					nearC(t, fmt.Sprintf("s = %v: Y[%d][%d]/Y", s, i, j), got.At(i, j)/want, 1, 1e-9)
				}
			}
		}
		if len(red.Circuits) != legs-1 {
			t.Errorf("%d circuits of %d legs", len(red.Circuits), legs)
			continue
		}
		for k, c := range red.Circuits {
			if rate := c.Rate(); !(rate > ratio[k] && rate < ratio[k+1]) {
				t.Errorf("rate %g isn't between %g and %g", rate, ratio[k], ratio[k+1])
			}
			sum, size := 0.0, 0.0
			for j := range r {
				x := 1 / (r[j] - c.Rate()*l[j])
				sum += x
				size = math.Max(size, math.Abs(x))
			}
			near(t, "sum 1/(R - rate L)", sum/size, 0, 1e-8)
		}
	}
}

// E2: S. Y. Caliskan, P. Tabuada, Automatica 50(10), 2014. Star L = (1, 2, 0.5) mH
// with R/L = 100 1/s: mesh L12 = 7, L13 = 1.75, L23 = 3.5 mH, R = 100 L.
func TestUniform(t *testing.T) {
	n, keep := evenStar()
	m, err := Uniform(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	want := map[[2]int]float64{{0, 1}: 7e-3, {0, 2}: 1.75e-3, {1, 2}: 3.5e-3}
	if len(m.Branches) != 3 {
		t.Fatalf("%d branches, want 3", len(m.Branches))
	}
	for _, b := range m.Branches {
		near(t, fmt.Sprintf("L %d-%d", b.From, b.To), b.L/want[[2]int{b.From, b.To}], 1, 1e-12)
		near(t, "R/L", b.R/b.L, 100, 1e-12)
	}
	for _, f := range []float64{0, 50, 1000} {
		s := complex(0, 2*math.Pi*f)
		y, err := n.Admittance(s)
		if err != nil {
			t.Fatal(err)
		}
		k, err := KronPhasor(y, keep)
		if err != nil {
			t.Fatal(err)
		}
		a, err := m.Admittance(s)
		if err != nil {
			t.Fatal(err)
		}
		near(t, fmt.Sprintf("distance at %g Hz", f), distance(k, a), 0, 1e-13)
	}
	mixed, keep := mixedStar()
	if _, err := Uniform(mixed, keep); err == nil || !strings.Contains(err.Error(), "want one ratio") {
		t.Errorf("mixed ratios: %v", err)
	}
}

// The first special case: with one ratio R/L the general reduction is the uniform
// one, with as many circuits as the Laplacian has rank.
func TestReduceRecoversUniform(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for range 20 {
		n, keep := randomNetwork(rng, rng.IntN(2) == 0)
		ratio := 50 + 400*rng.Float64()
		for k := range n.Branches {
			n.Branches[k].R = ratio * n.Branches[k].L
		}
		r, err := Reduce(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		m, err := Uniform(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		w, err := inverseInductance(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		rank := len(keep)
		if !r.Grounded() {
			rank--
		}
		if len(r.Circuits) != rank || len(r.Resistive) != 0 {
			t.Errorf("%d circuits, want %d", len(r.Circuits), rank)
		}
		for i := range keep {
			for j := range keep {
				sum := 0.0
				for _, c := range r.Circuits {
					sum += c.Drive[i] * c.Drive[j] / c.L
				}
				near(t, "Laplacian", sum/w.At(i, i), w.At(i, j)/w.At(i, i), 1e-11)
			}
		}
		for _, c := range r.Circuits {
			near(t, "rate", c.Rate()/ratio, 1, 1e-12)
		}
		for _, f := range []float64{0, 50, 5000} {
			s := complex(0, 2*math.Pi*f)
			y, err := m.Admittance(s)
			if err != nil {
				t.Fatal(err)
			}
			near(t, "distance", distance(r.Admittance(s), y), 0, 1e-11)
		}
	}
}

// The second special case: at any frequency, 0 and complex ones included, the
// general reduction has the admittance of the phasor Kron reduction.
func TestReduceRecoversPhasorKron(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	for range 40 {
		n, keep := randomNetwork(rng, rng.IntN(2) == 0)
		r, err := Reduce(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range []complex128{0, complex(0, 2*math.Pi*50), complex(0, 2*math.Pi*1e4), complex(37, -800), complex(1e6, 0)} {
			y, err := n.Admittance(s)
			if err != nil {
				t.Fatal(err)
			}
			k, err := KronPhasor(y, keep)
			if err != nil {
				t.Fatal(err)
			}
			near(t, fmt.Sprintf("distance at s = %v", s), distance(k, r.Admittance(s)), 0, 1e-9)
		}
		if len(r.Circuits) > r.Loops {
			t.Errorf("%d circuits of %d loops", len(r.Circuits), r.Loops)
		}
		for _, c := range r.Circuits {
			if !(c.L > 0) || !(c.R >= 0) || len(c.Drive) != len(keep) {
				t.Errorf("circuit %+v", c)
			}
		}
	}
}

// randomNetwork draws a connected network of mixed R/L, in part without L or R.
func randomNetwork(rng *rand.Rand, grounded bool) (Network, []int) {
	n := Network{Nodes: 4 + rng.IntN(8)}
	add := func(a, b int) {
		br := Branch{From: a, To: b, R: math.Exp(2 * rng.NormFloat64()), L: 1e-3 * math.Exp(rng.NormFloat64())}
		switch rng.IntN(8) {
		case 0:
			br.L *= 1e-3
		case 1:
			br.R *= 1e-3
		}
		n.Branches = append(n.Branches, br)
	}
	for k := 1; k < n.Nodes; k++ {
		add(k, rng.IntN(k))
	}
	for range n.Nodes / 2 {
		if a, b := rng.IntN(n.Nodes), rng.IntN(n.Nodes); a != b {
			add(a, b)
		}
	}
	if grounded {
		for range 3 {
			add(rng.IntN(n.Nodes), Ground)
		}
	}
	return n, rng.Perm(n.Nodes)[:2+rng.IntN(2)]
}

// With branches that have no inductance among them, the rest of the admittance at
// high frequency is resistive.
func TestReduceWithResistors(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	seen := 0
	for range 40 {
		n, keep := randomNetwork(rng, true)
		for k := range n.Branches {
			if rng.IntN(2) == 0 {
				n.Branches[k].L = 0
			}
		}
		r, err := Reduce(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		seen += len(r.Resistive)
		for _, b := range r.Resistive {
			if !(b.R > 0) || b.L != 0 {
				t.Errorf("resistive branch %+v", b)
			}
		}
		for _, s := range []complex128{0, complex(0, 2*math.Pi*50), complex(0, 1e5)} {
			y, err := n.Admittance(s)
			if err != nil {
				t.Fatal(err)
			}
			k, err := KronPhasor(y, keep)
			if err != nil {
				t.Fatal(err)
			}
			near(t, fmt.Sprintf("distance at s = %v", s), distance(k, r.Admittance(s)), 0, 1e-8)
		}
	}
	if seen < 10 {
		t.Errorf("only %d resistive branches in all", seen)
	}
}

// E3: the star of three legs of different R/L.
func TestProjectionIdentities(t *testing.T) {
	n, keep := mixedStar()
	p, err := Project(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	pi := p.Pi()
	want := [][]float64{
		{0.7142857143, -0.2857142857, -0.2857142857},
		{-0.1428571429, 0.8571428571, -0.1428571429},
		{-0.5714285714, -0.5714285714, 0.4285714286},
	}
	wantL := [][]float64{ // Pi L^-1, 1/H
		{714.2857142857, -142.8571428571, -571.4285714286},
		{-142.8571428571, 428.5714285714, -285.7142857143},
		{-571.4285714286, -285.7142857143, 857.1428571429},
	}
	laplacian, err := inverseInductance(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	for i := range 3 {
		for j := range 3 {
			near(t, fmt.Sprintf("Pi[%d][%d]", i, j), pi.At(i, j), want[i][j], 1e-10)
			l := pi.At(i, j) / n.Branches[j].L
			near(t, fmt.Sprintf("Pi/L[%d][%d]", i, j), l, wantL[i][j], 1e-12)
			near(t, fmt.Sprintf("Pi/L[%d][%d] against the Kron-reduced Laplacian", i, j), l, laplacian.At(i, j), 1e-13)
		}
	}
	four, keep4 := star([]float64{0.4, 0.3, 0.2, 0.1}, []float64{1e-3, 2e-3, 3e-3, 0.5e-3})
	p4, err := Project(four, keep4)
	if err != nil {
		t.Fatal(err)
	}
	for j, w := range []float64{0.7391304348, -0.2608695652, -0.2608695652, -0.2608695652} {
		near(t, fmt.Sprintf("four legs: Pi[0][%d]", j), p4.Pi().At(0, j), w, 1e-10)
	}
	// Pi^2 = Pi, A Pi = 0, Pi L^-1 A^T = 0, trace = branches - interior nodes,
	// Pi L^-1 symmetric, on networks of all shapes.
	rng := rand.New(rand.NewPCG(7, 8))
	for range 20 {
		n, keep := randomNetwork(rng, rng.IntN(2) == 0)
		p, err := Project(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		pi := p.Pi()
		var square, a, b, il mat.Dense
		square.Mul(pi, pi)
		square.Sub(&square, pi)
		scale := mat.Norm(pi, 2)
		near(t, "|Pi^2 - Pi|", mat.Norm(&square, 2)/scale/scale, 0, 1e-12)
		interior := n.incidence(p.Interior())
		a.Mul(interior, pi)
		near(t, "|A Pi|", mat.Norm(&a, 2)/scale, 0, 1e-12)
		il.Apply(func(i, j int, x float64) float64 { return x / n.Branches[j].L }, pi)
		lscale := mat.Norm(&il, 2)
		b.Mul(&il, interior.T())
		near(t, "|Pi L^-1 A^T|", mat.Norm(&b, 2)/lscale, 0, 1e-11)
		near(t, "trace", mat.Trace(pi), float64(len(n.Branches)-len(p.Interior())), 1e-10)
		var skew mat.Dense
		skew.Sub(&il, il.T())
		near(t, "skew part of Pi L^-1", mat.Norm(&skew, 2)/lscale, 0, 1e-11)
		// The number of dynamic states is the number of independent loops.
		_, loops, _ := n.loops(keep, 300)
		near(t, "loops", float64(loops), math.Round(mat.Trace(pi)), 0)
	}
}

// E3: modes of the stars: roots of sum 1/(R_k + s L_k) = 0.
func TestReduceModes(t *testing.T) {
	for _, c := range []struct {
		r, l, want []float64
	}{
		{[]float64{0.5, 0.2, 0.1}, []float64{1e-3, 2e-3, 0.5e-3}, []float64{118.424443881, 410.1469846904}},
		{[]float64{0.4, 0.3, 0.2, 0.1}, []float64{1e-3, 2e-3, 3e-3, 0.5e-3}, []float64{79.1411781003, 159.906262425, 343.5612551269}},
	} {
		n, keep := star(c.r, c.l)
		r, err := Reduce(n, keep)
		if err != nil {
			t.Fatal(err)
		}
		if len(r.Circuits) != len(c.want) {
			t.Fatalf("%d circuits, want %d", len(r.Circuits), len(c.want))
		}
		for k, w := range c.want {
			near(t, fmt.Sprintf("rate %d", k), r.Circuits[k].Rate()/w, 1, ten)
		}
		if r.Grounded() {
			t.Error("a star without ground counts as grounded")
		}
	}
	// The third eigenvalue of -Pi L^-1 R is 0.
	n, keep := mixedStar()
	p, err := Project(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	m := p.Pi()
	m.Apply(func(i, j int, x float64) float64 { return -x / n.Branches[j].L * n.Branches[j].R }, m)
	var e mat.Eigen
	if !e.Factorize(m, mat.EigenNone) {
		t.Fatal("no eigenvalues")
	}
	v := e.Values(nil)
	sort.Slice(v, func(i, j int) bool { return real(v[i]) < real(v[j]) })
	for k, w := range []float64{-410.1469846904, -118.424443881, 0} {
		nearC(t, fmt.Sprintf("eigenvalue %d", k), v[k], complex(w, 0), 1e-9)
	}
}

// step returns the currents into the network at time t after the kept voltages
// stepped to v from rest.
func step(r *Reduced, v []float64, t float64) []float64 {
	i := make([]float64, r.Kept)
	for _, c := range r.Circuits {
		drive := 0.0
		for j, x := range c.Drive {
			drive += x * v[j]
		}
		w := drive / c.R * -math.Expm1(-c.Rate()*t)
		for j, x := range c.Drive {
			i[j] += x * w
		}
	}
	return i
}

// E3: the response to a step of v = (100, 0, 0) V from rest. Each leg's current is
// what flows into the network at its end.
func TestReduceStepResponse(t *testing.T) {
	n, keep := mixedStar()
	r, err := Reduce(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	p, err := Project(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	v := []float64{100, 0, 0}
	rates := make([]float64, 3)
	p.Rates(rates, v, make([]float64, 3))
	for k, w := range []float64{71428.5714286, -14285.7142857, -57142.8571429} {
		near(t, fmt.Sprintf("i'(0+)[%d]", k), rates[k], w, ten)
		s := 0.0
		for _, c := range r.Circuits {
			s += c.Drive[k] * c.Drive[0] * 100 / c.L
		}
		near(t, fmt.Sprintf("i'(0+)[%d] of the circuits", k), s, w, ten)
	}
	for _, c := range []struct {
		t, volts float64
		i        []float64
	}{
		{0, 28.5714285714, []float64{0, 0, 0}},
		{1e-3, math.NaN(), []float64{58.6408580733, -12.2090532529, -46.4318048204}},
		{5e-3, 14.4544011288, []float64{152.3864746048, -36.9365366787, -115.4499379261}},
		{10e-3, math.NaN(), []float64{172.6074573464, -48.0868882455, -124.5205691010}},
		{10, 11.7647058824, []float64{176.4705882353, -58.8235294118, -117.6470588235}},
	} {
		i := step(r, v, c.t)
		for k, w := range c.i {
			near(t, fmt.Sprintf("i[%d] at %g s", k, c.t), i[k], w, ten)
		}
		if !math.IsNaN(c.volts) {
			inner := make([]float64, 1)
			p.InteriorVoltages(inner, v, i)
			near(t, fmt.Sprintf("v_int at %g s", c.t), inner[0], c.volts, ten)
		}
	}
}

// E3: the 50 Hz Kron reduction of the star, and what reading it as RL branches
// gives at 50 Hz, at 1 kHz and as a circuit.
func TestPlainBranches(t *testing.T) {
	n, keep := mixedStar()
	s50 := complex(0, 2*math.Pi*50)
	y, err := n.Admittance(s50)
	if err != nil {
		t.Fatal(err)
	}
	k, err := KronPhasor(y, keep)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		i, j int
		y    complex128
	}{
		{0, 1, complex(0.2001009709, -0.2324607545)},
		{0, 2, complex(0.8956034430, -0.6144606272)},
		{1, 2, complex(0.2574026028, -0.9379950954)},
	} {
		nearC(t, fmt.Sprintf("y%d%d", c.i+1, c.j+1), -k.At(c.i, c.j), c.y, ten)
	}
	for _, c := range []struct {
		f    float64
		r, l [3]float64 // 1-2, 1-3, 2-3; ohm, mH
	}{
		{50, [3]float64{2.12696, 0.75920, 0.27207}, [3]float64{7.8652013, 1.6580003, 3.1558607}},
		{1000, [3]float64{2.29939, 0.75003, 0.10151}, [3]float64{7.0030366, 1.7497468, 3.4969795}},
	} {
		m, dev, err := PlainBranches(n, keep, c.f)
		if err != nil {
			t.Fatal(err)
		}
		for k, b := range m.Branches {
			near(t, fmt.Sprintf("%g Hz: R of branch %d", c.f, k), b.R, c.r[k], 6e-6)
			near(t, fmt.Sprintf("%g Hz: L of branch %d", c.f, k), b.L*1e3, c.l[k], 6e-8)
		}
		for _, d := range dev {
			if d.Relative < 1e-3 && d.Frequency < 2*c.f {
				t.Errorf("plain branches of %g Hz deviate by %g at %g Hz: too good", c.f, d.Relative, d.Frequency)
			}
		}
		if c.f == 50 {
			// As a circuit the mesh has three modes, and they are wrong.
			loops, err := Reduce(Network{Nodes: 4, Branches: m.Branches}, keep)
			if err != nil {
				t.Fatal(err)
			}
			p, err := Project(Network{Nodes: 3, Branches: m.Branches}, keep)
			if err != nil {
				t.Fatal(err)
			}
			if trace := mat.Trace(p.Pi()); trace != 3 {
				t.Errorf("%g states, want 3", trace)
			}
			for k, w := range []float64{86.21, 270.43, 457.90} {
				rate := loops.Circuits[k].Rate()
				near(t, fmt.Sprintf("mode %d of the 50 Hz mesh", k), rate, w, 0.006/w)
			}
		}
	}
	// DC: 1.7, 0.85, 0.34 ohm.
	r, err := Reduce(n, keep)
	if err != nil {
		t.Fatal(err)
	}
	dc := r.Admittance(0)
	for k, w := range map[[2]int]float64{{0, 1}: 1.7, {0, 2}: 0.85, {1, 2}: 0.34} {
		nearC(t, fmt.Sprintf("DC resistance %v", k), -1/dc.At(k[0], k[1]), complex(w, 0), 1e-12)
	}
	// One ratio: exact everywhere.
	even, keep := evenStar()
	_, dev, err := PlainBranches(even, keep, 50)
	if err != nil {
		t.Fatal(err)
	}
	if len(dev) != 4 {
		t.Errorf("%d deviations, want 4", len(dev))
	}
	for _, d := range dev {
		if d.Relative > 1e-13 {
			t.Errorf("one ratio R/L: deviation %g at %g Hz", d.Relative, d.Frequency)
		}
	}
	// A star of an inductor between two resistors has no RL mesh: between the
	// resistors' ends the inductor's shunting gives a negative resistance or
	// inductance.
	odd, keep := star([]float64{1, 1, 1e-3}, []float64{1e-6, 1e-6, 0.1})
	if _, _, err := PlainBranches(odd, keep, 50); err == nil || !strings.Contains(err.Error(), "no branch has a negative value") {
		t.Errorf("error %v", err)
	}
}

// A series connection is one circuit of the sums, branches in parallel stay as
// they are, and a dead end vanishes.
func TestSimpleShapes(t *testing.T) {
	for _, c := range []struct {
		name string
		n    Network
		keep []int
		want []Circuit
	}{
		{"series", Network{3, []Branch{{0, 1, 1, 2e-3}, {2, 1, 3, 1e-3}}}, []int{0, 2}, []Circuit{{4, 3e-3, []float64{1, -1}}}},
		{"series with a stub", Network{4, []Branch{{0, 1, 1, 2e-3}, {1, 2, 3, 1e-3}, {1, 3, 1, 1}}}, []int{0, 2}, []Circuit{{4, 3e-3, []float64{1, -1}}}},
		{"parallel", Network{2, []Branch{{0, 1, 1, 2e-3}, {1, 0, 6, 3e-3}}}, []int{0, 1}, []Circuit{{1, 2e-3, []float64{1, -1}}, {6, 3e-3, []float64{1, -1}}}},
		{"equal ones", Network{2, []Branch{{0, 1, 2, 2e-3}, {1, 0, 3, 3e-3}}}, []int{0, 1}, []Circuit{{1.2, 1.2e-3, []float64{1, -1}}}},
		{"load behind a line", Network{2, []Branch{{0, 1, 1, 2e-3}, {1, Ground, 9, 0}}}, []int{0}, []Circuit{{10, 2e-3, []float64{1}}}},
		{"dead end", Network{3, []Branch{{0, 1, 1, 2e-3}, {1, 2, 1, 1e-3}}}, []int{0}, nil},
		{"loop inside", Network{4, []Branch{{0, 1, 1, 1e-3}, {1, 2, 1, 1e-3}, {1, 2, 2, 1e-3}, {2, 1, 5, 1e-3}}}, []int{0}, nil},
		{"island apart", Network{4, []Branch{{0, 1, 1, 1e-3}, {2, 3, 1, 1e-3}, {2, 3, 2, 1e-3}}}, []int{0, 1}, []Circuit{{1, 1e-3, []float64{1, -1}}}},
	} {
		r, err := Reduce(c.n, c.keep)
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		if len(r.Circuits) != len(c.want) || len(r.Resistive) != 0 {
			t.Errorf("%s: %+v, want %+v", c.name, r.Circuits, c.want)
			continue
		}
		for k, w := range c.want {
			g := r.Circuits[k]
			near(t, c.name+": R", g.R, w.R, 1e-12)
			near(t, c.name+": L", g.L/w.L, 1, 1e-12)
			for j := range w.Drive {
				near(t, c.name+": drive", g.Drive[j], w.Drive[j], 1e-12)
			}
		}
	}
}

func TestFaults(t *testing.T) {
	_, err := Reduce(Network{2, []Branch{{0, 5, 1, 1}, {1, 1, 1, 1}, {0, 1, -1, math.NaN()}, {0, 1, 0, 0}}}, []int{0, 0, 9})
	for _, w := range []string{"branch 0: node 5", "branch 1: both ends", "R = -1", "L = NaN", "R = 0 and L = 0", "listed twice", "kept node 9"} {
		if err == nil || !strings.Contains(err.Error(), w) {
			t.Errorf("error lacks %q: %v", w, err)
		}
	}
	if _, err := Reduce(Network{1, nil}, nil); err == nil {
		t.Error("no kept node accepted")
	}
	if r, err := Reduce(Network{1, nil}, []int{0}); err != nil || len(r.Circuits) != 0 {
		t.Errorf("no branches: %v, %v", r, err)
	}
	if _, err := Project(Network{2, []Branch{{0, 1, 1, 0}}}, []int{0}); err == nil || !strings.Contains(err.Error(), "want L > 0") {
		t.Errorf("Project without L: %v", err)
	}
	if _, err := Project(Network{3, []Branch{{0, 1, 1, 1}}}, []int{0}); err == nil {
		t.Error("Project with a node that hangs in the air accepted")
	}
	y := mat.NewCDense(2, 2, []complex128{1, 0, 0, 0})
	if _, err := KronPhasor(y, []int{0}); err == nil || !strings.Contains(err.Error(), "node 1 can't be eliminated") {
		t.Errorf("KronPhasor of a node in the air: %v", err)
	}
	if _, err := KronPhasor(mat.NewCDense(2, 1, nil), []int{0}); err == nil {
		t.Error("matrix that isn't square accepted")
	}
	if _, _, err := PlainBranches(Network{2, []Branch{{0, 1, 1, 1}}}, []int{0, 1}, 0); err == nil {
		t.Error("frequency 0 accepted")
	}
	if _, err := (Network{2, []Branch{{0, 1, 0, 1}}}).Admittance(0); err == nil || !strings.Contains(err.Error(), "R + sL is 0") {
		t.Errorf("lossless branch at s = 0: %v", err)
	}
}

// A star of three different legs is two RL circuits, driven by combinations of the
// voltages at its ends.
func ExampleReduce() {
	n := Network{Nodes: 4, Branches: []Branch{
		{From: 0, To: 3, R: 0.5, L: 1e-3},
		{From: 1, To: 3, R: 0.2, L: 2e-3},
		{From: 2, To: 3, R: 0.1, L: 0.5e-3},
	}}
	r, err := Reduce(n, []int{0, 1, 2})
	if err != nil {
		fmt.Println(err)
		return
	}
	for _, c := range r.Circuits {
		fmt.Printf("R = %.5f ohm, L = %.5f mH, decays at %.3f 1/s, drive %.4f\n", c.R, c.L*1e3, c.Rate(), c.Drive)
	}
	// Output:
	// R = 0.28628 ohm, L = 2.41742 mH, decays at 118.424 1/s, drive [-0.0966 1.0000 -0.9034]
	// R = 0.57732 ohm, L = 1.40760 mH, decays at 410.147 1/s, drive [1.0000 -0.1449 -0.8551]
}

func BenchmarkReduce(b *testing.B) {
	rng := rand.New(rand.NewPCG(9, 9))
	n := Network{Nodes: 101}
	var keep []int
	for k := 1; k <= 100; k++ {
		n.Branches = append(n.Branches, Branch{From: k, To: rng.IntN(k), R: rng.Float64(), L: 1e-3 * rng.Float64()},
			Branch{From: k, To: Ground, R: 10 * rng.Float64(), L: 1e-2 * rng.Float64()})
		if k%5 == 0 {
			keep = append(keep, k)
		}
	}
	for b.Loop() {
		if _, err := Reduce(n, keep); err != nil {
			b.Fatal(err)
		}
	}
}
