package solvers

import (
	"errors"
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"
)

const luEps = 0x1p-52

// luFromDense returns the sparse form of the rows given, without zeros.
func luFromDense(rows [][]float64) *CSC {
	var at []Entry
	for i, r := range rows {
		for j, v := range r {
			if v != 0 {
				at = append(at, Entry{i, j})
			}
		}
	}
	a, slot := NewCSC(len(rows), len(rows), at)
	for k, e := range at {
		a.X[slot[k]] = rows[e.Row][e.Col]
	}
	return a
}

func luDense(a *CSC) *mat.Dense {
	d := mat.NewDense(a.Rows, a.Cols, nil)
	for j := range a.Cols {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			d.Set(a.I[p], j, a.X[p])
		}
	}
	return d
}

// luRandom returns a random matrix with about perCol entries a column, which
// have a transversal but often no zero-free diagonal.
func luRandom(rnd *rand.Rand, n int, perCol float64) *CSC {
	var at []Entry
	for i, j := range rnd.Perm(n) {
		at = append(at, Entry{i, j})
	}
	for range int(float64(n) * (perCol - 1)) {
		at = append(at, Entry{rnd.IntN(n), rnd.IntN(n)})
	}
	a, _ := NewCSC(n, n, at)
	for p := range a.X {
		a.X[p] = rnd.NormFloat64()
	}
	return a
}

func luRandomVector(rnd *rand.Rand, n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = rnd.NormFloat64()
	}
	return x
}

// luBackward returns the normwise backward error |b - A x| / (|A| |x| + |b|)
// in the infinity norm.
func luBackward(a *CSC, x, b []float64) float64 {
	r := make([]float64, len(b))
	rowSum := make([]float64, len(b))
	a.MulVec(r, x)
	for j := range a.Cols {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			rowSum[a.I[p]] += math.Abs(a.X[p])
		}
	}
	var norm, nr, nx, nb float64
	for i := range r {
		nr = max(nr, math.Abs(r[i]-b[i]))
		norm = max(norm, rowSum[i])
		nx = max(nx, math.Abs(x[i]))
		nb = max(nb, math.Abs(b[i]))
	}
	return nr / (norm*nx + nb)
}

func luTranspose(a *CSC) *CSC {
	var at []Entry
	var val []float64
	for j := range a.Cols {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			at, val = append(at, Entry{j, a.I[p]}), append(val, a.X[p])
		}
	}
	b, slot := NewCSC(a.Cols, a.Rows, at)
	for k, s := range slot {
		b.X[s] = val[k]
	}
	return b
}

func luMust(t testing.TB, a *CSC, o LUOptions) *SparseLU {
	t.Helper()
	f, err := NewSparseLU(a, o)
	if err != nil {
		t.Fatal(err)
	}
	if err := f.Factor(); err != nil {
		t.Fatal(err)
	}
	return f
}

func luMaxDiff(x, y []float64) float64 {
	d := 0.0
	for i := range x {
		d = max(d, math.Abs(x[i]-y[i]))
	}
	return d
}

// Backward error bounds: errors grow with the number of operations in an
// unknown, and in proportion to the bound on L, 1/PivotThreshold; 10 n eps
// times that covers random matrices (common practice, no source). Forward
// errors are below the backward error times the condition.
func TestSparseLUAgainstDense(t *testing.T) {
	rnd := rand.New(rand.NewPCG(1, 2))
	for _, n := range []int{1, 2, 3, 4, 5, 8, 13, 30, 80, 150} {
		for _, perCol := range []float64{1, 1.5, 2.5, 4, 8, float64(n)} {
			for _, o := range []LUOptions{{}, {NaturalOrder: true}, {PivotThreshold: 1}, {PivotThreshold: 1e-3}} {
				a := luRandom(rnd, n, perCol)
				b := luRandomVector(rnd, n)
				name := fmt.Sprintf("n=%d perCol=%g %+v", n, perCol, o)

				var dense mat.LU
				dense.Factorize(luDense(a))
				if !(dense.Cond() < 1e12) {
					continue // few of these; what they deserve is tested below
				}
				f, err := NewSparseLU(a, o)
				if err != nil {
					t.Fatal(name, err)
				}
				for pass := range 2 { // the second is a refactorisation
					if err := f.Factor(); err != nil {
						t.Fatal(name, err)
					}
					tol := 10 * float64(n) * luEps / f.threshold

					var want mat.VecDense
					if err := dense.SolveVecTo(&want, false, mat.NewVecDense(n, append([]float64(nil), b...))); err != nil {
						t.Fatal(name, err)
					}
					x := append([]float64(nil), b...)
					f.Solve(x)
					if e := luBackward(a, x, b); !(e <= tol) {
						t.Errorf("%s pass %d: backward error %.2g > %.2g", name, pass, e, tol)
					}
					if d := luMaxDiff(x, want.RawVector().Data); !(d <= tol*dense.Cond()*mat.Norm(&want, math.Inf(1))) {
						t.Errorf("%s pass %d: solution differs by %.2g", name, pass, d)
					}

					if err := dense.SolveVecTo(&want, true, mat.NewVecDense(n, append([]float64(nil), b...))); err != nil {
						t.Fatal(name, err)
					}
					copy(x, b)
					f.SolveTranspose(x)
					at := luTranspose(a)
					if e := luBackward(at, x, b); !(e <= tol) {
						t.Errorf("%s pass %d: transpose: backward error %.2g > %.2g", name, pass, e, tol)
					}
					if d := luMaxDiff(x, want.RawVector().Data); !(d <= tol*dense.Cond()*mat.Norm(&want, 1)) {
						t.Errorf("%s pass %d: transpose: solution differs by %.2g", name, pass, d)
					}
				}
				if s := f.Stats(); s.Factorisations != 1 || s.Refactorisations != 1 || s.Fallbacks != 0 {
					t.Errorf("%s: stats %+v", name, s)
				}
			}
		}
	}
}

