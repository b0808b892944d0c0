package solvers

import (
	"fmt"
	"math"
)

// CSC is a sparse matrix in compressed-column form. Column j has the values
// X[P[j]:P[j+1]] in the rows I[P[j]:P[j+1]], which ascend strictly. An entry
// that is present but zero counts as part of the pattern.
type CSC struct {
	// Rows and Cols are the dimensions.
	Rows, Cols int
	// P holds the first position of each column, and the number of entries
	// at the end; len Cols+1.
	P []int
	// I holds the row of each value; len P[Cols].
	I []int
	// X holds the values; len P[Cols].
	X []float64
}

// NewCSC builds a matrix of the given pattern with all values zero. Entries
// may come in any order; those that stand more than once are merged. slot[k]
// is the index into a.X of entries[k], so that a caller fills the matrix
// without searching:
//
//	clear(a.X)
//	for k, s := range slot {
//		a.X[s] += value[k]
//	}
//
// It panics if a dimension is negative or an entry lies outside the matrix.
func NewCSC(rows, cols int, entries []Entry) (a *CSC, slot []int) {
	if rows < 0 || cols < 0 {
		panic(fmt.Sprintf("solvers: NewCSC: dimensions %d x %d are negative", rows, cols))
	}
	for k, e := range entries {
		if e.Row < 0 || e.Row >= rows || e.Col < 0 || e.Col >= cols {
			panic(fmt.Sprintf("solvers: NewCSC: entry %d at (%d, %d) is outside the %d x %d matrix",
				k, e.Row, e.Col, rows, cols))
		}
	}

	// Two stable counting sorts, by row and then by column, leave the rows
	// of each column in ascending order.
	byRow := make([]int, len(entries)) // positions in entries, by row
	next := make([]int, max(rows, cols)+1)
	for _, e := range entries {
		next[e.Row+1]++
	}
	cscPrefixSum(next[:rows+1])
	for k, e := range entries {
		byRow[next[e.Row]] = k
		next[e.Row]++
	}
	clear(next)
	sorted := make([]int, len(entries)) // positions in entries, by column and row
	for _, e := range entries {
		next[e.Col+1]++
	}
	cscPrefixSum(next[:cols+1])
	for _, k := range byRow {
		c := entries[k].Col
		sorted[next[c]] = k
		next[c]++
	}

	a = &CSC{Rows: rows, Cols: cols, P: make([]int, cols+1)}
	slot = make([]int, len(entries))
	last := Entry{Row: -1, Col: -1}
	for _, k := range sorted {
		if e := entries[k]; e != last {
			a.I = append(a.I, e.Row)
			a.P[e.Col+1] = len(a.I)
			last = e
		}
		slot[k] = len(a.I) - 1
	}
	for j := range cols { // columns without entries
		a.P[j+1] = max(a.P[j+1], a.P[j])
	}
	a.X = make([]float64, len(a.I))
	return a, slot
}

// cscPrefixSum replaces counts, shifted by one place, by first positions.
func cscPrefixSum(p []int) {
	for i := 1; i < len(p); i++ {
		p[i] += p[i-1]
	}
}

// MulVec writes A x into dst. len(dst) = Rows, len(x) = Cols, and dst must not
// alias x; it panics on other lengths.
func (a *CSC) MulVec(dst, x []float64) {
	if len(dst) != a.Rows || len(x) != a.Cols {
		panic(fmt.Sprintf("solvers: MulVec: lengths %d and %d with a %d x %d matrix",
			len(dst), len(x), a.Rows, a.Cols))
	}
	clear(dst)
	for j, xj := range x {
		rows := a.I[a.P[j]:a.P[j+1]]
		vals := a.X[a.P[j]:a.P[j+1]]
		vals = vals[:len(rows)]
		for p, i := range rows {
			dst[i] += vals[p] * xj
		}
	}
}

// Norm1 returns the 1-norm, the largest sum of magnitudes in a column. It is
// NaN if a value is NaN.
func (a *CSC) Norm1() float64 {
	norm := 0.0
	for j := range a.Cols {
		sum := 0.0
		for _, v := range a.X[a.P[j]:a.P[j+1]] {
			sum += math.Abs(v)
		}
		norm = max(norm, sum) // the built-in max keeps a NaN
	}
	return norm
}

// check returns an error if the arrays of a contradict each other.
func (a *CSC) check() error {
	if a.Rows < 0 || a.Cols < 0 || len(a.P) != a.Cols+1 || a.P[0] != 0 {
		return fmt.Errorf("solvers: matrix %d x %d has %d column positions, want %d starting with 0",
			a.Rows, a.Cols, len(a.P), a.Cols+1)
	}
	if nnz := a.P[a.Cols]; len(a.I) != nnz || len(a.X) != nnz {
		return fmt.Errorf("solvers: matrix has %d rows and %d values stored, its columns end at %d",
			len(a.I), len(a.X), nnz)
	}
	for j := range a.Cols {
		if a.P[j] > a.P[j+1] || a.P[j+1] > len(a.I) {
			return fmt.Errorf("solvers: matrix column %d extends from %d to %d", j, a.P[j], a.P[j+1])
		}
		last := -1
		for _, i := range a.I[a.P[j]:a.P[j+1]] {
			if i <= last || i >= a.Rows {
				return fmt.Errorf("solvers: matrix column %d has row %d after row %d, want ascending rows below %d",
					j, i, last, a.Rows)
			}
			last = i
		}
	}
	return nil
}
