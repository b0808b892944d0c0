package modes

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"

	"islet/engine"
	"islet/solvers"
)

// StateSpace is a linearised system in state-space form,
//
//	x' = A x + B u        w = C x + D u
//
// over deviations of States. Algebraic unknowns are eliminated exactly. Where
// a bus is fed by inductors alone its current law makes some currents depend
// on others: the state space is that of the independent ones, so that A has
// the network's eigenvalues and none of the differentiated law's zeros.
type StateSpace struct {
	// A is nil where no state is left.
	A *mat.Dense
	// B, C and D are nil where they would have no rows or columns.
	B, C, D *mat.Dense
	States  []engine.LinearUnknown
	Inputs  []engine.LinearSignal
	Outputs []engine.LinearSignal
	// Dependent names the currents that follow from the independent ones by
	// the hidden current laws.
	Dependent []string
	// Zeros are the islands whose common turn is a mode with eigenvalue zero.
	Zeros []Zero
	// Relative tells that these modes have been removed.
	Relative bool
}

// Zero is the rotational mode of an island: nothing changes when all angles
// grow together, so A has an eigenvalue that is exactly zero at a steady state.
// While the state still moves, the eigenvalue differs from zero by what the
// island's quantities turn in the frame; it is taken as zero all the same.
type Zero struct {
	Island    int    // index in engine.Linear.Islands
	Leader    string // the source the angles are taken from when it is removed
	Reference int    // its angle among the states; -1 once removed
	Rotation  []float64
}

// reduction eliminates the algebraic unknowns and the dependent currents of a
// linear system.
type reduction struct {
	l       *engine.Linear
	n       int
	state   []int // unknown -> position among the differential ones, -1
	diff    []int // the reverse
	zAt     []int // unknown -> position among the algebraic ones, -1
	alg     []int
	row     []int // algebraic equations that aren't hidden, by unknown
	hidden  [][]entry
	lu      *solvers.SparseLU
	g       []float64 // len alg
	indep   []int     // independent states, as positions in diff
	depends []dependence
	law     *mat.Cholesky // of H M^-1 H', nil without hidden laws
}

// entry is a value at a position among the differential unknowns.
type entry struct {
	at int
	v  float64
}

// dependence is x[at] = sum of terms over independent states.
type dependence struct {
	at    int
	terms []entry
}

// newReduction analyses l. The algebraic unknowns z follow from the
// differential ones x by the algebraic equations and by the time derivatives
// of the hidden laws H x = 0,
//
//	0 = J_gx x + J_gz z,   0 = H M^-1 (J_xx x + J_xz z).
func newReduction(l *engine.Linear) (*reduction, error) {
	r := &reduction{l: l, n: len(l.E)}
	r.state, r.zAt = make([]int, r.n), make([]int, r.n)
	hiddenAt := make([]int, r.n)
	for i := range hiddenAt {
		hiddenAt[i] = -1
	}
	for k, i := range l.Hidden {
		hiddenAt[i] = k
	}
	equation := make([]int, r.n) // algebraic, not hidden: position
	for i, e := range l.E {
		r.state[i], r.zAt[i], equation[i] = -1, -1, -1
		if e != 0 {
			r.state[i] = len(r.diff)
			r.diff = append(r.diff, i)
			continue
		}
		r.zAt[i] = len(r.alg)
		r.alg = append(r.alg, i)
		if hiddenAt[i] < 0 {
			equation[i] = len(r.row)
			r.row = append(r.row, i)
		}
	}
	if len(r.diff) == 0 {
		return nil, errors.New("modes: the system has no dynamics: every unknown is algebraic")
	}
	// H, and by column its rows.
	r.hidden = make([][]entry, len(l.Hidden))
	column := make([][]entry, len(r.diff))
	a := l.J
	for j := range r.n {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			if h := hiddenAt[a.I[p]]; h >= 0 {
				s := r.state[j]
				r.hidden[h] = append(r.hidden[h], entry{s, a.X[p]})
				column[s] = append(column[s], entry{h, a.X[p]})
			}
		}
	}
	// The matrix that gives z.
	var at []solvers.Entry
	var value []float64
	for _, j := range r.alg {
		for p := a.P[j]; p < a.P[j+1]; p++ {
			i := a.I[p]
			if k := equation[i]; k >= 0 {
				at = append(at, solvers.Entry{Row: k, Col: r.zAt[j]})
				value = append(value, a.X[p])
			} else if s := r.state[i]; s >= 0 {
				for _, h := range column[s] {
					at = append(at, solvers.Entry{Row: len(r.row) + h.at, Col: r.zAt[j]})
					value = append(value, h.v*a.X[p]/l.E[i])
				}
			}
		}
	}
	r.g = make([]float64, len(r.alg))
	if len(r.alg) > 0 {
		m, slot := solvers.NewCSC(len(r.alg), len(r.alg), at)
		for k, s := range slot {
			m.X[s] += value[k]
		}
		var err error
		if r.lu, err = solvers.NewSparseLU(m, solvers.LUOptions{}); err == nil {
			err = r.lu.Factor()
		}
		if err != nil {
			return nil, r.named(err)
		}
	}
	return r, r.choose()
}

