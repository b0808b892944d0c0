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
