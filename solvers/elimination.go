package solvers

import (
	"math"
)

// elimination is a program that eliminates the own unknowns of a block from
// its local matrix without searching and without pivoting at run time: static
// condensation. It is made once for a pattern (and a set of sample values,
// from which the pivots are chosen) and serves all blocks with that pattern.
//
// The local matrix has n = ports+own rows and columns, ports first. Own
// unknowns are eliminated in the order of steps; what is left is the Schur
// complement of the ports. Values live in one array, a slot for every entry
// that is or becomes nonzero:
//
//	[step 0: pivot, row entries, column entries | step 1: ... | port x port]
//
// so that a step's row and column are contiguous.
type elimination struct {
	ports, own int
	slots      int
	at         []int32 // pattern entry -> slot
	steps      []eliminationStep
	target     []int32 // slots updated, for each step: column entries x row entries
	index      []int32 // local index of the entries: see eliminationStep
	schur      []schurEntry
	diag       []int32 // own unknown -> slot of its diagonal, -1 if none

	laneProgram
}

type eliminationStep struct {
	pivot    int32 // slot; row entries follow, then column entries
	row, col int32 // own row and own column of the pivot (0..own-1)
	nu, nl   int32 // numbers of row entries and column entries
	idx      int32 // offset into index: nu columns, then nl rows (local indices: own first, then own+port)
	tgt      int32 // offset into target
}

// schurEntry is an entry of the port-by-port rest.
type schurEntry struct {
	slot     int32
	row, col int32 // port components
}

// maxGrowth bounds the multipliers of an elimination without pivoting: above
// it, digits are at risk and the pivots are chosen anew.
const maxGrowth = 1e8

// newElimination chooses pivots for the pattern by the Markowitz count, among
// entries that are not small in their scaled column for the sample values, and
// writes the program. It fails with the own column for which there is no
// pivot.
func newElimination(ports, own int, pattern []Entry, values []float64) (*elimination, error) {
	n := ports + own
	// Internal order: own 0..own-1, ports own..n-1.
	inner := func(i int) int {
		if i < ports {
			return own + i
		}
		return i - ports
	}
	a := make([]float64, n*n)
	nz := make([]bool, n*n)
	for k, e := range pattern {
		p := inner(e.Row)*n + inner(e.Col)
		nz[p] = true
		a[p] += values[k]
	}
	for i := range own {
		nz[i*n+i] = true // the mass may come here
	}
	for i := own; i < n; i++ {
		for j := own; j < n; j++ {
			nz[i*n+j] = true
		}
	}
	pattern0 := append([]bool(nil), nz...)
	// Scale own rows, then own columns, to largest entries of one.
	scaled := append([]float64(nil), a...)
	for i := range own {
		m := 0.0
		for j := range n {
			m = math.Max(m, math.Abs(scaled[i*n+j]))
		}
		if m > 0 {
			for j := range n {
				scaled[i*n+j] /= m
			}
		}
	}
	for j := range own {
		m := 0.0
		for i := range own {
			m = math.Max(m, math.Abs(scaled[i*n+j]))
		}
		if m > 0 {
			for i := range n {
				scaled[i*n+j] /= m
			}
		}
	}
	rowDone, colDone := make([]bool, own), make([]bool, own)
	rows, cols := make([]int, own), make([]int, own)
	type part struct{ u, l []int }
	parts := make([]part, own)
	const threshold = 0.05
	for k := range own {
		best, bestCount, bestSize := -1, math.MaxInt, 0.0
		for pass := 0; pass < 2 && best < 0; pass++ {
			limit := threshold
			if pass == 1 {
				limit = 1e-6
			}
			for j := range own {
				if colDone[j] {
					continue
				}
				colMax, count := 0.0, 0
				for i := range own {
					if !rowDone[i] && nz[i*n+j] {
						colMax = math.Max(colMax, math.Abs(scaled[i*n+j]))
						count++
					}
				}
				for i := own; i < n; i++ {
					if nz[i*n+j] {
						count++
					}
				}
				if !(colMax > 1e-13) {
					continue
				}
				for i := range own {
					if rowDone[i] || !nz[i*n+j] {
						continue
					}
					v := math.Abs(scaled[i*n+j])
					rowMax, rowCount := 0.0, 0
					for jj := range n {
						if (jj >= own || !colDone[jj]) && nz[i*n+jj] {
							rowCount++
							if jj < own {
								rowMax = math.Max(rowMax, math.Abs(scaled[i*n+jj]))
							}
						}
					}
					if v < limit*colMax || v < limit*0.1*rowMax || !(v > 1e-13) {
						continue
					}
					c := (rowCount - 1) * (count - 1)
					if i != j {
						c++ // prefer the diagonal, where the mass is
					}
					if c < bestCount || (c == bestCount && v > bestSize) {
						best, bestCount, bestSize = i*n+j, c, v
					}
				}
			}
		}
		if best < 0 {
			for j := range own {
				if !colDone[j] {
					return nil, &SingularError{Column: j}
				}
			}
		}
		r, c := best/n, best%n
		rows[k], cols[k] = r, c
		rowDone[r], colDone[c] = true, true
		var p part
		for j := range n {
			if nz[r*n+j] && (j >= own || !colDone[j]) {
				p.u = append(p.u, j)
			}
		}
		for i := range n {
			if nz[i*n+c] && (i >= own || !rowDone[i]) {
				p.l = append(p.l, i)
			}
		}
		for _, i := range p.l {
			m := scaled[i*n+c] / scaled[r*n+c]
			for _, j := range p.u {
				nz[i*n+j] = true
				scaled[i*n+j] -= m * scaled[r*n+j]
			}
		}
		parts[k] = p
	}

	e := &elimination{ports: ports, own: own}
	slot := make([]int32, n*n)
	for i := range slot {
		slot[i] = -1
	}
	next := int32(0)
	give := func(i, j int) int32 {
		slot[i*n+j] = next
		next++
		return next - 1
	}
	for k, p := range parts {
		st := eliminationStep{row: int32(rows[k]), col: int32(cols[k]), nu: int32(len(p.u)), nl: int32(len(p.l)), idx: int32(len(e.index))}
		st.pivot = give(rows[k], cols[k])
		for _, j := range p.u {
			give(rows[k], j)
			e.index = append(e.index, int32(j))
		}
		for _, i := range p.l {
			give(i, cols[k])
			e.index = append(e.index, int32(i))
		}
		e.steps = append(e.steps, st)
	}
	for i := own; i < n; i++ {
		for j := own; j < n; j++ {
			e.schur = append(e.schur, schurEntry{give(i, j), int32(i - own), int32(j - own)})
		}
	}
	e.slots = int(next)
	for k, p := range parts {
		e.steps[k].tgt = int32(len(e.target))
		for _, i := range p.l {
			for _, j := range p.u {
				e.target = append(e.target, slot[i*n+j])
			}
		}
	}
	for _, en := range pattern {
		e.at = append(e.at, slot[inner(en.Row)*n+inner(en.Col)])
	}
	for i := range own {
		s := int32(-1)
		if pattern0[i*n+i] {
			s = slot[i*n+i]
		}
		e.diag = append(e.diag, s)
	}
	e.laneProgram = newLaneProgram(e)
	return e, nil
}

