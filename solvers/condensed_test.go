package solvers_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/solvers"
)

// randomBordered makes a bordered matrix of several blocks, some of one
// pattern and some without own unknowns, with weighted port rows and ports that
// share a border column.
func randomBordered(rng *rand.Rand, blocks, border int, spread float64) *solvers.BorderedMatrix {
	m := &solvers.BorderedMatrix{Border: border, BorderMass: make([]float64, border), Shift: 1 + 10*rng.Float64()}
	val := func() float64 { return rng.NormFloat64() * math.Pow(10, spread*(2*rng.Float64()-1)) }
	var shared []solvers.Entry
	var sharedOwn, sharedPorts int
	for k := range blocks {
		own, ports := rng.IntN(7), 1+rng.IntN(4)
		var pattern []solvers.Entry
		if k%3 == 1 && shared != nil {
			own, ports, pattern = sharedOwn, sharedPorts, shared
		} else {
			n := own + ports
			for i := range n {
				for j := range n {
					if i == j || rng.Float64() < 0.5 {
						pattern = append(pattern, solvers.Entry{Row: i, Col: j})
					}
				}
			}
			shared, sharedOwn, sharedPorts = pattern, own, ports
		}
		b := solvers.BorderedBlock{Own: own, Ports: ports, Pattern: pattern, Mass: make([]float64, own)}
		for _, e := range pattern {
			v := val()
			if e.Row == e.Col && e.Row >= ports && rng.Float64() < 0.2 {
				v = 0 // a pivot that only elimination fills, or none
			} else if e.Row == e.Col {
				v += 3 * math.Copysign(1, v)
			}
			b.Values = append(b.Values, v)
		}
		for i := range b.Mass {
			if rng.Float64() < 0.6 {
				b.Mass[i] = rng.Float64()
			}
		}
		for i := range ports {
			c := rng.IntN(border)
			b.At = append(b.At, c)
			b.Rows = append(b.Rows, solvers.PortRow{Port: i, Row: c, Weight: 1})
			if rng.Float64() < 0.3 {
				b.Rows = append(b.Rows, solvers.PortRow{Port: i, Row: rng.IntN(border), Weight: rng.NormFloat64()})
			}
		}
		m.Blocks = append(m.Blocks, b)
	}
	for i := range m.BorderMass {
		m.BorderMass[i] = 1 + rng.Float64()
	}
	return m
}

// dense writes a bordered matrix out, by its definition.
func dense(m *solvers.BorderedMatrix) *mat.Dense {
	n := m.Border
	for _, b := range m.Blocks {
		n += b.Own
	}
	base := n - m.Border
	d := mat.NewDense(n, n, nil)
	add := func(i, j int, v float64) { d.Set(i, j, d.At(i, j)+v) }
	own := 0
	for _, b := range m.Blocks {
		for k, e := range b.Pattern {
			col := own + e.Col - b.Ports
			if e.Col < b.Ports {
				col = base + b.At[e.Col]
			}
			if e.Row >= b.Ports {
				add(own+e.Row-b.Ports, col, b.Values[k])
				continue
			}
			for _, r := range b.Rows {
				if r.Port == e.Row {
					add(base+r.Row, col, r.Weight*b.Values[k])
				}
			}
		}
		for i, v := range b.Mass {
			add(own+i, own+i, m.Shift*v)
		}
		own += b.Own
	}
	for i := range m.Border {
		if m.BorderMass != nil {
			add(base+i, base+i, m.Shift*m.BorderMass[i])
		}
		if m.BorderFixed != nil && m.BorderFixed[i] {
			add(base+i, base+i, 1)
		}
	}
	return d
}

// inverse1 is the exact 1-norm condition number.
func condition1(d *mat.Dense) float64 {
	var inv mat.Dense
	if err := inv.Inverse(d); err != nil {
		var c mat.Condition
		if !errors.As(err, &c) || math.IsInf(float64(c), 1) {
			return math.Inf(1)
		}
	}
	return mat.Norm(d, 1) * mat.Norm(&inv, 1)
}

