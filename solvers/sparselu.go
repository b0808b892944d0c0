package solvers

import (
	"errors"
	"fmt"
	"math"
)

// LUOptions tunes a [SparseLU]. The zero value asks for the defaults.
type LUOptions struct {
	// PivotThreshold is the share of the largest candidate of a column that
	// the diagonal entry must reach to be taken as pivot, 0 < PivotThreshold
	// <= 1. Small values keep the fill low, 1 is partial pivoting. 0 means
	// 0.1 (common practice, no source).
	PivotThreshold float64

	// GrowthLimit bounds what a refactorisation on the kept pivot sequence
	// may do before it is given up for a new search of pivots: the entries of
	// L (where the search itself guarantees 1/PivotThreshold), and the
	// entries of U in terms of the norm of their column in the scaled matrix,
	// or of the largest such ratio after the last search if that exceeds 1.
	// GrowthLimit >= 1/PivotThreshold; 0 means 1e3, or 1/PivotThreshold if
	// that is larger, at which up to three digits may be lost (common
	// practice, no source).
	GrowthLimit float64

	// NaturalOrder leaves out the block triangular form and the fill-reducing
	// ordering: columns are eliminated as they stand.
	NaturalOrder bool
}

// resolve replaces zeros by the defaults and reports every invalid field.
func (o *LUOptions) resolve() error {
	var errs []error
	if o.PivotThreshold == 0 {
		o.PivotThreshold = 0.1
	}
	least := 1.0 // of GrowthLimit
	if o.PivotThreshold > 0 && o.PivotThreshold <= 1 {
		least = 1 / o.PivotThreshold
	} else {
		errs = append(errs, fmt.Errorf("solvers: PivotThreshold is %g, want more than 0 and at most 1", o.PivotThreshold))
	}
	if o.GrowthLimit == 0 {
		o.GrowthLimit = max(1e3, least)
	}
	if !(o.GrowthLimit >= least) {
		errs = append(errs, fmt.Errorf("solvers: GrowthLimit is %g, want at least 1/PivotThreshold = %g", o.GrowthLimit, least))
	}
	return errors.Join(errs...)
}

// luCheck reports what keeps a from being factored, whatever its values.
func luCheck(a *CSC) error {
	if err := a.check(); err != nil {
		return err
	}
	if a.Rows != a.Cols {
		return fmt.Errorf("solvers: matrix is %d x %d, want a square one", a.Rows, a.Cols)
	}
	if len(a.I) > math.MaxInt32 || a.Cols > math.MaxInt32 {
		return fmt.Errorf("solvers: matrix of order %d has %d entries, want at most %d of each",
			a.Cols, len(a.I), math.MaxInt32)
	}
	return nil
}

// LUStats counts what a [SparseLU] has done.
type LUStats struct {
	// Factorisations counts full factorisations, with a search for pivots.
	Factorisations int
	// Refactorisations counts factorisations on a kept pivot sequence.
	Refactorisations int
	// Fallbacks counts those full factorisations that were made because a
	// refactorisation lost too much accuracy.
	Fallbacks int
	// Nonzeros is the number of entries in L and U of the last factorisation,
	// with one diagonal, and with the entries above the diagonal blocks.
	Nonzeros int
	// Flops is the number of floating point operations of one
	// refactorisation, without scaling: one for each multiplication,
	// subtraction and division.
	Flops int
	// Blocks is the number of irreducible diagonal blocks.
	Blocks int
	// OffDiagonal is the number of pivots that aren't on the diagonal which
	// the analysis chose.
	OffDiagonal int
}

