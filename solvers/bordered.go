package solvers

import (
	"errors"
	"fmt"
	"slices"
)

// BorderedMatrix is a block-diagonal matrix with a border, given as local
// matrices with ports:
//
//	A = sum over blocks of E_k (local_k) F_k' + Shift D
//
// Unknowns are the own unknowns of block 0, 1, ... and then the border. Block
// k's own unknowns appear in its local matrix only; its port columns are
// columns At of the border, and its port rows are added to rows of the border
// with weights. D is the diagonal of the blocks' Mass and of BorderMass.
type BorderedMatrix struct {
	Border     int // order of the border
	Blocks     []BorderedBlock
	BorderMass []float64 // len Border, or nil for zero
	// BorderFixed marks rows of the border that have a one on the diagonal
	// in addition; nil means none.
	BorderFixed []bool
	// Paired says that the rows and columns of the border come in pairs (the
	// two components of a node), which Border then is even for. It is worth
	// telling; it is no matter of right or wrong.
	Paired bool
	Shift  float64
}

// BorderedBlock is a block of a [BorderedMatrix].
type BorderedBlock struct {
	Ports, Own int
	// Pattern lists the entries of the local matrix, ports first; it must
	// hold the diagonal entries of the own unknowns.
	Pattern []Entry
	Values  []float64 // len Pattern
	Mass    []float64 // len Own, or nil for zero
	At      []int     // len Ports: border columns
	Rows    []PortRow
}

// PortRow adds Weight times the row of a port to a row of the border.
type PortRow struct {
	Port, Row int
	Weight    float64
}

// BorderedLU factors a [BorderedMatrix] by static condensation: each block's
// own unknowns are eliminated within the block by a program made once for its
// pattern, what is left at the ports is added up in the sparse border matrix,
// which alone is factored by a [SparseLU]. Pivots inside a block are fixed in
// advance and checked; a block in which they turn out too small gets pivots
// chosen for its present values, and where a block is singular by itself the
// whole matrix is factored by a SparseLU instead.
type BorderedLU struct {
	m      *BorderedMatrix
	n      int
	ownAt  []int // block -> first own unknown
	prog   []*elimination
	class  []*elimination // the program of the pattern, before any change of pivots
	at     []int          // block -> first value in lu
	stride []int          // block -> distance of its values in lu: 1, or lanes
	groups []laneGroup    // blocks of one pattern, eliminated together
	single []int          // the other blocks
	lu     []float64
	mid    []float64 // of groups: own entries, then port entries, half-way through a solution
	border *CSC
	diagAt []int     // border row -> slot in border.X
	slots  [][]int   // block -> for each PortRow, for each port column: slot in border.X
	pairs  *pairLU   // of the border, where it comes in pairs
	blu    *SparseLU // of the border, made when first needed where there is pairs
	paired bool      // the present factors are those of pairs
	c, x   []float64 // local workspace

	general *SparseLU // of the whole matrix, made when first needed
	gen     *CSC
	genAt   []int
	usesGen bool
	stats   BorderedStats
	est     []float64 // workspace of the condition estimate
}

// laneGroup is a group of blocks of one pattern whose values are interleaved.
// Lanes left over repeat the first block: its results are written again, the
// same bits.
type laneGroup struct {
	prog   *elimination
	count  int // different blocks
	blocks [lanes]int
	own    [lanes]int // each block's first own unknown
	at     int        // first value in lu
	mid    int        // first value in mid
	rows   []laneRow
	cols   []int32 // border column of each port of each block, interleaved
}

// laneRow adds weight times an interleaved value to a row of the border.
type laneRow struct {
	from, row int32
	weight    float64
}

// BorderedStats counts what a BorderedLU did.
type BorderedStats struct {
	Factorizations int
	Repivoted      int // blocks that got new pivots
	General        int // factorisations of the whole matrix by a SparseLU
	Unpaired       int // factorisations of a paired border by a SparseLU
	BorderNonzeros int // of the border matrix, before fill
}

// Stats returns the counts.
func (f *BorderedLU) Stats() BorderedStats { return f.stats }