// checkAgainstDense solves with f and with a dense inverse of the same matrix
// and judges by the backward error.
func checkAgainstDense(t *testing.T, what string, f *solvers.BorderedLU, d *mat.Dense, rng *rand.Rand) {
	t.Helper()
	n, _ := d.Dims()
	cond := condition1(d)
	if !(cond < 1e12) {
		return // singular for this purpose
	}
	if err := f.Factor(); err != nil {
		t.Errorf("%s: condition %.1e: %v", what, cond, err)
		return
	}
	for _, transposed := range []bool{false, true} {
		b := make([]float64, n)
		for i := range b {
			b[i] = rng.NormFloat64()
		}
		x := append([]float64(nil), b...)
		a := mat.Matrix(d)
		if transposed {
			a = d.T()
			f.SolveTranspose(x)
		} else {
			f.Solve(x)
		}
		var r mat.VecDense
		r.MulVec(a, mat.NewVecDense(n, x))
		r.SubVec(&r, mat.NewVecDense(n, b))
		scale := mat.Norm(d, math.Inf(1))*mat.Norm(mat.NewVecDense(n, x), math.Inf(1)) + 1
		if e := mat.Norm(&r, math.Inf(1)) / scale; !(e < 1e-9) {
			t.Errorf("%s, transposed %v: backward error %.2e at condition %.1e", what, transposed, e, cond)
		}
	}
	if est := f.Condition(); !(est < 3*cond && est > cond/10) {
		t.Errorf("%s: condition estimated %.3e, is %.3e", what, est, cond)
	}
}

func TestBorderedAgainstDense(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 7))
	general := 0
	for trial := range 300 {
		spread := 0.0
		if trial%3 == 2 {
			spread = 3
		}
		m := randomBordered(rng, 1+rng.IntN(14), 1+rng.IntN(6), spread)
		f, err := solvers.NewBorderedLU(m)
		if err != nil {
			t.Fatal(err)
		}
		what := fmt.Sprintf("trial %d", trial)
		checkAgainstDense(t, what, f, dense(m), rng)
		// Other values and another shift on the same pattern.
		for i := range m.Blocks {
			for k := range m.Blocks[i].Values {
				m.Blocks[i].Values[k] *= 1 + 0.3*rng.NormFloat64()
			}
		}
		m.Shift = []float64{0, 1e-3, 1e3, 1e9}[trial%4]
		checkAgainstDense(t, what+" again", f, dense(m), rng)
		general += f.Stats().General
	}
	if general == 0 {
		t.Error("no trial went through the general path: the table lacks a block that is singular by itself")
	}
}

// A block singular by itself, in a regular matrix: its own unknown has no
// diagonal and couples to the border alone.
func TestBlockSingularByItself(t *testing.T) {
	m := &solvers.BorderedMatrix{Border: 2, BorderMass: []float64{1, 0}, Shift: 2, Blocks: []solvers.BorderedBlock{{
		Ports: 2, Own: 1,
		Pattern: []solvers.Entry{{Row: 2, Col: 2}, {Row: 2, Col: 0}, {Row: 1, Col: 2}, {Row: 0, Col: 1}},
		Values:  []float64{0, 1, 1, 1}, At: []int{0, 1},
		Rows: []solvers.PortRow{{Port: 0, Row: 0, Weight: 1}, {Port: 1, Row: 1, Weight: 1}},
	}}}
	f, err := solvers.NewBorderedLU(m)
	if err != nil {
		t.Fatal(err)
	}
	checkAgainstDense(t, "singular block", f, dense(m), rand.New(rand.NewPCG(1, 2)))
	if f.Stats().General != 1 {
		t.Errorf("stats %+v, want one general factorisation", f.Stats())
	}
}

