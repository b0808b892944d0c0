package solvers

import "math"

// lanes is the number of blocks of one pattern that are eliminated together,
// their values interleaved: the indices of a program are read once for all,
// and the blocks' arithmetic is independent, so it overlaps or shares a vector
// register. Four is the width of AVX2; in scalar code two gave 1.5 times the
// speed of one block at a time, four 2, eight no more.
const lanes = 4

type lane = [lanes]float64

// laneProgram is an elimination program with positions in units of float64 of
// interleaved values.
type laneProgram struct {
	laneSteps  []laneStep
	laneIndex  []int32
	laneTarget []int32
}

// laneStep is an eliminationStep of a laneProgram. The assembly knows the
// offsets of its fields, 0, 4, ... 24, and its size, 28.
type laneStep struct {
	pivot    int32
	row, col int32
	nu, nl   int32
	idx, tgt int32
}

func newLaneProgram(e *elimination) laneProgram {
	var p laneProgram
	for _, s := range e.steps {
		p.laneSteps = append(p.laneSteps, laneStep{
			pivot: lanes * s.pivot, row: lanes * s.row, col: lanes * s.col,
			nu: s.nu, nl: s.nl, idx: s.idx, tgt: s.tgt,
		})
	}
	times := func(x []int32) []int32 {
		y := make([]int32, len(x))
		for i, v := range x {
			y[i] = lanes * v
		}
		return y
	}
	p.laneIndex, p.laneTarget = times(e.index), times(e.target)
	return p
}

// factorLanes is factor for interleaved blocks: v holds lanes values a slot. It
// reports whether every pivot of every block was acceptable.
func (e *elimination) factorLanes(v []float64) bool {
	if len(v) < lanes*e.slots {
		panic("solvers: too few values for the lanes")
	}
	if useAVX && e.own > 0 {
		return factorAVX(&e.laneSteps[0], len(e.laneSteps), first(e.laneTarget), &v[0])
	}
	return e.factorLanesGo(v)
}

// forwardLanes is forward for interleaved blocks.
func (e *elimination) forwardLanes(v, b []float64) {
	if len(v) < lanes*e.slots || len(b) < lanes*(e.own+e.ports) {
		panic("solvers: too few values for the lanes")
	}
	if useAVX && e.own > 0 {
		forwardAVX(&e.laneSteps[0], len(e.laneSteps), first(e.laneIndex), &v[0], &b[0])
		return
	}
	e.forwardLanesGo(v, b)
}

// backwardLanes is backward for interleaved blocks.
func (e *elimination) backwardLanes(v, b, x []float64) {
	if len(v) < lanes*e.slots || len(b) < lanes*e.own || len(x) < lanes*(e.own+e.ports) {
		panic("solvers: too few values for the lanes")
	}
	if useAVX && e.own > 0 {
		backwardAVX(&e.laneSteps[0], len(e.laneSteps), first(e.laneIndex), &v[0], &b[0], &x[0])
		return
	}
	e.backwardLanesGo(v, b, x)
}

// interleave writes a[l][j] to dst[j*lanes+l] for j < n.
func interleave(dst []float64, n int, a0, a1, a2, a3 []float64) {
	a0, a1, a2, a3 = a0[:n], a1[:n], a2[:n], a3[:n]
	dst = dst[:n*lanes]
	if useAVX && n > 0 {
		interleaveAVX(&dst[0], n, &a0[0], &a1[0], &a2[0], &a3[0])
		return
	}
	for j, x := range a0 {
		d := (*lane)(dst[j*lanes:])
		d[0], d[1], d[2], d[3] = x, a1[j], a2[j], a3[j]
	}
}

// separate is the inverse of interleave.
func separate(a0, a1, a2, a3 []float64, n int, src []float64) {
	a0, a1, a2, a3 = a0[:n], a1[:n], a2[:n], a3[:n]
	src = src[:n*lanes]
	if useAVX && n > 0 {
		separateAVX(&a0[0], &a1[0], &a2[0], &a3[0], n, &src[0])
		return
	}
	for j := range a0 {
		d := (*lane)(src[j*lanes:])
		a0[j], a1[j], a2[j], a3[j] = d[0], d[1], d[2], d[3]
	}
}

func first(x []int32) *int32 {
	if len(x) == 0 {
		return nil
	}
	return &x[0]
}