// With A = R B C, B well conditioned and R, C diagonal over 24 decades, the
// solution of A x = R B y is x = y / C whatever the scaling. Pivoting without
// equilibration fails here.
func TestSparseLUIllScaled(t *testing.T) {
	rnd := rand.New(rand.NewPCG(5, 6))
	scale := func() float64 { return math.Pow(10, 24*rnd.Float64()-12) }
	for _, n := range []int{2, 5, 20, 60, 150} {
		for try := range 20 {
			base := luRandom(rnd, n, 4)
			var dense mat.LU
			dense.Factorize(luDense(base))
			if dense.Cond() > 1e5 {
				continue
			}
			a := &CSC{Rows: n, Cols: n, P: base.P, I: base.I, X: append([]float64(nil), base.X...)}
			r, c := make([]float64, n), make([]float64, n)
			for i := range r {
				r[i], c[i] = scale(), scale()
			}
			for j := range n {
				for p := a.P[j]; p < a.P[j+1]; p++ {
					a.X[p] *= r[a.I[p]] * c[j]
				}
			}
			y := luRandomVector(rnd, n)
			b := make([]float64, n)
			base.MulVec(b, y)
			for i := range b {
				b[i] *= r[i]
			}
			f := luMust(t, a, LUOptions{})
			f.Solve(b)
			for j := range b {
				b[j] *= c[j]
			}
			if d := luMaxDiff(b, y); !(d <= 1e3*float64(n)*luEps*dense.Cond()) {
				t.Errorf("n=%d try %d: error %.2g with condition %.2g of the unscaled matrix", n, try, d, dense.Cond())
			}
		}
	}
}

func TestSparseLUZeroDiagonal(t *testing.T) {
	rnd := rand.New(rand.NewPCG(7, 8))
	n := 40
	patterns := map[string]func() []Entry{
		// Differential unknowns with mass and algebraic constraints on them.
		"saddle point": func() (at []Entry) {
			m := 25
			for i := range m {
				at = append(at, Entry{i, i}, Entry{i, (i + 1) % m})
			}
			for i := m; i < n; i++ {
				at = append(at, Entry{i, i - m}, Entry{i - m, i}, Entry{i, i - m + 3}, Entry{i - m + 3, i})
			}
			return at
		},
		"cyclic shift": func() (at []Entry) {
			for i := range n {
				at = append(at, Entry{i, (i + 1) % n}, Entry{i, (i + 5) % n})
			}
			return at
		},
		"reversed": func() (at []Entry) {
			for i := range n {
				at = append(at, Entry{i, n - 1 - i})
				if i > 0 {
					at = append(at, Entry{i, n - i})
				}
			}
			return at
		},
	}
	for name, pattern := range patterns {
		for try := range 20 {
			a, _ := NewCSC(n, n, pattern())
			for p := range a.X {
				a.X[p] = rnd.NormFloat64()
			}
			var dense mat.LU
			dense.Factorize(luDense(a))
			if dense.Cond() > 1e10 {
				continue
			}
			b := luRandomVector(rnd, n)
			x := append([]float64(nil), b...)
			f := luMust(t, a, LUOptions{})
			f.Solve(x)
			if e := luBackward(a, x, b); e > 1e-14 {
				t.Errorf("%s %d: backward error %.2g", name, try, e)
			}
		}
	}

	// Entries on the diagonal that are present but zero or tiny.
	for _, d := range []float64{0, 1e-30} {
		a, slot := NewCSC(3, 3, []Entry{{0, 0}, {0, 1}, {1, 0}, {1, 1}, {1, 2}, {2, 1}, {2, 2}})
		for k, v := range []float64{d, 2, 3, d, 4, 5, d} {
			a.X[slot[k]] = v
		}
		// For d = 0, row 1 is all there is for columns 0 and 2: singular.
		f, err := NewSparseLU(a, LUOptions{})
		if err != nil {
			t.Fatal(err)
		}
		if err := f.Factor(); d == 0 && err == nil {
			t.Error("singular matrix accepted")
		}
		a.X[slot[6]] = 7
		f = luMust(t, a, LUOptions{})
		b := []float64{2, 7, 12} // A (1, 1, 1)' for d = 0
		f.Solve(b)
		if e := luMaxDiff(b, []float64{1, 1, 1}); e > 1e-14 {
			t.Errorf("d=%g: error %.2g", d, e)
		}
	}
}

