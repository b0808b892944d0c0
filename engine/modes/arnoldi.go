package modes

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"sort"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// nearest finds the modes nearest each shift.
//
// The operator (sigma E - J)^-1 E has the eigenvalues 1/(sigma - lambda) and
// the pencil's eigenvectors; what the algebraic equations and hidden laws
// exclude has eigenvalue zero and is never found. For a complex shift its
// imaginary part is taken, which keeps the iteration real and has the
// eigenvalues
//
//	-Im sigma / ((sigma - lambda) (conj sigma - lambda))
//
// so that modes come in the order of the product of their distances to the
// shift and to its conjugate (B. N. Parlett, Y. Saad, "Complex shift and invert
// strategies for real matrices", Linear Algebra and its Applications 88/89,
// 1987; the real part, the other choice there, is blind to some modes close
// by). The rotational modes, known in advance, are taken out: with r the
// rotation and p its reference, x - r x_p follows the other modes. Every mode
// found is refined by inverse iteration close to its eigenvalue, which gives
// the left vector as well.
func (rep *Report) nearest(r *reduction, o *Options) error {
	a := &arnoldi{rep: rep, r: r, real: newShifted(r.l, false)}
	for _, i := range r.diff {
		a.base = append(a.base, r.l.Unknowns[i].Base)
	}
	for _, k := range rotating(r.l) {
		is := &r.l.Islands[k]
		turn := make([]float64, len(r.diff))
		for s, i := range r.diff {
			turn[s] = is.Rotation[i] / a.base[s]
		}
		a.turns = append(a.turns, turn)
		a.refs = append(a.refs, r.state[is.Reference])
		a.leaders = append(a.leaders, is.Leader)
	}
	if err := a.zeros(); err != nil {
		return err
	}
	count := o.Count
	if count == 0 {
		count = 20
	}
	for _, shift := range o.Shifts {
		if err := a.around(shift, count); err != nil {
			return err
		}
	}
	return nil
}

// arnoldi is the workspace of nearest. Vectors are over the differential
// unknowns, right ones in per unit, left ones its inverse.
type arnoldi struct {
	rep     *Report
	r       *reduction
	base    []float64
	turns   [][]float64 // rotations, and what they are about
	refs    []int
	leaders []string
	real    *shifted
	complex *shifted // made when first needed
	full    []complex128
}

// at factors sigma E - J.
func (a *arnoldi) at(sigma complex128) (*shifted, error) {
	s := a.real
	if imag(sigma) != 0 {
		if a.complex == nil {
			a.complex = newShifted(a.r.l, true)
		}
		s = a.complex
	}
	return s, s.factor(sigma)
}

// right overwrites x with (sigma E - J)^-1 E x.
func (a *arnoldi) right(s *shifted, x []complex128) {
	f := a.clear()
	for k, i := range a.r.diff {
		f[i] = x[k] * complex(a.r.l.E[i]*a.base[k], 0)
	}
	s.solve(f)
	for k, i := range a.r.diff {
		x[k] = f[i] / complex(a.base[k], 0)
	}
}

// left overwrites w with w (sigma E - J)^-1 E.
func (a *arnoldi) left(s *shifted, w []complex128) {
	f := a.clear()
	for k, i := range a.r.diff {
		f[i] = w[k] / complex(a.base[k], 0)
	}
	s.solveTranspose(f)
	for k, i := range a.r.diff {
		w[k] = f[i] * complex(a.r.l.E[i]*a.base[k], 0)
	}
}

func (a *arnoldi) clear() []complex128 {
	if a.full == nil {
		a.full = make([]complex128, len(a.r.l.E))
	}
	clear(a.full)
	return a.full
}

// still takes the common turns out of x.
func (a *arnoldi) still(x []float64) {
	for k, turn := range a.turns {
		p := a.refs[k]
		floats.AddScaled(x, -x[p]/turn[p], turn)
	}
}

// stillComplex is still for complex vectors.
func (a *arnoldi) stillComplex(x []complex128) {
	for k, turn := range a.turns {
		p := a.refs[k]
		c := -x[p] / complex(turn[p], 0)
		for i, t := range turn {
			x[i] += c * complex(t, 0)
		}
	}
}

// zeros appends the rotational modes.
func (a *arnoldi) zeros() error {
	if len(a.turns) == 0 {
		return nil
	}
	// Close to zero the inverse is w times v over the shift, and little else.
	s, err := a.at(complex(1e-6, 0))
	if err != nil {
		return err
	}
	for k, turn := range a.turns {
		m := Mode{Zero: true, Island: a.leaders[k], Right: make([]complex128, len(turn)), Left: make([]complex128, len(turn))}
		for i, t := range turn {
			m.Right[i] = complex(t*a.base[i], 0)
		}
		// An impulse on this reference drives this island's turn alone.
		m.Left[a.refs[k]] = 1
		for range 3 {
			a.left(s, m.Left)
			unit(m.Left)
		}
		for i := range m.Left {
			m.Left[i] /= complex(a.base[i], 0)
		}
		a.rep.addFull(m)
	}
	return nil
}