// The kernels in Go name the lanes one by one: an array in a local variable
// lives in memory, scalars live in registers.

func (e *elimination) factorLanesGo(v []float64) bool {
	worst := 0.0
	for k := range e.laneSteps {
		st := &e.laneSteps[k]
		p := (*lane)(v[st.pivot:])
		i0, i1, i2, i3 := 1/p[0], 1/p[1], 1/p[2], 1/p[3]
		if !(math.Abs(i0) <= math.MaxFloat64 && math.Abs(i1) <= math.MaxFloat64 &&
			math.Abs(i2) <= math.MaxFloat64 && math.Abs(i3) <= math.MaxFloat64) {
			return false
		}
		p[0], p[1], p[2], p[3] = i0, i1, i2, i3
		nu, nl := int(st.nu), int(st.nl)
		u := v[st.pivot+lanes:][:nu*lanes]
		l := v[int(st.pivot)+lanes*(1+nu):][:nl*lanes]
		tgt := e.laneTarget[st.tgt:][:nu*nl]
		for ; len(l) >= lanes; l = l[lanes:] {
			m := (*lane)(l)
			m0, m1, m2, m3 := m[0]*i0, m[1]*i1, m[2]*i2, m[3]*i3
			m[0], m[1], m[2], m[3] = m0, m1, m2, m3
			size := max(math.Abs(m0), math.Abs(m1), math.Abs(m2), math.Abs(m3))
			if !(size <= worst) {
				worst = size // and stays NaN if it is
				if !(size <= maxGrowth) {
					return false
				}
			}
			uu := u
			for _, t := range tgt[:nu] {
				x, y := (*lane)(v[t:]), (*lane)(uu)
				x[0] -= m0 * y[0]
				x[1] -= m1 * y[1]
				x[2] -= m2 * y[2]
				x[3] -= m3 * y[3]
				uu = uu[lanes:]
			}
			tgt = tgt[nu:]
		}
	}
	return true
}

func (e *elimination) forwardLanesGo(v, b []float64) {
	for k := range e.laneSteps {
		st := &e.laneSteps[k]
		c := (*lane)(b[st.row:])
		c0, c1, c2, c3 := c[0], c[1], c[2], c[3]
		nu, nl := int(st.nu), int(st.nl)
		l := v[int(st.pivot)+lanes*(1+nu):][:nl*lanes]
		for _, r := range e.laneIndex[int(st.idx)+nu:][:nl] {
			m, x := (*lane)(l), (*lane)(b[r:])
			x[0] -= m[0] * c0
			x[1] -= m[1] * c1
			x[2] -= m[2] * c2
			x[3] -= m[3] * c3
			l = l[lanes:]
		}
	}
}

// backwardLanesGo sums terms of even and odd place apart, so that they
// overlap.
func (e *elimination) backwardLanesGo(v, b, x []float64) {
	for k := len(e.laneSteps) - 1; k >= 0; k-- {
		st := &e.laneSteps[k]
		s := (*lane)(b[st.row:])
		s0, s1, s2, s3 := s[0], s[1], s[2], s[3]
		var t0, t1, t2, t3 float64
		nu := int(st.nu)
		u := v[st.pivot+lanes:][:nu*lanes]
		index := e.laneIndex[st.idx:][:nu]
		for ; len(index) >= 2; index = index[2:] {
			m, y := (*lane)(u), (*lane)(x[index[0]:])
			s0 -= m[0] * y[0]
			s1 -= m[1] * y[1]
			s2 -= m[2] * y[2]
			s3 -= m[3] * y[3]
			u = u[lanes:]
			m, y = (*lane)(u), (*lane)(x[index[1]:])
			t0 += m[0] * y[0]
			t1 += m[1] * y[1]
			t2 += m[2] * y[2]
			t3 += m[3] * y[3]
			u = u[lanes:]
		}
		if len(index) > 0 {
			m, y := (*lane)(u), (*lane)(x[index[0]:])
			s0 -= m[0] * y[0]
			s1 -= m[1] * y[1]
			s2 -= m[2] * y[2]
			s3 -= m[3] * y[3]
		}
		p, y := (*lane)(v[st.pivot:]), (*lane)(x[st.col:])
		y[0], y[1], y[2], y[3] = (s0-t0)*p[0], (s1-t1)*p[1], (s2-t2)*p[2], (s3-t3)*p[3]
	}
}