// The estimate is a lower bound and mostly within a factor of three (Higham
// 1988); ten is the bound here. gonum estimates in the infinity norm, hence
// the transpose.
func TestSparseLUCondition(t *testing.T) {
	rnd := rand.New(rand.NewPCG(9, 10))
	for _, n := range []int{1, 2, 3, 10, 40} {
		for try := range 30 {
			a := luRandom(rnd, n, 1+3*rnd.Float64())
			switch {
			case n > 1 && try%3 == 1: // two columns nearly parallel
				rows := make([][]float64, n)
				d := luDense(a)
				eps := math.Pow(10, -1-9*rnd.Float64())
				for i := range rows {
					rows[i] = d.RawRowView(i)
					rows[i][1] = rows[i][0] + eps*rows[i][1]
				}
				a = luFromDense(rows)
			case try%3 == 2: // bad scaling counts as a bad condition
				for p := range a.X {
					a.X[p] *= math.Pow(10, 6*float64(a.I[p])/float64(n))
				}
			}
			var inverse mat.Dense
			if err := inverse.Inverse(luDense(a)); err != nil {
				continue // condition above 1e16
			}
			truth := mat.Norm(&inverse, 1) * a.Norm1()
			if truth > 1e12 {
				continue // the inverse itself is uncertain
			}
			f := luMust(t, a, LUOptions{})
			got := f.Condition()
			if got > truth*1.001 || got < truth/10 {
				t.Errorf("n=%d try %d: condition %.4g, true value %.4g", n, try, got, truth)
			}
			var dense mat.LU
			dense.Factorize(luDense(a).T())
			if c := dense.Cond(); got > 10*c || got < c/10 {
				t.Errorf("n=%d try %d: condition %.4g, gonum %.4g", n, try, got, c)
			}
		}
	}
}

// Condition numbers of the Hilbert matrices, |H|_1 |H^-1|_1. Values from
// memory (they stand in many textbooks), confirmed below by the closed form of
// the inverse; source of that: M.-D. Choi, "Tricks or treats with the Hilbert
// matrix", Amer. Math. Monthly 90 (1983) 301-312.
func TestSparseLUHilbert(t *testing.T) {
	for _, tt := range []struct {
		n    int
		cond float64
		tol  float64 // half a unit of the last digit remembered, relative
	}{
		{2, 27, 1e-15}, {3, 748, 1e-14}, {4, 28375, 1e-14}, {5, 943656, 1e-14}, {6, 29070279, 1e-9},
		{7, 9.8519e8, 1e-5}, {8, 3.3873e10, 2e-5}, {9, 1.0997e12, 5e-5}, {10, 3.54e13, 2e-3},
	} {
		n := tt.n
		rows := make([][]float64, n)
		var norm float64 // of the inverse
		for i := range n {
			rows[i] = make([]float64, n)
			sum := new(big.Int)
			for j := range n {
				rows[i][j] = 1 / float64(i+j+1)
				v := new(big.Int).Binomial(int64(n+i), int64(n-j-1))
				v.Mul(v, new(big.Int).Binomial(int64(n+j), int64(n-i-1)))
				b := new(big.Int).Binomial(int64(i+j), int64(i))
				v.Mul(v, b.Mul(b, b))
				v.Mul(v, big.NewInt(int64(i+j+1)))
				sum.Add(sum, v)
			}
			s, _ := new(big.Float).SetInt(sum).Float64()
			norm = max(norm, s)
		}
		a := luFromDense(rows)
		exact := norm * a.Norm1()
		if math.Abs(exact/tt.cond-1) > tt.tol {
			t.Errorf("n=%d: closed form gives %.6g, the table %.6g", n, exact, tt.cond)
		}
		f := luMust(t, a, LUOptions{})
		// All entries of the inverse alternate in sign, for which the
		// estimate is exact up to the effect of rounding, cond * eps.
		if got := f.Condition(); math.Abs(got/exact-1) > 10*exact*luEps {
			t.Errorf("n=%d: condition %.6g, want %.6g", n, got, exact)
		}
	}
}