// programCache shares elimination programs among blocks of one pattern.
type programCache map[string]*elimination

func patternKey(ports, own int, p []Entry) string {
	b := make([]byte, 0, 4*len(p)+4)
	b = append(b, byte(ports), byte(ports>>8), byte(own), byte(own>>8))
	for _, e := range p {
		b = append(b, byte(e.Row), byte(e.Row>>8), byte(e.Col), byte(e.Col>>8))
	}
	return string(b)
}

// NewBorderedLU analyses the pattern of m, with the values it holds as a guide
// for the pivots, and keeps a reference to it. It fails if m is malformed.
func NewBorderedLU(m *BorderedMatrix) (*BorderedLU, error) {
	if err := m.check(); err != nil {
		return nil, err
	}
	f := &BorderedLU{m: m}
	widest := 0
	total := 0
	cache := make(programCache)
	var entries []Entry
	for i := range m.Border {
		entries = append(entries, Entry{i, i})
	}
	for k := range m.Blocks {
		b := &m.Blocks[k]
		f.ownAt = append(f.ownAt, f.n)
		f.n += b.Own
		widest = max(widest, b.Own+b.Ports)
		key := patternKey(b.Ports, b.Own, b.Pattern)
		e, ok := cache[key]
		if !ok {
			e, _ = newElimination(b.Ports, b.Own, b.Pattern, f.shifted(b))
			cache[key] = e
		}
		f.class = append(f.class, e)
		for _, r := range b.Rows {
			for _, c := range b.At {
				entries = append(entries, Entry{r.Row, c})
			}
		}
	}
	f.n += m.Border
	f.prog = append([]*elimination(nil), f.class...)
	f.at, f.stride = make([]int, len(m.Blocks)), make([]int, len(m.Blocks))
	total = f.group()
	f.lu = make([]float64, total)
	f.c, f.x = make([]float64, lanes*widest), make([]float64, lanes*widest)
	if m.Border > 0 {
		var slot []int
		f.border, slot = NewCSC(m.Border, m.Border, entries)
		f.diagAt, slot = slot[:m.Border], slot[m.Border:]
		for k := range m.Blocks {
			b := &m.Blocks[k]
			w := len(b.Rows) * len(b.At)
			f.slots = append(f.slots, slot[:w])
			slot = slot[w:]
		}
		if m.Paired {
			f.pairs = newPairLU(f.border)
		} else if err := f.newBorderLU(); err != nil {
			return nil, err
		}
		f.stats.BorderNonzeros = len(f.border.X)
	}
	return f, nil
}

// newBorderLU makes the scalar factorisation of the border.
func (f *BorderedLU) newBorderLU() (err error) {
	f.blu, err = NewSparseLU(f.border, LUOptions{})
	return f.bordersColumn(err)
}

// bordersColumn counts the column of a singular border from the first unknown.
func (f *BorderedLU) bordersColumn(err error) error {
	if err == nil {
		return nil
	}
	var s *SingularError
	if errors.As(err, &s) {
		return &SingularError{Column: f.n - f.m.Border + s.Column, Pivot: s.Pivot}
	}
	return err
}