// named tells which algebraic unknown has no equation.
func (r *reduction) named(err error) error {
	var s *solvers.SingularError
	if errors.As(err, &s) && s.Column < len(r.alg) {
		return fmt.Errorf("modes: the equations don't determine the algebraic unknown %s: %w", r.l.Unknowns[r.alg[s.Column]].Name, err)
	}
	return fmt.Errorf("modes: %w", err)
}

// choose picks the dependent currents by Gauss-Jordan elimination of H in per
// unit, in each row the last unknown whose pivot isn't small.
func (r *reduction) choose() error {
	nh := len(r.hidden)
	if nh == 0 {
		for s := range r.diff {
			r.indep = append(r.indep, s)
		}
		return nil
	}
	base := func(s int) float64 { return r.l.Unknowns[r.diff[s]].Base }
	local := make([]int, len(r.diff)) // state -> column of h
	var cols []int
	used := make([]bool, len(r.diff))
	for _, row := range r.hidden {
		for _, e := range row {
			used[e.at] = true
		}
	}
	for s, u := range used {
		if u {
			local[s] = len(cols)
			cols = append(cols, s)
		}
	}
	h := make([][]float64, nh)
	scale := make([]float64, nh) // largest entry of each row
	for k, row := range r.hidden {
		h[k] = make([]float64, len(cols))
		for _, e := range row {
			h[k][local[e.at]] += e.v * base(e.at)
			scale[k] = math.Max(scale[k], math.Abs(h[k][local[e.at]]))
		}
	}
	const threshold = 0.1 // of the largest entry; common practice, no source
	pivot := make([]int, nh)
	isPivot := make([]bool, len(cols))
	for k := range h {
		size := 0.0
		for j, v := range h[k] {
			if !isPivot[j] {
				size = math.Max(size, math.Abs(v))
			}
		}
		if !(size > 1e-10*scale[k]) {
			return fmt.Errorf("modes: the current law of %s follows from others; the system can't be reduced", r.l.Unknowns[r.l.Hidden[k]].Owner)
		}
		at := -1
		for j, v := range h[k] {
			if !isPivot[j] && math.Abs(v) >= threshold*size {
				at = j
			}
		}
		pivot[k], isPivot[at] = at, true
		inv := 1 / h[k][at]
		for j := range h[k] {
			h[k][j] *= inv
		}
		h[k][at] = 1
		for i := range h {
			f := h[i][at]
			if i == k || f == 0 {
				continue
			}
			for j, v := range h[k] {
				h[i][j] -= f * v
			}
			h[i][at] = 0
		}
	}
	dependent := make([]bool, len(r.diff))
	for k, at := range pivot {
		d := dependence{at: cols[at]}
		for j, v := range h[k] {
			// Beyond rounding of sums of entries of size one.
			if j != at && !isPivot[j] && math.Abs(v) > 1e-14 {
				d.terms = append(d.terms, entry{cols[j], -v * base(cols[at]) / base(cols[j])})
			}
		}
		dependent[d.at] = true
		r.depends = append(r.depends, d)
	}
	for s := range r.diff {
		if !dependent[s] {
			r.indep = append(r.indep, s)
		}
	}
	if len(r.indep) == 0 {
		return errors.New("modes: the system has no dynamics: the current laws leave no independent current")
	}
	// H M^-1 H', symmetric and positive definite.
	m := mat.NewSymDense(nh, nil)
	columns := make([][]entry, len(r.diff))
	for k, row := range r.hidden {
		for _, e := range row {
			columns[e.at] = append(columns[e.at], entry{k, e.v})
		}
	}
	for s, c := range columns {
		for _, a := range c {
			for _, b := range c {
				if a.at <= b.at {
					m.SetSym(a.at, b.at, m.At(a.at, b.at)+a.v*b.v/r.l.E[r.diff[s]])
				}
			}
		}
	}
	r.law = new(mat.Cholesky)
	if !r.law.Factorize(m) {
		return errors.New("modes: the hidden current laws depend on each other")
	}
	return nil
}