func TestSparseLUStructurallySingular(t *testing.T) {
	for _, tt := range []struct {
		name   string
		n      int
		at     []Entry
		column int // the largest that may be named
	}{
		{"empty", 1, nil, 0},
		{"empty column", 3, []Entry{{1, 1}, {2, 1}, {2, 2}, {0, 2}}, 0},
		{"two columns share one row", 3, []Entry{{1, 0}, {1, 1}, {0, 2}, {1, 2}, {2, 2}}, 1},
		{"three columns share two rows", 4, []Entry{
			{0, 0}, {1, 0}, {0, 1}, {1, 1}, {0, 2}, {1, 2}, {0, 3}, {1, 3}, {2, 3}, {3, 3}}, 2},
	} {
		a, _ := NewCSC(tt.n, tt.n, tt.at)
		_, err := NewSparseLU(a, LUOptions{})
		var s *SingularError
		if !errors.As(err, &s) || s.Column > tt.column || s.Pivot != 0 {
			t.Errorf("%s: error %v, want singular at column %d at most", tt.name, err, tt.column)
		}
	}
}

func TestSparseLUNumericallySingular(t *testing.T) {
	rnd := rand.New(rand.NewPCG(11, 12))
	n := 30
	factor := func(a *CSC, o LUOptions) *SingularError {
		t.Helper()
		f, err := NewSparseLU(a, o)
		if err != nil {
			t.Fatal(err)
		}
		var s *SingularError
		if err := f.Factor(); !errors.As(err, &s) {
			t.Errorf("error %v, condition %.3g; want a singular matrix", err, f.Condition())
			return &SingularError{Column: -1}
		}
		if !math.IsInf(f.Condition(), 1) {
			t.Errorf("condition %g after a failed Factor", f.Condition())
		}
		return s
	}

	// A column of zeros, anywhere.
	for j := range n {
		a := luRandom(rnd, n, 5)
		clear(a.X[a.P[j]:a.P[j+1]])
		if got := factor(a, LUOptions{}); got.Column != j || got.Pivot != 0 {
			t.Errorf("column %d is zero, reported %+v", j, got)
		}
	}

	// One column a multiple of another; the later one in order of
	// elimination can't get a pivot.
	for range 50 {
		i, j := rnd.IntN(n), rnd.IntN(n)
		if i == j {
			continue
		}
		d := luDense(luRandom(rnd, n, 6))
		rows := make([][]float64, n)
		m := rnd.NormFloat64()
		for r := range rows {
			rows[r] = d.RawRowView(r)
			rows[r][j] = m * rows[r][i]
		}
		a := luFromDense(rows)
		if _, err := NewSparseLU(a, LUOptions{}); err != nil {
			continue // a single row, twice
		}
		if got := factor(a, LUOptions{}); got.Column != i && got.Column != j {
			t.Errorf("columns %d and %d are parallel, reported %+v", i, j, got)
		}
		if got := factor(a, LUOptions{NaturalOrder: true}); got.Column != max(i, j) {
			t.Errorf("columns %d and %d are parallel, reported %+v in natural order", i, j, got)
		}
	}

	// A resistive network without a path to ground: rows and columns add to
	// zero.
	for range 10 {
		var at []Entry
		var val []float64
		for i := range n {
			for _, j := range []int{(i + 1) % n, rnd.IntN(n)} {
				if i != j {
					g := math.Exp(rnd.NormFloat64())
					at = append(at, Entry{i, i}, Entry{j, j}, Entry{i, j}, Entry{j, i})
					val = append(val, g, g, -g, -g)
				}
			}
		}
		a, slot := NewCSC(n, n, at)
		for k, s := range slot {
			a.X[s] += val[k]
		}
		factor(a, LUOptions{})
	}
}

// [1 1 0; 0 d 1; s 0 1] with tiny d and s, |det| = d + s, is as good as
// singular for a norm, yet no pivot suffers from cancellation: the solution is
// exact and must not be refused.
func TestSparseLUTinyPivotWithoutCancellation(t *testing.T) {
	d, s := 0x1p-70, 0x1p-71
	a := luFromDense([][]float64{{1, 1, 0}, {0, d, 1}, {s, 0, 1}})
	f := luMust(t, a, LUOptions{})
	b := []float64{0, 0, 1}
	f.Solve(b)
	// Cramer's rule
	want := []float64{1 / (d + s), -1 / (d + s), d / (d + s)}
	for i := range b {
		if math.Abs(b[i]/want[i]-1) > 1e-14 {
			t.Errorf("x[%d] = %v, want %v", i, b[i], want[i])
		}
	}
	if err := f.Factor(); err != nil || f.Stats().Refactorisations != 1 {
		t.Errorf("refactorisation: %v, %+v", err, f.Stats())
	}
}

