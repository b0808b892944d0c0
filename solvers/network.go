package solvers

import (
	"errors"
	"fmt"
	"math"
)

// Network is many [Block] values whose ports are tied together at nodes. Its
// unknowns are the own unknowns of block 0, 1, ... and then the node
// components. It is a [System] once Configure has been called.
type Network struct {
	width  int
	nodes  int // components
	blocks []netBlock
	nOwn   int
	nodeSc []float64

	// Set by Configure.
	ready    bool
	n        int
	hidden   []int
	isHidden []bool    // node component
	fixed    []bool    // node component of a dead node
	mass     []float64 // diagonal of M
	scale    []float64 // of every unknown, for the norm
	relative []float64 // 1, or 0 for those measured absolutely
	nodeMass []float64 // its part of the nodes
	active   []int     // indices of blocks that are on
	evals    []evaluation
	matrix   BorderedMatrix
	lu       *BorderedLU
	algRow   []bool
	general  bool
	work     [5][]float64
	flow     []float64 // widest port count
	v        []float64
	local    [6][]float64
	alpha    float64
	frozen   []int // own unknowns of blocks that are off
}

type netBlock struct {
	b      Block
	diff   Differentiable
	fill   JacobianFiller
	timed  TimeDependent
	ports  int
	own    int
	lo     int   // first own unknown
	at     []int // node component of each port component
	scale  []float64
	abs    []bool
	off    bool
	rows   []PortRow // where the port rows go
	jac    []float64 // n x n, shared by blocks of one pattern
	mat    int       // index in matrix.Blocks
	nDense int       // number of pattern entries that come from the Jacobian
	from   []int32   // their places in jac, shared by blocks of one pattern
	nPort  int       // those before it lie in port rows, the rest in own rows; -1 if mixed
}

// evaluation is what Eval needs of a block that is on, packed.
type evaluation struct {
	b     Block
	block int32
	lo    int32
	own   int32
	ports int32
	// node is the first node component of a block with one pair of ports,
	// whose flows go to these components alone; else -1.
	node int32
}

// BlockError tells which block of a [Network] returned an error.
type BlockError struct {
	Block int
	Err   error
}

func (e *BlockError) Error() string { return fmt.Sprintf("solvers: block %d: %v", e.Block, e.Err) }

func (e *BlockError) Unwrap() error { return e.Err }

// NewNetwork makes a network of the given number of nodes, each with width
// components. Node i has the components i*width ... i*width+width-1.
func NewNetwork(nodes, width int) *Network {
	n := &Network{width: width, nodes: nodes * width}
	n.nodeSc = make([]float64, n.nodes)
	for i := range n.nodeSc {
		n.nodeSc[i] = 1
	}
	return n
}

