package modes

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"sort"

	"gonum.org/v1/gonum/mat"

	"islet/engine"
)

// Options steer an analysis. nil, or the zero value, gives the stated
// defaults.
type Options struct {
	// Shifts asks for the modes nearest these points of the complex plane,
	// 1/s, instead of all modes; nil means all. See [Analyse].
	Shifts []complex128
	// Count is the number of modes wanted at each shift; 0 means 20.
	Count int
	// Gap is the ratio of magnitudes from which two neighbouring modes
	// belong to different timescales, > 1; 0 means 3 (common practice, no
	// source).
	Gap float64
}

// Mode is a real eigenvalue, or a complex pair, with its eigenvectors: A v =
// lambda v, w A = lambda w, w v = 1. Vectors and participation factors are by
// Report.States.
type Mode struct {
	Number int        // from 1, in order of falling real part
	Value  complex128 // lambda, 1/s, Im >= 0
	// Frequency is Im lambda/2 pi, Hz, Damping -Re lambda/|lambda|, and
	// TimeConstant -1/Re lambda, s, negative for growth and infinite for a
	// zero real part.
	Frequency, Damping, TimeConstant float64
	// Zero marks the rotational mode of an island, whose eigenvalue is
	// exactly zero: all its angles grow together and nothing else happens.
	Zero bool
	// Neutral marks another eigenvalue that is zero to rounding, such as the
	// angle between two ideal sources. It doesn't count for the verdict.
	Neutral bool
	// Island is the leading source of a rotational mode's island.
	Island string
	// Right and Left are the eigenvectors; Left is nil where a rotational
	// mode is tied to another zero eigenvalue.
	Right, Left []complex128
	// Participation is |w_k v_k| over the sum of all; nil without Left.
	Participation []float64
	// ByDevice and ByDynamics sum it by device or bus and by group of
	// dynamics, largest first.
	ByDevice, ByDynamics []Share
	// Condition is the eigenvalue's condition number |w||v| in per unit: a
	// change of the matrix by e moves it by up to e times that. Large values
	// tell of (nearly) equal eigenvalues with one eigenvector, whose
	// participation factors mean little.
	Condition float64
	// Residual is |A v - lambda v| / |v| in per unit, over |lambda| or, if
	// that is less, 1e-3 1/s, where the mode was found by iteration; 0 else.
	Residual float64
}

// Share is a part of a mode's participation, 0 to 1.
type Share struct {
	Name  string  `json:"name"`
	Value float64 `json:"share"`
}

// Report is the result of an analysis.
type Report struct {
	Time   float64 // s, of the linearisation
	States []engine.LinearUnknown
	// Independent is the number of states that the current laws leave
	// independent: the number of eigenvalues there are.
	Independent int
	Dependent   []string // currents that follow from others
	Modes       []Mode
	All         bool // the list holds every mode
	// Stable tells that every mode in the list decays, rotational and neutral
	// ones left out.
	Stable     bool
	Timescales []Timescale // slowest first
	Drift      float64     // of the state linearised about, per unit per second
	Notes      []string
}

// Rightmost returns the mode with the largest real part, rotational and
// neutral ones left out, or nil.
func (rep *Report) Rightmost() *Mode {
	for i := range rep.Modes {
		if m := &rep.Modes[i]; !m.Zero && !m.Neutral {
			return m
		}
	}
	return nil
}

// String tells a mode in a line.
func (m *Mode) String() string {
	switch {
	case m.Zero:
		return fmt.Sprintf("mode %d: 0 (common turn of the island of %s)", m.Number, m.Island)
	case imag(m.Value) == 0:
		return fmt.Sprintf("mode %d: %.6g 1/s", m.Number, real(m.Value))
	}
	return fmt.Sprintf("mode %d: %.6g ± j%.6g 1/s, %.4g Hz, damping %.3g %%", m.Number, real(m.Value), imag(m.Value), m.Frequency, 100*m.Damping)
}

