package solvers

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

func TestNewCSC(t *testing.T) {
	tests := []struct {
		name       string
		rows, cols int
		entries    []Entry
		p, i       []int
		slot       []int
	}{
		{"empty", 0, 0, nil, []int{0}, nil, []int{}},
		{"no entries", 2, 3, nil, []int{0, 0, 0, 0}, nil, []int{}},
		{"out of order", 3, 3,
			[]Entry{{2, 1}, {0, 1}, {1, 0}, {2, 2}, {0, 0}},
			[]int{0, 2, 4, 5}, []int{0, 1, 0, 2, 2}, []int{3, 2, 1, 4, 0}},
		{"duplicates", 2, 2,
			[]Entry{{1, 1}, {0, 0}, {1, 1}, {0, 1}, {0, 0}},
			[]int{0, 1, 3}, []int{0, 0, 1}, []int{2, 0, 2, 1, 0}},
		{"same row, next column", 2, 2,
			[]Entry{{1, 0}, {1, 1}},
			[]int{0, 1, 2}, []int{1, 1}, []int{0, 1}},
		{"empty columns, wide", 2, 5,
			[]Entry{{1, 3}},
			[]int{0, 0, 0, 0, 1, 1}, []int{1}, []int{0}},
		{"tall", 4, 1,
			[]Entry{{3, 0}, {0, 0}},
			[]int{0, 2}, []int{0, 3}, []int{1, 0}},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			a, slot := NewCSC(tt.rows, tt.cols, tt.entries)
			if !slices.Equal(a.P, tt.p) || !slices.Equal(a.I, tt.i) || !slices.Equal(slot, tt.slot) {
				t.Errorf("P, I, slot = %v, %v, %v, want %v, %v, %v", a.P, a.I, slot, tt.p, tt.i, tt.slot)
			}
			if len(a.X) != len(a.I) || slices.ContainsFunc(a.X, func(v float64) bool { return v != 0 }) {
				t.Errorf("X = %v, want %d zeros", a.X, len(a.I))
			}
			if err := a.check(); err != nil {
				t.Error(err)
			}
		})
	}
}

func TestNewCSCPanics(t *testing.T) {
	for _, tt := range []struct {
		rows, cols int
		e          Entry
	}{
		{-1, 1, Entry{}}, {1, -1, Entry{}}, {2, 3, Entry{2, 0}}, {2, 3, Entry{0, 3}},
		{2, 3, Entry{-1, 0}}, {2, 3, Entry{0, -1}},
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("NewCSC(%d, %d, %v) didn't panic", tt.rows, tt.cols, tt.e)
				}
			}()
			NewCSC(tt.rows, tt.cols, []Entry{tt.e})
		}()
	}
}

func TestCSCAgainstDense(t *testing.T) {
	rnd := rand.New(rand.NewPCG(3, 4))
	for range 50 {
		rows, cols := 1+rnd.IntN(12), 1+rnd.IntN(12)
		dense := make([]float64, rows*cols)
		var at []Entry
		var val []float64
		for range rnd.IntN(60) {
			e, v := Entry{rnd.IntN(rows), rnd.IntN(cols)}, rnd.NormFloat64()
			at, val = append(at, e), append(val, v)
			dense[e.Row*cols+e.Col] += v
		}
		a, slot := NewCSC(rows, cols, at)
		for k, s := range slot {
			a.X[s] += val[k]
		}
		x := make([]float64, cols)
		for j := range x {
			x[j] = rnd.NormFloat64()
		}
		got := make([]float64, rows)
		got[0] = math.NaN() // MulVec overwrites
		a.MulVec(got, x)
		norm := 0.0
		for j := range cols {
			sum := 0.0
			for i := range rows {
				sum += math.Abs(dense[i*cols+j])
			}
			norm = max(norm, sum)
		}
		for i := range rows {
			want := 0.0
			for j := range cols {
				want += dense[i*cols+j] * x[j]
			}
			if math.Abs(got[i]-want) > 1e-13 {
				t.Fatalf("row %d of A x is %v, want %v", i, got[i], want)
			}
		}
		if math.Abs(a.Norm1()-norm) > 1e-13 {
			t.Fatalf("Norm1 = %v, want %v", a.Norm1(), norm)
		}
	}
}

func TestCSCNorm1NaN(t *testing.T) {
	a, _ := NewCSC(2, 2, []Entry{{0, 0}, {1, 1}})
	a.X[0], a.X[1] = math.NaN(), 1
	if got := a.Norm1(); !math.IsNaN(got) {
		t.Errorf("Norm1 = %v, want NaN", got)
	}
}

func TestCSCCheck(t *testing.T) {
	for name, a := range map[string]*CSC{
		"no positions":    {Rows: 1, Cols: 1},
		"first position":  {Rows: 1, Cols: 1, P: []int{1, 1}},
		"too few rows":    {Rows: 1, Cols: 1, P: []int{0, 1}, X: []float64{1}},
		"too few values":  {Rows: 1, Cols: 1, P: []int{0, 1}, I: []int{0}},
		"row too large":   {Rows: 1, Cols: 1, P: []int{0, 1}, I: []int{1}, X: []float64{1}},
		"negative row":    {Rows: 1, Cols: 1, P: []int{0, 1}, I: []int{-1}, X: []float64{1}},
		"not ascending":   {Rows: 2, Cols: 1, P: []int{0, 2}, I: []int{1, 0}, X: []float64{1, 1}},
		"row repeated":    {Rows: 2, Cols: 1, P: []int{0, 2}, I: []int{1, 1}, X: []float64{1, 1}},
		"column backward": {Rows: 2, Cols: 3, P: []int{0, 2, 1, 2}, I: []int{0, 1}, X: []float64{1, 1}},
		"column too long": {Rows: 2, Cols: 2, P: []int{0, 3, 2}, I: []int{0, 1}, X: []float64{1, 1}},
	} {
		if a.check() == nil {
			t.Errorf("%s: no error", name)
		}
		if _, err := NewSparseLU(a, LUOptions{}); err == nil {
			t.Errorf("%s: NewSparseLU: no error", name)
		}
	}
}