// Add adds a block whose port component i is tied to node component at[i].
// scale holds the positive scale of each own unknown (nil: 1 each) and
// absolute marks those measured absolutely (nil: none). It returns the
// block's index.
func (n *Network) Add(b Block, at []int, scale []float64, absolute []bool) (int, error) {
	ports, own := b.Dims()
	var errs []error
	if len(at) != ports {
		errs = append(errs, fmt.Errorf("solvers: block has %d port components, %d are tied", ports, len(at)))
	}
	for _, c := range at {
		if c < 0 || c >= n.nodes {
			errs = append(errs, fmt.Errorf("solvers: node component %d lies outside 0..%d", c, n.nodes-1))
		}
	}
	if scale == nil {
		scale = make([]float64, own)
		for i := range scale {
			scale[i] = 1
		}
	}
	if absolute == nil {
		absolute = make([]bool, own)
	}
	if len(scale) != own || len(absolute) != own {
		errs = append(errs, fmt.Errorf("solvers: block has %d own unknowns, %d scales and %d marks given", own, len(scale), len(absolute)))
	}
	for i, s := range scale {
		if !(s > 0) || math.IsInf(s, 0) {
			errs = append(errs, fmt.Errorf("solvers: scale of own unknown %d is %g, want a positive value", i, s))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return -1, err
	}
	nb := netBlock{b: b, ports: ports, own: own, lo: n.nOwn, at: append([]int(nil), at...), scale: scale, abs: absolute}
	nb.diff, _ = b.(Differentiable)
	nb.fill, _ = b.(JacobianFiller)
	nb.timed, _ = b.(TimeDependent)
	n.blocks = append(n.blocks, nb)
	n.nOwn += own
	n.ready = false
	return len(n.blocks) - 1, nil
}

// SetNodeScale sets the scale of the components of node i.
func (n *Network) SetNodeScale(i int, s float64) {
	for c := range n.width {
		n.nodeSc[i*n.width+c] = s
	}
	n.ready = false
}

// Own returns the range lo <= i < hi of the own unknowns of block k.
func (n *Network) Own(k int) (lo, hi int) {
	b := &n.blocks[k]
	return b.lo, b.lo + b.own
}

// NodeUnknown returns the index of the unknown of a node component.
func (n *Network) NodeUnknown(component int) int { return n.nOwn + component }

// Ports writes the values at the ports of block k in state y into v.
func (n *Network) Ports(k int, v, y []float64) {
	for i, c := range n.blocks[k].at {
		v[i] = y[n.nOwn+c]
	}
}

// PortUnknown returns the index of the unknown at the first port of block k, if
// those at its other ports follow it in order; -1 else.
func (n *Network) PortUnknown(k int) int {
	at := n.blocks[k].at
	for i, c := range at {
		if c != at[0]+i {
			return -1
		}
	}
	if len(at) == 0 {
		return -1
	}
	return n.nOwn + at[0]
}

// Configuration says how the parts of a network are connected at present.
type Configuration struct {
	// Off marks blocks that take no part: no flow, own unknowns kept.
	Off []bool
	// Dead marks nodes whose components are held at zero.
	Dead []bool
	// Hidden replaces node equations that hold differential unknowns alone.
	Hidden []Combination
	// General asks for a general sparse LU of the whole matrix instead of
	// static condensation.
	General bool
}

// Combination replaces the equation of node component Row by a sum of
// weighted node equations, among them Row's own. The sum must hold only flows
// that are linear in differential unknowns, with constant coefficients; see
// System.Hidden.
type Combination struct {
	Row   int
	Terms []Term
}

// Term is a node component with a weight.
type Term struct {
	Component int
	Weight    float64
	// Skip lists blocks whose flows cancel in the sum, and are left out.
	Skip []int
}

// Configure takes the present connections of the blocks and analyses the
// system again: masses and patterns of the blocks are read anew. The steppers
// of the network must be Reset afterwards.
func (n *Network) Configure(c Configuration) error {
	n.n = n.nOwn + n.nodes
	if c.Off != nil && len(c.Off) != len(n.blocks) {
		return fmt.Errorf("solvers: Off has %d entries, want %d", len(c.Off), len(n.blocks))
	}
	if c.Dead != nil && len(c.Dead) != n.nodes/n.width {
		return fmt.Errorf("solvers: Dead has %d entries, want %d", len(c.Dead), n.nodes/n.width)
	}
	n.general = c.General
	n.hidden = n.hidden[:0]
	n.isHidden = make([]bool, n.nodes)
	n.fixed = make([]bool, n.nodes)
	n.mass = make([]float64, n.n)
	n.scale, n.relative = make([]float64, n.n), make([]float64, n.n)
	for k := range n.blocks {
		b := &n.blocks[k]
		copy(n.scale[b.lo:], b.scale)
		for i, a := range b.abs {
			if !a {
				n.relative[b.lo+i] = 1
			}
		}
	}
	copy(n.scale[n.nOwn:], n.nodeSc)
	for i := n.nOwn; i < n.n; i++ {
		n.relative[i] = 1
	}
	n.nodeMass = n.mass[n.nOwn:]
	for i, d := range c.Dead {
		if d {
			for k := range n.width {
				n.fixed[i*n.width+k] = true
			}
		}
	}
	// Rows of the hidden combinations, by component and block.
	type extra struct {
		row    int
		weight float64
		skip   []int
	}
	extras := make(map[int][]extra)
	for _, h := range c.Hidden {
		if h.Row < 0 || h.Row >= n.nodes {
			return fmt.Errorf("solvers: hidden row %d lies outside 0..%d", h.Row, n.nodes-1)
		}
		n.isHidden[h.Row] = true
		n.hidden = append(n.hidden, n.nOwn+h.Row)
		for _, t := range h.Terms {
			if t.Component < 0 || t.Component >= n.nodes {
				return fmt.Errorf("solvers: component %d of a hidden row lies outside 0..%d", t.Component, n.nodes-1)
			}
			extras[t.Component] = append(extras[t.Component], extra{h.Row, t.Weight, t.Skip})
		}
	}
	n.active, n.evals = n.active[:0], n.evals[:0]
	n.frozen = n.frozen[:0]
	n.matrix = BorderedMatrix{Border: n.nodes, BorderMass: n.nodeMass, BorderFixed: n.fixed, Paired: n.width == 2}
	n.algRow = make([]bool, n.n)
	type shared struct {
		jac  []float64
		from []int32
	}
	dense := make(map[string]shared)
	widest, widestPorts := 0, 0
	portMass := make([]float64, 0, 16)
	for k := range n.blocks {
		b := &n.blocks[k]
		b.off = c.Off != nil && c.Off[k]
		widest = max(widest, b.ports+b.own)
		widestPorts = max(widestPorts, b.ports)
		if b.off {
			for i := range b.own {
				n.frozen = append(n.frozen, b.lo+i)
			}
			// The block's unknowns keep their place with M = 1, f = 0.
			nb := BorderedBlock{Own: b.own, Mass: n.mass[b.lo:][:b.own]}
			for i := range b.own {
				nb.Mass[i] = 1
				nb.Pattern = append(nb.Pattern, Entry{i, i})
			}
			nb.Values = make([]float64, b.own)
			b.mat = len(n.matrix.Blocks)
			n.matrix.Blocks = append(n.matrix.Blocks, nb)
			continue
		}
		n.active = append(n.active, k)
		nb := BorderedBlock{Ports: b.ports, Own: b.own, At: b.at, Mass: n.mass[b.lo:][:b.own]}
		portMass = portMass[:0]
		for range b.ports {
			portMass = append(portMass, 0)
		}
		b.b.Mass(portMass, nb.Mass)
		for i, m := range nb.Mass {
			n.algRow[b.lo+i] = m == 0
		}
		b.rows = b.rows[:0]
		for i, comp := range b.at {
			if n.fixed[comp] {
				return fmt.Errorf("solvers: block %d is on at a dead node", k)
			}
			if !n.isHidden[comp] {
				b.rows = append(b.rows, PortRow{i, comp, 1})
				n.nodeMass[comp] += portMass[i]
			}
			for _, x := range extras[comp] {
				skip := false
				for _, s := range x.skip {
					skip = skip || s == k
				}
				if skip {
					continue
				}
				b.rows = append(b.rows, PortRow{i, x.row, x.weight})
				if portMass[i] != 0 {
					return fmt.Errorf("solvers: block %d has mass at a port in a hidden row", k)
				}
			}
		}
		nb.Rows = b.rows
		w := b.ports + b.own
		if b.diff != nil {
			nb.Pattern = append(nb.Pattern, b.diff.Pattern()...)
		} else {
			for i := range w {
				for j := range w {
					nb.Pattern = append(nb.Pattern, Entry{i, j})
				}
			}
		}
		b.nDense = len(nb.Pattern)
		have := make([]bool, b.own)
		for _, e := range nb.Pattern {
			if e.Row < 0 || e.Col < 0 || e.Row >= w || e.Col >= w {
				return fmt.Errorf("solvers: block %d: pattern entry (%d, %d) lies outside %d x %d", k, e.Row, e.Col, w, w)
			}
			if e.Row == e.Col && e.Row >= b.ports {
				have[e.Row-b.ports] = true
			}
		}
		key := patternKey(b.ports, b.own, nb.Pattern)
		for i, ok := range have {
			if !ok {
				nb.Pattern = append(nb.Pattern, Entry{b.ports + i, b.ports + i})
			}
		}
		nb.Values = make([]float64, len(nb.Pattern))
		sh, ok := dense[key]
		if !ok {
			sh.jac = make([]float64, w*w)
			for _, e := range nb.Pattern[:b.nDense] {
				sh.from = append(sh.from, int32(e.Row*w+e.Col))
			}
			dense[key] = sh
		}
		b.jac, b.from = sh.jac, sh.from
		b.nPort = 0
		for i, e := range nb.Pattern[:b.nDense] {
			switch {
			case e.Row >= b.ports || b.nPort < 0:
			case b.nPort == i:
				b.nPort++
			default:
				b.nPort = -1
			}
		}
		b.mat = len(n.matrix.Blocks)
		n.matrix.Blocks = append(n.matrix.Blocks, nb)
		ev := evaluation{b: b.b, block: int32(k), lo: int32(b.lo), own: int32(b.own), ports: int32(b.ports), node: -1}
		if b.ports == 2 && b.at[1] == b.at[0]+1 && len(b.rows) == 2 &&
			b.rows[0] == (PortRow{0, b.at[0], 1}) && b.rows[1] == (PortRow{1, b.at[1], 1}) {
			ev.node = int32(b.at[0])
		}
		n.evals = append(n.evals, ev)
	}
	for i := range n.nodes {
		n.algRow[n.nOwn+i] = n.nodeMass[i] == 0
	}
	for i := range n.work {
		n.work[i] = make([]float64, n.n)
	}
	n.flow = make([]float64, widestPorts)
	n.v = make([]float64, widestPorts)
	for i := range n.local {
		n.local[i] = make([]float64, widest)
	}
	n.lu = nil // made with the first values
	n.ready = true
	return nil
}

// Reanalyse forgets the pivots chosen so far; the next factorisation chooses
// anew. Worth a call after factorisations with a very different alpha (an
// operating point's zero), whose pivots may be poor ones for stepping.
func (n *Network) Reanalyse() { n.lu = nil }

// Dim implements [System].
func (n *Network) Dim() int { return n.nOwn + n.nodes }

// Hidden implements [System].
func (n *Network) Hidden() []int { return n.hidden }

// AlgebraicRow implements [System].
func (n *Network) AlgebraicRow(i int) bool { return n.algRow[i] }

func (n *Network) check() {
	if !n.ready {
		panic("solvers: Network used before Configure")
	}
}

// Eval implements [System].
func (n *Network) Eval(dst []float64, t float64, y []float64) error {
	n.check()
	node := y[n.nOwn:n.n]
	out := dst[n.nOwn:n.n]
	for i := range out {
		out[i] = 0
	}
	for _, i := range n.frozen {
		dst[i] = 0
	}
	for i := range n.evals {
		e := &n.evals[i]
		lo, hi := e.lo, e.lo+e.own
		if c := e.node; c >= 0 {
			flow := n.flow[:2]
			if err := e.b.Eval(flow, dst[lo:hi:hi], t, node[c:c+2:c+2], y[lo:hi:hi]); err != nil {
				return &BlockError{int(e.block), err}
			}
			out[c] -= flow[0]
			out[c+1] -= flow[1]
			continue
		}
		b := &n.blocks[e.block]
		v, flow := n.v[:b.ports], n.flow[:b.ports]
		for i, c := range b.at {
			v[i] = node[c]
		}
		if err := e.b.Eval(flow, dst[lo:hi:hi], t, v, y[lo:hi:hi]); err != nil {
			return &BlockError{int(e.block), err}
		}
		for _, r := range b.rows {
			out[r.Row] -= r.Weight * flow[r.Port]
		}
	}
	for i, f := range n.fixed {
		if f {
			out[i] = -node[i]
		}
	}
	return nil
}

// TimeDerivative implements [System].
func (n *Network) TimeDerivative(dst []float64, t, h float64, y, f0 []float64) (bool, error) {
	n.check()
	node := y[n.nOwn:n.n]
	for i := range dst {
		dst[i] = 0
	}
	any := false
	for _, k := range n.active {
		b := &n.blocks[k]
		v, flow := n.v[:b.ports], n.flow[:b.ports]
		for i, c := range b.at {
			v[i] = node[c]
		}
		own := y[b.lo : b.lo+b.own]
		rate := dst[b.lo : b.lo+b.own]
		if b.timed != nil {
			for i := range flow {
				flow[i] = 0
			}
			if !b.timed.TimeDerivative(flow, rate, t, v, own) {
				continue
			}
		} else if err := n.differenceTime(b, flow, rate, t, h, v, own); err != nil {
			return true, &BlockError{k, err}
		}
		any = true
		for _, r := range b.rows {
			dst[n.nOwn+r.Row] -= r.Weight * flow[r.Port]
		}
	}
	return any, nil
}

// differenceTime differences a block's flow and rate in time, one-sided.
func (n *Network) differenceTime(b *netBlock, flow, rate []float64, t, h float64, v, x []float64) error {
	d := timeIncrement(t, h)
	var f, r [3][]float64
	for i := range f {
		f[i], r[i] = n.local[i][:b.ports], n.local[3+i][:b.own]
		if err := b.b.Eval(f[i], r[i], t+float64(i)*d, v, x); err != nil {
			return err
		}
	}
	for i := range flow {
		flow[i] = (4*f[1][i] - 3*f[0][i] - f[2][i]) / (2 * d)
	}
	for i := range rate {
		rate[i] = (4*r[1][i] - 3*r[0][i] - r[2][i]) / (2 * d)
	}
	return nil
}

// Linearise implements [System].
func (n *Network) Linearise(t float64, y []float64) error {
	n.check()
	node := y[n.nOwn:n.n]
	for _, k := range n.active {
		b := &n.blocks[k]
		v := n.v[:b.ports]
		for i, c := range b.at {
			v[i] = node[c]
		}
		own := y[b.lo : b.lo+b.own]
		// Values of W = alpha M - J: own rows with the minus sign; the node
		// equations hold minus the flows, so port rows with plus.
		m := &n.matrix.Blocks[b.mat]
		values := m.Values[:b.nDense]
		switch {
		case b.fill != nil:
			b.fill.FillJacobian(b.jac, t, v, own)
		case b.diff != nil:
			b.diff.Jacobian(b.jac, t, v, own)
		default:
			if err := n.difference(b, t, v, own); err != nil {
				return &BlockError{k, err}
			}
		}
		jac := b.jac
		if b.nPort >= 0 {
			for i, k := range b.from[:b.nPort] {
				values[i] = jac[k]
			}
			rest := values[b.nPort:]
			for i, k := range b.from[b.nPort:] {
				rest[i] = -jac[k]
			}
		} else {
			for i, k := range b.from {
				values[i] = jac[k]
				if m.Pattern[i].Row >= b.ports {
					values[i] = -values[i]
				}
			}
		}
		for i := b.nDense; i < len(m.Values); i++ {
			m.Values[i] = 0
		}
	}
	return nil
}

// difference fills b.jac by central differences of the block alone.
func (n *Network) difference(b *netBlock, t float64, v, x []float64) error {
	w := b.ports + b.own
	vv, xx := n.local[0][:b.ports], n.local[1][:b.own]
	fp, fm := n.local[2][:b.ports], n.local[3][:b.ports]
	rp, rm := n.local[4][:b.own], n.local[5][:b.own]
	copy(vv, v)
	copy(xx, x)
	for j := range w {
		var p *float64
		var scale float64
		if j < b.ports {
			p, scale = &vv[j], n.nodeSc[b.at[j]]
		} else {
			p, scale = &xx[j-b.ports], b.scale[j-b.ports]
		}
		at := *p
		d := cbrtEps * math.Max(math.Abs(at), scale)
		*p = at + d
		hi := *p
		if err := b.b.Eval(fp, rp, t, vv, xx); err != nil {
			return err
		}
		*p = at - d
		span := hi - *p
		if err := b.b.Eval(fm, rm, t, vv, xx); err != nil {
			return err
		}
		*p = at
		for i := range fp {
			b.jac[i*w+j] = (fp[i] - fm[i]) / span
		}
		for i := range rp {
			b.jac[(b.ports+i)*w+j] = (rp[i] - rm[i]) / span
		}
	}
	return nil
}

// Factor implements [System].
func (n *Network) Factor(alpha float64) error {
	n.matrix.Shift = alpha
	n.alpha = alpha
	if n.lu == nil {
		lu, err := NewBorderedLU(&n.matrix)
		if err != nil {
			return err
		}
		n.lu = lu
	}
	if n.general {
		return n.lu.factorGeneral()
	}
	return n.lu.Factor()
}

// Solve implements [System].
func (n *Network) Solve(b []float64) { n.lu.Solve(b) }

// Condition estimates the condition number of the matrix factored last.
func (n *Network) Condition() float64 { return n.lu.Condition() }

// LinearStats counts what the linear solver did since Configure.
func (n *Network) LinearStats() BorderedStats {
	if n.lu == nil {
		return BorderedStats{}
	}
	return n.lu.Stats()
}

// AddMass implements [System].
func (n *Network) AddMass(dst []float64, c float64, x []float64) {
	mass, x := n.mass[:len(dst)], x[:len(dst)]
	for i, m := range mass {
		dst[i] += c * m * x[i]
	}
}

// MassDiagonal implements [DiagonalMass].
func (n *Network) MassDiagonal(dst []float64) { copy(dst, n.mass) }

// Pin adds a spring of the given stiffness to an own unknown in the Jacobian
// kept last: d rate/d x is lowered by it. It makes a Jacobian regular whose
// null space the unknown takes part in; Linearise removes it.
func (n *Network) Pin(unknown int, stiffness float64) {
	for k := range n.blocks {
		b := &n.blocks[k]
		if unknown < b.lo || unknown >= b.lo+b.own {
			continue
		}
		m := &n.matrix.Blocks[b.mat]
		at := b.ports + unknown - b.lo
		for i, e := range m.Pattern {
			if e.Row == at && e.Col == at {
				m.Values[i] += stiffness
				return
			}
		}
	}
	panic("solvers: Pin of an unknown that is no block's own")
}

// Norm implements [System]: blocks are the groups, and each node.
func (n *Network) Norm(e, y0, y1 []float64, tol Tolerance) (norm float64, worst int) {
	lo, hi := -1, -1 // the worst group
	group := func(i, j int) {
		s := groupNorm(e[i:j], y0[i:j], y1[i:j], n.scale[i:j], n.relative[i:j], tol)
		if !(s <= norm) || lo < 0 {
			norm, lo, hi = s, i, j
		}
	}
	for i := range n.evals {
		if v := &n.evals[i]; v.own > 0 {
			group(int(v.lo), int(v.lo+v.own))
		}
		if norm != norm {
			break
		}
	}
	for i := 0; i < n.nodes && norm == norm; i += n.width {
		if !n.fixed[i] {
			group(n.nOwn+i, n.nOwn+i+n.width)
		}
	}
	if lo < 0 {
		return 0, -1
	}
	return norm, lo + worstEntry(e[lo:hi], y0[lo:hi], y1[lo:hi], n.scale[lo:hi], n.relative[lo:hi], tol)
}

// fastRate implements algebraic.
func (n *Network) fastRate() float64 {
	rate := 1.0
	for _, k := range n.active {
		m := &n.matrix.Blocks[n.blocks[k].mat]
		for i, e := range m.Pattern {
			if e.Row >= m.Ports {
				if mass := m.Mass[e.Row-m.Ports]; mass != 0 && e.Col >= m.Ports {
					rate = math.Max(rate, math.Abs(m.Values[i])/mass*n.ratio(k, e.Col-m.Ports, e.Row-m.Ports))
				}
			}
		}
	}
	return 1e10 * rate
}

// ratio is the scale of own unknown j over that of i, block k.
func (n *Network) ratio(k, j, i int) float64 { return n.blocks[k].scale[j] / n.blocks[k].scale[i] }

// algebraicResidual implements algebraic.
func (n *Network) algebraicResidual(dst []float64, t float64, y []float64, alpha float64) error {
	if err := n.Eval(dst, t, y); err != nil {
		return err
	}
	for _, h := range n.hidden {
		dst[h] = 0
	}
	// d/dt of a hidden sum of flows, flow = F x: minus sum of F (rate/mass).
	for _, k := range n.active {
		b := &n.blocks[k]
		touches := false
		for _, r := range b.rows {
			touches = touches || n.isHidden[r.Row]
		}
		if !touches {
			continue
		}
		m := &n.matrix.Blocks[b.mat]
		for i, e := range m.Pattern {
			if e.Row >= b.ports || e.Col < b.ports || m.Values[i] == 0 {
				continue
			}
			j := e.Col - b.ports
			if m.Mass[j] == 0 {
				continue
			}
			for _, r := range b.rows {
				if r.Port == e.Row && n.isHidden[r.Row] {
					dst[n.nOwn+r.Row] -= r.Weight * m.Values[i] * dst[b.lo+j] / m.Mass[j] / alpha
				}
			}
		}
	}
	for _, k := range n.active {
		b := &n.blocks[k]
		for i, m := range n.matrix.Blocks[b.mat].Mass {
			if m != 0 {
				dst[b.lo+i] = 0
			}
		}
	}
	for i, m := range n.nodeMass {
		if m != 0 {
			dst[n.nOwn+i] = 0
		}
	}
	return nil
}

// keepAlgebraic implements algebraic.
func (n *Network) keepAlgebraic(d []float64) {
	for k := range n.blocks {
		b := &n.blocks[k]
		for i, m := range n.matrix.Blocks[b.mat].Mass {
			if m != 0 {
				d[b.lo+i] = 0
			}
		}
	}
	for i, m := range n.nodeMass {
		if m != 0 {
			d[n.nOwn+i] = 0
		}
	}
}

// Initialise implements [System]. With project, differential unknowns are
// first moved as far as the hidden equations demand, by an impulse at the
// nodes concerned: each unknown moves by what the impulse gives it through its
// own equation, divided by its mass (for currents of inductors: flux linkage
// around every loop is kept).
func (n *Network) Initialise(t float64, y []float64, project bool) error {
	n.check()
	if project && len(n.hidden) > 0 {
		if err := n.project(t, y); err != nil {
			return err
		}
	}
	return initialise(n, t, y, n.work[:])
}

func (n *Network) project(t float64, y []float64) error {
	fail := func(err error) error {
		i := -1
		var s *SingularError
		if errors.As(err, &s) {
			i = s.Column
		}
		return &InconsistentError{Time: t, Index: i, Size: math.NaN(), Err: err}
	}
	d := n.work[0]
	for range 3 { // linear: the second pass removes what rounding left
		if err := n.Eval(d, t, y); err != nil {
			return fail(err)
		}
		if err := n.Linearise(t, y); err != nil {
			return fail(err)
		}
		if err := n.Factor(n.fastRate()); err != nil {
			return fail(err)
		}
		for i := range d {
			if i < n.nOwn || !n.isHidden[i-n.nOwn] {
				d[i] = 0
			}
		}
		n.Solve(d)
		for _, k := range n.active {
			b := &n.blocks[k]
			for i, m := range n.matrix.Blocks[b.mat].Mass {
				if m != 0 {
					y[b.lo+i] += d[b.lo+i]
				}
			}
		}
	}
	return nil
}