func TestBorderedFaults(t *testing.T) {
	block := func() solvers.BorderedBlock {
		return solvers.BorderedBlock{Ports: 1, Own: 1, Pattern: []solvers.Entry{{Row: 0, Col: 0}, {Row: 0, Col: 1}, {Row: 1, Col: 0}, {Row: 1, Col: 1}},
			Values: []float64{1, 1, 1, 1}, At: []int{0}, Rows: []solvers.PortRow{{Port: 0, Row: 0, Weight: 1}}}
	}
	singular := &solvers.BorderedMatrix{Border: 1, Blocks: []solvers.BorderedBlock{block()}} // [1 1; 1 1]
	f, err := solvers.NewBorderedLU(singular)
	if err != nil {
		t.Fatal(err)
	}
	var s *solvers.SingularError
	if err := f.Factor(); !errors.As(err, &s) || s.Column != 1 {
		t.Errorf("a singular matrix gave %v, want a SingularError at column 1", err)
	}
	singular.Blocks[0].Values[0] = 3
	if err := f.Factor(); err != nil {
		t.Errorf("regular again: %v", err)
	}
	singular.Blocks[0].Values[3] = math.NaN()
	if err := f.Factor(); !errors.As(err, &s) {
		t.Errorf("NaN gave %v, want a SingularError", err)
	}
	b := block()
	b.Pattern, b.Values = b.Pattern[:3], b.Values[:2]
	b.At = []int{5}
	_, err = solvers.NewBorderedLU(&solvers.BorderedMatrix{Border: 1, BorderMass: []float64{1, 2}, Blocks: []solvers.BorderedBlock{b}})
	for _, want := range []string{"2 values for 3", "lacks the diagonal", "column 5", "BorderMass has 2"} {
		if err == nil || !contains(err.Error(), want) {
			t.Errorf("error lacks %q: %v", want, err)
		}
	}
}

func contains(s, sub string) bool {
	for i := 0; i+len(sub) <= len(s); i++ {
		if s[i:i+len(sub)] == sub {
			return true
		}
	}
	return false
}

func TestBorderedAllocatesNothing(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	m := randomBordered(rng, 12, 5, 0)
	for i := range m.Blocks {
		for j := range m.Blocks[i].Mass {
			m.Blocks[i].Mass[j] = 5
		}
	}
	f, err := solvers.NewBorderedLU(m)
	if err != nil {
		t.Fatal(err)
	}
	if err := f.Factor(); err != nil {
		t.Fatal(err)
	}
	n := m.Border
	for _, b := range m.Blocks {
		n += b.Own
	}
	b := make([]float64, n)
	if got := testing.AllocsPerRun(100, func() {
		if err := f.Factor(); err != nil {
			t.Fatal(err)
		}
		for i := range b {
			b[i] = 1
		}
		f.Solve(b)
	}); got != 0 {
		t.Errorf("%g allocations", got)
	}
}

func FuzzBordered(f *testing.F) {
	for s := range uint64(8) {
		f.Add(s, uint8(3+s), uint8(2), uint8(s))
	}
	f.Fuzz(func(t *testing.T, seed uint64, blocks, border, spread uint8) {
		rng := rand.New(rand.NewPCG(seed, 11))
		m := randomBordered(rng, 1+int(blocks)%12, 1+int(border)%6, float64(spread%4))
		lu, err := solvers.NewBorderedLU(m)
		if err != nil {
			t.Fatal(err)
		}
		d := dense(m)
		if cond := condition1(d); cond < 1e10 {
			checkAgainstDense(t, "fuzz", lu, d, rng)
		}
	})
}

// A star of two blocks at one border unknown: the own unknowns are eliminated
// within their blocks, and a 1 x 1 border is left.
func ExampleNewBorderedLU() {
	leg := solvers.BorderedBlock{
		Ports: 1, Own: 1,
		Pattern: []solvers.Entry{{Row: 0, Col: 1}, {Row: 1, Col: 0}, {Row: 1, Col: 1}},
		Values:  []float64{1, -1, 2}, // flow = x; 2 x - v = b
		At:      []int{0},
		Rows:    []solvers.PortRow{{Port: 0, Row: 0, Weight: 1}},
	}
	m := &solvers.BorderedMatrix{Border: 1, Blocks: []solvers.BorderedBlock{leg, leg}}
	f, err := solvers.NewBorderedLU(m)
	if err != nil {
		fmt.Println(err)
		return
	}
	if err := f.Factor(); err != nil {
		fmt.Println(err)
		return
	}
	b := []float64{1, 3, 0} // the flows sum to zero
	f.Solve(b)
	fmt.Println(b)
	// Output: [-0.5 0.5 -2]
}