// SparseLU solves systems with one sparse unsymmetric matrix whose values
// change often and whose pattern doesn't. It implements [LinearSolver].
//
// With permutations P and Q and diagonal matrices R and C of powers of two,
//
//	P R A C Q  is block upper triangular; each diagonal block is L U.
//
// P and Q come from a maximum transversal, the block triangular form, an
// approximate minimum degree ordering of each diagonal block, and threshold
// pivoting (Gilbert and Peierls) that prefers the diagonal so found. R and C
// bring the largest entry of every row and column of a diagonal block near 1,
// so that neither the units of an equation nor those of an unknown mislead
// the pivoting.
//
// Factor searches pivots the first time and then keeps them: it repeats the
// arithmetic alone, allocates nothing, and watches the growth of the factors.
// Where that is too large, it searches pivots anew. Results may thus differ in
// the last digits with the values factored before; Reset makes the next Factor
// depend on the present values only.
//
// A SparseLU must not be used by several goroutines at once.
type SparseLU struct {
	a *CSC
	n int

	threshold   float64 // of pivots
	growthLimit float64

	// Analysis. Position k stands for the k-th elimination.
	colOf  []int32 // len n: column of a at position k
	facing []int32 // len n: row of a at position k before pivoting
	block  []int   // len Blocks+1: first position of each block

	// Pivot sequence and structure, by position; set by search.
	rowOf    []int32   // len n: row of a at position k
	rowScale []float64 // len n: R, a power of two
	colScale []float64 // len n: C, a power of two

	ap    []int     // len n+1: entries of a in diagonal blocks, by column
	aFrom []int32   // len ap[n]: their index in a.X
	aRow  []int32   // len ap[n]: their position
	aMul  []float64 // len ap[n]: their scale

	op    []int     // len n+1: entries of a above the diagonal blocks, by column
	oFrom []int32   // len op[n]: their index in a.X
	oRow  []int32   // len op[n]: their position
	ox    []float64 // len op[n]: value, not scaled

	lp []int     // len n+1: L without its unit diagonal, by column
	li []int32   // len lp[n]: position of the row, ascending
	lx []float64 // len lp[n]

	up  []int     // len n+1: U without its diagonal, by column
	ui  []int32   // len up[n]: position of the row, ascending
	ux  []float64 // len up[n]
	inv []float64 // len n: reciprocals of the diagonal of U

	tall []bool // len n: L(:,k) has the rows of L(:,k+1), and k+1
	wide []bool // len n: U(:,k+1) has the rows of U(:,k), and k
	twin []bool // len n: columns k and k+1 are computed together

	pivoted  bool    // the sequence above is usable
	factored bool    // so are the values
	growth   float64 // largest |u| / column norm after the last search, at least 1
	lLimit   float64 // of |l| in a refactorisation
	uLimit   float64 // of |u| / column norm in a refactorisation
	worst    float64 // smallest ratio of a pivot to the magnitudes it is the sum of, in the last search
	worstAt  int     // its position, if worst < 1
	norm1    float64 // of the matrix factored last

	x     []float64    // len n: work, zero between calls of eliminateOne
	xx    [][2]float64 // len n: work, zero between calls of eliminateTwo
	y     []float64    // len n: work of Solve and magnitude
	est   []float64    // len n: work of Condition
	sign  []float64    // len n: work of Condition
	find  *luSearch
	stats LUStats
}

var _ LinearSolver = (*SparseLU)(nil)

// NewSparseLU analyses the pattern of a and keeps a reference to a, whose
// pattern must not change any more. It doesn't look at the values.
//
// The error is a *SingularError if no choice of values makes a regular; its
// column is one of a group that has entries in too few rows. Other errors name
// all invalid options, and a matrix that isn't square or whose arrays
// contradict each other.
func NewSparseLU(a *CSC, o LUOptions) (*SparseLU, error) {
	if err := errors.Join(o.resolve(), luCheck(a)); err != nil {
		return nil, err
	}
	row, j := luMatch(a)
	if j >= 0 {
		return nil, &SingularError{Column: j}
	}

	n := a.Cols
	f := &SparseLU{
		a:           a,
		n:           n,
		threshold:   o.PivotThreshold,
		growthLimit: o.GrowthLimit,
		facing:      make([]int32, n),
		x:           make([]float64, n),
		xx:          make([][2]float64, n),
		y:           make([]float64, n),
		est:         make([]float64, n),
		sign:        make([]float64, n),
	}
	if o.NaturalOrder {
		f.colOf = make([]int32, n)
		for j := range f.colOf {
			f.colOf[j] = int32(j)
		}
		f.block = []int{0, n}
		if n == 0 {
			f.block = []int{0}
		}
	} else {
		f.colOf, f.block = luBlocks(a, row)
		luOrderBlocks(a, row, f.colOf, f.block)
	}
	for k, j := range f.colOf {
		f.facing[k] = row[j]
	}
	f.stats.Blocks = len(f.block) - 1
	f.find = newLUSearch(f)
	return f, nil
}

