package screen

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

func near(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s is %.12g, want %.12g", what, got, want)
	}
}

// The star of three inverters and a load in section D of the check values, after
// J. W. Simpson-Porco, F. Dorfler, F. Bullo, Automatica 49(9), 2013; the values are
// computed from its closed forms.
func TestStar(t *testing.T) {
	d, ratings := []float64{2, 1.5, 1}, []float64{0.8, 0.6, 0.4}
	n := &Network{Nodes: []Node{{Name: "load", P: -1.5}}}
	for i, a := range []float64{5, 4, 2.5} {
		n.Nodes = append(n.Nodes, Node{Name: []string{"one", "two", "three"}[i], D: d[i], P: ratings[i], Rating: ratings[i]})
		n.Edges = append(n.Edges, Edge{Name: n.Nodes[i+1].Name, From: i + 1, To: 0, A: a})
	}
	r, err := Screen(n, nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "w_sync", r.Speed, 0.0666666667, 1e-10)
	for i, want := range []float64{0.6666666667, 0.5, 0.3333333333} {
		near(t, "power of "+r.Sources[i].Name, r.Sources[i].Given, want, 1e-10)
		near(t, "share of "+r.Sources[i].Name, r.Sources[i].Given/r.Sources[i].P, 0.8333333333333, 1e-10)
	}
	near(t, "Gamma", r.Loading, 0.1333333333, 1e-10)
	for i, want := range []float64{7.662255661, 7.180755782, 7.662255661} {
		near(t, "angle", r.Flows[i].Angle*180/math.Pi, want, 1e-8)
	}
	if !r.Tree || !r.InStep || !r.Proportional || r.Tracked || !strings.Contains(r.NotTracked, "exceed what is drawn by 0.3 W") {
		t.Errorf("%+v", r)
	}
	near(t, "margin", r.MarginLost, 7.5, 1e-6)
	if len(r.Modes) != 2 {
		t.Fatalf("modes %v", r.Modes)
	}
	near(t, "slower mode", r.Modes[0], -2.477678125, 2e-9)
	near(t, "faster mode", r.Modes[1], -2.587249330, 2e-9)
	// One line weaker than what it must carry: no state in step, exactly.
	n.Edges[0].A = 0.66
	if r, err = Screen(n, nil); err != nil || r.InStep || r.Critical != "one" || r.MarginLost > 1 {
		t.Errorf("%+v, %v", r, err)
	}
	n.Edges[0].A = 0.67
	if r, err = Screen(n, nil); err != nil || !r.InStep {
		t.Errorf("%+v, %v", r, err)
	}
}

// The ring of four with a chord in section D of the check values, after F. Dorfler,
// M. Chertkov, F. Bullo, PNAS 110(6), 2013; the values are computed.
func TestRingWithChord(t *testing.T) {
	n := &Network{}
	for i, w := range []float64{0.9, -0.4, 0.3, -0.8} {
		n.Nodes = append(n.Nodes, Node{Name: string(rune('a' + i)), D: 1, P: w})
	}
	for _, e := range []struct {
		i, j int
		a    float64
	}{{1, 2, 1.5}, {2, 3, 1.0}, {3, 4, 1.2}, {4, 1, 0.8}, {1, 3, 0.7}} {
		n.Edges = append(n.Edges, Edge{Name: "x", From: e.i - 1, To: e.j - 1, A: e.a})
	}
	r, err := Screen(n, &Options{Precision: 1e-10})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "norm", r.Loading, 0.5146067416, 1e-10)
	near(t, "certified angle", r.Certified*180/math.Pi, 30.97117267, 1e-7)
	near(t, "true angle", r.Widest*180/math.Pi, 30.48105745, 1e-7)
	theta := []float64{0, -0.2403018334, -0.1972822622, -0.5319948119}
	for k, e := range n.Edges {
		near(t, "angle", r.Flows[k].Angle, theta[e.From]-theta[e.To], 1e-9)
	}
	near(t, "factor at 90 degrees", r.Margin90, 2.264622609, 1e-7)
	near(t, "factor at which the state is lost", r.MarginLost, 2.362652604, 1e-6)
	near(t, "factor the norm certifies", 1/r.Loading, 1.943231441, 1e-8)
	if r.Tree || !r.InStep {
		t.Errorf("%+v", r)
	}
	for k, want := range []float64{0.2364044944, -0.0453932584, 0.3235955056, -0.5146067416, 0.1910112360} {
		near(t, "B' L^+ w", r.Flows[k].Linear/n.Edges[k].A, want, 1e-10)
	}
	// At the last factor that the norm certifies the largest angle is 67.632 degrees.
	scaled := &Network{Edges: n.Edges}
	for _, v := range n.Nodes {
		v.P *= 1.943231441
		scaled.Nodes = append(scaled.Nodes, v)
	}
	if at, err := Screen(scaled, nil); err != nil || !at.InStep {
		t.Fatalf("%+v, %v", at, err)
	} else {
		near(t, "angle at the certified factor", at.Widest*180/math.Pi, 67.632, 5e-4)
	}
	// Beyond its end there is nothing in step.
	for i := range n.Nodes {
		n.Nodes[i].P *= 2.3
	}
	if r, err = Screen(n, nil); err != nil || r.InStep {
		t.Errorf("at 2.3 an edge has more than 90 degrees: %+v, %v", r, err)
	}
}

