package solvers

import "fmt"

// Solve overwrites b with the solution of A x = b. It panics if len(b) is not
// the order of A, or if the last Factor didn't succeed.
func (f *SparseLU) Solve(b []float64) {
	f.mustSolve(b)
	y := f.y
	for k, i := range f.rowOf {
		y[k] = b[i]
	}
	for blk := len(f.block) - 2; blk >= 0; blk-- {
		k0, k1 := f.block[blk], f.block[blk+1]
		f.solveBlock(k0, k1)
		if f.op[k0] == f.op[k1] {
			continue
		}
		// Move the block's unknowns to the right-hand sides above.
		for k := k0; k < k1; k++ {
			rows, vals := f.oRow[f.op[k]:f.op[k+1]], f.ox[f.op[k]:f.op[k+1]]
			vals = vals[:len(rows)]
			yk := y[k]
			for p, i := range rows {
				y[i] -= vals[p] * yk
			}
		}
	}
	for k, j := range f.colOf {
		b[j] = y[k]
	}
}

// solveBlock solves with the diagonal block of the positions k0..k1-1 in y.
func (f *SparseLU) solveBlock(k0, k1 int) {
	y := f.y[k0:k1]
	r, c := f.rowScale[k0:k1], f.colScale[k0:k1]
	r, c = r[:len(y)], c[:len(y)]
	for k := range y {
		y[k] *= r[k]
	}
	f.solveLU(k0, k1)
	for k := range y {
		y[k] *= c[k]
	}
}

// solveLU overwrites the positions k0..k1-1 of y, a diagonal block, with
// U\(L\y). Neighbouring columns of like structure are applied together.
func (f *SparseLU) solveLU(k0, k1 int) {
	y := f.y
	lp, li, lx, tall := f.lp, f.li, f.lx, f.tall
	for k := k0; k < k1; k++ {
		y0 := y[k]
		if !tall[k] {
			s, l0 := li[lp[k]:lp[k+1]], lx[lp[k]:lp[k+1]]
			l0 = l0[:len(s)]
			for p, i := range s {
				y[i] -= l0[p] * y0
			}
			continue
		}
		s := li[lp[k+1]:lp[k+2]]
		l0, l1 := lx[lp[k]:lp[k+1]], lx[lp[k+1]:lp[k+2]]
		k++
		y1 := y[k] - l0[0]*y0
		y[k] = y1
		l0, l1 = l0[1:][:len(s)], l1[:len(s)]
		for p, i := range s {
			y[i] -= l0[p]*y0 + l1[p]*y1
		}
	}
	up, ui, ux, inv, wide := f.up, f.ui, f.ux, f.inv, f.wide
	for k := k1 - 1; k >= k0; k-- {
		y1 := y[k] * inv[k]
		y[k] = y1
		if k == k0 || !wide[k-1] {
			s, u1 := ui[up[k]:up[k+1]], ux[up[k]:up[k+1]]
			u1 = u1[:len(s)]
			for p, i := range s {
				y[i] -= u1[p] * y1
			}
			continue
		}
		s := ui[up[k-1]:up[k]]
		u0, u1 := ux[up[k-1]:up[k]], ux[up[k]:up[k+1]]
		k--
		y0 := (y[k] - u1[len(s)]*y1) * inv[k]
		y[k] = y0
		u0, u1 = u0[:len(s)], u1[:len(s)]
		for p, i := range s {
			y[i] -= u0[p]*y0 + u1[p]*y1
		}
	}
}

// solveLUTranspose overwrites the positions k0..k1-1 of y, a diagonal block,
// with L'\(U'\y).
func (f *SparseLU) solveLUTranspose(k0, k1 int) {
	y := f.y
	for k := k0; k < k1; k++ {
		s, u := f.ui[f.up[k]:f.up[k+1]], f.ux[f.up[k]:f.up[k+1]]
		u = u[:len(s)]
		yk := y[k]
		for p, i := range s {
			yk -= u[p] * y[i]
		}
		y[k] = yk * f.inv[k]
	}
	for k := k1 - 1; k >= k0; k-- {
		s, l := f.li[f.lp[k]:f.lp[k+1]], f.lx[f.lp[k]:f.lp[k+1]]
		l = l[:len(s)]
		yk := y[k]
		for p, i := range s {
			yk -= l[p] * y[i]
		}
		y[k] = yk
	}
}

// SolveTranspose overwrites b with the solution of A' x = b, A' the transpose.
// It panics if len(b) is not the order of A, or if the last Factor didn't
// succeed.
func (f *SparseLU) SolveTranspose(b []float64) {
	f.mustSolve(b)
	y := f.y
	for k, j := range f.colOf {
		y[k] = b[j]
	}
	for blk := range len(f.block) - 1 {
		k0, k1 := f.block[blk], f.block[blk+1]

		// The unknowns of earlier blocks go to the right-hand side.
		for k := k0; k < k1; k++ {
			yk := y[k]
			for p := f.op[k]; p < f.op[k+1]; p++ {
				yk -= f.ox[p] * y[f.oRow[p]]
			}
			y[k] = yk * f.colScale[k]
		}
		f.solveLUTranspose(k0, k1)
		for k := k0; k < k1; k++ {
			y[k] *= f.rowScale[k]
		}
	}
	for k, i := range f.rowOf {
		b[i] = y[k]
	}
}

func (f *SparseLU) mustSolve(b []float64) {
	if len(b) != f.n {
		panic(fmt.Sprintf("solvers: right-hand side has length %d, the matrix order %d", len(b), f.n))
	}
	if !f.factored {
		panic("solvers: solve without a successful Factor")
	}
}
