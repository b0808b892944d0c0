package solvers_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"islet/solvers"
	"islet/solvers/testproblems"
)

// coil is an inductor with resistance between two nodes of one component,
// L x' = v0 - v1 - r x; the nodes of coils alone have a hidden equation.
type coil struct{ r, l float64 }

func (c coil) Dims() (int, int)         { return 2, 1 }
func (c coil) Mass(port, own []float64) { clear(port); own[0] = c.l }
func (c coil) Eval(flow, rate []float64, t float64, v, x []float64) error {
	flow[0], flow[1] = x[0], -x[0]
	rate[0] = v[0] - v[1] - c.r*x[0]
	return nil
}

// tank is a capacitor and a cubic resistor to ground at one node.
type tank struct{ c, g float64 }

func (k tank) Dims() (int, int)         { return 1, 0 }
func (k tank) Mass(port, own []float64) { port[0] = k.c }
func (k tank) Eval(flow, rate []float64, t float64, v, x []float64) error {
	flow[0] = k.g * (v[0] + v[0]*v[0]*v[0])
	return nil
}

// assembled is a network with a capacitor node, a node of coils alone, a node
// with a resistor alone, a dead node with a block that is off.
func assembled(t *testing.T) *solvers.Network {
	t.Helper()
	n := solvers.NewNetwork(4, 1)
	add := func(b solvers.Block, at []int, scale []float64) {
		if _, err := n.Add(b, at, scale, nil); err != nil {
			t.Fatal(err)
		}
	}
	add(coil{1, 0.1}, []int{0, 1}, []float64{3})
	add(coil{2, 0.3}, []int{1, 2}, nil)
	add(coil{2, 0.3}, []int{2, 3}, nil)
	add(tank{1e-3, 0.5}, []int{0}, nil)
	add(tank{0, 0.2}, []int{2}, nil)
	n.SetNodeScale(2, 7)
	if err := n.Configure(solvers.Configuration{
		Off:    []bool{false, false, true, false, false},
		Dead:   []bool{false, false, false, true},
		Hidden: []solvers.Combination{{Row: 1, Terms: []solvers.Term{{Component: 1, Weight: 1}}}},
	}); err != nil {
		t.Fatal(err)
	}
	return n
}

// A assembled must be the matrix that Solve solves with: A (solution of b) = b.
func TestAssemblyIsTheMatrixOfSolve(t *testing.T) {
	systems := map[string]solvers.System{"network": assembled(t)}
	for _, c := range []*testproblems.Case{testproblems.TransistorAmplifier(), testproblems.RobertsonDAE(), testproblems.HIRES()} {
		s, err := c.Problem.System()
		if err != nil {
			t.Fatal(err)
		}
		systems[c.Name] = s
	}
	rng := rand.New(rand.NewPCG(1, 2))
	for name, s := range systems {
		a := s.(solvers.MatrixSource).Assembly()
		n := s.Dim()
		y, b, x, back := make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n)
		for range 10 {
			for i := range y {
				y[i], b[i] = 0.2*rng.Float64(), rng.NormFloat64()
			}
			alpha := math.Exp(8 * rng.Float64())
			if err := s.Linearise(0.01, y); err != nil {
				t.Fatal(err)
			}
			if err := s.Factor(alpha); err != nil {
				t.Fatalf("%s: %v", name, err)
			}
			copy(x, b)
			s.Solve(x)
			a.Fill(alpha)
			a.A.MulVec(back, x)
			for i := range b {
				// Backward stable elimination: the residual is small
				// against |A||x|, a bound for which is taken.
				size := 0.0
				for _, v := range x {
					size = math.Max(size, math.Abs(v))
				}
				if math.Abs(back[i]-b[i]) > 1e-13*(1+a.A.Norm1()*size) {
					t.Errorf("%s: row %d: A x = %g, want %g", name, i, back[i], b[i])
				}
			}
		}
		// Its mass is that of AddMass.
		for i := range x {
			x[i] = rng.NormFloat64()
			back[i], b[i] = 0, 0
		}
		s.AddMass(b, 2, x)
		for _, e := range a.Mass {
			back[e.Row] += 2 * e.Value * x[e.Col]
		}
		for i := range b {
			if math.Abs(b[i]-back[i]) > 1e-15*(1+math.Abs(b[i])) {
				t.Errorf("%s: row %d: mass times vector %g, want %g", name, i, back[i], b[i])
			}
		}
		if !a.Current() {
			t.Errorf("%s: assembly is not current", name)
		}
		if k := testing.AllocsPerRun(5, func() { a.Fill(3) }); k != 0 {
			t.Errorf("%s: Fill allocates %g times", name, k)
		}
	}
}

func TestAssemblyAfterConfigure(t *testing.T) {
	n := assembled(t)
	a := n.Assembly()
	if err := n.Configure(solvers.Configuration{}); err != nil {
		t.Fatal(err)
	}
	if a.Current() {
		t.Error("assembly is current after Configure")
	}
	if !n.Assembly().Current() {
		t.Error("a fresh assembly is not current")
	}
}

func TestScales(t *testing.T) {
	scale, absolute := assembled(t).Scales()
	want := []float64{3, 1, 1, 1, 1, 7, 1}
	if len(scale) != len(want) || len(absolute) != len(want) {
		t.Fatalf("%d scales, %d marks, want %d", len(scale), len(absolute), len(want))
	}
	for i := range want {
		if scale[i] != want[i] || absolute[i] {
			t.Errorf("unknown %d: scale %g, absolute %v, want %g, false", i, scale[i], absolute[i], want[i])
		}
	}
	s, err := (&solvers.Problem{N: 2, F: func(dst []float64, t float64, y []float64) error { return nil },
		Scale: []float64{2, 3}, Absolute: []bool{false, true}}).System()
	if err != nil {
		t.Fatal(err)
	}
	scale, absolute = s.(solvers.Scaled).Scales()
	if scale[0] != 2 || scale[1] != 3 || absolute[0] || !absolute[1] {
		t.Errorf("scales %v, marks %v", scale, absolute)
	}
}