// complete receives the right-hand side f of all equations due to states and
// inputs and to no algebraic unknown, adds what the algebraic unknowns
// contribute, and writes these into y.
func (r *reduction) complete(f, y []float64) {
	if r.lu == nil {
		return
	}
	for k, i := range r.row {
		r.g[k] = -f[i]
	}
	for k, row := range r.hidden {
		sum := 0.0
		for _, e := range row {
			i := r.diff[e.at]
			sum += e.v * f[i] / r.l.E[i]
		}
		r.g[len(r.row)+k] = -sum
	}
	r.lu.Solve(r.g)
	a := r.l.J
	for k, j := range r.alg {
		y[j] = r.g[k]
		addColumn(f, a, j, y[j])
	}
}

// addColumn adds v times column j of a to f.
func addColumn(f []float64, a *solvers.CSC, j int, v float64) {
	if v == 0 {
		return
	}
	rows, x := a.I[a.P[j]:a.P[j+1]], a.X[a.P[j]:a.P[j+1]]
	x = x[:len(rows)]
	for p, i := range rows {
		f[i] += v * x[p]
	}
}

// embed writes into y, zeroed by the caller, the differential unknowns that
// belong to independent state k alone being one.
func (r *reduction) embed(y []float64, k int, users [][]entry) {
	s := r.indep[k]
	y[r.diff[s]] = 1
	for _, d := range users[s] {
		y[r.diff[d.at]] = d.v
	}
}

// users lists, by state, the dependent states it determines and by how much.
func (r *reduction) users() [][]entry {
	u := make([][]entry, len(r.diff))
	for _, d := range r.depends {
		for _, t := range d.terms {
			u[t.at] = append(u[t.at], entry{d.at, t.v})
		}
	}
	return u
}

// Reduce brings a linear system into state-space form. With relative true the
// rotational mode of every island is removed: network-frame quantities and
// angles are then those seen from a frame on the island's leading source, and
// outputs that don't turn with the frame (powers, magnitudes, frequencies) are
// the same. The result is dense: n states take 8 n^2 bytes.
func Reduce(l *engine.Linear, relative bool) (*StateSpace, error) {
	r, err := newReduction(l)
	if err != nil {
		return nil, err
	}
	return r.stateSpace(relative), nil
}

func (r *reduction) stateSpace(relative bool) *StateSpace {
	l := r.l
	n, nu, nw := len(r.indep), len(l.Inputs), len(l.Outputs)
	s := &StateSpace{A: mat.NewDense(n, n, nil), Inputs: l.Inputs, Outputs: l.Outputs}
	if nu > 0 {
		s.B = mat.NewDense(n, nu, nil)
	}
	if nw > 0 {
		s.C = mat.NewDense(nw, n, nil)
		if nu > 0 {
			s.D = mat.NewDense(nw, nu, nil)
		}
	}
	for _, d := range r.depends {
		s.Dependent = append(s.Dependent, l.Unknowns[r.diff[d.at]].Name)
	}
	users := r.users()
	f, y, w := make([]float64, r.n), make([]float64, r.n), make([]float64, nw)
	column := func(a, c *mat.Dense, k int) {
		r.complete(f, y)
		if a != nil {
			for i, st := range r.indep {
				if u := r.diff[st]; f[u] != 0 {
					a.Set(i, k, f[u]/l.E[u])
				}
			}
		}
		if c != nil {
			clear(w)
			for j, v := range y {
				addColumn(w, l.C, j, v)
			}
			for i, v := range w {
				c.Set(i, k, v)
			}
		}
	}
	for k, st := range r.indep {
		s.States = append(s.States, l.Unknowns[r.diff[st]])
		clear(f)
		clear(y)
		r.embed(y, k, users)
		addColumn(f, l.J, r.diff[st], 1)
		for _, d := range users[st] {
			addColumn(f, l.J, r.diff[d.at], d.v)
		}
		column(s.A, s.C, k)
	}
	for k := range nu {
		clear(f)
		clear(y)
		addColumn(f, l.B, k, 1)
		column(s.B, s.D, k)
		if s.D != nil {
			for p := l.D.P[k]; p < l.D.P[k+1]; p++ {
				s.D.Set(l.D.I[p], k, s.D.At(l.D.I[p], k)+l.D.X[p])
			}
		}
	}
	s.findZeros(r)
	if relative {
		s.removeZeros()
	}
	return s
}

