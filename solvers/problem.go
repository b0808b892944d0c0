package solvers

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Element is an entry of a sparse matrix with its value.
type Element struct {
	Row, Col int
	Value    float64
}

// Diagonal returns the elements of the diagonal matrix diag(d), zeros left
// out.
func Diagonal(d ...float64) []Element {
	e := make([]Element, 0, len(d))
	for i, v := range d {
		if v != 0 {
			e = append(e, Element{i, i, v})
		}
	}
	return e
}

// Problem is M y' = f(t, y) over one flat vector: a struct of functions, nil
// meaning not available.
type Problem struct {
	// N is the number of unknowns.
	N int

	// Mass holds the elements of M (duplicates are summed); nil is the
	// identity. M may be singular as long as the problem has index 1, and
	// needn't show that by a zero row.
	Mass []Element

	// F writes f(t, y) into dst. It may return an error that wraps
	// ErrReject.
	F func(dst []float64, t float64, y []float64) error

	// Pattern lists the entries of df/dy that can be nonzero; nil means all
	// N*N of them, row by row.
	Pattern []Entry

	// Jacobian writes the values of df/dy in the order of Pattern; nil means
	// that F is differenced.
	Jacobian func(dst []float64, t float64, y []float64) error

	// TimeDerivative writes the partial derivative of f with respect to t;
	// nil means that F is differenced unless Autonomous is set.
	TimeDerivative func(dst []float64, t float64, y []float64) error

	// Autonomous promises that F doesn't depend on t explicitly.
	Autonomous bool

	// Scale holds, for each unknown, the positive value that counts as one
	// for Tolerance.Abs; nil means 1 each.
	Scale []float64

	// Absolute marks unknowns whose magnitude doesn't widen their tolerance
	// (angles); nil means none.
	Absolute []bool
}

