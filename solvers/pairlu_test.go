package solvers

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// pairMatrix is a random matrix of 2 x 2 blocks on the edges of a square mesh
// and a few chords, diagonally strong, not symmetric in values nor, in places, in
// pattern.
func pairMatrix(rng *rand.Rand, width int) *CSC {
	n := width * width
	var entries []Entry
	var values []float64
	add := func(i, j int, size float64) {
		for r := range 2 {
			for c := range 2 {
				if i != j && rng.Float64() < 0.1 {
					continue
				}
				entries = append(entries, Entry{2*i + r, 2*j + c})
				x := rng.NormFloat64()
				if i == j && r == c {
					x += 8
				}
				values = append(values, size*x)
			}
		}
	}
	for i := range n {
		add(i, i, 1)
		link := func(j int) {
			add(i, j, 1)
			add(j, i, 1)
		}
		if (i+1)%width != 0 {
			link(i + 1)
		}
		if i+width < n {
			link(i + width)
		}
		if rng.Float64() < 0.05 {
			if j := rng.IntN(n); j != i {
				add(i, j, 0.3) // one way only
			}
		}
	}
	a, slot := NewCSC(2*n, 2*n, entries)
	for k, s := range slot {
		a.X[s] += values[k]
	}
	return a
}

func TestPairLU(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 9))
	for _, width := range []int{1, 2, 3, 7, 12} {
		a := pairMatrix(rng, width)
		n := a.Cols
		f := newPairLU(a)
		if !f.factor() {
			t.Fatalf("width %d: a diagonally strong matrix is refused", width)
		}
		scalar, err := NewSparseLU(a, LUOptions{})
		if err != nil {
			t.Fatal(err)
		}
		if err := scalar.Factor(); err != nil {
			t.Fatal(err)
		}
		b := randoms(rng, n)
		x, y := slices.Clone(b), slices.Clone(b)
		f.solve(x)
		scalar.Solve(y)
		r := make([]float64, n)
		a.MulVec(r, x)
		for i := range x {
			if math.Abs(x[i]-y[i]) > 1e-11 || math.Abs(r[i]-b[i]) > 1e-11 {
				t.Fatalf("width %d: unknown %d is %v, by the scalar factorisation %v; residual %g", width, i, x[i], y[i], r[i]-b[i])
			}
		}
		x, y = slices.Clone(b), slices.Clone(b)
		f.solveTranspose(x)
		scalar.SolveTranspose(y)
		for i := range x {
			if math.Abs(x[i]-y[i]) > 1e-11 {
				t.Fatalf("width %d: transposed, unknown %d is %v, by the scalar factorisation %v", width, i, x[i], y[i])
			}
		}
	}
}

// A matrix that needs pivots between nodes, a singular one and one that holds
// no number are reported.
func TestPairLURefuses(t *testing.T) {
	for name, v := range map[string]float64{"a zero diagonal block": 0, "not a number": math.NaN(), "a tiny diagonal block": 1e-9} {
		// Two nodes, each coupled to the other by the unit matrix.
		a, slot := NewCSC(4, 4, []Entry{{0, 0}, {1, 1}, {2, 2}, {3, 3}, {0, 2}, {1, 3}, {2, 0}, {3, 1}})
		for k, x := range []float64{v, v, v, v, 1, 1, 1, 1} {
			a.X[slot[k]] = x
		}
		if newPairLU(a).factor() {
			t.Errorf("%s is accepted", name)
		}
	}
}

// What the pairs refuse, the bordered factorisation gives to the scalar one: here
// the nodes of two blocks with a flow that another's value sets.
func TestBorderedUnpaired(t *testing.T) {
	m := &BorderedMatrix{Border: 4, Paired: true, Blocks: []BorderedBlock{{
		Ports: 4, At: []int{0, 1, 2, 3},
		Rows:    []PortRow{{0, 0, 1}, {1, 1, 1}, {2, 2, 1}, {3, 3, 1}},
		Pattern: []Entry{{0, 2}, {1, 3}, {2, 0}, {3, 1}},
		Values:  []float64{2, 4, 5, 8},
	}}}
	f, err := NewBorderedLU(m)
	if err != nil {
		t.Fatal(err)
	}
	if err := f.Factor(); err != nil {
		t.Fatal(err)
	}
	b := []float64{2, 8, 15, 32}
	f.Solve(b)
	for i, want := range []float64{3, 4, 1, 2} {
		if math.Abs(b[i]-want) > 1e-14 {
			t.Errorf("unknown %d is %v, want %v", i, b[i], want)
		}
	}
	b = []float64{2, 8, 15, 32}
	f.SolveTranspose(b)
	for i, want := range []float64{7.5, 8, 0.4, 1} {
		if math.Abs(b[i]-want) > 1e-14 {
			t.Errorf("transposed, unknown %d is %v, want %v", i, b[i], want)
		}
	}
	if s := f.Stats(); s.Unpaired != 1 || s.General != 0 {
		t.Errorf("counts are %+v", s)
	}
}

func TestPairUpdate(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 1))
	for n := 1; n < 9; n++ {
		work := randoms(rng, 80)
		w := [4]float64(randoms(rng, 4))
		var col []int32
		for _, j := range rng.Perm(20)[:n] {
			col = append(col, int32(j))
		}
		u := randoms(rng, 4*n)
		other := slices.Clone(work)
		pairUpdate(work, &w, col, u)
		pairUpdateGo(other, &w, col, u)
		sameBits(t, "update", work, other)
	}
}
