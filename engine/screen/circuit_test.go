package screen

import (
	"math"
	"math/cmplx"
	"strings"
	"testing"
)

// Two sources over a lossless line cut into pieces: (3/2) E1 E2/X of the whole, however
// many buses there are, and P = a sin(delta), the power-angle curve of the textbooks.
func TestReduceLine(t *testing.T) {
	const e, x = 326.0, 1.0
	for _, pieces := range []int{1, 2, 7} {
		delta := 0.5
		p := 1.5 * e * e / x * math.Sin(delta)
		c := &Circuit{Sources: []CircuitSource{
			{Node: Node{Name: "a", D: 1, P: p}, E: cmplx.Rect(e, delta), Z: complex(0, 0.2*x), Bus: 0, Gives: p},
			{Node: Node{Name: "b", D: 1, P: -p}, E: e, Z: complex(0, 0.3*x), Bus: pieces, Gives: -p},
		}}
		for range pieces + 1 {
			c.Buses = append(c.Buses, CircuitBus{Name: "bus", V: e})
		}
		for k := range pieces {
			c.Branches = append(c.Branches, CircuitBranch{Name: "piece", From: k, To: k + 1, Y: 1 / complex(0, 0.5*x/float64(pieces)), KFrom: 1, KTo: 1})
		}
		red, err := c.Reduce()
		if err != nil {
			t.Fatal(err)
		}
		near(t, "coupling", red.Edges[0].A, 1.5*e*e/x, 1e-6)
		near(t, "share", red.Nodes[0].Share, 0, 1e-6)
		near(t, "resistive part", red.Conductance, 0, 1e-12)
		r, err := Screen(&red.Network, nil)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "angle", r.Widest, delta, 1e-9)
		near(t, "margin", r.MarginLost, 1/math.Sin(delta), 1e-9)
		near(t, "given", r.Sources[0].Given, p, 1e-6)
	}
}

// A star of three becomes a delta: b_ij = b_i b_j/(b_1 + b_2 + b_3), and what is drawn at
// its middle is shared as b_i/(b_1 + b_2 + b_3), a current divider.
func TestReduceStar(t *testing.T) {
	b := []float64{1, 2, 5}
	const e = 100.0
	c := &Circuit{Buses: []CircuitBus{{Name: "middle", V: e, Draw: 600}}}
	for _, x := range b {
		c.Sources = append(c.Sources, CircuitSource{Node: Node{Name: "s", D: 1}, E: e, Z: 1 / complex(0, -x), Gives: math.NaN()})
	}
	r, err := c.Reduce()
	if err != nil {
		t.Fatal(err)
	}
	for _, edge := range r.Edges {
		near(t, "coupling", edge.A, 1.5*e*e*b[edge.From]*b[edge.To]/8, 1e-9)
	}
	for i := range b {
		near(t, "share", r.Nodes[i].Share, 600*b[i]/8, 1e-9)
	}
}

// A transformer's ratio goes into the coupling, not into the angle: seen from its
// low-voltage side, E1 is E1 LV/HV.
func TestReduceTransformer(t *testing.T) {
	c := &Circuit{
		Sources: []CircuitSource{
			{Node: Node{Name: "hv", D: 1}, E: 1000, Z: 1i * 20, Bus: 0, Gives: math.NaN()},
			{Node: Node{Name: "lv", D: 1}, E: 90, Z: 1i * 0.1, Bus: 1, Gives: math.NaN()},
		},
		Buses:    []CircuitBus{{Name: "h", V: 1000}, {Name: "l", V: 100}},
		Branches: []CircuitBranch{{Name: "t", From: 0, To: 1, Y: 1 / (1i * 0.5), KFrom: 10, KTo: 1}},
	}
	r, err := c.Reduce()
	if err != nil {
		t.Fatal(err)
	}
	near(t, "coupling", r.Edges[0].A, 1.5*100*90/(0.2+0.5+0.1), 1e-9)
}

// Resistance is told of, and a bus without a source.
func TestReduceTells(t *testing.T) {
	c := &Circuit{
		Sources: []CircuitSource{
			{Node: Node{Name: "a", D: 1}, E: 100, Z: complex(0.3, 0.1), Bus: 0, Gives: math.NaN()},
			{Node: Node{Name: "b", D: 1}, E: 100, Z: complex(0.3, 0.1), Bus: 0, Gives: math.NaN()},
		},
		Buses: []CircuitBus{{Name: "fed", V: 100}, {Name: "dark", V: 100, Draw: 50}},
	}
	r, err := c.Reduce()
	if err != nil {
		t.Fatal(err)
	}
	near(t, "resistive part", r.Conductance, 3, 1e-12)
	if len(r.Loose) != 1 || r.Loose[0] != "dark" {
		t.Errorf("loose %v", r.Loose)
	}
	for want, change := range map[string]func(c *Circuit){
		"stands at bus 7 of 2":   func(c *Circuit) { c.Sources[0].Bus = 7 },
		"inner voltage of (0+0i": func(c *Circuit) { c.Sources[0].E = 0 },
		"stands behind (0+0i":    func(c *Circuit) { c.Sources[1].Z = 0 },
		"bus fed has 0 V":        func(c *Circuit) { c.Buses[0].V = 0 },
		"joins buses 0 and 9":    func(c *Circuit) { c.Branches = []CircuitBranch{{Name: "x", To: 9, Y: 1, KFrom: 1, KTo: 1}} },
		"turns ratios of 0 and":  func(c *Circuit) { c.Branches = []CircuitBranch{{Name: "x", To: 1, Y: 1, KTo: 1}} },
	} {
		bad := *c
		bad.Sources = append([]CircuitSource(nil), c.Sources...)
		bad.Buses = append([]CircuitBus(nil), c.Buses...)
		change(&bad)
		if _, err := bad.Reduce(); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v, want %q", err, want)
		}
	}
}