// group puts blocks of one program together by fours, in their order, and gives
// every block its place in lu. It returns the length of lu.
func (f *BorderedLU) group() (total int) {
	open := make(map[*elimination]int) // 1 + group with a lane left
	for k, e := range f.prog {
		if e == nil || e.own == 0 {
			f.single = append(f.single, k)
			continue
		}
		i := open[e] - 1
		if i < 0 {
			i = len(f.groups)
			f.groups = append(f.groups, laneGroup{prog: e, blocks: [lanes]int{k, k, k, k}})
		}
		g := &f.groups[i]
		g.blocks[g.count] = k
		g.count++
		open[e] = i + 1
		if g.count == lanes {
			open[e] = 0
		}
	}
	mid := 0
	for i := range f.groups {
		g := &f.groups[i]
		g.at = total
		g.mid = mid
		no, np := g.prog.own, g.prog.ports
		mid += lanes * (no + np)
		g.cols = make([]int32, lanes*np)
		for l, k := range g.blocks {
			g.own[l] = f.ownAt[k]
			for j, c := range f.m.Blocks[k].At {
				g.cols[lanes*j+l] = int32(c)
			}
		}
		for l, k := range g.blocks[:g.count] {
			f.at[k], f.stride[k] = total+l, lanes
			for _, r := range f.m.Blocks[k].Rows {
				g.rows = append(g.rows, laneRow{int32(lanes*(no+r.Port) + l), int32(r.Row), r.Weight})
			}
		}
		total += lanes * g.prog.slots
	}
	for _, k := range f.single {
		f.at[k], f.stride[k] = total, 1
		if f.prog[k] != nil {
			total += f.prog[k].slots
		}
	}
	f.mid = make([]float64, mid)
	return total
}

func (m *BorderedMatrix) check() error {
	var errs []error
	bad := func(format string, a ...any) { errs = append(errs, fmt.Errorf("solvers: "+format, a...)) }
	if m.Border < 0 {
		bad("border order is %d", m.Border)
	}
	if m.Paired && m.Border%2 != 0 {
		bad("border order is %d, want an even one for pairs", m.Border)
	}
	if m.BorderMass != nil && len(m.BorderMass) != m.Border {
		bad("BorderMass has %d entries, want %d", len(m.BorderMass), m.Border)
	}
	if m.BorderFixed != nil && len(m.BorderFixed) != m.Border {
		bad("BorderFixed has %d entries, want %d", len(m.BorderFixed), m.Border)
	}
	for k := range m.Blocks {
		b := &m.Blocks[k]
		if len(b.Values) != len(b.Pattern) {
			bad("block %d: %d values for %d pattern entries", k, len(b.Values), len(b.Pattern))
		}
		if b.Mass != nil && len(b.Mass) != b.Own {
			bad("block %d: %d masses for %d own unknowns", k, len(b.Mass), b.Own)
		}
		if len(b.At) != b.Ports {
			bad("block %d: %d border columns for %d ports", k, len(b.At), b.Ports)
		}
		diag := make([]bool, b.Own)
		for _, e := range b.Pattern {
			n := b.Ports + b.Own
			if e.Row < 0 || e.Row >= n || e.Col < 0 || e.Col >= n {
				bad("block %d: pattern entry (%d, %d) lies outside %d x %d", k, e.Row, e.Col, n, n)
				continue
			}
			if e.Row == e.Col && e.Row >= b.Ports {
				diag[e.Row-b.Ports] = true
			}
		}
		for i, ok := range diag {
			if !ok {
				bad("block %d: pattern lacks the diagonal of own unknown %d", k, i)
			}
		}
		for _, c := range b.At {
			if c < 0 || c >= m.Border {
				bad("block %d: border column %d lies outside %d", k, c, m.Border)
			}
		}
		for _, r := range b.Rows {
			if r.Row < 0 || r.Row >= m.Border || r.Port < 0 || r.Port >= b.Ports {
				bad("block %d: port row %+v lies outside", k, r)
			}
		}
	}
	return errors.Join(errs...)
}

// shifted returns the local values with the shifted mass added.
func (f *BorderedLU) shifted(b *BorderedBlock) []float64 {
	v := append([]float64(nil), b.Values...)
	if b.Mass == nil {
		return v
	}
	for i := range b.Own {
		for k, e := range b.Pattern {
			if e.Row == b.Ports+i && e.Col == e.Row {
				v[k] += f.m.Shift * b.Mass[i]
				break
			}
		}
	}
	return v
}

// load writes block k's local matrix into its slots, which hold zeros.
func (f *BorderedLU) load(k int) {
	b, p := &f.m.Blocks[k], f.prog[k]
	v, stride := f.lu[f.at[k]:], f.stride[k]
	values := b.Values[:len(p.at)]
	for i, s := range p.at {
		v[int(s)*stride] += values[i]
	}
	if b.Mass != nil {
		shift := f.m.Shift
		mass := b.Mass[:len(p.diag)]
		for i, s := range p.diag {
			v[int(s)*stride] += shift * mass[i]
		}
	}
}

