package solvers

import "math"

// eliminate computes the factors of the present values on the kept pivot
// sequence. It returns the position and the value of the first pivot that
// isn't good enough, with k = -1 if there is none. If the sequence comes from
// a search with the same values, a loss of digits in a pivot counts as known.
// It allocates nothing.
//
// Left-looking: column k of L and U comes from column k of the matrix by one
// update with every column c of L for which u(c,k) is part of the structure.
// Neighbouring columns of like structure, which the two axes of an electrical
// or mechanical vector have as a rule, are applied and computed two at a time:
// indices are read and short loops started less often.
func (f *SparseLU) eliminate(searched bool) (k int, pivot float64) {
	f.norm1 = 0
	for k := 0; k < f.n; {
		if f.twin[k] {
			bad, pivot := f.eliminateTwo(k, searched)
			if bad >= 0 {
				return bad, pivot
			}
			k += 2
		} else {
			pivot, good := f.eliminateOne(k, searched)
			if !good {
				return k, pivot
			}
			k++
		}
	}
	return -1, 0
}

// eliminateOne computes column k of L and U.
func (f *SparseLU) eliminateOne(k int, searched bool) (pivot float64, good bool) {
	x := f.x
	lp, li, lx, tall := f.lp, f.li, f.lx, f.tall

	// x = column k of R A C
	from := f.aFrom[f.ap[k]:f.ap[k+1]]
	row := f.aRow[f.ap[k]:f.ap[k+1]]
	mul := f.aMul[f.ap[k]:f.ap[k+1]]
	row, mul = row[:len(from)], mul[:len(from)]
	ax := f.a.X
	raw, norm := 0.0, 0.0 // 1-norms of the column, unscaled and scaled
	for p, e := range from {
		v, m := ax[e], mul[p]
		x[row[p]] = v * m
		v = math.Abs(v)
		raw += v
		norm += v * m
	}
	if f.op[k] < f.op[k+1] {
		raw += f.copyAbove(k)
	}

	// x = L\x
	largest := uint64(0) // magnitude in the column of U
	ui, ux := f.ui[f.up[k]:f.up[k+1]], f.ux[f.up[k]:f.up[k+1]]
	for t := 0; t < len(ui); {
		c := int(ui[t])
		if t+1 == len(ui) || !tall[c] {
			s, l0 := li[lp[c]:lp[c+1]], lx[lp[c]:lp[c+1]]
			u0 := x[c]
			x[c] = 0
			ux[t] = u0
			largest = max(largest, luMagnitude(u0))
			l0 = l0[:len(s)]
			for p, i := range s {
				x[i] -= l0[p] * u0
			}
			t++
			continue
		}
		s := li[lp[c+1]:lp[c+2]] // rows that both columns have
		l0, l1 := lx[lp[c]:lp[c+1]], lx[lp[c+1]:lp[c+2]]
		u0 := x[c]
		u1 := x[c+1] - l0[0]*u0
		x[c], x[c+1] = 0, 0
		ux[t], ux[t+1] = u0, u1
		largest = max(largest, luMagnitude(u0))
		largest = max(largest, luMagnitude(u1))
		l0, l1 = l0[1:][:len(s)], l1[:len(s)]
		for p, i := range s {
			x[i] -= l0[p]*u0 + l1[p]*u1
		}
		t += 2
	}

	// L(:,k) = x / pivot
	pivot = x[k]
	x[k] = 0
	inv := 1 / pivot
	f.inv[k] = inv
	good = true
	limit := luMagnitude(f.lLimit)
	s, l := li[lp[k]:lp[k+1]], lx[lp[k]:lp[k+1]]
	l = l[:len(s)]
	for p, i := range s {
		v := x[i] * inv
		x[i] = 0
		l[p] = v
		if luMagnitude(v) > limit {
			good = false
		}
	}
	return pivot, good && f.accept(k, pivot, raw, norm, largest, searched)
}

