package bench

import (
	"context"
	"errors"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/cases"
	"islet/engine"
	"islet/engine/modes"
	"islet/engine/perunit"
	"islet/solvers"
)

// The harbour's stiff contacts leave its step control to the last digits once it has
// become an island: numbers of steps part by one or two, and waveforms with them.
var perUnitCases = []struct {
	name   string
	until  float64
	within float64 // of range
}{{"starter", 0.6, 1e-9}, {"harbour", 0.75, 3e-6}, {"droop3", 0.2, 1e-9}, {"cigre-lv", 0.7, 1e-7}, {"mesh-10", 1, 1e-9},
	{"short-lines", 0.2, 1e-9}}

// integratePU runs a case to a time by a method.
func integratePU(t *testing.T, name string, until float64, m solvers.Method) (*engine.Trace, solvers.Stats) {
	t.Helper()
	k, err := cases.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	sim, err := k.Start(&engine.Options{Method: m, Record: []string{"*.v", "*.p", "*.frequency"}, Sample: 5e-3, FixedFrame: true})
	if err != nil {
		t.Fatal(err)
	}
	tr, err := sim.Run(context.Background(), until)
	if err != nil {
		t.Fatalf("%s: %v", name, err)
	}
	return tr, sim.Stats()
}

// Cases integrated per unit, by bases that are anything but round, and in SI: the same
// steps, and the same waveforms to rounding.
func TestPerUnitTrajectories(t *testing.T) {
	for _, c := range perUnitCases {
		si, a := integratePU(t, c.name, c.until, solvers.Rodas5P)
		rng := rand.New(rand.NewPCG(5, 7))
		pu, b := integratePU(t, c.name, c.until, perunit.Method{Of: solvers.Rodas5P, Base: func(_ int, scale float64) float64 { return scale * math.Exp(3*rng.NormFloat64()) }})
		if d := a.Steps - b.Steps; d*d > 4 || c.name != "harbour" && (d != 0 || a.Evals != b.Evals) {
			t.Errorf("%s: %d steps in SI, %d per unit", c.name, a.Steps, b.Steps)
		}
		d := Compare(pu, si, 5e-3, flatChannel)
		t.Logf("%s: %d steps; per unit deviates by %.2g of range at most (%s)", c.name, a.Steps, d.Largest, d.Channel)
		if d.Largest > c.within || d.Channels < 5 {
			t.Errorf("%s: per unit deviates by %.2g of range (%s), %d channels", c.name, d.Largest, d.Channel, d.Channels)
		}
		// Time in radians: first steps after events are chosen a little
		// differently, so that waveforms agree to the tolerance.
		pu, _ = integratePU(t, c.name, c.until, perunit.Method{Of: solvers.Rodas5P, Time: 1 / (100 * math.Pi)})
		if d := Compare(pu, si, 5e-3, flatChannel); d.Largest > 2e-5 {
			t.Errorf("%s: in radians it deviates by %.2g of range (%s)", c.name, d.Largest, d.Channel)
		}
	}
}

// With powers of two for bases, which divide and multiply without rounding, every
// shipped case gives the bits it gives in SI. So what other bases change is rounding
// alone, where step control enlarges it too: in cigre-lv-plain, which is at rest before
// its events, it is the first steps after them.
func TestPerUnitSameBits(t *testing.T) {
	type run struct {
		name  string
		until float64
	}
	runs := []run{{"cigre-lv-plain", 0.7}, {"mesh-100", 1.1}}
	for _, c := range perUnitCases {
		runs = append(runs, run{c.name, c.until})
	}
	for _, c := range runs {
		si, a := integratePU(t, c.name, c.until, solvers.Rodas5P)
		rng := rand.New(rand.NewPCG(11, 13))
		pu, b := integratePU(t, c.name, c.until, perunit.Method{Of: solvers.Rodas5P, Base: func(int, float64) float64 { return math.Exp2(float64(rng.IntN(31) - 15)) }})
		if d := Compare(pu, si, 5e-3, flatChannel); d.Largest != 0 || d.Channels < 5 || a.Steps != b.Steps || a.Steps < 5 {
			t.Errorf("%s: deviates by %.2g of range (%s), %d steps for %d", c.name, d.Largest, d.Channel, b.Steps, a.Steps)
		}
	}
}