// loadLanes is load for the blocks of a group.
func (f *BorderedLU) loadLanes(g *laneGroup) {
	p, v := g.prog, f.lu[g.at:][:lanes*g.prog.slots]
	b0, b1, b2, b3 := &f.m.Blocks[g.blocks[0]], &f.m.Blocks[g.blocks[1]], &f.m.Blocks[g.blocks[2]], &f.m.Blocks[g.blocks[3]]
	n := len(p.at)
	v0, v1, v2, v3 := b0.Values[:n], b1.Values[:n], b2.Values[:n], b3.Values[:n]
	for i, s := range p.at {
		d := (*lane)(v[int(s)*lanes:])
		d[0] += v0[i]
		d[1] += v1[i]
		d[2] += v2[i]
		d[3] += v3[i]
	}
	shift := f.m.Shift
	for l, b := range [lanes]*BorderedBlock{b0, b1, b2, b3} {
		if b.Mass == nil {
			continue
		}
		mass := b.Mass[:len(p.diag)]
		for i, s := range p.diag {
			v[int(s)*lanes+l] += shift * mass[i]
		}
	}
}

// Factor implements [LinearSolver].
func (f *BorderedLU) Factor() error {
	f.stats.Factorizations++
	f.usesGen = false
	for i := 0; i < len(f.groups); {
		g := &f.groups[i]
		v := f.lu[g.at:][:lanes*g.prog.slots]
		clear(v)
		f.loadLanes(g)
		if !g.prog.factorLanes(v) {
			// Some block needs pivots of its own: its group goes on one by one.
			f.dissolve(i)
			continue
		}
		i++
	}
	for _, k := range f.single {
		if f.prog[k] == nil {
			if !f.repivot(k) {
				return f.factorGeneral()
			}
			continue
		}
		clear(f.lu[f.at[k]:][:f.prog[k].slots])
		f.load(k)
		if f.m.Blocks[k].Own == 0 {
			continue
		}
		if f.prog[k].factor(f.lu[f.at[k]:][:f.prog[k].slots]) >= 0 && !f.repivot(k) {
			return f.factorGeneral()
		}
	}
	if f.m.Border == 0 {
		return nil
	}
	x := f.border.X
	for i := range x {
		x[i] = 0
	}
	if f.m.BorderMass != nil {
		for i, m := range f.m.BorderMass {
			x[f.diagAt[i]] += f.m.Shift * m
		}
	}
	if f.m.BorderFixed != nil {
		for i, fixed := range f.m.BorderFixed {
			if fixed {
				x[f.diagAt[i]]++
			}
		}
	}
	for k := range f.m.Blocks {
		b, p := &f.m.Blocks[k], f.prog[k]
		np, stride := b.Ports, f.stride[k]
		if np == 0 {
			continue
		}
		s := f.lu[f.at[k]+(p.slots-np*np)*stride:]
		slots := f.slots[k]
		for _, r := range b.Rows {
			at := r.Port * np * stride
			to := slots[:np]
			slots = slots[np:]
			for _, t := range to {
				x[t] += r.Weight * s[at]
				at += stride
			}
		}
	}
	if f.pairs != nil {
		if f.paired = f.pairs.factor(); f.paired {
			return nil
		}
		f.stats.Unpaired++
		if f.blu == nil {
			if err := f.newBorderLU(); err != nil {
				return err
			}
		}
	}
	return f.bordersColumn(f.blu.Factor())
}

// dissolve takes a group apart; its blocks get places of their own.
func (f *BorderedLU) dissolve(i int) {
	g := f.groups[i]
	f.groups = slices.Delete(f.groups, i, i+1)
	for _, k := range g.blocks[:g.count] {
		f.place(k)
		f.single = append(f.single, k)
	}
	slices.Sort(f.single)
}

