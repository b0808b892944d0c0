package solvers

import "math"

// luSuspect is the ratio of a pivot to its column below which the digits lost
// in it are counted.
const luSuspect = 0x1p-24

// luLoss is the ratio of a pivot to the magnitudes that it is the sum of below
// which so many digits have cancelled (all but ten bits) that the matrix may be
// singular; below luNoise nothing but rounding errors is left. Both common
// practice, no source.
const (
	luLoss  = 0x1p-42
	luNoise = 0x1p-50
)

// luHopeless is the condition number of the scaled diagonal block from which
// on a matrix with such a pivot counts as singular to working precision.
const luHopeless = 0x1p52

// luTiny is a bound for pivots whose reciprocal may overflow.
const luTiny = 0x1p-1000

// luSearch is the workspace for finding a pivot sequence. Rows are known by
// their position before pivoting, "places", which pivoting permutes within a
// diagonal block.
type luSearch struct {
	place []int32 // len n: place of each row of a
	first []int32 // len n: first position of the block a position lies in

	exp            []int32 // len a.P[n]: exponents of the values
	rowExp, colExp []int32 // len n: of the scale factors, by place and position
	rowMax, colMax []int32 // len n

	pivotOf  []int32 // len n: position at which a place became pivot, -1: not yet
	diagonal []int32 // len n: place that counts as the diagonal of a column
	wants    []int32 // len n: column whose diagonal a place is

	lp     []int     // len n+1: columns of L found so far
	li     []int32   // place of the row
	lx     []float64 // value
	pruned []int32   // len n: leading part of a column of L that reach follows, -1: all
	up     []int     // len n+1: columns of U found so far
	ui     []int32   // position of the row, in an order fit for elimination

	x      []float64 // len n, by place: the present column, zero between columns
	w      []float64 // len n, by place: work of magnitude
	mark   []int32   // len n, by place: k+1: in the pattern of column k
	stack  []int32   // len n: search path, positions
	resume []int     // len n: where to go on in each of its columns
	topo   []int32   // len n: eliminated positions found, filled from the end
	below  []int32   // places found that aren't eliminated yet
	count  []int     // len n+1
}

// newLUSearch returns the workspace for the analysis in f.
func newLUSearch(f *SparseLU) *luSearch {
	n := f.n
	s := &luSearch{
		place: make([]int32, n), first: make([]int32, n),
		exp:    make([]int32, len(f.a.I)),
		rowExp: make([]int32, n), colExp: make([]int32, n),
		rowMax: make([]int32, n), colMax: make([]int32, n),
		pivotOf: make([]int32, n), diagonal: make([]int32, n), wants: make([]int32, n),
		lp: make([]int, n+1), pruned: make([]int32, n), up: make([]int, n+1),
		x: make([]float64, n), w: make([]float64, n), mark: make([]int32, n),
		stack: make([]int32, n), resume: make([]int, n), topo: make([]int32, n),
		below: make([]int32, 0, n), count: make([]int, n+1),
	}
	for k, i := range f.facing {
		s.place[i] = int32(k)
	}
	for b := range len(f.block) - 1 {
		for k := f.block[b]; k < f.block[b+1]; k++ {
			s.first[k] = int32(f.block[b])
		}
	}
	return s
}