// Two sources: sin(delta) = p/a, the swing equation's textbook case.
func TestTwo(t *testing.T) {
	n := &Network{
		Nodes: []Node{{Name: "a", D: 1, Speed: 1, P: 3}, {Name: "b", D: 3, Speed: 1, P: -1}},
		Edges: []Edge{{Name: "first", From: 0, To: 1, A: 3}, {Name: "second", From: 1, To: 0, A: 2}},
	}
	r, err := Screen(n, nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "speed", r.Speed, 1.5, 1e-14)
	// a gives 3 - 1 * 0.5, over parallel lines of 5 in all.
	near(t, "flow", r.Flows[0].P, 2.5, 1e-12)
	near(t, "angle", r.Flows[0].Angle, math.Asin(0.5), 1e-12)
	near(t, "margin", r.MarginLost, 2, 1e-12)
	if !r.Tree || !strings.Contains(r.Critical, "first and second") {
		t.Errorf("%+v", r)
	}
	// A source that holds its speed takes up the balance; the other follows it.
	n.Nodes[1].D = math.Inf(1)
	n.Nodes[1].Speed = 2
	if r, err = Screen(n, nil); err != nil {
		t.Fatal(err)
	}
	near(t, "speed", r.Speed, 2, 0)
	near(t, "power of a", r.Sources[0].Given, 2, 1e-14)
	near(t, "power of b", r.Sources[1].Given, -2, 1e-14)
	if r.Tracked || !strings.Contains(r.NotTracked, "b holds another speed") {
		t.Errorf("%+v", r)
	}
}

// A ring of equal oscillators with nothing to carry: no angle, and no end.
func TestIdleRing(t *testing.T) {
	n := &Network{}
	for i := range 6 {
		n.Nodes = append(n.Nodes, Node{Name: "n", D: 1})
		n.Edges = append(n.Edges, Edge{Name: "e", From: i, To: (i + 1) % 6, A: 1})
	}
	r, err := Screen(n, nil)
	if err != nil {
		t.Fatal(err)
	}
	if !r.InStep || !r.Tracked || r.Widest != 0 || !math.IsInf(r.MarginLost, 1) {
		t.Errorf("%+v", r)
	}
}

// A uniform ring of n whose first and second neighbours ... feed each other: with
// p at one node and -p at the opposite one, half goes each way, sin = p/(2a).
func TestRingHalves(t *testing.T) {
	n := &Network{}
	for i := range 6 {
		n.Nodes = append(n.Nodes, Node{Name: "n", D: 1})
		n.Edges = append(n.Edges, Edge{Name: "e", From: i, To: (i + 1) % 6, A: 2})
	}
	n.Nodes[0].P, n.Nodes[3].P = 1, -1
	r, err := Screen(n, nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "angle", r.Widest, math.Asin(0.25), 1e-12)
	near(t, "margin", r.MarginLost, 4, 1e-5)
}