// place gives block k a new place at the end of lu; the old one stays unused
// until the next analysis.
func (f *BorderedLU) place(k int) {
	f.at[k], f.stride[k] = len(f.lu), 1
	f.lu = append(f.lu, make([]float64, f.prog[k].slots)...)
}

// repivot makes a program of its own for block k's present values.
func (f *BorderedLU) repivot(k int) bool {
	b := &f.m.Blocks[k]
	e, err := newElimination(b.Ports, b.Own, b.Pattern, f.shifted(b))
	if err != nil {
		return false
	}
	f.stats.Repivoted++
	before := f.prog[k]
	f.prog[k] = e
	if before == nil || e.slots > before.slots {
		f.place(k)
	}
	v := f.lu[f.at[k]:][:e.slots]
	clear(v)
	f.load(k)
	return e.factor(v) < 0
}

// factorGeneral factors the whole matrix.
func (f *BorderedLU) factorGeneral() error {
	f.stats.General++
	f.assemble()
	if f.general == nil {
		lu, err := NewSparseLU(f.gen, LUOptions{})
		if err != nil {
			return err
		}
		f.general = lu
	}
	f.usesGen = true
	return f.general.Factor()
}

// assemble writes the whole matrix into f.gen.
func (f *BorderedLU) assemble() {
	if f.gen == nil {
		var entries []Entry
		f.entries(func(row, col int, _ float64) { entries = append(entries, Entry{row, col}) })
		f.gen, f.genAt = NewCSC(f.n, f.n, entries)
	}
	clear(f.gen.X)
	i := 0
	f.entries(func(_, _ int, v float64) {
		f.gen.X[f.genAt[i]] += v
		i++
	})
}

// entries calls visit for every entry of the whole matrix, always in the same
// order, duplicates included.
func (f *BorderedLU) entries(visit func(row, col int, v float64)) {
	base := f.n - f.m.Border
	for k := range f.m.Blocks {
		b := &f.m.Blocks[k]
		own := f.ownAt[k]
		for i, e := range b.Pattern {
			col := own + e.Col - b.Ports
			if e.Col < b.Ports {
				col = base + b.At[e.Col]
			}
			if e.Row >= b.Ports {
				visit(own+e.Row-b.Ports, col, b.Values[i])
				continue
			}
			for _, r := range b.Rows {
				if r.Port == e.Row {
					visit(base+r.Row, col, r.Weight*b.Values[i])
				}
			}
		}
		for i := range b.Own {
			m := 0.0
			if b.Mass != nil {
				m = f.m.Shift * b.Mass[i]
			}
			visit(own+i, own+i, m)
		}
	}
	for i := range f.m.Border {
		d := 0.0
		if f.m.BorderMass != nil {
			d = f.m.Shift * f.m.BorderMass[i]
		}
		if f.m.BorderFixed != nil && f.m.BorderFixed[i] {
			d++
		}
		visit(base+i, base+i, d)
	}
}