// search finds a pivot sequence for the present values and leaves it and the
// structure of the factors in f, without their values.
//
// Method: left-looking elimination of one column at a time; the pattern of a
// column comes from a depth-first search in the graph of L, with symmetric
// pruning. Sources: J. R. Gilbert, T. Peierls, "Sparse partial pivoting in
// time proportional to arithmetic operations", SIAM J. Sci. Stat. Comput. 9
// (1988) 862-874; S. C. Eisenstat, J. W. H. Liu, "Exploiting structural
// symmetry in a sparse partial pivoting code", SIAM J. Sci. Comput. 14 (1993)
// 253-257.
func (f *SparseLU) search() error {
	s, a, n := f.find, f.a, f.n
	s.scale(f)
	s.li, s.lx, s.ui = s.li[:0], s.lx[:0], s.ui[:0]
	clear(s.mark)
	for k := range int32(n) {
		s.pivotOf[k], s.pruned[k] = -1, -1
		s.diagonal[k], s.wants[k] = k, k
	}
	x := s.x
	f.growth, f.worst = 1, 1

	for k := range n {
		j := f.colOf[k]
		top := s.reach(a.I[a.P[j]:a.P[j+1]], int32(k))

		// x = column of R A C
		norm := 0.0 // 1-norm of the column
		for p := a.P[j]; p < a.P[j+1]; p++ {
			if i := s.place[a.I[p]]; i >= s.first[k] {
				x[i] = math.Ldexp(a.X[p], int(s.rowExp[i]+s.colExp[k]))
				norm += math.Abs(x[i])
			}
		}

		// x = L\x
		largest := norm // in the column of U and the input
		for _, c := range s.topo[top:] {
			i := s.diagonal[c]
			u := x[i]
			x[i] = 0
			if m := math.Abs(u); m > largest {
				largest = m
			}
			s.ui = append(s.ui, c)
			li := s.li[s.lp[c]:s.lp[c+1]]
			lx := s.lx[s.lp[c]:s.lp[c+1]]
			lx = lx[:len(li)]
			for p, i := range li {
				x[i] -= lx[p] * u
			}
		}
		s.up[k+1] = len(s.ui)

		// The diagonal if it is large enough, else the largest.
		d := s.diagonal[k]
		best, at := -1.0, int32(-1)
		for _, i := range s.below {
			if m := math.Abs(x[i]); m > best {
				best, at = m, i
			}
		}
		if s.mark[d] == int32(k)+1 && math.Abs(x[d]) >= f.threshold*best {
			at = d
		}
		if best < luTiny {
			for _, i := range s.below {
				x[i] = 0
			}
			return &SingularError{Column: int(j), Pivot: max(best, 0)}
		}
		if math.Abs(x[at]) < luSuspect*largest && f.worst > luNoise {
			// Once a pivot is noise, all that follows is its consequence.
			if r := math.Abs(x[at]) / s.magnitude(f, k, top, at); r < f.worst {
				f.worst, f.worstAt = r, k
			}
		}
		if norm > 0 && largest > f.growth*norm {
			f.growth = largest / norm
		}

		// at becomes the diagonal of column k; the column that wanted at
		// gets d instead.
		if at != d {
			w := s.wants[at]
			s.diagonal[w], s.wants[d] = d, w
			s.diagonal[k], s.wants[at] = at, int32(k)
		}
		s.pivotOf[at] = int32(k)
		pivot := x[at]
		x[at] = 0
		for _, i := range s.below {
			if i != at {
				s.li = append(s.li, i)
				s.lx = append(s.lx, x[i]/pivot)
				x[i] = 0
			}
		}
		s.lp[k+1] = len(s.li)
		s.prune(k, at)
	}
	s.finish(f)
	return nil
}

// reach finds the pattern of column k: it leaves the eliminated positions in
// s.topo, from the returned index on, each before those it changes, and the
// other places in s.below.
func (s *luSearch) reach(rows []int, k int32) (top int) {
	top = len(s.topo)
	s.below = s.below[:0]
	mark, pivotOf := s.mark, s.pivotOf
	for _, row := range rows {
		i := s.place[row]
		if i < s.first[k] || mark[i] == k+1 {
			continue
		}
		mark[i] = k + 1
		c := pivotOf[i]
		if c < 0 {
			s.below = append(s.below, i)
			continue
		}
		depth := 0
		s.stack[0], s.resume[0] = c, s.lp[c]
	descend:
		for depth >= 0 {
			c := s.stack[depth]
			end := s.lp[c+1]
			if s.pruned[c] >= 0 {
				end = s.lp[c] + int(s.pruned[c])
			}
			for p := s.resume[depth]; p < end; p++ {
				i := s.li[p]
				if mark[i] == k+1 {
					continue
				}
				mark[i] = k + 1
				if next := pivotOf[i]; next < 0 {
					s.below = append(s.below, i)
				} else {
					s.resume[depth] = p + 1
					depth++
					s.stack[depth], s.resume[depth] = next, s.lp[next]
					continue descend
				}
			}
			depth--
			top--
			s.topo[top] = c
		}
	}
	return top
}

// prune shortens, for later searches, the columns of L that column k has an
// entry of U for and that have the new pivot at in their pattern: whatever
// they have below the pivot, column k has too.
func (s *luSearch) prune(k int, at int32) {
	for _, c := range s.ui[s.up[k]:s.up[k+1]] {
		if s.pruned[c] >= 0 {
			continue
		}
		li := s.li[s.lp[c]:s.lp[c+1]]
		has := false
		for _, i := range li {
			if i == at {
				has = true
				break
			}
		}
		if !has {
			continue
		}
		lx := s.lx[s.lp[c]:s.lp[c+1]]
		m := 0 // rows that are pivots already come first
		for p, i := range li {
			if s.pivotOf[i] >= 0 {
				li[p], li[m] = li[m], li[p]
				lx[p], lx[m] = lx[m], lx[p]
				m++
			}
		}
		s.pruned[c] = int32(m)
	}
}

// magnitude returns the sum of the magnitudes that add up to place at of column
// k, whose entries of U are those from top on: w = |A(:,k)| + |L| w. Rounding
// makes the value uncertain by a few roundoffs of that.
func (s *luSearch) magnitude(f *SparseLU, k, top int, at int32) float64 {
	a, w := f.a, s.w
	for _, c := range s.topo[top:] {
		w[s.diagonal[c]] = 0
	}
	for _, i := range s.below {
		w[i] = 0
	}
	j := f.colOf[k]
	for p := a.P[j]; p < a.P[j+1]; p++ {
		if i := s.place[a.I[p]]; i >= s.first[k] {
			w[i] = math.Abs(math.Ldexp(a.X[p], int(s.rowExp[i]+s.colExp[k])))
		}
	}
	for _, c := range s.topo[top:] {
		wc := w[s.diagonal[c]]
		for p := s.lp[c]; p < s.lp[c+1]; p++ {
			w[s.li[p]] += math.Abs(s.lx[p]) * wc
		}
	}
	return w[at]
}

