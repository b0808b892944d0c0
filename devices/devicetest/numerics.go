package devicetest

import (
	"fmt"
	"math"

	"islet/solvers"
)

// derivative writes df/ds at s = 0 into d (len n) by central differences of
// order four with steps h and h/2, and the difference of the two estimates
// into spread: large where f isn't smooth within 2h.
func derivative(d, spread []float64, h float64, f func(dst []float64, s float64) error) error {
	n := len(d)
	var at [3][2][]float64
	for i, s := range [3]float64{h / 2, h, 2 * h} {
		for j, sign := range [2]float64{-1, 1} {
			at[i][j] = floats(n)
			if err := f(at[i][j], sign*s); err != nil {
				return err
			}
		}
	}
	for k := range d {
		half, one, two := at[0][1][k]-at[0][0][k], at[1][1][k]-at[1][0][k], at[2][1][k]-at[2][0][k]
		d[k] = (8*one - two) / (12 * h)
		spread[k] = math.Abs(d[k] - (8*half-one)/(6*h))
	}
	return nil
}

// jacobian returns d[flow, rate]/d[v, x], row-major, by the block's own method
// or else by differences.
func (s *subject) jacobian(b solvers.Block, t float64, v, x []float64) ([]float64, error) {
	n := s.ports + s.own
	jac := floats(n * n)
	if d, ok := b.(solvers.Differentiable); ok {
		d.Jacobian(jac, t, v, x)
		return jac, nil
	}
	col, spread := floats(n), floats(n)
	for j := range n {
		if err := s.column(b, col, spread, 1e-4, j, t, v, x); err != nil {
			return nil, err
		}
		for i := range n {
			jac[i*n+j] = col[i]
		}
	}
	return jac, nil
}

// column writes the derivative with respect to unknown j of [v | x] into col,
// by differences with a step relative to the unknown's base.
func (s *subject) column(b solvers.Block, col, spread []float64, step float64, j int, t float64, v, x []float64) error {
	at := append(append(floats(0), v...), x...)
	center := at[j]
	return derivative(col, spread, step*s.bases[j], func(dst []float64, ds float64) error {
		at[j] = center + ds
		return s.eval(b, dst, t, at[:s.ports], at[s.ports:])
	})
}

// rowScales returns, for each of [flow | rate], the size of the terms it is
// made of: the measure for "small" in that row.
func (s *subject) rowScales(b solvers.Block, t float64, v, x []float64) ([]float64, error) {
	n := s.ports + s.own
	scale := floats(n)
	if err := s.eval(b, scale, t, v, x); err != nil {
		return nil, err
	}
	jac, err := s.jacobian(b, t, v, x)
	if err != nil {
		return nil, err
	}
	at := append(append(floats(0), v...), x...)
	for i := range scale {
		scale[i] = math.Abs(scale[i])
		for j := range n {
			scale[i] = max(scale[i], math.Abs(jac[i*n+j])*max(s.bases[j], math.Abs(at[j])))
		}
	}
	return scale, nil
}

// solve finds the own unknowns which[...] for which the rates of the same
// indices vanish, by a damped Newton iteration from x, which it overwrites.
// Unknowns that no equation determines stay as they are; an equation that
// holds no unknown is left out.
func (s *subject) solve(b solvers.Block, t float64, v, x []float64, which []int) error {
	n, m := s.ports+s.own, len(which)
	if m == 0 {
		return nil
	}
	f, trial := floats(n), floats(s.own)
	a, rhs := floats(m*m), floats(m)
	// residual is the largest rate relative to its row's scale.
	residual := func(x, scale []float64) float64 {
		if s.eval(b, f, t, v, x) != nil || !finite(f) {
			return math.Inf(1)
		}
		var r float64
		for i, k := range which {
			if scale[i] > 0 {
				r = max(r, math.Abs(f[s.ports+k])/scale[i])
			}
		}
		return r
	}
	scale := floats(m)
	for range 200 {
		jac, err := s.jacobian(b, t, v, x)
		if err != nil {
			return err
		}
		if !finite(jac) {
			return fmt.Errorf("newton: Jacobian not finite at x = %v", x)
		}
		for i, k := range which {
			scale[i] = 0
			for j, l := range which {
				a[i*m+j] = jac[(s.ports+k)*n+s.ports+l] * s.bases[s.ports+l]
				scale[i] = max(scale[i], math.Abs(a[i*m+j]))
			}
		}
		before := residual(x, scale)
		for i, k := range which {
			rhs[i] = 0
			if scale[i] > 0 {
				rhs[i] = -f[s.ports+k] / scale[i]
				for j := range which {
					a[i*m+j] /= scale[i]
				}
			}
		}
		eliminate(a, rhs)
		var size float64
		for _, dx := range rhs {
			size = max(size, math.Abs(dx))
		}
		lambda := 1.0
		for {
			copy(trial, x)
			for i, k := range which {
				trial[k] += lambda * rhs[i] * s.bases[s.ports+k]
			}
			// Near the solution round-off keeps the residual from falling.
			if residual(trial, scale) < before || size < 1e-9 {
				break
			}
			if lambda /= 2; lambda < 1e-6 {
				return fmt.Errorf("newton: no descent at x = %v, residual %.3g", x, before)
			}
		}
		copy(x, trial)
		if size < 1e-12 {
			return nil
		}
		if size < 1e-9 && lambda == 1 && residual(x, scale) < 1e-13 {
			return nil
		}
	}
	return fmt.Errorf("newton: no convergence, x = %v", x)
}

// eliminate overwrites rhs (m) with a solution of a x = rhs by Gaussian
// elimination with complete pivoting; a (m x m, row-major, rows scaled to 1) is
// destroyed. Where a is rank-deficient the undetermined unknowns are 0.
func eliminate(a, rhs []float64) {
	m := len(rhs)
	order := make([]int, m)
	for j := range order {
		order[j] = j
	}
	rank := m
	for k := range m {
		p, q := k, k
		for i := k; i < m; i++ {
			for j := k; j < m; j++ {
				if math.Abs(a[i*m+j]) > math.Abs(a[p*m+q]) {
					p, q = i, j
				}
			}
		}
		if math.Abs(a[p*m+q]) < 1e-13 {
			rank = k
			break
		}
		for j := range m {
			a[p*m+j], a[k*m+j] = a[k*m+j], a[p*m+j]
		}
		rhs[p], rhs[k] = rhs[k], rhs[p]
		for i := range m {
			a[i*m+q], a[i*m+k] = a[i*m+k], a[i*m+q]
		}
		order[q], order[k] = order[k], order[q]
		for i := k + 1; i < m; i++ {
			l := a[i*m+k] / a[k*m+k]
			for j := k; j < m; j++ {
				a[i*m+j] -= l * a[k*m+j]
			}
			rhs[i] -= l * rhs[k]
		}
	}
	x := floats(m)
	for k := rank - 1; k >= 0; k-- {
		sum := rhs[k]
		for j := k + 1; j < rank; j++ {
			sum -= a[k*m+j] * x[order[j]]
		}
		x[order[k]] = sum / a[k*m+k]
	}
	copy(rhs, x)
}

// unknowns lists the own unknowns without mass, or every one.
func (s *subject) unknowns(every bool) []int {
	var list []int
	for k, m := range s.mass {
		if every || m == 0 {
			list = append(list, k)
		}
	}
	return list
}