func TestSparseLUNotFinite(t *testing.T) {
	rnd := rand.New(rand.NewPCG(13, 14))
	n := 25
	for _, v := range []float64{math.NaN(), math.Inf(1), math.Inf(-1)} {
		for range 20 {
			a := luRandom(rnd, n, 4)
			f, err := NewSparseLU(a, LUOptions{})
			if err != nil {
				t.Fatal(err)
			}
			p := rnd.IntN(len(a.X))
			j := 0
			for a.P[j+1] <= p {
				j++
			}
			good := a.X[p]
			for range 2 { // from the start, and on a kept pivot sequence
				a.X[p] = v
				var s *SingularError
				if err := f.Factor(); !errors.As(err, &s) || s.Column != j ||
					!strings.Contains(err.Error(), "not finite") {
					t.Errorf("%g in column %d: %v", v, j, err)
				}
				a.X[p] = good
				if err := f.Factor(); err != nil {
					if errors.As(err, &s) {
						break // the random matrix itself is singular
					}
					t.Fatal(err)
				}
				b := luRandomVector(rnd, n)
				x := append([]float64(nil), b...)
				f.Solve(x)
				if e := luBackward(a, x, b); e > 1e-12 {
					t.Errorf("after %g: backward error %.2g", v, e)
				}
			}
		}
	}
}

func TestSparseLURefactor(t *testing.T) {
	rnd := rand.New(rand.NewPCG(15, 16))
	a := luMesh(400, 2)
	f := luMust(t, a, LUOptions{})
	first := append([]float64(nil), f.lx...)
	if err := f.Factor(); err != nil {
		t.Fatal(err)
	}
	for p, v := range first {
		if f.lx[p] != v {
			t.Fatal("refactoring the same values gives other factors")
		}
	}

	base := append([]float64(nil), a.X...)
	for range 10 {
		for p := range a.X {
			a.X[p] = base[p] * (1 + 0.2*rnd.NormFloat64())
		}
		if err := f.Factor(); err != nil {
			t.Fatal(err)
		}
		g := luMust(t, a, LUOptions{}) // from scratch
		b := luRandomVector(rnd, a.Cols)
		x, y := append([]float64(nil), b...), append([]float64(nil), b...)
		f.Solve(x)
		g.Solve(y)
		if e := luBackward(a, y, b); e > 1e-15 {
			t.Errorf("factored: backward error %.2g", e)
		}
		// What GrowthLimit promises: three digits lost at worst.
		tol := luEps * f.growthLimit
		if e := luBackward(a, x, b); e > tol {
			t.Errorf("refactored: backward error %.2g", e)
		}
		if c := g.Condition(); luMaxDiff(x, y) > tol*c*luNorm1(y) {
			t.Errorf("solutions differ by %.2g, condition %.2g", luMaxDiff(x, y), c)
		}
	}
	if s := f.Stats(); s.Factorisations != 1 || s.Refactorisations != 11 || s.Fallbacks != 0 {
		t.Errorf("stats %+v", s)
	}

	// After Reset, the history no longer matters to the last bit.
	f.Reset()
	if err := f.Factor(); err != nil {
		t.Fatal(err)
	}
	g := luMust(t, a, LUOptions{})
	for p, v := range g.lx {
		if f.lx[p] != v {
			t.Fatal("factors after Reset differ from new ones")
		}
	}
}