// Analyse finds the modes of a linear system. Without shifts it finds all of
// them by the QR algorithm, for up to a few thousand states: the time grows
// with the cube of their number. With shifts it finds the Count modes nearest
// each by shift-invert Arnoldi iteration, in a time that grows little faster
// than the system; nearest a complex shift is what has the least product of
// distances to it and to its conjugate, which is fair to pairs. An iteration may miss a mode of a tight cluster, so the
// verdict of a report that isn't All is about what was found. o may be nil.
func Analyse(l *engine.Linear, o *Options) (*Report, error) {
	if o == nil {
		o = &Options{}
	}
	var errs []error
	if o.Count < 0 {
		errs = append(errs, fmt.Errorf("modes: option Count is %d, want 0 (default) or more", o.Count))
	}
	if o.Gap != 0 && !(o.Gap > 1) {
		errs = append(errs, fmt.Errorf("modes: option Gap is %g, want 0 (default) or a value above 1", o.Gap))
	}
	for _, s := range o.Shifts {
		if cmplx.IsNaN(s) || cmplx.IsInf(s) {
			errs = append(errs, fmt.Errorf("modes: shift is %g 1/s, want a finite value", s))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	r, err := newReduction(l)
	if err != nil {
		return nil, err
	}
	rep := &Report{Time: l.Time, Drift: l.Drift, Notes: append([]string(nil), l.Notes...), Independent: len(r.indep), All: o.Shifts == nil}
	for _, i := range r.diff {
		rep.States = append(rep.States, l.Unknowns[i])
	}
	for _, d := range r.depends {
		rep.Dependent = append(rep.Dependent, rep.States[d.at].Name)
	}
	if rep.All {
		err = rep.dense(r)
	} else {
		err = rep.nearest(r, o)
	}
	if err != nil {
		return nil, err
	}
	rep.finish(o.Gap)
	return rep, nil
}

// dense finds all modes. The rotational modes are split off first, so that
// their eigenvalue is exactly zero and the others are free of its rounding.
func (rep *Report) dense(r *reduction) error {
	s := r.stateSpace(false)
	zeros := append([]Zero(nil), s.Zeros...)
	refs := make([][]float64, len(zeros)) // rows of the references
	dropped := make([]bool, len(s.States))
	for k, z := range zeros {
		refs[k] = append([]float64(nil), s.A.RawRowView(z.Reference)...)
		dropped[z.Reference] = true
	}
	var keep []int
	base := make([]float64, len(s.States))
	for i, u := range s.States {
		base[i] = u.Base
		if !dropped[i] {
			keep = append(keep, i)
		}
	}
	s.removeZeros()
	n := len(keep)
	var values []complex128
	var right, left mat.CDense
	norm := 0.0
	if n > 0 {
		// In per unit, for the sake of the balancing.
		scaled := mat.NewDense(n, n, nil)
		for i := range n {
			row, to := s.A.RawRowView(i), scaled.RawRowView(i)
			for j, v := range row {
				to[j] = v * base[keep[j]] / base[keep[i]]
				norm = math.Max(norm, math.Abs(to[j]))
			}
		}
		var e mat.Eigen
		if !e.Factorize(scaled, mat.EigenBoth) {
			return errors.New("modes: the QR algorithm did not find all eigenvalues")
		}
		values = e.Values(nil)
		e.VectorsTo(&right)
		e.LeftVectorsTo(&left)
	}
	// Vectors over all states: x = x~ + r x_p with lambda x_p = A[p,:] x~, and
	// w_p = -sum of r_k w_k over the others.
	turn := func(w []complex128) {
		for _, z := range zeros {
			for j, t := range z.Rotation {
				if j != z.Reference {
					w[z.Reference] -= complex(t, 0) * w[j]
				}
			}
		}
	}
	for k, lambda := range values {
		if imag(lambda) < 0 {
			continue
		}
		m := Mode{Value: lambda, Neutral: cmplx.Abs(lambda) <= math.Max(1e-7, 1e-14*norm)}
		v, w := make([]complex128, len(base)), make([]complex128, len(base))
		for i, at := range keep {
			v[at] = right.At(i, k) * complex(base[at], 0)
			w[at] = cmplx.Conj(left.At(i, k)) / complex(base[at], 0)
		}
		if !m.Neutral {
			x := make([]complex128, len(zeros))
			for z := range zeros {
				for j, f := range refs[z] {
					x[z] += complex(f, 0) * v[j]
				}
				x[z] /= lambda
			}
			for k, z := range zeros {
				for j, t := range z.Rotation {
					v[j] += complex(t, 0) * x[k]
				}
			}
		}
		turn(w)
		rep.add(r, m, v, w)
	}
	if len(zeros) == 0 {
		return nil
	}
	var lu mat.LU
	if n > 0 {
		lu.Factorize(s.A)
	}
	for k, z := range zeros {
		// w with w_p = 1 and A[p,:] + w A = 0 for the others.
		v, w := make([]complex128, len(base)), make([]complex128, len(base))
		for j, t := range z.Rotation {
			v[j] = complex(t, 0)
		}
		w[z.Reference] = 1
		b := mat.NewVecDense(max(n, 1), nil)
		driven := false
		for i, at := range keep {
			b.SetVec(i, -refs[k][at])
			driven = driven || refs[k][at] != 0
		}
		if driven {
			if err := lu.SolveVecTo(b, true, b); err != nil && lu.Cond() > 1e15 {
				w = nil // another zero eigenvalue drives this one
			}
		}
		if w != nil {
			for i, at := range keep {
				w[at] = complex(b.AtVec(i), 0)
			}
			turn(w)
		}
		rep.add(r, Mode{Zero: true, Island: z.Leader}, v, w)
	}
	return nil
}

// add appends a mode whose vectors are given over the independent states, made
// complete. w may be nil.
func (rep *Report) add(r *reduction, m Mode, v, w []complex128) {
	m.Right = make([]complex128, len(r.diff))
	for k, st := range r.indep {
		m.Right[st] = v[k]
	}
	for _, d := range r.depends {
		for _, t := range d.terms {
			m.Right[d.at] += complex(t.v, 0) * m.Right[t.at]
		}
	}
	if w != nil {
		m.Left = make([]complex128, len(r.diff))
		for k, st := range r.indep {
			m.Left[st] = w[k]
		}
		r.project(m.Left)
	}
	rep.addFull(m)
}

// project makes a left vector that is given over the independent currents one
// over all: w Pi with the projector
//
//	Pi = 1 - M^-1 H' (H M^-1 H')^-1 H
//
// onto the currents that satisfy the laws H x = 0, by which an impulse acts.
// What the vector gives for such currents stays, and no current is preferred.
func (r *reduction) project(w []complex128) {
	nh := len(r.hidden)
	if nh == 0 {
		return
	}
	b := mat.NewDense(nh, 2, nil)
	for k, row := range r.hidden {
		sum := complex(0, 0)
		for _, e := range row {
			sum += w[e.at] * complex(e.v/r.l.E[r.diff[e.at]], 0)
		}
		b.Set(k, 0, real(sum))
		b.Set(k, 1, imag(sum))
	}
	// The law's matrix was factored without complaint when the currents were
	// chosen; an error here is a warning about its condition.
	_ = r.law.SolveTo(b, b)
	for k, row := range r.hidden {
		f := complex(b.At(k, 0), b.At(k, 1))
		for _, e := range row {
			w[e.at] -= complex(e.v, 0) * f
		}
	}
}

// addFull scales the vectors of a mode, given over all states, and appends it.
func (rep *Report) addFull(m Mode) {
	re, size := real(m.Value), cmplx.Abs(m.Value)
	m.Frequency = math.Abs(imag(m.Value)) / (2 * math.Pi)
	if size > 0 {
		m.Damping = -re / size
	}
	m.TimeConstant = math.Inf(1)
	if re != 0 {
		m.TimeConstant = -1 / re
	}
	// The right vector: length one in per unit, its largest entry real.
	norm, most, top := 0.0, 0.0, complex(1, 0)
	for i, v := range m.Right {
		p := cmplx.Abs(v) / rep.States[i].Base
		norm += p * p
		if p > most*(1+1e-9) { // ties go to the first, whatever the rounding
			most, top = p, v
		}
	}
	scale := complex(cmplx.Abs(top)/math.Sqrt(norm), 0) / top
	for i := range m.Right {
		m.Right[i] *= scale
	}
	if m.Left != nil {
		dot, total, length := complex(0, 0), 0.0, 0.0
		m.Participation = make([]float64, len(m.Right))
		for i, w := range m.Left {
			p := w * m.Right[i]
			dot += p
			m.Participation[i] = cmplx.Abs(p)
			total += m.Participation[i]
			q := cmplx.Abs(w) * rep.States[i].Base
			length += q * q
		}
		m.Condition = math.Sqrt(length) / cmplx.Abs(dot)
		for i := range m.Participation {
			m.Participation[i] /= total
		}
		if m.Condition < 1e14 {
			for i := range m.Left {
				m.Left[i] /= dot
			}
		}
	}
	rep.Modes = append(rep.Modes, m)
}

// finish sorts and numbers the modes, and draws the conclusions.
func (rep *Report) finish(gap float64) {
	sort.SliceStable(rep.Modes, func(i, j int) bool {
		a, b := rep.Modes[i].Value, rep.Modes[j].Value
		if real(a) != real(b) {
			return real(a) > real(b)
		}
		return imag(a) < imag(b)
	})
	rep.Stable = true
	for i := range rep.Modes {
		m := &rep.Modes[i]
		m.Number = i + 1
		if !m.Zero && !m.Neutral && real(m.Value) >= 0 {
			rep.Stable = false
		}
		if m.Participation != nil {
			m.ByDevice = rep.shares(m.Participation, func(u *engine.LinearUnknown) string { return u.Owner })
			m.ByDynamics = rep.shares(m.Participation, func(u *engine.LinearUnknown) string { return u.Dynamics })
		}
	}
	if gap == 0 {
		gap = 3
	}
	rep.timescales(gap)
}
