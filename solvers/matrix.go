package solvers

// MatrixSource is the optional facet of a [System] that hands out its matrix
// as a whole, for a linear solver or an integrator from elsewhere.
// [Problem.System] and [Network] have it.
type MatrixSource interface {
	// Assembly analyses the pattern of alpha M - J. A Network must have been
	// configured, and the assembly serves until it is configured again.
	Assembly() *Assembly
}

// Scaled is the optional facet of a [System] that tells the scales of its
// unknowns. [Problem.System] and [Network] have it.
type Scaled interface {
	// Scales returns, for each unknown, the positive value that counts as 1
	// for Tolerance.Abs, and whether its magnitude leaves its tolerance
	// alone. The slices belong to the caller.
	Scales() (scale []float64, absolute []bool)
}

// Assembly gathers alpha M - J of a system in one sparse matrix.
type Assembly struct {
	// A is the matrix as of the last Fill; its pattern stays the same.
	A *CSC
	// Mass holds the elements of M, which may share a place (they add up).
	Mass []Element

	massAt  []int      // len Mass: slot in A.X
	ones    []int      // slots with a one in addition
	parts   []assembly // the rest, from where the system keeps its Jacobian
	current func() bool
}

// assembly moves values of a system's Jacobian into the matrix.
type assembly struct {
	values []float64 // kept by the system
	moves  []move
}

type move struct {
	from, to int32 // index in values, slot in A.X
	weight   float64
}

// Fill sets a.A to alpha M - J with the Jacobian the system keeps at present.
// It allocates nothing.
func (a *Assembly) Fill(alpha float64) {
	x := a.A.X
	clear(x)
	at := a.massAt[:len(a.Mass)]
	for k, e := range a.Mass {
		x[at[k]] += alpha * e.Value
	}
	for _, s := range a.ones {
		x[s]++
	}
	for _, p := range a.parts {
		for _, m := range p.moves {
			x[m.to] += m.weight * p.values[m.from]
		}
	}
}

// Current reports whether the system still has the structure that was
// analysed.
func (a *Assembly) Current() bool { return a.current() }

// Assembly implements [MatrixSource].
func (s *flatSystem) Assembly() *Assembly {
	a := &Assembly{Mass: append([]Element(nil), s.mass...), current: func() bool { return true }}
	entries := make([]Entry, 0, len(s.w.X)+s.n)
	for j := range s.n {
		for _, i := range s.w.I[s.w.P[j]:s.w.P[j+1]] {
			entries = append(entries, Entry{i, j})
		}
	}
	// The same pattern, so that a value keeps its slot.
	a.A, _ = NewCSC(s.n, s.n, entries)
	a.massAt = append([]int(nil), s.massAt...)
	p := assembly{values: s.jac}
	for k, to := range s.jacAt {
		p.moves = append(p.moves, move{int32(k), int32(to), -1})
	}
	a.parts = []assembly{p}
	return a
}

// Scales implements [Scaled].
func (s *flatSystem) Scales() (scale []float64, absolute []bool) {
	return append([]float64(nil), s.scale...), append([]bool(nil), s.abs...)
}

// Assembly implements [MatrixSource]. It panics before Configure.
func (n *Network) Assembly() *Assembly {
	n.check()
	blocks := n.matrix.Blocks
	a := &Assembly{current: func() bool {
		// Configure makes a new list of blocks each time.
		now := n.matrix.Blocks
		return len(now) == len(blocks) && (len(now) == 0 || &now[0] == &blocks[0])
	}}
	// In this order: own rows, port rows, masses, fixed rows.
	var entries []Entry
	base := n.nOwn
	for k := range n.blocks {
		lo := n.blocks[k].lo
		m := &blocks[n.blocks[k].mat]
		p := assembly{values: m.Values}
		for i, e := range m.Pattern {
			col := lo + e.Col - m.Ports
			if e.Col < m.Ports {
				col = base + m.At[e.Col]
			}
			if e.Row >= m.Ports {
				p.moves = append(p.moves, move{int32(i), int32(len(entries)), 1})
				entries = append(entries, Entry{lo + e.Row - m.Ports, col})
				continue
			}
			for _, r := range m.Rows {
				if r.Port == e.Row {
					p.moves = append(p.moves, move{int32(i), int32(len(entries)), r.Weight})
					entries = append(entries, Entry{base + r.Row, col})
				}
			}
		}
		a.parts = append(a.parts, p)
	}
	nJac := len(entries)
	mass := func(i int, v float64) {
		if v != 0 {
			a.Mass = append(a.Mass, Element{i, i, v})
			entries = append(entries, Entry{i, i})
		}
	}
	for k := range n.blocks {
		for i, v := range blocks[n.blocks[k].mat].Mass {
			mass(n.blocks[k].lo+i, v)
		}
	}
	for i, v := range n.nodeMass {
		mass(base+i, v)
	}
	nMass := len(entries)
	for i, fixed := range n.fixed {
		if fixed {
			entries = append(entries, Entry{base + i, base + i})
		}
	}
	var slot []int
	a.A, slot = NewCSC(n.n, n.n, entries)
	for _, p := range a.parts {
		for i := range p.moves {
			p.moves[i].to = int32(slot[p.moves[i].to])
		}
	}
	a.massAt, a.ones = slot[nJac:nMass], slot[nMass:]
	return a
}

// Scales implements [Scaled].
func (n *Network) Scales() (scale []float64, absolute []bool) {
	for k := range n.blocks {
		scale = append(scale, n.blocks[k].scale...)
		absolute = append(absolute, n.blocks[k].abs...)
	}
	return append(scale, n.nodeSc...), append(absolute, make([]bool, n.nodes)...)
}