// Solve implements [LinearSolver].
func (f *BorderedLU) Solve(b []float64) {
	if len(b) != f.n {
		panic("solvers: length of b doesn't match the matrix")
	}
	if f.usesGen {
		f.general.Solve(b)
		return
	}
	border := b[f.n-f.m.Border:]
	for i := range f.groups {
		g := &f.groups[i]
		no := g.prog.own
		c := f.mid[g.mid:][:(no+g.prog.ports)*lanes]
		interleave(c, no, b[g.own[0]:], b[g.own[1]:], b[g.own[2]:], b[g.own[3]:])
		clear(c[no*lanes:])
		g.prog.forwardLanes(f.lu[g.at:][:lanes*g.prog.slots], c)
		for _, r := range g.rows {
			border[r.row] += r.weight * c[r.from]
		}
	}
	for _, k := range f.single {
		blk := &f.m.Blocks[k]
		no := blk.Own
		if no == 0 {
			continue
		}
		p := f.prog[k]
		c := f.c[:no+blk.Ports]
		own := b[f.ownAt[k]:][:no]
		copy(c, own)
		ports := c[no:]
		clear(ports)
		p.forward(f.lu[f.at[k]:][:p.slots], c)
		copy(own, c)
		for _, r := range blk.Rows {
			border[r.Row] += r.Weight * ports[r.Port]
		}
	}
	if f.m.Border > 0 {
		if f.paired {
			f.pairs.solve(border)
		} else {
			f.blu.Solve(border)
		}
	}
	for i := range f.groups {
		g := &f.groups[i]
		no := g.prog.own
		c, x := f.mid[g.mid:][:no*lanes], f.x[:no*lanes+len(g.cols)]
		for j, col := range g.cols {
			x[no*lanes+j] = border[col]
		}
		g.prog.backwardLanes(f.lu[g.at:][:lanes*g.prog.slots], c, x)
		separate(b[g.own[0]:], b[g.own[1]:], b[g.own[2]:], b[g.own[3]:], no, x)
	}
	for _, k := range f.single {
		blk := &f.m.Blocks[k]
		no := blk.Own
		if no == 0 {
			continue
		}
		p := f.prog[k]
		x := f.x[:no+blk.Ports]
		for i, c := range blk.At {
			x[no+i] = border[c]
		}
		own := b[f.ownAt[k]:][:no]
		p.backward(f.lu[f.at[k]:][:p.slots], own, x)
		copy(own, x)
	}
}

// SolveTranspose overwrites b with the solution of A' x = b.
func (f *BorderedLU) SolveTranspose(b []float64) {
	if len(b) != f.n {
		panic("solvers: length of b doesn't match the matrix")
	}
	if f.usesGen {
		f.general.SolveTranspose(b)
		return
	}
	base := f.n - f.m.Border
	border := b[base:]
	for k := range f.m.Blocks {
		blk := &f.m.Blocks[k]
		no := blk.Own
		p := f.prog[k]
		v, stride := f.lu[f.at[k]:], f.stride[k]
		c, x := f.c[:no+blk.Ports], f.x[:no]
		copy(c, b[f.ownAt[k]:][:no])
		for i := range blk.Ports {
			c[no+i] = 0
		}
		// U' x = c, by columns of the own part; the ports receive the rest.
		for s := range p.steps {
			st := &p.steps[s]
			z := c[st.col] * v[int(st.pivot)*stride]
			x[st.row] = z
			nu := int(st.nu)
			for j := range nu {
				c[p.index[int(st.idx)+j]] -= v[(int(st.pivot)+1+j)*stride] * z
			}
		}
		copy(b[f.ownAt[k]:][:no], x)
		for i, col := range blk.At {
			border[col] += c[no+i]
		}
	}
	if f.m.Border > 0 {
		if f.paired {
			f.pairs.solveTranspose(border)
		} else {
			f.blu.SolveTranspose(border)
		}
	}
	for k := range f.m.Blocks {
		blk := &f.m.Blocks[k]
		no := blk.Own
		p := f.prog[k]
		v, stride := f.lu[f.at[k]:], f.stride[k]
		x := f.x[:no+blk.Ports]
		copy(x, b[f.ownAt[k]:][:no])
		for i := range blk.Ports {
			x[no+i] = 0
		}
		for _, r := range blk.Rows {
			x[no+r.Port] += r.Weight * border[r.Row]
		}
		// L' z = x, by rows.
		for s := len(p.steps) - 1; s >= 0; s-- {
			st := &p.steps[s]
			nu, nl := int(st.nu), int(st.nl)
			z := x[st.row]
			for i := range nl {
				z -= v[(int(st.pivot)+1+nu+i)*stride] * x[p.index[int(st.idx)+nu+i]]
			}
			x[st.row] = z
		}
		copy(b[f.ownAt[k]:][:no], x)
	}
}

// Condition implements [LinearSolver]. It assembles the whole matrix for its
// norm.
func (f *BorderedLU) Condition() float64 {
	if f.est == nil {
		f.est = make([]float64, 2*f.n)
	}
	f.assemble()
	return f.gen.Norm1() * inverseNorm1(f, f.est[:f.n], f.est[f.n:])
}