func TestSparseLUFallback(t *testing.T) {
	full := func(v ...float64) [][]float64 {
		n := int(math.Sqrt(float64(len(v))))
		var rows [][]float64
		for i := range n {
			rows = append(rows, v[i*n:(i+1)*n])
		}
		return rows
	}
	for _, tt := range []struct {
		name          string
		before, after [][]float64
		fallbacks     int
	}{
		{"pivot vanishes", full(4, 1, 1, 3), full(0, 1, 1, 3), 1},
		{"pivot tiny", full(4, 1, 1, 3), full(1e-12, 1, 1, 3), 1},
		{"both pivots tiny", full(4, 1, 1, 3), full(1e-12, 1, 1, 1e-12), 1},
		{"values all change", full(4, 2, 1, 2, 4, 1, 1, 1, 4), full(4, 2, 1, 2, 4, 3, 1, 1, 0.5), 0},
		{"last pivot is rounding error", full(4, 1, 1, 3, 3, 1, 1, 1, 3), full(3, 0.1, 1, 0.3, 0.01, 1, 1, 1, 3), 1},
		{"all scaled", full(4, 1, 1, 3), full(4e-20, 1e-20, 1e-20, 3e-20), 0},
		{"all huge", full(4, 1, 1, 3), full(4e300, 1e300, 1e300, 3e300), 0},
		{"all close to underflow", full(4, 1, 1, 3), full(4e-304, 1e-304, 1e-304, 3e-304), 1},
		{"growth within the limit", full(4, 1, 1, 3), full(0.02, 1, 1, 3), 0},
	} {
		t.Run(tt.name, func(t *testing.T) {
			a := luFromDense(tt.before)
			f := luMust(t, a, LUOptions{NaturalOrder: true})
			for j := range a.Cols {
				for p := a.P[j]; p < a.P[j+1]; p++ {
					a.X[p] = tt.after[a.I[p]][j]
				}
			}
			if err := f.Factor(); err != nil {
				t.Fatal(err)
			}
			x := make([]float64, a.Cols)
			b := make([]float64, a.Cols)
			for i := range x {
				x[i] = float64(i + 1)
			}
			a.MulVec(b, x)
			f.Solve(b)
			if d := luMaxDiff(b, x); d > 1e-12 {
				t.Errorf("error %.2g", d)
			}
			s := f.Stats()
			if s.Fallbacks != tt.fallbacks || s.Factorisations != 1+tt.fallbacks || s.Refactorisations != 1-tt.fallbacks {
				t.Errorf("stats %+v, want %d fallbacks", s, tt.fallbacks)
			}
			if err := f.Factor(); err != nil || f.Stats().Fallbacks != tt.fallbacks {
				t.Errorf("next Factor: %v, %+v", err, f.Stats())
			}
		})
	}

	// From regular to singular and back.
	b, slot := NewCSC(3, 3, []Entry{{0, 0}, {0, 1}, {1, 0}, {1, 1}, {1, 2}, {2, 1}, {2, 2}})
	fill := func(v ...float64) {
		for k, s := range slot {
			b.X[s] = v[k]
		}
	}
	fill(2, -1, -1, 2, -1, -1, 2)
	g := luMust(t, b, LUOptions{})
	fill(0.1, -0.1, -0.1, 0.1+0.7, -0.7, -0.7, 0.7)
	var s *SingularError
	if err := g.Factor(); !errors.As(err, &s) {
		t.Errorf("error %v, condition %.3g; want a singular matrix", err, g.Condition())
	}
	fill(2, -1, -1, 2, -1, -1, 2)
	if err := g.Factor(); err != nil || g.Stats().Factorisations != 3 || g.Stats().Fallbacks != 1 {
		t.Errorf("regular again: %v, %+v", err, g.Stats())
	}

	// Values so different that hardly a pivot is left, many times.
	rnd := rand.New(rand.NewPCG(17, 18))
	a := luRandom(rnd, 60, 5)
	f, err := NewSparseLU(a, LUOptions{})
	if err != nil {
		t.Fatal(err)
	}
	for range 200 {
		for p := range a.X {
			a.X[p] = rnd.NormFloat64() * math.Pow(10, 8*rnd.Float64()-4)
		}
		if err := f.Factor(); err != nil {
			t.Fatal(err)
		}
		b := luRandomVector(rnd, 60)
		x := append([]float64(nil), b...)
		f.Solve(x)
		// Up to three digits lost by the default GrowthLimit.
		if e := luBackward(a, x, b); e > 1e-12 {
			t.Errorf("backward error %.2g", e)
		}
	}
	if s := f.Stats(); s.Fallbacks == 0 || s.Fallbacks != s.Factorisations-1 {
		t.Errorf("stats %+v", s)
	}
}

// luGrid returns the five-point Laplacian on a k x k grid.
func luGrid(k int) *CSC {
	var at []Entry
	for r := range k {
		for c := range k {
			i := r*k + c
			at = append(at, Entry{i, i})
			if c > 0 {
				at = append(at, Entry{i, i - 1}, Entry{i - 1, i})
			}
			if r > 0 {
				at = append(at, Entry{i, i - k}, Entry{i - k, i})
			}
		}
	}
	a, slot := NewCSC(k*k, k*k, at)
	for n, s := range slot {
		a.X[s] = -1
		if at[n].Row == at[n].Col {
			a.X[s] = 4
		}
	}
	return a
}

func TestSparseLUGridFill(t *testing.T) {
	for _, k := range []int{10, 20, 40} {
		a := luGrid(k)
		n := k * k
		natural := luMust(t, a, LUOptions{NaturalOrder: true}).Stats().Nonzeros
		// Band elimination fills the band below the first row: exactly
		// k (k-1) (k+1) + (k-1) entries of L for row-wise numbering (count:
		// row i >= k reaches back k places, row i < k to its start).
		lower := 0
		for i := range n {
			switch {
			case i == 0:
			case i < k:
				lower++ // only i-1 is filled as yet
			default:
				lower += k
			}
		}
		if want := 2*lower + n; natural != want {
			t.Errorf("k=%d: natural order has %d entries, want %d", k, natural, want)
		}
		// Nested dissection needs at most 31/4 n log2 k + O(n) entries of L
		// (A. George, "Nested dissection of a regular finite element mesh",
		// SIAM J. Numer. Anal. 10 (1973) 345-363; leading term from memory,
		// for the nine-point grid, which includes this one).
		got := luMust(t, a, LUOptions{}).Stats().Nonzeros
		bound := 2 * 31.0 / 4 * float64(n) * math.Log2(float64(k))
		if float64(got) > bound {
			t.Errorf("k=%d: minimum degree has %d entries, nested dissection at most about %.0f", k, got, bound)
		}
		if k >= 20 && got > natural*3/5 {
			t.Errorf("k=%d: %d entries against %d in natural order", k, got, natural)
		}
		t.Logf("k=%d: %d entries, natural order %d", k, got, natural)
	}
}