// rotating lists the islands whose common turn changes nothing: J r is, to
// rounding, what the rates at the state become by turning, which is zero at a
// steady state.
func rotating(l *engine.Linear) []int {
	const (
		rounding = 1e-7 // of the sum of the terms that cancel in a row
		still    = 1e-6 // per unit per second: what a steady state found to rounding leaves
	)
	sum, terms := make([]float64, len(l.E)), make([]float64, len(l.E))
	var list []int
	for k, is := range l.Islands {
		for i, v := range is.Turned {
			sum[i], terms[i] = -v, math.Abs(v)
		}
		for j, turn := range is.Rotation {
			for p := l.J.P[j]; p < l.J.P[j+1]; p++ {
				v := turn * l.J.X[p]
				sum[l.J.I[p]] += v
				terms[l.J.I[p]] += math.Abs(v)
			}
		}
		ok := l.E[is.Reference] != 0
		for i, v := range sum {
			ok = ok && math.Abs(v) <= rounding*terms[i]+still*l.E[i]*l.Unknowns[i].Base
		}
		if ok {
			list = append(list, k)
		}
	}
	return list
}

// findZeros lists the rotational modes over the independent states.
func (s *StateSpace) findZeros(r *reduction) {
	for _, k := range rotating(r.l) {
		is := r.l.Islands[k]
		z := Zero{Island: k, Leader: is.Leader, Reference: -1, Rotation: make([]float64, len(r.indep))}
		for j, st := range r.indep {
			z.Rotation[j] = is.Rotation[r.diff[st]]
			if r.diff[st] == is.Reference {
				z.Reference = j
			}
		}
		if z.Reference >= 0 {
			s.Zeros = append(s.Zeros, z)
		}
	}
}

// removeZeros takes the angles, and all that turns with them, relative to the
// leading source of each island: with r the rotation, p its reference and x =
// x~ + r x_p, the rows become A[k,:] - r_k A[p,:] and column p drops out, as
// A r = 0.
func (s *StateSpace) removeZeros() {
	drop := make([]bool, len(s.States))
	for z := range s.Zeros {
		zero := &s.Zeros[z]
		p := zero.Reference
		drop[p] = true
		for _, m := range []*mat.Dense{s.A, s.B} {
			if m == nil {
				continue
			}
			ref := m.RawRowView(p)
			for k, turn := range zero.Rotation {
				if k == p || turn == 0 {
					continue
				}
				row := m.RawRowView(k)
				for j, v := range ref {
					row[j] -= turn * v
				}
			}
		}
		zero.Reference = -1
	}
	var keep []int
	for i, d := range drop {
		if !d {
			keep = append(keep, i)
		}
	}
	all := func(n int) []int {
		list := make([]int, n)
		for i := range list {
			list[i] = i
		}
		return list
	}
	s.A = pick(s.A, keep, keep)
	if s.B != nil {
		s.B = pick(s.B, keep, all(len(s.Inputs)))
	}
	if s.C != nil {
		s.C = pick(s.C, all(len(s.Outputs)), keep)
	}
	states := make([]engine.LinearUnknown, 0, len(keep))
	for _, i := range keep {
		states = append(states, s.States[i])
	}
	for z := range s.Zeros {
		turn := make([]float64, 0, len(keep))
		for _, i := range keep {
			turn = append(turn, s.Zeros[z].Rotation[i])
		}
		s.Zeros[z].Rotation = turn
	}
	s.States, s.Relative = states, true
}

// pick returns the chosen rows and columns of m, or nil if there are none.
func pick(m *mat.Dense, rows, cols []int) *mat.Dense {
	if len(rows) == 0 || len(cols) == 0 {
		return nil
	}
	out := mat.NewDense(len(rows), len(cols), nil)
	for i, r := range rows {
		from, to := m.RawRowView(r), out.RawRowView(i)
		for j, c := range cols {
			to[j] = from[c]
		}
	}
	return out
}