func TestFaults(t *testing.T) {
	two := func(change func(n *Network)) *Network {
		n := &Network{Nodes: []Node{{Name: "a", D: 1}, {Name: "b", D: 1}}, Edges: []Edge{{Name: "e", From: 0, To: 1, A: 1}}}
		change(n)
		return n
	}
	for want, n := range map[string]*Network{
		"no nodes":              {},
		"D is -1":               two(func(n *Network) { n.Nodes[0].D = -1 }),
		"P is NaN":              two(func(n *Network) { n.Nodes[1].P = math.NaN() }),
		"joins nodes 0 and 5":   two(func(n *Network) { n.Edges[0].To = 5 }),
		"can carry 0 W":         two(func(n *Network) { n.Edges[0].A = 0 }),
		"2 parts":               two(func(n *Network) { n.Edges = nil }),
		"no source sets":        two(func(n *Network) { n.Nodes[0].D, n.Nodes[1].D = 0, 0 }),
		"hold different speeds": two(func(n *Network) { n.Nodes[0].D, n.Nodes[1].D, n.Nodes[1].Speed = math.Inf(1), math.Inf(1), 3 }),
		"both hold the speed":   two(func(n *Network) { n.Nodes[0].D, n.Nodes[1].D = math.Inf(1), math.Inf(1) }),
	} {
		if _, err := Screen(n, nil); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v, want %q", err, want)
		}
	}
	if _, err := Screen(two(func(*Network) {}), &Options{Precision: -1}); err == nil {
		t.Error("a precision of -1 is taken")
	}
}

// Sources hang on a meshed network by branches of their own: what those carry is
// known, and the weakest of them bounds the margin exactly.
func TestLeaves(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 3))
	n := &Network{}
	const ring = 8
	for i := range ring {
		n.Nodes = append(n.Nodes, Node{Name: "bus", P: -1 - rng.Float64()})
		n.Edges = append(n.Edges, Edge{Name: "ring", From: i, To: (i + 1) % ring, A: 20 + 10*rng.Float64()})
	}
	n.Edges = append(n.Edges, Edge{Name: "chord", From: 0, To: 4, A: 15})
	for i := range ring {
		n.Nodes = append(n.Nodes, Node{Name: "source", D: 1 + rng.Float64(), P: 3 * rng.Float64()})
		n.Edges = append(n.Edges, Edge{Name: "coupling", From: ring + i, To: i, A: 12})
	}
	r, err := Screen(n, nil)
	if err != nil {
		t.Fatal(err)
	}
	// Every node's balance holds in the state found.
	sum := make([]float64, len(n.Nodes))
	for _, f := range r.Flows {
		near(t, "flow", f.P, f.A*math.Sin(f.Angle), 1e-12)
		sum[f.From] += f.P
		sum[f.To] -= f.P
	}
	weakest := math.Inf(1)
	for i := range ring {
		near(t, "balance at a bus", sum[i], n.Nodes[i].P, 1e-9)
		near(t, "balance at a source", sum[ring+i], r.Sources[i].Given, 1e-9)
		weakest = math.Min(weakest, 12/math.Abs(r.Sources[i].Given))
	}
	if r.Tree || !r.InStep {
		t.Errorf("%+v", r)
	}
	near(t, "margin of the weakest coupling", r.MarginLost, weakest, 1e-9*weakest)
	// With strong couplings the ring decides.
	for i := range n.Edges {
		if n.Edges[i].Name == "coupling" {
			n.Edges[i].A = 1e4
		}
	}
	if r, err = Screen(n, nil); err != nil || !(r.MarginLost > weakest) || math.IsInf(r.MarginLost, 0) || r.Margin90 > r.MarginLost {
		t.Errorf("%+v, %v", r, err)
	}
}

// Two inverters of m = 1e-4 and 2e-4 rad/s/W share 9 kW, then the first is set to 2 kW:
// section B1 of the check values, from dw = -(P_L - sum P*)/sum(1/m).
func TestSharing(t *testing.T) {
	n := &Network{
		Nodes: []Node{
			{Name: "first", D: 1e4, Speed: 100 * math.Pi},
			{Name: "second", D: 5e3, Speed: 100 * math.Pi},
			{Name: "load", P: -9e3},
		},
		Edges: []Edge{{Name: "one", From: 0, To: 2, A: 1e5}, {Name: "two", From: 1, To: 2, A: 1e5}},
	}
	for _, c := range []struct{ set, speed, first, second float64 }{
		{0, -0.6, 6000, 3000},
		{2000, -0.4666666667, 6666.666667, 2333.333333},
	} {
		n.Nodes[0].P = c.set
		r, err := Screen(n, nil)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "speed", r.Speed-100*math.Pi, c.speed, 1e-10)
		near(t, "first", r.Sources[0].Given, c.first, 1e-6)
		near(t, "second", r.Sources[1].Given, c.second, 1e-6)
	}
}