// A matrix that is triangular after permutations needs no elimination at all,
// and one that is block triangular has no fill outside its blocks.
func TestSparseLUBlockTriangular(t *testing.T) {
	rnd := rand.New(rand.NewPCG(19, 20))
	for _, size := range []int{1, 2, 5} {
		for range 20 {
			blocks := 1 + rnd.IntN(12)
			n := blocks * size
			rows, cols := rnd.Perm(n), rnd.Perm(n)
			var at []Entry
			for b := range blocks {
				for i := range size {
					for j := range size { // full blocks
						at = append(at, Entry{rows[b*size+i], cols[b*size+j]})
					}
				}
			}
			for range 3 * n {
				i, j := rnd.IntN(n), rnd.IntN(n)
				if i/size < j/size {
					at = append(at, Entry{rows[i], cols[j]})
				}
			}
			a, _ := NewCSC(n, n, at)
			for p := range a.X {
				a.X[p] = 1 + rnd.Float64()
			}
			f := luMust(t, a, LUOptions{})
			s := f.Stats()
			flops := blocks * (size*(size-1)/2 + 2*(size-1)*size*(2*size-1)/6)
			if s.Blocks != blocks || s.Nonzeros != len(a.I) || s.Flops != flops {
				t.Errorf("size %d: stats %+v, want %d blocks, %d entries, %d flops",
					size, s, blocks, len(a.I), flops)
			}
			b := luRandomVector(rnd, n)
			x := append([]float64(nil), b...)
			f.Solve(x)
			if e := luBackward(a, x, b); e > 1e-14 {
				t.Errorf("size %d: backward error %.2g", size, e)
			}
			copy(x, b)
			f.SolveTranspose(x)
			if e := luBackward(luTranspose(a), x, b); e > 1e-14 {
				t.Errorf("size %d: transpose: backward error %.2g", size, e)
			}
		}
	}
}

// luFillOf eliminates on the graph itself, in the order given or, for nil, by
// minimum degree with exact degrees, and returns the number of fill edges.
func luFillOf(adj []map[int]bool, order []int) int {
	g := make([]map[int]bool, len(adj))
	for i, m := range adj {
		g[i] = map[int]bool{}
		for j := range m {
			g[i][j] = true
		}
	}
	fill := 0
	done := make([]bool, len(adj))
	for step := range adj {
		p := -1
		if order != nil {
			p = order[step]
		} else {
			for i := range g {
				if !done[i] && (p < 0 || len(g[i]) < len(g[p])) {
					p = i
				}
			}
		}
		done[p] = true
		for i := range g[p] {
			delete(g[i], p)
			for j := range g[p] {
				if i < j && !g[i][j] {
					g[i][j], g[j][i] = true, true
					fill++
				}
			}
		}
	}
	return fill
}

// Fill of the approximate minimum degree ordering against minimum degree with
// exact degrees: the article of Amestoy, Davis and Duff reports differences of
// some per cent either way; ties make small graphs differ by more.
func TestOrderMinDegree(t *testing.T) {
	rnd := rand.New(rand.NewPCG(21, 22))
	sum, sumExact := 0, 0
	for try := range 60 {
		n := 1 + rnd.IntN(120)
		adj := make([]map[int]bool, n)
		for i := range adj {
			adj[i] = map[int]bool{}
		}
		tie := func(i, j int) {
			if i != j {
				adj[i][j], adj[j][i] = true, true
			}
		}
		noFill := false
		switch try % 4 {
		case 0: // a tree: minimum degree makes no fill
			for i := 1; i < n; i++ {
				tie(i, rnd.IntN(i))
			}
			noFill = true
		case 1: // an arrow with a hub
			for i := range n {
				tie(i, n/2)
			}
			noFill = true
		case 2: // sparse random
			for range 2 * n {
				tie(rnd.IntN(n), rnd.IntN(n))
			}
		case 3: // ring with chords
			for i := range n {
				tie(i, (i+1)%n)
				tie(i, (i+rnd.IntN(10))%n)
			}
		}
		lists := make([][]int32, n)
		for i, m := range adj {
			for j := range n { // fixed order
				if m[j] {
					lists[i] = append(lists[i], int32(j))
				}
			}
		}
		order := make([]int, 0, n)
		seen := make([]bool, n)
		for _, i := range orderMinDegree(lists) {
			if seen[i] {
				t.Fatalf("try %d: %d stands twice", try, i)
			}
			seen[i] = true
			order = append(order, int(i))
		}
		if len(order) != n {
			t.Fatalf("try %d: %d of %d variables ordered", try, len(order), n)
		}
		fill, exact := luFillOf(adj, order), luFillOf(adj, nil)
		if noFill && fill != 0 {
			t.Errorf("try %d: fill %d, want none", try, fill)
		}
		sum += fill
		sumExact += exact
	}
	if float64(sum) > 1.05*float64(sumExact) {
		t.Errorf("total fill %d, with exact degrees %d", sum, sumExact)
	}
	t.Logf("total fill %d, with exact degrees %d", sum, sumExact)
}