// unit scales x to length one.
func unit(x []complex128) {
	sum := 0.0
	for _, v := range x {
		sum += real(v)*real(v) + imag(v)*imag(v)
	}
	f := complex(1/math.Sqrt(sum), 0)
	for i := range x {
		x[i] *= f
	}
}

// inner returns conj(x) y.
func inner(x, y []complex128) complex128 {
	sum := complex(0, 0)
	for i, v := range x {
		sum += cmplx.Conj(v) * y[i]
	}
	return sum
}

// around appends the modes nearest a shift, of which it finds a few more.
func (a *arnoldi) around(shift complex128, count int) error {
	if cmplx.Abs(shift) < 1e-3 && len(a.turns) > 0 {
		shift = complex(1e-3, imag(shift)) // zero is an eigenvalue
	}
	s, err := a.at(shift)
	if err != nil {
		return err
	}
	guesses, missed := a.guess(s, count)
	type found struct {
		lambda complex128
		x      []complex128
	}
	isReal := func(x []complex128) bool {
		for _, v := range x {
			if imag(v) != 0 {
				return false
			}
		}
		return true
	}
	var list []found
	for _, x := range guesses {
		y := append([]complex128(nil), x...)
		a.right(s, y)
		a.stillComplex(y)
		lambda := shift - 1/inner(x, y)
		if isReal(x) {
			lambda = complex(real(lambda), 0)
		}
		list = append(list, found{lambda, x})
	}
	sort.SliceStable(list, func(i, j int) bool {
		return distance(list[i].lambda, shift) < distance(list[j].lambda, shift)
	})
	bad := 0
	for _, f := range list[:min(count, len(list))] {
		m, err := a.refine(f.lambda, f.x)
		if err != nil {
			return err
		}
		if !(m.Residual < 1e-6) {
			bad++
			continue
		}
		if imag(m.Value) < 0 {
			m.Value = cmplx.Conj(m.Value)
			for i := range m.Right {
				m.Right[i], m.Left[i] = cmplx.Conj(m.Right[i]), cmplx.Conj(m.Left[i])
			}
		}
		if !a.known(&m) {
			a.rep.addFull(m)
		}
	}
	if missed > 0 || bad > 0 {
		a.rep.Notes = append(a.rep.Notes, fmt.Sprintf("near %.6g 1/s the iteration had not converged for %d modes, and %d were given up: there may be others than those listed", shift, missed, bad))
	}
	return nil
}

// known reports whether another shift has found the mode already.
func (a *arnoldi) known(m *Mode) bool {
	scaled := func(v []complex128) []complex128 {
		x := make([]complex128, len(v))
		for i := range v {
			x[i] = v[i] / complex(a.base[i], 0)
		}
		unit(x)
		return x
	}
	for k := range a.rep.Modes {
		o := &a.rep.Modes[k]
		if cmplx.Abs(o.Value-m.Value) <= 1e-7*cmplx.Abs(m.Value) && cmplx.Abs(inner(scaled(o.Right), scaled(m.Right))) > 0.999 {
			return true
		}
	}
	return false
}

// refine improves an eigenvalue and its right vector by inverse iteration and
// finds the left one.
func (a *arnoldi) refine(lambda complex128, x []complex128) (Mode, error) {
	// So close that the other modes vanish in an iteration or two, and far
	// enough for the factorisation.
	mu := lambda + complex(1e-6*cmplx.Abs(lambda)+1e-9, 0)
	s, err := a.at(mu)
	if err != nil {
		return Mode{}, err
	}
	m := Mode{}
	x = append([]complex128(nil), x...)
	y := make([]complex128, len(x))
	for range 4 {
		unit(x)
		copy(y, x)
		a.right(s, y)
		a.stillComplex(y)
		m.Value = mu - 1/inner(x, y)
		// (A - lambda) y = (mu - lambda) y - x
		res, size := 0.0, 0.0
		for i, v := range y {
			d := (mu-m.Value)*v - x[i]
			res += real(d)*real(d) + imag(d)*imag(d)
			size += real(v)*real(v) + imag(v)*imag(v)
		}
		m.Residual = math.Sqrt(res/size) / math.Max(cmplx.Abs(m.Value), 1e-3)
		x, y = y, x
		if m.Residual < 1e-11 {
			break
		}
	}
	if imag(mu) == 0 {
		m.Value = complex(real(m.Value), 0)
	}
	// What the mode turns: close to lambda the mode itself outgrows the turn.
	for range 2 {
		unit(x)
		a.right(s, x)
	}
	w := make([]complex128, len(x))
	rng := rand.New(rand.NewPCG(1, 1))
	for i := range w {
		w[i] = complex(rng.NormFloat64(), 0)
	}
	for range 4 {
		unit(w)
		a.left(s, w)
	}
	unit(x)
	unit(w)
	for i := range x {
		x[i] *= complex(a.base[i], 0)
		w[i] /= complex(a.base[i], 0)
	}
	m.Right, m.Left = x, w
	m.Neutral = cmplx.Abs(m.Value) <= 1e-7
	return m, nil
}