// Whether there is a state in step doesn't depend on D where set powers balance what is
// drawn: Simpson-Porco, Dorfler, Bullo, Automatica 49(9), 2013.
func TestExistenceDoesNotDependOnDroop(t *testing.T) {
	var first *Result
	for _, d := range [][3]float64{{1, 1, 1}, {1e-3, 7, 20}, {500, 0.1, 3}} {
		n := &Network{
			Nodes: []Node{{Name: "a", D: d[0], P: 1}, {Name: "b", D: d[1], P: 0.5}, {Name: "c", D: d[2], P: -1.5}},
			Edges: []Edge{{Name: "ab", From: 0, To: 1, A: 2}, {Name: "bc", From: 1, To: 2, A: 3}, {Name: "ca", From: 2, To: 0, A: 1}},
		}
		r, err := Screen(n, &Options{Precision: 1e-9})
		if err != nil {
			t.Fatal(err)
		}
		if first == nil {
			first = r
		}
		if !r.InStep || !r.Tracked {
			t.Errorf("%+v", r)
		}
		near(t, "margin", r.MarginLost, first.MarginLost, 1e-7)
	}
}

// A ring of n idle oscillators stands with angles wound q times round as well where
// 2 pi q/n < 90 degrees, with a sin(2 pi q/n) circulating, and doesn't where it is more.
// Source: Delabays, Coletta, Jacquod, J. Math. Phys. 57, 032701, 2016.
func TestRingWithWinding(t *testing.T) {
	for _, c := range []struct {
		n, q   int
		stands bool
	}{{6, 0, true}, {6, 1, true}, {6, -1, true}, {5, 1, true}, {3, 1, false}, {9, 2, true}, {7, 2, false}} {
		n := &Network{}
		theta, loop := make([]float64, c.n), make([]int, c.n)
		for i := range c.n {
			n.Nodes = append(n.Nodes, Node{Name: "n", D: 1})
			n.Edges = append(n.Edges, Edge{Name: "e", From: i, To: (i + 1) % c.n, A: 2})
			loop[i] = i
			theta[i] = 2*math.Pi*float64(c.q)*float64(i)/float64(c.n) + 0.05*math.Sin(3*float64(i))
		}
		angles, widest, err := Settle(n, theta)
		if c.stands != (err == nil) {
			t.Errorf("ring of %d wound %d times: %v", c.n, c.q, err)
		}
		if err != nil {
			continue
		}
		near(t, "angle across an edge", widest, 2*math.Pi*math.Abs(float64(c.q))/float64(c.n), 1e-9)
		if w := Winding(angles, loop); w != c.q {
			t.Errorf("ring of %d wound %d times, now %d", c.n, c.q, w)
		}
	}
}

// A loaded ring by a road of its own: round one loop the flows are f_k + c, and c the
// root of sum asin((f_k + c)/a_k) = 0, by bisection.
func TestLoadedRing(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 1))
	for range 20 {
		const size = 5
		n := &Network{}
		p := make([]float64, size)
		for i := 1; i < size; i++ {
			p[i] = 0.6 * (rng.Float64() - 0.5)
			p[0] -= p[i]
		}
		a, f := make([]float64, size), make([]float64, size)
		for i := range size {
			n.Nodes = append(n.Nodes, Node{Name: "n", D: 1, P: p[i]})
			a[i] = 1 + rng.Float64()
			n.Edges = append(n.Edges, Edge{Name: "e", From: i, To: (i + 1) % size, A: a[i]})
			f[i] = p[i]
			if i > 0 {
				f[i] += f[i-1]
			}
		}
		turn := func(c float64) (s float64) {
			for k := range f {
				s += math.Asin(math.Max(-1, math.Min(1, (f[k]+c)/a[k])))
			}
			return s
		}
		lo, hi := -3.0, 3.0
		for range 200 {
			if mid := (lo + hi) / 2; turn(mid) < 0 {
				lo = mid
			} else {
				hi = mid
			}
		}
		r, err := Screen(n, nil)
		if err != nil {
			t.Fatal(err)
		}
		if !r.InStep {
			t.Fatalf("%+v", r)
		}
		for k := range f {
			near(t, "flow", r.Flows[k].P, f[k]+lo, 1e-9)
		}
	}
}