// factor eliminates in v (len slots), which holds the matrix by slot; pivots
// are replaced by their reciprocals. It returns -1, or the own column at which
// a pivot was too small.
func (e *elimination) factor(v []float64) int {
	for k := range e.steps {
		st := &e.steps[k]
		p := st.pivot
		inv := 1 / v[p]
		if !(math.Abs(inv) <= math.MaxFloat64) {
			return int(st.col)
		}
		v[p] = inv
		nu, nl := int(st.nu), int(st.nl)
		u := v[p+1:][:nu]
		l := v[int(p)+1+nu:][:nl]
		tgt := e.target[st.tgt:][:nu*nl]
		for i, m := range l {
			m *= inv
			if !(math.Abs(m) <= maxGrowth) {
				return int(st.col)
			}
			l[i] = m
			for j, t := range tgt[:nu] {
				v[t] -= m * u[j]
			}
			tgt = tgt[nu:]
		}
	}
	return -1
}

// forward overwrites b (own entries, then port entries) by L\b; the port
// entries receive what the own equations pass on.
func (e *elimination) forward(v, b []float64) {
	for k := range e.steps {
		st := &e.steps[k]
		c := b[st.row]
		if c == 0 {
			continue
		}
		nu, nl := int(st.nu), int(st.nl)
		l := v[int(st.pivot)+1+nu:][:nl]
		rows := e.index[int(st.idx)+nu:][:nl]
		for i, m := range l {
			b[rows[i]] -= m * c
		}
	}
}

// backward solves for the own unknowns: b holds L\b by rows, x receives the
// unknowns by columns and holds the port unknowns from own on.
func (e *elimination) backward(v, b, x []float64) {
	for k := len(e.steps) - 1; k >= 0; k-- {
		st := &e.steps[k]
		s := b[st.row]
		nu := int(st.nu)
		u := v[int(st.pivot)+1:][:nu]
		cols := e.index[st.idx:][:nu]
		for j, w := range u {
			s -= w * x[cols[j]]
		}
		x[st.col] = s * v[st.pivot]
	}
}
