package modes

import (
	"errors"
	"fmt"
	"math/cmplx"

	"islet/engine"
	"islet/solvers"
)

// shifted solves with sigma E - J. The fill-reducing order of the sparse
// factorisation finds what static condensation does: the devices' own unknowns
// go first. A complex shift takes the real form of twice the order, unknown by
// unknown in turn:
//
//	[ Re -Im ] [Re x]
//	[ Im  Re ] [Im x]
type shifted struct {
	l      *engine.Linear
	width  int // 1, or 2 for complex shifts
	a      *solvers.CSC
	lu     *solvers.SparseLU
	jacAt  [2][]int // entry of J -> slot, for each diagonal block
	massAt []int    // mass -> width^2 slots
	masses []int    // unknowns with a mass
	b      []float64
}

func newShifted(l *engine.Linear, complexShift bool) *shifted {
	s := &shifted{l: l, width: 1}
	if complexShift {
		s.width = 2
	}
	n, w := len(l.E), s.width
	var at []solvers.Entry
	for c := range w {
		for j := range n {
			for _, i := range l.J.I[l.J.P[j]:l.J.P[j+1]] {
				at = append(at, solvers.Entry{Row: w*i + c, Col: w*j + c})
			}
		}
	}
	for i, e := range l.E {
		if e == 0 {
			continue
		}
		s.masses = append(s.masses, i)
		for c := range w {
			for d := range w {
				at = append(at, solvers.Entry{Row: w*i + c, Col: w*i + d})
			}
		}
	}
	var slot []int
	s.a, slot = solvers.NewCSC(w*n, w*n, at)
	for c := range w {
		s.jacAt[c], slot = slot[:len(l.J.X)], slot[len(l.J.X):]
	}
	s.massAt = slot
	s.b = make([]float64, w*n)
	return s
}

// factor factors sigma E - J. The imaginary part is used for complex shifts
// alone.
func (s *shifted) factor(sigma complex128) error {
	x := s.a.X
	clear(x)
	for c := range s.width {
		at := s.jacAt[c]
		for k, v := range s.l.J.X {
			x[at[k]] -= v
		}
	}
	for k, i := range s.masses {
		re, im := real(sigma)*s.l.E[i], imag(sigma)*s.l.E[i]
		if s.width == 1 {
			x[s.massAt[k]] += re
			continue
		}
		at := s.massAt[4*k : 4*k+4]
		x[at[0]] += re
		x[at[1]] -= im
		x[at[2]] += im
		x[at[3]] += re
	}
	if s.lu == nil {
		lu, err := solvers.NewSparseLU(s.a, solvers.LUOptions{})
		if err != nil {
			return s.named(err, sigma)
		}
		s.lu = lu
	}
	if err := s.lu.Factor(); err != nil {
		return s.named(err, sigma)
	}
	return nil
}

func (s *shifted) named(err error, sigma complex128) error {
	var sing *solvers.SingularError
	if errors.As(err, &sing) && sing.Column/s.width < len(s.l.Unknowns) {
		return fmt.Errorf("modes: no solution at s = %.6g 1/s, met at %s: %w", sigma, s.l.Unknowns[sing.Column/s.width].Name, err)
	}
	return fmt.Errorf("modes: at s = %.6g 1/s: %w", sigma, err)
}

// solve overwrites b with the solution x of (sigma E - J) x = b.
func (s *shifted) solve(b []complex128) {
	if s.width == 1 {
		s.each(b, s.lu.Solve)
		return
	}
	for i, v := range b {
		s.b[2*i], s.b[2*i+1] = real(v), imag(v)
	}
	s.lu.Solve(s.b)
	for i := range b {
		b[i] = complex(s.b[2*i], s.b[2*i+1])
	}
}

// solveTranspose overwrites b with the solution of (sigma E - J)' x = b, the
// transpose without conjugation. The transpose of the real form belongs to the
// conjugate transpose.
func (s *shifted) solveTranspose(b []complex128) {
	if s.width == 1 {
		s.each(b, s.lu.SolveTranspose)
		return
	}
	for i, v := range b {
		s.b[2*i], s.b[2*i+1] = real(v), -imag(v)
	}
	s.lu.SolveTranspose(s.b)
	for i := range b {
		b[i] = cmplx.Conj(complex(s.b[2*i], s.b[2*i+1]))
	}
}

// each solves for real and imaginary parts.
func (s *shifted) each(b []complex128, solve func([]float64)) {
	for i, v := range b {
		s.b[i] = real(v)
	}
	solve(s.b)
	for i, v := range b {
		b[i], s.b[i] = complex(s.b[i], imag(v)), imag(v)
	}
	solve(s.b)
	for i, v := range b {
		b[i] = complex(real(v), s.b[i])
	}
}