// distance is that of a mode from a shift, for a complex one the product of
// those to it and to its conjugate.
func distance(lambda, shift complex128) float64 {
	return cmplx.Abs(lambda-shift) * cmplx.Abs(lambda-cmplx.Conj(shift))
}

// margin is how many modes more than asked for the iteration settles, so that
// those of a cluster at the rim are told apart.
func margin(count int) int { return 4 + count/4 }

// guess finds vectors of the modes nearest the shift that s holds, of which
// count have converged but those that missed counts.
func (a *arnoldi) guess(s *shifted, count int) (vectors [][]complex128, missed int) {
	n := len(a.r.diff)
	rank := len(a.r.indep) - len(a.turns)
	if rank == 0 {
		return nil, 0
	}
	y := make([]float64, s.width*len(a.r.l.E))
	op := func(dst, x []float64) {
		clear(y)
		for k, i := range a.r.diff {
			y[s.width*i] = x[k] * a.r.l.E[i] * a.base[k]
		}
		s.lu.Solve(y)
		// The imaginary part of a complex solution stands behind the real one.
		for k, i := range a.r.diff {
			dst[k] = y[s.width*i+s.width-1] / a.base[k]
		}
		a.still(dst)
	}
	count = min(count, rank)
	return krylovSchur(op, n, rank, count, min(count+margin(count), rank))
}

// krylovSchur finds vectors of the wanted number of modes, real eigenvalues or
// pairs, of a real operator of order n and the given rank with
// the largest magnitudes, by Arnoldi's method restarted with the best invariant
// subspace at hand (G. W. Stewart, "A Krylov-Schur algorithm for large
// eigenproblems", SIAM J. Matrix Analysis and Applications 23(3), 2001):
//
//	Op V = V S + v b'
//
// The first count of them must converge; missed is how many have not.
func krylovSchur(op func(dst, x []float64), n, rank, count, want int) (vectors [][]complex128, missed int) {
	const (
		restarts  = 15   // more help only inside a dense cluster, where any shift is a poor one
		tolerance = 1e-8 // of a Ritz value; refinement does the rest
	)
	order := min(rank, 4*want+20) // of the subspace
	rng := rand.New(rand.NewPCG(2, 2))
	basis := mat.NewDense(order+1, n, nil) // a vector a row
	v := make([][]float64, order+1)
	for k := range v {
		v[k] = basis.RawRowView(k)
	}
	// orthogonalise makes w orthogonal to v[:k], adds the coefficients to h
	// and returns the length left. A second pass is made where the first has
	// cancelled much (J. W. Daniel, W. B. Gragg, L. Kaufman, G. W. Stewart,
	// Math. Comp. 30, 1976).
	orthogonalise := func(w []float64, k int, h []float64) float64 {
		part := basis.Slice(0, k, 0, n)
		c, x := mat.NewVecDense(k, nil), mat.NewVecDense(n, w)
		var d mat.VecDense
		before := floats.Norm(w, 2)
		for {
			c.MulVec(part, x)
			d.MulVec(part.T(), c)
			floats.Sub(w, d.RawVector().Data)
			floats.Add(h[:k], c.RawVector().Data)
			after := floats.Norm(w, 2)
			if after > 0.7*before || after < 1e-14*floats.Norm(h[:k], 2) {
				return after
			}
			before = after
		}
	}
	scratch := make([]float64, order+1)
	fresh := func(k int) {
		for i := range v[k] {
			v[k][i] = rng.NormFloat64()
		}
		// Twice through the operator, which leaves nothing of what the
		// hidden laws exclude.
		w := make([]float64, n)
		for range 2 {
			op(w, v[k])
			copy(v[k], w)
			floats.Scale(1/floats.Norm(v[k], 2), v[k])
		}
		left := floats.Norm(v[k], 2)
		if k > 0 {
			left = orthogonalise(v[k], k, scratch)
		}
		floats.Scale(1/left, v[k])
	}
	fresh(0)
	sm := mat.NewDense(order, order, nil)
	b := make([]float64, order) // coupling to the vector after the subspace
	have := 0
	var e mat.Eigen
	var y mat.CDense
	for restart := 0; ; restart++ {
		for k := have; k < order; k++ {
			// Row k: how the vectors before couple to v[k].
			for j := range k {
				sm.Set(k, j, b[j])
			}
			clear(b)
			w := v[k+1]
			op(w, v[k])
			before := floats.Norm(w, 2)
			h := make([]float64, k+1)
			left := orthogonalise(w, k+1, h)
			for j, c := range h {
				sm.Set(j, k, c)
			}
			if left > 1e-13*before {
				floats.Scale(1/left, w)
				b[k] = left
			} else if k+1 < order {
				fresh(k + 1) // the subspace is invariant: another start
			}
		}
		if !e.Factorize(sm, mat.EigenRight) {
			return nil, count
		}
		theta := e.Values(nil)
		e.VectorsTo(&y)
		sorted := make([]int, 0, order)
		for k, t := range theta {
			if imag(t) >= 0 {
				sorted = append(sorted, k)
			}
		}
		sort.SliceStable(sorted, func(i, j int) bool { return cmplx.Abs(theta[sorted[i]]) > cmplx.Abs(theta[sorted[j]]) })
		take := sorted[:min(want, len(sorted))]
		missed = 0
		for _, k := range take[:min(count, len(take))] {
			res, norm := complex(0, 0), 0.0
			for j := range order {
				c := y.At(j, k)
				res += complex(b[j], 0) * c
				norm += real(c)*real(c) + imag(c)*imag(c)
			}
			if cmplx.Abs(res) > tolerance*cmplx.Abs(theta[k])*math.Sqrt(norm) {
				missed++
			}
		}
		if missed == 0 || restart == restarts || order == rank {
			for _, k := range take {
				if cmplx.Abs(theta[k]) < 1e-14*cmplx.Abs(theta[sorted[0]]) {
					continue // the operator's null space
				}
				x := make([]complex128, n)
				for j := range order {
					c := y.At(j, k)
					for i, u := range v[j] {
						x[i] += c * complex(u, 0)
					}
				}
				unit(x)
				vectors = append(vectors, x)
			}
			return vectors, missed
		}
		// Keep the wanted subspace and half of the rest.
		room := (dimension(theta, take) + order) / 2
		var columns [][]float64
		for _, k := range sorted {
			re, im := make([]float64, order), make([]float64, order)
			for j := range order {
				re[j], im[j] = real(y.At(j, k)), imag(y.At(j, k))
			}
			if imag(theta[k]) == 0 {
				columns = append(columns, re)
			} else {
				columns = append(columns, re, im)
			}
			if len(columns) >= room {
				break
			}
		}
		have = min(len(columns), order-1)
		q := orthonormal(columns[:have])
		rotate(basis, q, sm, b)
	}
}

