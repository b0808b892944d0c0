package solvers

import "math"

// Condition returns an estimate of the 1-norm condition number
// |A|_1 |A^-1|_1 of the matrix factored last: a lower bound (to rounding),
// mostly within a factor of three, for the price of some five pairs of solves.
// It is +Inf if the last Factor didn't succeed, and 1 for a matrix of order 0.
//
// Sources: W. W. Hager, "Condition estimates", SIAM J. Sci. Stat. Comput. 5
// (1984) 311-316; N. J. Higham, "FORTRAN codes for estimating the one-norm of
// a real or complex matrix, with applications to condition estimation", ACM
// Trans. Math. Softw. 14 (1988) 381-396.
func (f *SparseLU) Condition() float64 {
	if !f.factored {
		return math.Inf(1)
	}
	if f.n == 0 {
		return 1
	}
	return f.norm1 * inverseNorm1(f, f.est, f.sign)
}

// inverse solves with a factored matrix and with its transpose.
type inverse interface {
	Solve(b []float64)
	SolveTranspose(b []float64)
}

// blockCondition estimates the 1-norm condition number of the scaled diagonal
// block around position k.
func (f *SparseLU) blockCondition(k int) float64 {
	k0 := int(f.find.first[k])
	k1 := k0 + 1
	for k1 < f.n && int(f.find.first[k1]) == k0 {
		k1++
	}
	norm := 0.0
	for k := k0; k < k1; k++ {
		sum := 0.0
		for p := f.ap[k]; p < f.ap[k+1]; p++ {
			sum += math.Abs(f.a.X[f.aFrom[p]] * f.aMul[p])
		}
		norm = max(norm, sum)
	}
	return norm * inverseNorm1(luBlock{f, k0, k1}, f.est[k0:k1], f.sign[k0:k1])
}

// luBlock is the scaled diagonal block of the positions k0..k1-1.
type luBlock struct {
	f      *SparseLU
	k0, k1 int
}

func (b luBlock) Solve(x []float64) {
	y := b.f.y[b.k0:b.k1]
	copy(y, x)
	b.f.solveLU(b.k0, b.k1)
	copy(x, y)
}

func (b luBlock) SolveTranspose(x []float64) {
	y := b.f.y[b.k0:b.k1]
	copy(y, x)
	b.f.solveLUTranspose(b.k0, b.k1)
	copy(x, y)
}

// inverseNorm1 estimates |A^-1|_1, the maximum over the unit 1-norm ball of
// the convex function |A^-1 x|_1, by going from vertex to vertex. x and sign
// are work of length n >= 1, the order of A.
func inverseNorm1(a inverse, x, sign []float64) float64 {
	n := len(x)
	for i := range x {
		x[i] = 1 / float64(n)
	}
	a.Solve(x)
	norm := luNorm1(x)
	if n == 1 {
		return norm
	}
	for i, v := range x {
		sign[i] = math.Copysign(1, v)
	}
	vertex := -1
	for range 5 { // the article's limit; two or three are the rule
		// A subgradient of the function at x
		copy(x, sign)
		a.SolveTranspose(x)
		best := 0
		for i, v := range x {
			if math.Abs(v) > math.Abs(x[best]) {
				best = i
			}
		}
		if vertex >= 0 && math.Abs(x[best]) == math.Abs(x[vertex]) {
			break // no vertex promises more than the present one
		}
		vertex = best
		clear(x)
		x[vertex] = 1
		a.Solve(x)
		at := luNorm1(x)
		same := true
		for i, v := range x {
			if s := math.Copysign(1, v); s != sign[i] {
				sign[i] = s
				same = false
			}
		}
		if at <= norm || same {
			norm = max(norm, at)
			break
		}
		norm = at
	}

	// A vector against matrices that cancellation hides from the search.
	for i := range x {
		x[i] = 1 + float64(i)/float64(n-1)
		if i%2 == 1 {
			x[i] = -x[i]
		}
	}
	a.Solve(x)
	return max(norm, 2*luNorm1(x)/float64(3*n))
}

func luNorm1(x []float64) float64 {
	sum := 0.0
	for _, v := range x {
		sum += math.Abs(v)
	}
	return sum
}
