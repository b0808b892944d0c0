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
// Neighbouring columns of like structure are applied four or two at a time,
// which reads and writes the column k less often.
func (f *SparseLU) eliminate(searched bool) (k int, pivot float64) {
	ax, x := f.a.X, f.x
	lp, li, lx, run := f.lp, f.li, f.lx, f.run
	lLimit := f.growthLimit * (1 + 0x1p-20) // the search's own L passes
	uLimit := f.growthLimit * f.growth
	f.norm1 = 0
	for k := range f.n {
		// x = column k of R A C
		from := f.aFrom[f.ap[k]:f.ap[k+1]]
		row := f.aRow[f.ap[k]:f.ap[k+1]]
		mul := f.aMul[f.ap[k]:f.ap[k+1]]
		row, mul = row[:len(from)], mul[:len(from)]
		raw, norm := 0.0, 0.0 // 1-norms of the column, unscaled and scaled
		for p, e := range from {
			v := ax[e]
			raw += math.Abs(v)
			v *= mul[p]
			norm += math.Abs(v)
			x[row[p]] = v
		}
		if o, oEnd := f.op[k], f.op[k+1]; o < oEnd {
			from, to := f.oFrom[o:oEnd], f.ox[o:oEnd]
			to = to[:len(from)]
			for p, e := range from {
				to[p] = ax[e]
				raw += math.Abs(ax[e])
			}
		}
		f.norm1 = max(f.norm1, raw)

		// x = L\x
		largest := 0.0 // in the column of U
		ui := f.ui[f.up[k]:f.up[k+1]]
		ux := f.ux[f.up[k]:f.up[k+1]]
		for len(ui) > 0 {
			c := int(ui[0])
			r := min(int(run[c])+1, len(ui))
			switch {
			case r >= 4:
				s := li[lp[c+3]:lp[c+4]] // rows that all four have
				l0, l1, l2, l3 := lx[lp[c]:lp[c+1]], lx[lp[c+1]:lp[c+2]], lx[lp[c+2]:lp[c+3]], lx[lp[c+3]:lp[c+4]]
				xc := x[c : c+4 : c+4]
				u0 := xc[0]
				u1 := xc[1] - l0[0]*u0
				u2 := xc[2] - l0[1]*u0 - l1[0]*u1
				u3 := xc[3] - l0[2]*u0 - l1[1]*u1 - l2[0]*u2
				xc[0], xc[1], xc[2], xc[3] = 0, 0, 0, 0
				ux[0], ux[1], ux[2], ux[3] = u0, u1, u2, u3
				if m := math.Abs(u0); m > largest {
					largest = m
				}
				if m := math.Abs(u1); m > largest {
					largest = m
				}
				if m := math.Abs(u2); m > largest {
					largest = m
				}
				if m := math.Abs(u3); m > largest {
					largest = m
				}
				l0, l1, l2, l3 = l0[3:][:len(s)], l1[2:][:len(s)], l2[1:][:len(s)], l3[:len(s)]
				for p, i := range s {
					x[i] -= (l0[p]*u0 + l1[p]*u1) + (l2[p]*u2 + l3[p]*u3)
				}
				ui, ux = ui[4:], ux[4:]
			case r >= 2:
				s := li[lp[c+1]:lp[c+2]]
				l0, l1 := lx[lp[c]:lp[c+1]], lx[lp[c+1]:lp[c+2]]
				u0 := x[c]
				u1 := x[c+1] - l0[0]*u0
				x[c], x[c+1] = 0, 0
				ux[0], ux[1] = u0, u1
				if m := math.Abs(u0); m > largest {
					largest = m
				}
				if m := math.Abs(u1); m > largest {
					largest = m
				}
				l0, l1 = l0[1:][:len(s)], l1[:len(s)]
				for p, i := range s {
					x[i] -= l0[p]*u0 + l1[p]*u1
				}
				ui, ux = ui[2:], ux[2:]
			default:
				s, l0 := li[lp[c]:lp[c+1]], lx[lp[c]:lp[c+1]]
				u0 := x[c]
				x[c] = 0
				ux[0] = u0
				if m := math.Abs(u0); m > largest {
					largest = m
				}
				l0 = l0[:len(s)]
				for p, i := range s {
					x[i] -= l0[p] * u0
				}
				ui, ux = ui[1:], ux[1:]
			}
		}

		// L(:,k) = x / pivot
		pivot := x[k]
		x[k] = 0
		inv := 1 / pivot
		f.inv[k] = inv
		good := raw-raw == 0 && math.Abs(pivot) >= luTiny && largest <= uLimit*norm
		s, l := li[lp[k]:lp[k+1]], lx[lp[k]:lp[k+1]]
		l = l[:len(s)]
		for p, i := range s {
			v := x[i] * inv
			x[i] = 0
			l[p] = v
			if !(math.Abs(v) <= lLimit) {
				good = false
			}
		}
		if good && !searched && math.Abs(pivot) < luSuspect*max(norm, largest) {
			good = math.Abs(pivot) > luLoss*f.magnitude(k)
		}
		if !good {
			return k, pivot
		}
	}
	return -1, 0
}

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