func TestSparseLUOptions(t *testing.T) {
	a := luFromDense([][]float64{{1, 0}, {0, 1}})
	for want, o := range map[string]LUOptions{
		"PivotThreshold is -1":  {PivotThreshold: -1},
		"PivotThreshold is 1.5": {PivotThreshold: 1.5},
		"PivotThreshold is NaN": {PivotThreshold: math.NaN()},
		"GrowthLimit is 5":      {GrowthLimit: 5},
		"GrowthLimit is NaN":    {GrowthLimit: math.NaN()},
	} {
		if _, err := NewSparseLU(a, o); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%+v: error %v, want %q", o, err, want)
		}
	}
	wide, _ := NewCSC(1, 2, []Entry{{0, 0}})
	_, err := NewSparseLU(wide, LUOptions{PivotThreshold: 2, GrowthLimit: -1})
	for _, want := range []string{"PivotThreshold is 2", "GrowthLimit is -1", "1 x 2"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v lacks %q", err, want)
		}
	}
	if _, err := NewSparseLU(wide, LUOptions{}); err == nil || !strings.Contains(err.Error(), "1 x 2") {
		t.Errorf("1 x 2 matrix: error %v", err)
	}
}

func TestSparseLUOrderZero(t *testing.T) {
	a, _ := NewCSC(0, 0, nil)
	for _, o := range []LUOptions{{}, {NaturalOrder: true}} {
		f := luMust(t, a, o)
		f.Solve(nil)
		f.SolveTranspose(nil)
		if c := f.Condition(); c != 1 {
			t.Errorf("condition %g, want 1", c)
		}
	}
}

func TestSparseLUPanics(t *testing.T) {
	a := luFromDense([][]float64{{2, 0}, {0, 2}})
	f := luMust(t, a, LUOptions{})
	fresh, err := NewSparseLU(a, LUOptions{})
	if err != nil {
		t.Fatal(err)
	}
	for name, call := range map[string]func(){
		"short":            func() { f.Solve(make([]float64, 1)) },
		"long transpose":   func() { f.SolveTranspose(make([]float64, 3)) },
		"without Factor":   func() { fresh.Solve(make([]float64, 2)) },
		"MulVec, short x":  func() { a.MulVec(make([]float64, 2), make([]float64, 1)) },
		"MulVec, long dst": func() { a.MulVec(make([]float64, 3), make([]float64, 2)) },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", name)
				}
			}()
			call()
		}()
	}
}

func TestSparseLUAllocations(t *testing.T) {
	a := luMesh(300, 3)
	f := luMust(t, a, LUOptions{})
	b := make([]float64, a.Cols)
	for i := range b {
		b[i] = 1
	}
	if n := testing.AllocsPerRun(10, func() {
		if err := f.Factor(); err != nil {
			t.Fatal(err)
		}
		f.Solve(b)
		f.SolveTranspose(b)
		f.Condition()
	}); n != 0 {
		t.Errorf("%g allocations", n)
	}
	if s := f.Stats(); s.Factorisations != 1 {
		t.Errorf("stats %+v", s)
	}
}

func ExampleNewSparseLU() {
	// The pattern first: a matrix with a zero on the diagonal.
	a, slot := NewCSC(3, 3, []Entry{{0, 0}, {0, 1}, {1, 0}, {1, 2}, {2, 1}, {2, 2}})
	f, err := NewSparseLU(a, LUOptions{})
	if err != nil {
		fmt.Println(err)
		return
	}
	// Then values, as often as they change.
	for _, s := range []float64{1, 10} {
		for k, v := range []float64{4, 1, 1, -1, 2, 5} {
			a.X[slot[k]] = s * v
		}
		if err := f.Factor(); err != nil {
			fmt.Println(err)
			return
		}
		b := []float64{6, -2, 19}
		f.Solve(b)
		fmt.Printf("%.4f\n", b)
	}
	fmt.Println(f.Stats().Factorisations, "full,", f.Stats().Refactorisations, "on the kept pivots")
	// Output:
	// [1.0000 2.0000 3.0000]
	// [0.1000 0.2000 0.3000]
	// 1 full, 1 on the kept pivots
}