// System checks p and makes it ready for a method. All faults found are
// joined in the error.
func (p *Problem) System() (System, error) {
	var errs []error
	if p.N <= 0 {
		errs = append(errs, fmt.Errorf("solvers: problem has N = %d unknowns, want at least 1", p.N))
	}
	if p.F == nil {
		errs = append(errs, errors.New("solvers: problem has no F"))
	}
	for _, e := range p.Mass {
		if e.Row < 0 || e.Row >= p.N || e.Col < 0 || e.Col >= p.N {
			errs = append(errs, fmt.Errorf("solvers: mass element at (%d, %d) lies outside %d x %d", e.Row, e.Col, p.N, p.N))
		}
		if math.IsNaN(e.Value) || math.IsInf(e.Value, 0) {
			errs = append(errs, fmt.Errorf("solvers: mass element at (%d, %d) is %g", e.Row, e.Col, e.Value))
		}
	}
	for _, e := range p.Pattern {
		if e.Row < 0 || e.Row >= p.N || e.Col < 0 || e.Col >= p.N {
			errs = append(errs, fmt.Errorf("solvers: pattern entry (%d, %d) lies outside %d x %d", e.Row, e.Col, p.N, p.N))
		}
	}
	if p.Scale != nil && len(p.Scale) != p.N {
		errs = append(errs, fmt.Errorf("solvers: Scale has %d entries, want %d", len(p.Scale), p.N))
	}
	for i, v := range p.Scale {
		if !(v > 0) || math.IsInf(v, 0) {
			errs = append(errs, fmt.Errorf("solvers: Scale[%d] is %g, want a positive value", i, v))
		}
	}
	if p.Absolute != nil && len(p.Absolute) != p.N {
		errs = append(errs, fmt.Errorf("solvers: Absolute has %d entries, want %d", len(p.Absolute), p.N))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	return newFlatSystem(p)
}

// flatSystem is the System of a Problem.
type flatSystem struct {
	p        *Problem
	n        int
	mass     []Element
	algRow   []bool // n: empty mass row
	w        *CSC   // alpha M - J
	massAt   []int  // len mass: slot in w.X
	jacAt    []int  // len pattern: slot in w.X
	jac      []float64
	lu       *SparseLU
	scale    []float64
	abs      []bool
	relative []float64 // 1, or 0 where abs
	nulls    []nullSpace
	work     [6][]float64
	central  [3][]float64
}

// nullSpace is the left and right null space of one connected part of M.
type nullSpace struct {
	rows, cols  []int
	left, right [][]float64 // orthonormal vectors over rows and over cols
}

func newFlatSystem(p *Problem) (*flatSystem, error) {
	n := p.N
	s := &flatSystem{p: p, n: n, mass: p.Mass, scale: p.Scale, abs: p.Absolute}
	if s.mass == nil {
		d := make([]float64, n)
		for i := range d {
			d[i] = 1
		}
		s.mass = Diagonal(d...)
	}
	if s.scale == nil {
		s.scale = make([]float64, n)
		for i := range s.scale {
			s.scale[i] = 1
		}
	}
	if s.abs == nil {
		s.abs = make([]bool, n)
	}
	for _, a := range s.abs {
		r := 1.0
		if a {
			r = 0
		}
		s.relative = append(s.relative, r)
	}
	pattern := p.Pattern
	if pattern == nil {
		pattern = make([]Entry, 0, n*n)
		for i := range n {
			for j := range n {
				pattern = append(pattern, Entry{i, j})
			}
		}
	}
	entries := make([]Entry, 0, len(pattern)+len(s.mass))
	entries = append(entries, pattern...)
	s.algRow = make([]bool, n)
	for i := range s.algRow {
		s.algRow[i] = true
	}
	for _, e := range s.mass {
		entries = append(entries, Entry{e.Row, e.Col})
		if e.Value != 0 {
			s.algRow[e.Row] = false
		}
	}
	var slot []int
	s.w, slot = NewCSC(n, n, entries)
	s.jacAt, s.massAt = slot[:len(pattern)], slot[len(pattern):]
	s.jac = make([]float64, len(pattern))
	for i := range s.work {
		s.work[i] = make([]float64, n)
	}
	for i := range s.central {
		s.central[i] = make([]float64, n)
	}
	var err error
	if s.lu, err = NewSparseLU(s.w, LUOptions{}); err != nil {
		return nil, err
	}
	s.nulls, err = nullSpaces(n, s.mass)
	return s, err
}

// nullSpaces finds the null spaces of M by singular value decomposition of
// its connected parts, which are small.
func nullSpaces(n int, mass []Element) ([]nullSpace, error) {
	parent := make([]int, 2*n) // rows 0..n-1, columns n..2n-1
	for i := range parent {
		parent[i] = i
	}
	var find func(i int) int
	find = func(i int) int {
		if parent[i] != i {
			parent[i] = find(parent[i])
		}
		return parent[i]
	}
	for _, e := range mass {
		if e.Value != 0 {
			parent[find(e.Row)] = find(n + e.Col)
		}
	}
	part := make([]nullSpace, 0, n)
	index := make(map[int]int, n)
	at := make([]int, n) // position of a row or column within its part
	colAt := make([]int, n)
	for i := range 2 * n {
		r := find(i)
		k, ok := index[r]
		if !ok {
			k = len(part)
			index[r] = k
			part = append(part, nullSpace{})
		}
		if i < n {
			at[i] = len(part[k].rows)
			part[k].rows = append(part[k].rows, i)
		} else {
			colAt[i-n] = len(part[k].cols)
			part[k].cols = append(part[k].cols, i-n)
		}
	}
	dense := make([]*mat.Dense, len(part))
	for k := range part {
		if len(part[k].rows) > 0 && len(part[k].cols) > 0 {
			dense[k] = mat.NewDense(len(part[k].rows), len(part[k].cols), nil)
		}
	}
	for _, e := range mass {
		if e.Value == 0 {
			continue
		}
		d := dense[index[find(e.Row)]]
		i, j := at[e.Row], colAt[e.Col]
		d.Set(i, j, d.At(i, j)+e.Value)
	}
	var nulls []nullSpace
	for k, p := range part {
		m, c := len(p.rows), len(p.cols)
		if dense[k] == nil { // an empty row or an empty column
			for range p.rows {
				p.left = append(p.left, []float64{1})
			}
			for range p.cols {
				p.right = append(p.right, []float64{1})
			}
			nulls = append(nulls, p)
			continue
		}
		if m == 1 && c == 1 && dense[k].At(0, 0) != 0 {
			continue
		}
		var svd mat.SVD
		if !svd.Factorize(dense[k], mat.SVDFull) {
			return nil, errors.New("solvers: singular value decomposition of the mass matrix failed")
		}
		sv := svd.Values(nil)
		rank := 0
		for _, x := range sv {
			if x > 1e-12*sv[0] {
				rank++
			}
		}
		var u, v mat.Dense
		svd.UTo(&u)
		svd.VTo(&v)
		for j := rank; j < m; j++ {
			p.left = append(p.left, mat.Col(nil, j, &u))
		}
		for j := rank; j < c; j++ {
			p.right = append(p.right, mat.Col(nil, j, &v))
		}
		if len(p.left)+len(p.right) > 0 {
			nulls = append(nulls, p)
		}
	}
	return nulls, nil
}

func (s *flatSystem) Dim() int { return s.n }

func (s *flatSystem) Eval(dst []float64, t float64, y []float64) error {
	return s.p.F(dst, t, y)
}

func (s *flatSystem) TimeDerivative(dst []float64, t, h float64, y, f0 []float64) (bool, error) {
	if s.p.Autonomous {
		return false, nil
	}
	if s.p.TimeDerivative != nil {
		return true, s.p.TimeDerivative(dst, t, y)
	}
	d := timeIncrement(t, h)
	f1, f2 := s.work[0], s.work[1]
	if err := s.p.F(f1, t+d, y); err != nil {
		return true, err
	}
	if err := s.p.F(f2, t+2*d, y); err != nil {
		return true, err
	}
	for i := range dst {
		dst[i] = (4*f1[i] - 3*f0[i] - f2[i]) / (2 * d)
	}
	return true, nil
}

// timeIncrement is the increment for the one-sided second-order difference in
// time: small against the step, large against the resolution of t.
func timeIncrement(t, h float64) float64 {
	return math.Max(1e-4*h, 1e-12*math.Abs(t))
}

func (s *flatSystem) Linearise(t float64, y []float64) error {
	if s.p.Jacobian != nil {
		return s.p.Jacobian(s.jac, t, y)
	}
	// Central differences, a column at a time; the increment is the cube
	// root of the rounding unit, which balances truncation against rounding.
	fp, fm, yy := s.central[0], s.central[1], s.central[2]
	copy(yy, y)
	entries := s.p.Pattern
	for j := range s.n {
		d := cbrtEps * math.Max(math.Abs(y[j]), s.scale[j]*1e-3)
		yy[j] = y[j] + d
		hi := yy[j]
		if err := s.p.F(fp, t, yy); err != nil {
			return err
		}
		yy[j] = y[j] - d
		span := hi - yy[j]
		if err := s.p.F(fm, t, yy); err != nil {
			return err
		}
		yy[j] = y[j]
		if entries == nil {
			for i := range s.n {
				s.jac[i*s.n+j] = (fp[i] - fm[i]) / span
			}
			continue
		}
		for k, e := range entries {
			if e.Col == j {
				s.jac[k] = (fp[e.Row] - fm[e.Row]) / span
			}
		}
	}
	return nil
}

// cbrtEps is the cube root of the rounding unit of float64.
const cbrtEps = 6.055454452393343e-06

func (s *flatSystem) Factor(alpha float64) error {
	x := s.w.X
	for i := range x {
		x[i] = 0
	}
	for k, at := range s.jacAt {
		x[at] -= s.jac[k]
	}
	for k, at := range s.massAt {
		x[at] += alpha * s.mass[k].Value
	}
	return s.lu.Factor()
}

func (s *flatSystem) Solve(b []float64) { s.lu.Solve(b) }

func (s *flatSystem) AddMass(dst []float64, c float64, x []float64) {
	for _, e := range s.mass {
		dst[e.Row] += c * e.Value * x[e.Col]
	}
}

func (s *flatSystem) Hidden() []int           { return nil }
func (s *flatSystem) AlgebraicRow(i int) bool { return s.algRow[i] }

func (s *flatSystem) Initialise(t float64, y []float64, project bool) error {
	if len(s.nulls) == 0 {
		return nil
	}
	return initialise(s, t, y, s.work[:])
}

func (s *flatSystem) fastRate() float64 {
	// Far beyond the fastest rate of any differential unknown, row by row.
	m, j := s.work[0], s.work[1]
	for i := range m {
		m[i], j[i] = 0, 0
	}
	for _, e := range s.mass {
		m[e.Row] = math.Max(m[e.Row], math.Abs(e.Value))
	}
	for k, at := range s.jacAt {
		i := s.w.I[at]
		j[i] = math.Max(j[i], math.Abs(s.jac[k]))
	}
	rate := 1.0
	for i := range m {
		if m[i] > 0 {
			rate = math.Max(rate, j[i]/m[i])
		}
	}
	return 1e10 * rate
}

func (s *flatSystem) algebraicResidual(dst []float64, t float64, y []float64, alpha float64) error {
	f := s.central[0]
	if err := s.p.F(f, t, y); err != nil {
		return err
	}
	for i := range dst {
		dst[i] = 0
	}
	for _, p := range s.nulls {
		for _, v := range p.left {
			dot := 0.0
			for i, r := range p.rows {
				dot += v[i] * f[r]
			}
			for i, r := range p.rows {
				dst[r] += v[i] * dot
			}
		}
	}
	return nil
}

func (s *flatSystem) keepAlgebraic(d []float64) {
	x := s.central[0]
	copy(x, d)
	for i := range d {
		d[i] = 0
	}
	for _, p := range s.nulls {
		for _, v := range p.right {
			dot := 0.0
			for i, c := range p.cols {
				dot += v[i] * x[c]
			}
			for i, c := range p.cols {
				d[c] += v[i] * dot
			}
		}
	}
}

func (s *flatSystem) Norm(e, y0, y1 []float64, tol Tolerance) (float64, int) {
	return groupNorm(e, y0, y1, s.scale, s.relative, tol), worstEntry(e, y0, y1, s.scale, s.relative, tol)
}

// groupNorm is the root mean square of the weighted entries of e. Entries are
// weighed by tol.Abs scale + tol.Rel relative max(|y0|, |y1|), with relative one,
// or zero for those measured absolutely.
func groupNorm(e, y0, y1, scale, relative []float64, tol Tolerance) float64 {
	n := len(e)
	y0, y1, scale, relative = y0[:n], y1[:n], scale[:n], relative[:n]
	sum := 0.0
	for i, x := range e {
		q := x / (tol.Abs*scale[i] + tol.Rel*relative[i]*max(math.Abs(y0[i]), math.Abs(y1[i])))
		sum += q * q
	}
	return math.Sqrt(sum / float64(n))
}

// worstEntry is the index of the largest entry, weighted as by groupNorm, or of
// the first that is not a number.
func worstEntry(e, y0, y1, scale, relative []float64, tol Tolerance) int {
	worst, largest := 0, -1.0
	for i, x := range e {
		q := math.Abs(x / (tol.Abs*scale[i] + tol.Rel*relative[i]*max(math.Abs(y0[i]), math.Abs(y1[i]))))
		if q != q {
			return i
		}
		if q > largest {
			worst, largest = i, q
		}
	}
	return worst
}