// eliminateTwo computes the columns k and k+1 of L and U, where L(:,k) has the
// rows of L(:,k+1) and k+1, and U(:,k+1) those of U(:,k) and k. It returns the
// position and the value of a pivot that isn't good enough, or -1.
func (f *SparseLU) eliminateTwo(k int, searched bool) (bad int, pivot float64) {
	x := f.xx
	lp, li, lx, tall := f.lp, f.li, f.lx, f.tall

	// x = columns k and k+1 of R A C
	ax := f.a.X
	var raw, norm [2]float64 // 1-norms of the columns, unscaled and scaled
	for h := range 2 {
		from := f.aFrom[f.ap[k+h]:f.ap[k+h+1]]
		row := f.aRow[f.ap[k+h]:f.ap[k+h+1]]
		mul := f.aMul[f.ap[k+h]:f.ap[k+h+1]]
		row, mul = row[:len(from)], mul[:len(from)]
		r, n := 0.0, 0.0
		for p, e := range from {
			v, m := ax[e], mul[p]
			x[row[p]][h] = v * m
			v = math.Abs(v)
			r += v
			n += v * m
		}
		if f.op[k+h] < f.op[k+h+1] {
			r += f.copyAbove(k + h)
		}
		raw[h], norm[h] = r, n
	}

	// x = L\x
	var largest, largestB uint64 // magnitudes in the columns of U
	ui, ux, uxB := f.ui[f.up[k]:f.up[k+1]], f.ux[f.up[k]:f.up[k+1]], f.ux[f.up[k+1]:f.up[k+2]]
	for t := 0; t < len(ui); {
		c := int(ui[t])
		if t+1 == len(ui) || !tall[c] {
			s, l0 := li[lp[c]:lp[c+1]], lx[lp[c]:lp[c+1]]
			u0, v0 := x[c][0], x[c][1]
			x[c] = [2]float64{}
			ux[t], uxB[t] = u0, v0
			largest = max(largest, luMagnitude(u0))
			largestB = max(largestB, luMagnitude(v0))
			l0 = l0[:len(s)]
			for p, i := range s {
				xi := &x[i]
				l := l0[p]
				xi[0] -= l * u0
				xi[1] -= l * v0
			}
			t++
			continue
		}
		s := li[lp[c+1]:lp[c+2]] // rows that both columns have
		l0, l1 := lx[lp[c]:lp[c+1]], lx[lp[c+1]:lp[c+2]]
		u0, v0 := x[c][0], x[c][1]
		u1 := x[c+1][0] - l0[0]*u0
		v1 := x[c+1][1] - l0[0]*v0
		x[c], x[c+1] = [2]float64{}, [2]float64{}
		ux[t], ux[t+1] = u0, u1
		uxB[t], uxB[t+1] = v0, v1
		largest = max(largest, luMagnitude(u0))
		largest = max(largest, luMagnitude(u1))
		largestB = max(largestB, luMagnitude(v0))
		largestB = max(largestB, luMagnitude(v1))
		l0, l1 = l0[1:][:len(s)], l1[:len(s)]
		for p, i := range s {
			xi := &x[i]
			l, m := l0[p], l1[p]
			xi[0] -= l*u0 + m*u1
			xi[1] -= l*v0 + m*v1
		}
		t += 2
	}

	// Both columns of L, and u(k,k+1)
	pivot = x[k][0]
	inv := 1 / pivot
	u := x[k][1]
	l := x[k+1][0] * inv
	pivotB := x[k+1][1] - l*u
	invB := 1 / pivotB
	x[k], x[k+1] = [2]float64{}, [2]float64{}
	f.inv[k], f.inv[k+1] = inv, invB
	uxB[len(ui)] = u
	largestB = max(largestB, luMagnitude(u))
	limit := luMagnitude(f.lLimit)
	good, goodB := luMagnitude(l) <= limit, true
	s := li[lp[k+1]:lp[k+2]]
	l0, l1 := lx[lp[k]:lp[k+1]], lx[lp[k+1]:lp[k+2]]
	l0[0] = l
	l0, l1 = l0[1:][:len(s)], l1[:len(s)]
	for p, i := range s {
		xi := &x[i]
		v := xi[0] * inv
		w := (xi[1] - v*u) * invB
		*xi = [2]float64{}
		l0[p], l1[p] = v, w
		if luMagnitude(v) > limit {
			good = false
		}
		if luMagnitude(w) > limit {
			goodB = false
		}
	}
	if !good || !f.accept(k, pivot, raw[0], norm[0], largest, searched) {
		return k, pivot
	}
	if !goodB || !f.accept(k+1, pivotB, raw[1], norm[1], largestB, searched) {
		return k + 1, pivotB
	}
	return -1, 0
}

// copyAbove copies the values of column k above its diagonal block, and
// returns the sum of their magnitudes.
func (f *SparseLU) copyAbove(k int) (sum float64) {
	ax, to := f.a.X, f.ox[f.op[k]:f.op[k+1]]
	for p, e := range f.oFrom[f.op[k]:f.op[k+1]] {
		to[p] = ax[e]
		sum += math.Abs(ax[e])
	}
	return sum
}

// accept decides on the pivot of column k, given the 1-norms of the column,
// unscaled and scaled, and the largest magnitude in its column of U.
func (f *SparseLU) accept(k int, pivot, raw, norm float64, largest uint64, searched bool) bool {
	if raw > f.norm1 {
		f.norm1 = raw
	}
	p, u := math.Abs(pivot), math.Float64frombits(largest>>1)
	if !(raw <= math.MaxFloat64 && p >= luTiny && p <= math.MaxFloat64 && u <= f.uLimit*norm) {
		return false
	}
	return searched || p >= luSuspect*norm && p >= luSuspect*u || p > luLoss*f.magnitude(k)
}

// luMagnitude maps v to an integer that grows with the magnitude of v; NaN comes
// after Inf. Integers compare faster, and none is left out.
func luMagnitude(v float64) uint64 { return math.Float64bits(v) << 1 }

// magnitude returns the sum of the magnitudes that add up to the pivot of
// column k: w = |A(:,k)| + |L| w. Rounding makes the pivot uncertain by a few
// roundoffs of that.
func (f *SparseLU) magnitude(k int) float64 {
	w, ui := f.y, f.ui[f.up[k]:f.up[k+1]]
	for _, c := range ui {
		w[c] = 0
	}
	for _, i := range f.li[f.lp[k]:f.lp[k+1]] {
		w[i] = 0
	}
	w[k] = 0
	for p := f.ap[k]; p < f.ap[k+1]; p++ {
		w[f.aRow[p]] = math.Abs(f.a.X[f.aFrom[p]] * f.aMul[p])
	}
	for _, c := range ui {
		for p := f.lp[c]; p < f.lp[c+1]; p++ {
			w[f.li[p]] += math.Abs(f.lx[p]) * w[c]
		}
	}
	return w[k]
}