func linearOf(t *testing.T, name string) *modes.StateSpace {
	t.Helper()
	k, err := cases.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	sim, err := k.Start(&engine.Options{Record: []string{}})
	if err != nil {
		t.Fatal(err)
	}
	l, err := sim.Linearise(nil)
	if err != nil {
		t.Fatal(err)
	}
	s, err := modes.Reduce(l, true)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// basesOf draws bases for a system: those of unknowns and signals as the devices
// tell them, off by random factors.
func basesOf(s *modes.StateSpace, seed uint64) perunit.Scaling {
	rng := rand.New(rand.NewPCG(seed, 1))
	free := func(x float64) float64 { return x * math.Exp(2*rng.NormFloat64()) }
	out := perunit.Scaling{Time: 1 / (100 * math.Pi)}
	for _, u := range s.States {
		out.States = append(out.States, free(u.Base))
	}
	for range s.Inputs {
		out.Inputs = append(out.Inputs, free(1e3))
	}
	for range s.Outputs {
		out.Outputs = append(out.Outputs, free(1e2))
	}
	return out
}

// Linear systems per unit: eigenvalues times the base of time, transfer functions by
// the bases, and a change of bases is one more scaling.
func TestPerUnitLinear(t *testing.T) {
	for _, c := range perUnitCases {
		s := linearOf(t, c.name)
		one, two := basesOf(s, 1), basesOf(s, 2)
		pu, err := one.Apply(s)
		if err != nil {
			t.Fatal(err)
		}
		// From one set of bases to another, without SI between.
		direct, err := two.Apply(s)
		if err != nil {
			t.Fatal(err)
		}
		changed, err := perunit.Change(one, two).Apply(pu)
		if err != nil {
			t.Fatal(err)
		}
		n, _ := s.A.Dims()
		for i := range n {
			for j := range n {
				if a, b := direct.A.At(i, j), changed.A.At(i, j); math.Abs(a-b) > 1e-12*math.Abs(a) {
					t.Fatalf("%s: A[%d,%d] is %g by two scalings, %g by one", c.name, i, j, b, a)
				}
			}
		}
		chain := one.Then(perunit.Change(one, two))
		for i := range chain.States {
			if math.Abs(chain.States[i]-two.States[i]) > 1e-12*two.States[i] || math.Abs(chain.Time-two.Time) > 1e-12 {
				t.Fatalf("%s: bases multiply to %g, want %g", c.name, chain.States[i], two.States[i])
			}
		}
		// H_pu(s) = W^-1 H(s/T) U at a few points of the complex plane.
		for _, at := range []complex128{1i, 0.3 + 5i, -0.1 + 0.02i} {
			h := transfer(t, s, at/complex(one.Time, 0))
			hp := transfer(t, pu, at)
			size := 0.0
			for i := range h {
				for j := range h[i] {
					size = math.Max(size, cmplx.Abs(h[i][j])*one.Inputs[j]/one.Outputs[i])
				}
			}
			for i := range h {
				for j := range h[i] {
					want := h[i][j] * complex(one.Inputs[j]/one.Outputs[i], 0)
					// The entries of A span twelve decades (contacts, short
					// cables), and the dense solution keeps as many digits less.
					if cmplx.Abs(hp[i][j]-want) > 1e-5*cmplx.Abs(want)+1e-9*size {
						t.Errorf("%s: H[%d,%d](%v) is %v per unit, want %v", c.name, i, j, at, hp[i][j], want)
					}
				}
			}
		}
		// Eigenvalues, by the characteristic polynomial's logarithm: the trace
		// and the determinants of A - sI at points.
		tr, trp := 0.0, 0.0
		for i := range n {
			tr += s.A.At(i, i)
			trp += pu.A.At(i, i)
		}
		if math.Abs(trp-tr*one.Time) > 1e-10*math.Abs(trp) {
			t.Errorf("%s: eigenvalues sum to %g per unit, want %g", c.name, trp, tr*one.Time)
		}
		a, b := spectrum(t, s.A), spectrum(t, pu.A)
		for _, z := range a {
			best := math.Inf(1)
			for _, w := range b {
				best = math.Min(best, cmplx.Abs(w-z*complex(one.Time, 0)))
			}
			if best > 1e-5*(1e-2+cmplx.Abs(z)*one.Time) {
				t.Errorf("%s: eigenvalue %v has no partner per unit: nearest is %.3g off", c.name, z, best)
			}
		}
	}
}

func spectrum(t *testing.T, a *mat.Dense) []complex128 {
	t.Helper()
	var e mat.Eigen
	if !e.Factorize(a, mat.EigenNone) {
		t.Fatal("no eigenvalues")
	}
	return e.Values(nil)
}

// transfer is C (sI - A)^-1 B + D.
func transfer(t *testing.T, s *modes.StateSpace, at complex128) [][]complex128 {
	t.Helper()
	n, _ := s.A.Dims()
	m := len(s.Inputs)
	// Real form of order 2n, its columns scaled by the bases that the devices
	// tell: volts, amperes and watts as they are leave six digits.
	w := mat.NewDense(2*n, 2*n, nil)
	rhs := mat.NewDense(2*n, m, nil)
	base := func(i int) float64 { return s.States[i%n].Base }
	for i := range n {
		for j := range n {
			w.Set(i, j, -s.A.At(i, j))
			w.Set(n+i, n+j, -s.A.At(i, j))
		}
		w.Set(i, i, w.At(i, i)+real(at))
		w.Set(n+i, n+i, w.At(n+i, n+i)+real(at))
		w.Set(i, n+i, -imag(at))
		w.Set(n+i, i, imag(at))
		for j := range m {
			rhs.Set(i, j, s.B.At(i, j))
		}
	}
	for i := range 2 * n {
		for j := range 2 * n {
			w.Set(i, j, w.At(i, j)*base(j)/base(i))
		}
		for j := range m {
			rhs.Set(i, j, rhs.At(i, j)/base(i))
		}
	}
	var x mat.Dense
	if err := x.Solve(w, rhs); err != nil {
		var ill mat.Condition
		if !errors.As(err, &ill) {
			t.Fatal(err)
		}
	}
	out := make([][]complex128, len(s.Outputs))
	for i := range out {
		out[i] = make([]complex128, m)
		for j := range m {
			z := complex(s.D.At(i, j), 0)
			for k := range n {
				z += complex(s.C.At(i, k), 0) * complex(x.At(k, j)*base(k), x.At(n+k, j)*base(k))
			}
			out[i][j] = z
		}
	}
	return out
}

// Bases of control signals are free: whatever they are, from setpoints to physical
// quantities the system is the same, and so is every physical state's row and column.
func TestPerUnitControlBasesAreFree(t *testing.T) {
	for _, c := range perUnitCases {
		s := linearOf(t, c.name)
		rng := rand.New(rand.NewPCG(3, 4))
		b := perunit.Scaling{}
		control := make([]bool, len(s.States))
		any := false
		for i, u := range s.States {
			switch u.Dynamics {
			case "network", "filter", "":
			default:
				// i_f counts as current loop, but is a current.
				control[i] = !strings.Contains(u.Name, ".i_") && u.Unit != "rad"
			}
			x := 1.0
			if control[i] {
				x, any = math.Exp(3*rng.NormFloat64()), true
			}
			b.States = append(b.States, x)
		}
		if !any {
			t.Fatalf("%s has no states of controllers", c.name)
		}
		pu, err := b.Apply(s)
		if err != nil {
			t.Fatal(err)
		}
		for i := range s.States {
			for j := range s.States {
				if !control[i] && !control[j] && pu.A.At(i, j) != s.A.At(i, j) {
					t.Fatalf("%s: %s on %s moves with bases of controllers", c.name, s.States[j].Name, s.States[i].Name)
				}
			}
		}
		for _, at := range []complex128{2i, 30 + 500i} {
			h, hp := transfer(t, s, at), transfer(t, pu, at)
			size := 0.0
			for i := range h {
				for j := range h[i] {
					size = math.Max(size, cmplx.Abs(h[i][j]))
				}
			}
			for i := range h {
				for j := range h[i] {
					if cmplx.Abs(h[i][j]-hp[i][j]) > 1e-5*cmplx.Abs(h[i][j])+1e-9*size {
						t.Errorf("%s: %s to %s is %v, with other bases of controllers %v", c.name, s.Inputs[j].Name, s.Outputs[i].Name, h[i][j], hp[i][j])
					}
				}
			}
		}
	}
}

// In radians of the frame's speed an inductance is its reactance (see
// perunit.TestHandbook), and with derivatives zero what is left of the equations is
// the algebraic phasor model: the operating point of full networks is that of their
// quasi-steady forms, which hold phasor admittances alone.
func TestSynchronousSteadyStateIsPhasors(t *testing.T) {
	for _, name := range []string{"starter", "harbour", "droop3", "cigre-lv", "mesh-20"} {
		values := func(rules ...cases.DetailRule) map[string]float64 {
			k, err := cases.Open(name)
			if err != nil {
				t.Fatal(err)
			}
			sim, err := k.Start(&engine.Options{Record: []string{"*.v", "*.p", "*.q"}}, rules...)
			if err != nil {
				t.Fatal(err)
			}
			out := make(map[string]float64)
			tr := sim.Trace()
			for i, ch := range tr.Channels {
				out[ch.Name] = tr.Values(i)[0]
			}
			return out
		}
		full, phasors := values(), values(cases.DetailRule{Pattern: "*", Level: "quasi-steady"})
		size := make(map[string]float64) // of channels of one name
		kind := func(name string) string { return name[strings.LastIndexByte(name, '.'):] }
		for ch, x := range full {
			size[kind(ch)] = math.Max(size[kind(ch)], math.Abs(x))
		}
		both := 0
		for ch, x := range full {
			y, ok := phasors[ch]
			if !ok {
				continue // a current that is a state in the full form alone
			}
			both++
			if math.Abs(x-y) > 1e-8*size[kind(ch)] {
				t.Errorf("%s: %s is %.12g, by phasors %.12g", name, ch, x, y)
			}
		}
		if both < 10 {
			t.Errorf("%s: %d channels in both", name, both)
		}
	}
}