// luOrderBlocks rearranges the columns of each block by minimum degree on the
// pattern of B + B', B the block with row[j] facing column j.
func luOrderBlocks(a *CSC, row, order []int32, start []int) {
	n := a.Cols
	local := make([]int32, n) // place of a row in its block
	in := make([]int32, n)    // block of a row
	for b := range len(start) - 1 {
		for k, j := range order[start[b]:start[b+1]] {
			local[row[j]] = int32(k)
			in[row[j]] = int32(b)
		}
	}
	for b := range len(start) - 1 {
		cols := order[start[b]:start[b+1]]
		m := len(cols)
		if m < 3 {
			continue // any order is as good
		}

		// Both directions of every entry off the diagonal; room for both.
		count := make([]int, m+1)
		for k, j := range cols {
			for _, i := range a.I[a.P[j]:a.P[j+1]] {
				if in[i] == int32(b) && local[i] != int32(k) {
					count[k+1]++
					count[local[i]+1]++
				}
			}
		}
		cscPrefixSum(count)
		room := make([]int32, count[m])
		adj := make([][]int32, m)
		for k := range adj {
			adj[k] = room[count[k]:count[k]:count[k+1]]
		}
		for k, j := range cols {
			for _, i := range a.I[a.P[j]:a.P[j+1]] {
				if l := local[i]; in[i] == int32(b) && l != int32(k) {
					adj[k] = append(adj[k], l)
					adj[l] = append(adj[l], int32(k))
				}
			}
		}
		seen := make([]int32, m) // k+1: in the list of k
		for k := range adj {
			once := adj[k][:0]
			for _, l := range adj[k] {
				if seen[l] != int32(k)+1 {
					seen[l] = int32(k) + 1
					once = append(once, l)
				}
			}
			adj[k] = once
		}

		sorted := make([]int32, m)
		for k, l := range orderMinDegree(adj) {
			sorted[k] = cols[l]
		}
		copy(cols, sorted)
	}
}

// Factor factors the matrix with its present values. The error is a
// *SingularError that names the column of the matrix: one whose sum of
// magnitudes isn't finite, one without any pivot left, or, where the scaled
// matrix has a condition number above 2^52 and a pivot that is little more than
// the rounding errors in it, the column of that pivot.
//
// After an error, Solve must not be called until Factor has succeeded.
func (f *SparseLU) Factor() error {
	f.factored = false
	if f.pivoted {
		if k, _ := f.eliminate(false); k < 0 {
			f.stats.Refactorisations++
			f.factored = true
			return nil
		}
	}
	if err := f.checkFinite(); err != nil {
		return err
	}
	if f.pivoted {
		f.stats.Fallbacks++
	}
	f.stats.Factorisations++
	f.pivoted = false
	if err := f.search(); err != nil {
		return err
	}
	// The search leaves the structure only; the values come from the same
	// arithmetic that a refactorisation does, so that both agree in every bit.
	if k, pivot := f.eliminate(true); k >= 0 {
		// A pivot that was rounding error alone: summed in another order,
		// nothing is left.
		return &SingularError{Column: int(f.colOf[k]), Pivot: pivot}
	}
	if f.worst < luLoss {
		if k := f.worstAt; f.blockCondition(k) > luHopeless {
			return &SingularError{Column: int(f.colOf[k]), Pivot: 1 / f.inv[k]}
		}
	}
	f.pivoted, f.factored = true, true
	return nil
}

// Reset forgets the pivot sequence: the next Factor is a full one.
func (f *SparseLU) Reset() {
	f.pivoted, f.factored = false, false
}

// Stats returns the counts so far.
func (f *SparseLU) Stats() LUStats { return f.stats }

// checkFinite reports the first column whose sum of magnitudes is not finite.
func (f *SparseLU) checkFinite() error {
	a := f.a
	for j := range f.n {
		sum := 0.0
		for _, v := range a.X[a.P[j]:a.P[j+1]] {
			sum += math.Abs(v)
		}
		if sum-sum != 0 {
			return &SingularError{Column: j, Pivot: sum}
		}
	}
	return nil
}
