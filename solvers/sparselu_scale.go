package solvers

import "math"

// luMaxExponent bounds the scale factors, so that the product of a value with
// two of them neither overflows nor vanishes in the range that matters.
const luMaxExponent = 500

// scale finds powers of two for the rows (by position before pivoting) and
// columns that bring the largest magnitude of each row and column of the
// diagonal blocks near 1, and leaves their exponents in s.rowExp and s.colExp.
// Scaling by powers of two adds no rounding error.
//
// Method: simultaneous scaling of rows and columns by the square roots of
// their largest entries, carried out on the exponents. Source: D. Ruiz, "A
// scaling algorithm to equilibrate both rows and columns norms in matrices",
// report RAL-TR-2001-034, Rutherford Appleton Laboratory, 2001. Each sweep
// halves the distance to the goal on the logarithmic scale, so that 12 reach
// it from any exponents of double precision (2^11).
func (s *luSearch) scale(f *SparseLU) {
	const none = math.MinInt32 / 2 // no nonzero value
	a, exp := f.a, s.exp
	for p, v := range a.X[:len(a.I)] {
		if v == 0 {
			exp[p] = none
		} else {
			exp[p] = int32(math.Float64bits(v)>>52&0x7ff) - 1023
		}
	}
	r, c := s.rowExp, s.colExp
	clear(r)
	clear(c)
	for range 12 {
		done := true
		for b := range len(f.block) - 1 {
			k0, k1 := f.block[b], f.block[b+1]
			rmax := s.rowMax[k0:k1]
			for i := range rmax {
				rmax[i] = none
			}
			for k := k0; k < k1; k++ {
				cmax := int32(none)
				j := f.colOf[k]
				for p := a.P[j]; p < a.P[j+1]; p++ {
					i := int(s.place[a.I[p]]) - k0
					if i < 0 || exp[p] == none {
						continue
					}
					e := exp[p] + r[k0+i] + c[k]
					cmax = max(cmax, e)
					rmax[i] = max(rmax[i], e)
				}
				s.colMax[k] = cmax
			}
		}
		for k, m := range s.rowMax {
			if m != none && m>>1 != 0 {
				r[k] = min(max(r[k]-m>>1, -luMaxExponent), luMaxExponent)
				done = false
			}
		}
		for k, m := range s.colMax {
			if m != none && m>>1 != 0 {
				c[k] = min(max(c[k]-m>>1, -luMaxExponent), luMaxExponent)
				done = false
			}
		}
		if done {
			break
		}
	}
}