// dimension is that of the real subspace of the modes listed.
func dimension(theta []complex128, list []int) int {
	d := 0
	for _, k := range list {
		d++
		if imag(theta[k]) != 0 {
			d++
		}
	}
	return d
}

// orthonormal returns an orthonormal basis of the columns.
func orthonormal(columns [][]float64) *mat.Dense {
	m := mat.NewDense(len(columns[0]), len(columns), nil)
	for k, c := range columns {
		m.SetCol(k, c)
	}
	var qr mat.QR
	qr.Factorize(m)
	var q mat.Dense
	qr.QTo(&q)
	return mat.DenseCopyOf(q.Slice(0, len(columns[0]), 0, len(columns)))
}

// rotate makes V Q the basis, Q'S Q its matrix and b'Q its coupling; the
// vector after the subspace, the last one, moves to its place.
func rotate(v, q, s *mat.Dense, b []float64) {
	order, have := q.Dims()
	_, n := v.Dims()
	var sq, next mat.Dense
	sq.Mul(s, q)
	next.Mul(q.T(), &sq)
	s.Zero()
	s.Slice(0, have, 0, have).(*mat.Dense).Copy(&next)
	var c mat.VecDense
	c.MulVec(q.T(), mat.NewVecDense(order, b))
	clear(b)
	copy(b, c.RawVector().Data)
	var turned mat.Dense
	turned.Mul(q.T(), v.Slice(0, order, 0, n))
	v.Slice(0, have, 0, n).(*mat.Dense).Copy(&turned)
	copy(v.RawRowView(have), v.RawRowView(order))
}

// DefaultShifts are points along the imaginary axis, a little to the right of
// it, from which [Analyse] finds the rightmost modes of most inverter-rich
// networks: 0, 5, 15, 40, 100 and 300 Hz. An unstable mode further away than
// Count modes from all of them is missed.
func DefaultShifts() []complex128 {
	var s []complex128
	for _, hz := range []float64{0, 5, 15, 40, 100, 300} {
		s = append(s, complex(1, 2*math.Pi*hz))
	}
	return s
}