// finish writes the pivot sequence and the structure of the factors into f.
func (s *luSearch) finish(f *SparseLU) {
	a, n := f.a, f.n
	f.rowOf = luResize(f.rowOf, n)
	f.rowScale = luResize(f.rowScale, n)
	f.colScale = luResize(f.colScale, n)
	f.inv = luResize(f.inv, n)
	f.ap, f.op = luResize(f.ap, n+1), luResize(f.op, n+1)
	off := 0
	for k, i := range s.diagonal {
		f.rowOf[k] = f.facing[i]
		f.rowScale[k] = math.Ldexp(1, int(s.rowExp[i]))
		f.colScale[k] = math.Ldexp(1, int(s.colExp[k]))
		if int(i) != k {
			off++
		}
	}

	// Entries of a
	f.aFrom, f.aRow, f.aMul = f.aFrom[:0], f.aRow[:0], f.aMul[:0]
	f.oFrom, f.oRow = f.oFrom[:0], f.oRow[:0]
	for k, j := range f.colOf {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			i := s.place[a.I[p]]
			if i >= s.first[k] {
				f.aFrom = append(f.aFrom, int32(p))
				f.aRow = append(f.aRow, s.pivotOf[i])
				f.aMul = append(f.aMul, math.Ldexp(1, int(s.rowExp[i]+s.colExp[k])))
			} else {
				f.oFrom = append(f.oFrom, int32(p))
				f.oRow = append(f.oRow, s.pivotOf[i])
			}
		}
		f.ap[k+1], f.op[k+1] = len(f.aFrom), len(f.oFrom)
	}
	f.ox = luResize(f.ox, len(f.oRow))

	// L and U with ascending rows
	for p, i := range s.li {
		s.li[p] = s.pivotOf[i]
	}
	f.lp, f.li = s.sorted(f.lp, f.li, s.lp, s.li)
	f.up, f.ui = s.sorted(f.up, f.ui, s.up, s.ui)
	f.lx = luResize(f.lx, len(f.li))
	f.ux = luResize(f.ux, len(f.ui))

	// Neighbours of like structure
	f.tall, f.wide, f.twin = luResize(f.tall, n), luResize(f.wide, n), luResize(f.twin, n)
	for k := range n {
		f.tall[k], f.wide[k], f.twin[k] = false, false, false
		if k == n-1 || s.first[k] != s.first[k+1] {
			continue
		}
		here, next := f.li[f.lp[k]:f.lp[k+1]], f.li[f.lp[k+1]:f.lp[k+2]]
		f.tall[k] = len(here) == len(next)+1 && here[0] == int32(k)+1 && luEqual(here[1:], next)
		here, next = f.ui[f.up[k]:f.up[k+1]], f.ui[f.up[k+1]:f.up[k+2]]
		f.wide[k] = len(next) == len(here)+1 && next[len(here)] == int32(k) && luEqual(here, next)
		f.twin[k] = f.tall[k] && f.wide[k] && (k == 0 || !f.twin[k-1])
	}

	f.lLimit = f.growthLimit * (1 + 0x1p-20) // the search's own L passes
	f.uLimit = f.growthLimit * f.growth
	flops := len(f.li)
	for _, c := range f.ui {
		flops += 2 * (f.lp[c+1] - f.lp[c])
	}
	f.stats.Flops = flops
	f.stats.Nonzeros = len(f.li) + len(f.ui) + n + len(f.oRow)
	f.stats.OffDiagonal = off
}

// sorted writes the columns (p, i) with ascending indices into (toP, toI) and
// returns these. It transposes twice; the transpose uses the work of the
// search.
func (s *luSearch) sorted(toP []int, toI []int32, p []int, i []int32) ([]int, []int32) {
	n := len(p) - 1
	toP, toI = luResize(toP, n+1), luResize(toI, len(i))
	copy(toP, p)
	count := s.count
	clear(count)
	for _, r := range i {
		count[r+1]++
	}
	cscPrefixSum(count)
	byRow := make([]int32, len(i)) // columns, row by row
	for c := range n {
		for _, r := range i[p[c]:p[c+1]] {
			byRow[count[r]] = int32(c)
			count[r]++
		}
	}
	next := s.resume // next place in each column
	copy(next, p)
	from := 0
	for r := range n {
		for _, c := range byRow[from:count[r]] {
			toI[next[c]] = int32(r)
			next[c]++
		}
		from = count[r]
	}
	return toP, toI
}

// luResize returns a slice of length n, s where it is long enough. The
// elements are arbitrary.
func luResize[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n)
	}
	return s[:n]
}

func luEqual(a, b []int32) bool {
	for p, i := range a {
		if i != b[p] {
			return false
		}
	}
	return true
}
