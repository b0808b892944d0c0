package screen

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Options steer [Screen]. nil, or the zero value, gives the stated defaults.
type Options struct {
	// Precision is that of the margins, relative; 0 means 1e-7.
	Precision float64
}

// Source is what the screen says of a source.
type Source struct {
	Node
	Given float64 // W, in step
	// Tracked tells that it gives its P*.
	Tracked bool
}

// Flow is what an edge carries in step.
type Flow struct {
	Edge
	P      float64 // W, from From to To
	Linear float64 // W, what the linear network would carry, A (B' L^+ p)
	Angle  float64 // theta_from - theta_to, rad
}

// Result is the screen of one island.
type Result struct {
	// Speed is the speed of all in step, rad/s, in closed form:
	// (sum D w* + sum P* - sum share) / sum D over all nodes.
	Speed   float64
	Sources []Source
	// Tracked tells that every source gives its P*, one that holds its speed left
	// out; NotTracked says why not.
	Tracked    bool
	NotTracked string
	// Proportional tells that sources share what moves in proportion to rating:
	// D over rating is one value, one that holds its speed left out. It needs all
	// ratings.
	Proportional bool

	Tree bool // the network has no loop
	// Loading is what decides: of a tree the largest |flow|/A, exactly; with
	// loops the norm |B' L^+ p| over edges, which below 1 is sufficient for
	// many kinds of network and a good estimate for others.
	Loading float64
	// Critical is the edge of that value, and Capacity its A, W.
	Critical string
	Capacity float64
	// Certified is the bound on angles that the norm promises, asin(Loading),
	// rad; NaN if Loading is 1 or more.
	Certified float64

	// InStep tells that there is a state in which all turn alike, stable and with
	// less than 90 degrees across every edge.
	InStep bool
	// Flows and Widest hold that state: flows, and the largest angle across an
	// edge, rad.
	Flows  []Flow
	Widest float64
	// Margin90 is the factor on all transfers at which some edge has 90 degrees
	// across it, and MarginLost that at which no stable state is left; of a tree
	// they are the same. +Inf if nothing is transferred, NaN if not InStep.
	Margin90, MarginLost float64
	// Modes are the eigenvalues of the phases about that state, 1/s, real and
	// negative, slowest first; that of all phases together, 0, is left out.
	Modes []float64
}

// Screen analyses a connected network. The error joins all faults of the network,
// or says that nothing in it sets a frequency.
func Screen(n *Network, o *Options) (*Result, error) {
	precision := 1e-7
	if o != nil && o.Precision != 0 {
		precision = o.Precision
	}
	if !(precision > 1e-14 && precision < 0.1) {
		return nil, fmt.Errorf("screen: precision %g, want 1e-14 to 0.1", precision)
	}
	if err := n.check(); err != nil {
		return nil, err
	}
	if len(n.Islands()) != 1 {
		return nil, fmt.Errorf("screen: %d parts that nothing joins, want one", len(n.Islands()))
	}
	r := &Result{MarginLost: math.NaN(), Margin90: math.NaN(), Certified: math.NaN()}
	p, err := r.balance(n)
	if err != nil {
		return nil, err
	}
	edges := n.merged()
	r.Tree = len(edges) == len(n.Nodes)-1
	w := &wheel{n: len(n.Nodes), edges: edges}
	flows, err := w.linear(p)
	if err != nil {
		return nil, err
	}
	for k, e := range edges {
		if x := math.Abs(flows[k]) / e.A; x > r.Loading || r.Critical == "" {
			r.Loading, r.Critical, r.Capacity = x, e.Name, e.A
		}
	}
	if r.Loading < 1 {
		r.Certified = math.Asin(r.Loading)
	}
	theta := make([]float64, len(n.Nodes))
	if r.Loading < 1e-12 {
		r.InStep, r.Margin90, r.MarginLost = true, math.Inf(1), math.Inf(1)
	} else {
		s := w.strip(p)
		r.margins(s, precision)
		r.InStep = r.Margin90 > 1
		if r.InStep {
			if theta, err = s.reach(); err != nil {
				return nil, err
			}
		}
	}
	if !r.InStep {
		return r, nil
	}
	for k, e := range edges {
		d := theta[e.From] - theta[e.To]
		r.Flows = append(r.Flows, Flow{Edge: e, P: e.A * math.Sin(d), Linear: flows[k], Angle: d})
		r.Widest = math.Max(r.Widest, math.Abs(d))
	}
	r.Modes, err = modes(n, w.edges, theta)
	return r, err
}

// modes are the eigenvalues of D theta' = -L theta with L = B diag(a cos(angle)) B':
// nodes without damping are eliminated, one that holds its speed stands still.
func modes(n *Network, edges []Edge, theta []float64) ([]float64, error) {
	var moving, following []int
	at := make([]int, len(n.Nodes))
	for i := range n.Nodes {
		switch d := n.Nodes[i].D; {
		case math.IsInf(d, 1):
			at[i] = -1
		case d > 0:
			at[i] = len(moving)
			moving = append(moving, i)
		default:
			following = append(following, i)
		}
	}
	m := len(moving)
	for k, i := range following {
		at[i] = m + k
	}
	total := m + len(following)
	if m == 0 {
		return nil, nil
	}
	l := mat.NewSymDense(total, nil)
	add := func(i, j int, x float64) {
		if i >= 0 && j >= 0 {
			l.SetSym(i, j, l.At(i, j)+x)
		}
	}
	for _, e := range edges {
		a := e.A * math.Cos(theta[e.From]-theta[e.To])
		i, j := at[e.From], at[e.To]
		add(i, i, a)
		add(j, j, a)
		add(i, j, -a)
	}
	// L_mm - L_mf L_ff^-1 L_fm, then scaled by D^-1/2 from both sides.
	s := mat.NewSymDense(m, nil)
	s.CopySym(l.SliceSym(0, m))
	if f := len(following); f > 0 {
		ff := l.SliceSym(m, total)
		fm := mat.NewDense(f, m, nil)
		for i := range f {
			for j := range m {
				fm.Set(i, j, l.At(m+i, j))
			}
		}
		var c mat.Cholesky
		if !c.Factorize(ff) {
			return nil, errors.New("screen: the network's matrix at nodes without damping isn't positive definite")
		}
		var x, y mat.Dense
		if err := c.SolveTo(&x, fm); err != nil {
			var ill mat.Condition
			if !errors.As(err, &ill) {
				return nil, fmt.Errorf("screen: %w", err)
			}
		}
		y.Mul(fm.T(), &x)
		for i := range m {
			for j := i; j < m; j++ {
				s.SetSym(i, j, s.At(i, j)-(y.At(i, j)+y.At(j, i))/2)
			}
		}
	}
	for i := range m {
		for j := i; j < m; j++ {
			s.SetSym(i, j, s.At(i, j)/math.Sqrt(n.Nodes[moving[i]].D*n.Nodes[moving[j]].D))
		}
	}
	var e mat.EigenSym
	if !e.Factorize(s, false) {
		return nil, errors.New("screen: the eigenvalues of the phases can't be found")
	}
	values := e.Values(nil) // ascending
	if m+len(following) == len(n.Nodes) {
		values = values[1:] // nothing holds the angle: all together
	}
	out := make([]float64, len(values))
	for k, v := range values {
		out[k] = -v
	}
	return out, nil
}

// Settle finds the state in step next to the given angles, rad, one for each node, by
// Newton's method: a loop of five branches or more can have several that differ by
// power that circulates. It returns the angles, the first node's 0, and the largest
// across an edge, wound to within pi. The error tells that there is none, or that it
// isn't stable. [Winding] tells them apart.
func Settle(n *Network, theta []float64) (angles []float64, widest float64, err error) {
	if len(theta) != len(n.Nodes) {
		return nil, 0, fmt.Errorf("screen: %d angles for %d nodes", len(theta), len(n.Nodes))
	}
	if err := n.check(); err != nil {
		return nil, 0, err
	}
	if len(n.Islands()) != 1 {
		return nil, 0, fmt.Errorf("screen: %d parts that nothing joins, want one", len(n.Islands()))
	}
	p, err := new(Result).balance(n)
	if err != nil {
		return nil, 0, err
	}
	w := &wheel{n: len(n.Nodes), edges: n.merged()}
	from := make([]float64, len(theta))
	for i := range from {
		from[i] = theta[i] - theta[0]
	}
	angles, ok := w.newton(p, 1, from)
	if !ok {
		return nil, 0, errors.New("screen: no stable state in step next to these angles")
	}
	for _, e := range w.edges {
		widest = math.Max(widest, math.Abs(math.Remainder(angles[e.From]-angles[e.To], 2*math.Pi)))
	}
	return angles, widest, nil
}

// Winding counts how often angles turn round along a loop of nodes: the sum of the
// differences, each wound to within pi, over 2 pi.
//
// Source: R. Delabays, T. Coletta, P. Jacquod, "Multistability of phase-locking and
// topological winding numbers in locally coupled Kuramoto models on single-loop
// networks", J. Math. Phys. 57, 032701, 2016.
func Winding(theta []float64, loop []int) int {
	sum := 0.0
	for k, i := range loop {
		sum += math.Remainder(theta[loop[(k+1)%len(loop)]]-theta[i], 2*math.Pi)
	}
	return int(math.Round(sum / (2 * math.Pi)))
}

// balance finds the speed in step and what every source gives, and returns what
// every node feeds into the network.
func (r *Result) balance(n *Network) ([]float64, error) {
	var sumD, sumP, moment float64
	stiff := -1
	for i := range n.Nodes {
		v := &n.Nodes[i]
		switch {
		case math.IsInf(v.D, 1):
			if stiff >= 0 && v.Speed != n.Nodes[stiff].Speed {
				return nil, fmt.Errorf("screen: %s and %s hold different speeds, %.9g and %.9g rad/s: they can't be in step",
					n.Nodes[stiff].Name, v.Name, n.Nodes[stiff].Speed, v.Speed)
			}
			if stiff >= 0 {
				return nil, fmt.Errorf("screen: %s and %s both hold the speed: what each gives isn't determined", n.Nodes[stiff].Name, v.Name)
			}
			stiff = i
		default:
			sumD += v.D
			sumP += v.P - v.Share
			moment += v.D * v.Speed
		}
	}
	switch {
	case stiff >= 0:
		r.Speed = n.Nodes[stiff].Speed
	case sumD > 0:
		r.Speed = (moment + sumP) / sumD
	default:
		return nil, errors.New("screen: no source sets a frequency")
	}
	p := make([]float64, len(n.Nodes))
	total := 0.0 // but for what one that holds its speed exchanges
	r.Tracked, r.Proportional = true, true
	share := math.NaN()
	largest, sum := 0.0, 0.0
	for i := range n.Nodes {
		v := &n.Nodes[i]
		if i == stiff {
			continue
		}
		p[i] = v.P - v.Share
		if v.D > 0 {
			p[i] += v.D * (v.Speed - r.Speed)
		}
		total += p[i]
		largest = math.Max(largest, math.Abs(p[i]))
	}
	if stiff >= 0 {
		p[stiff] = -total
		largest = math.Max(largest, math.Abs(total))
	} else {
		// Rounding of the closed form, taken off the largest.
		sum = total
		at := 0
		for i := range p {
			if math.Abs(p[i]) > math.Abs(p[at]) {
				at = i
			}
		}
		p[at] -= sum
	}
	unequal := false
	var first *Node
	for i := range n.Nodes {
		v := &n.Nodes[i]
		if v.D == 0 {
			continue
		}
		s := Source{Node: *v, Given: p[i] + v.Share}
		if i == stiff {
			// It has no reference to track, and no share.
			s.Tracked = true
			r.Sources = append(r.Sources, s)
			continue
		}
		size := v.Rating
		if size == 0 {
			size = math.Max(largest, math.Abs(v.P))
		}
		s.Tracked = math.Abs(s.Given-v.P) <= 1e-6*size
		r.Tracked = r.Tracked && s.Tracked
		r.Sources = append(r.Sources, s)
		if first == nil {
			first = v
		}
		unequal = unequal || math.Abs(v.Speed-first.Speed) > 1e-9*math.Abs(first.Speed)
		if v.Rating == 0 {
			r.Proportional = false
			continue
		}
		if share != share {
			share = v.D / v.Rating
		}
		r.Proportional = r.Proportional && math.Abs(v.D/v.Rating-share) <= 1e-6*share
	}
	if !r.Tracked {
		balance := 0.0
		for i := range n.Nodes {
			balance += n.Nodes[i].P - n.Nodes[i].Share
		}
		switch {
		case unequal:
			r.NotTracked = "the sources' nominal speeds differ"
		case stiff >= 0:
			r.NotTracked = fmt.Sprintf("%s holds another speed than their nominal one", n.Nodes[stiff].Name)
		case balance < 0:
			r.NotTracked = fmt.Sprintf("the set powers fall short of what is drawn by %.6g W", -balance)
		default:
			r.NotTracked = fmt.Sprintf("the set powers exceed what is drawn by %.6g W", balance)
		}
	}
	return p, nil
}

// margins finds the factors on p at which some edge has 90 degrees, and at which
// no stable state is left: of branches without a loop exactly, of what has loops by
// continuation from zero.
func (r *Result) margins(s *stripped, precision float64) {
	r.Margin90, r.MarginLost = s.limit, s.limit
	w, p := s.core, s.p
	if w.n < 2 {
		return
	}
	loading := 0.0
	if flows, err := w.linear(p); err == nil {
		for k, e := range w.edges {
			loading = math.Max(loading, math.Abs(flows[k])/e.A)
		}
	}
	if loading < 1e-12 {
		return
	}
	// The norm is no bound in general; go on until the state is lost, or beyond
	// what the rest stands.
	good, theta := 0.0, make([]float64, w.n)
	step := 0.25 / loading
	wide := math.Inf(1)
	for step > precision*math.Max(good, 1e-3/loading) && good < s.limit {
		next, ok := w.newton(p, good+step, theta)
		if !ok {
			step /= 2
			continue
		}
		if math.IsInf(wide, 1) && w.widest(next) >= math.Pi/2 {
			// Between the two, by bisection from the last state.
			lo, hi, from := good, good+step, theta
			for hi-lo > precision*hi {
				mid := (lo + hi) / 2
				at, ok := w.newton(p, mid, from)
				if ok && w.widest(at) < math.Pi/2 {
					lo, from = mid, at
				} else {
					hi = mid
				}
			}
			wide = lo
		}
		good, theta = good+step, next
	}
	r.MarginLost = math.Min(s.limit, good)
	r.Margin90 = math.Min(wide, r.MarginLost)
}

// stripped is a network whose branches without a loop are taken off, end by end: what
// they carry is known.
type stripped struct {
	full  *wheel
	core  *wheel // what has loops, or a single node
	p     []float64
	node  []int // of the core's nodes
	off   []cut // in the order in which they were taken off
	limit float64
}

// cut is a node taken off with its edge.
type cut struct {
	node, to int
	sine     float64 // of theta_node - theta_to
}

func (w *wheel) strip(p []float64) *stripped {
	s := &stripped{full: w, limit: math.Inf(1)}
	degree := make([]int, w.n)
	touching := make([][]int, w.n)
	for k, e := range w.edges {
		for _, v := range []int{e.From, e.To} {
			degree[v]++
			touching[v] = append(touching[v], k)
		}
	}
	carried := append([]float64(nil), p...)
	gone, used := make([]bool, w.n), make([]bool, len(w.edges))
	var ends []int
	for v, d := range degree {
		if d == 1 {
			ends = append(ends, v)
		}
	}
	for len(ends) > 0 {
		v := ends[len(ends)-1]
		ends = ends[:len(ends)-1]
		if gone[v] || degree[v] != 1 {
			continue // the last node of a tree
		}
		for _, k := range touching[v] {
			if used[k] {
				continue
			}
			e := w.edges[k]
			to := e.From + e.To - v
			used[k], gone[v] = true, true
			degree[v]--
			degree[to]--
			carried[to] += carried[v]
			s.limit = math.Min(s.limit, e.A/math.Abs(carried[v]))
			s.off = append(s.off, cut{v, to, carried[v] / e.A})
			if degree[to] == 1 {
				ends = append(ends, to)
			}
		}
	}
	at := make([]int, w.n)
	for v := range w.n {
		if !gone[v] {
			at[v] = len(s.node)
			s.node = append(s.node, v)
			s.p = append(s.p, carried[v])
		}
	}
	s.core = &wheel{n: len(s.node)}
	for k, e := range w.edges {
		if !used[k] {
			e.From, e.To = at[e.From], at[e.To]
			s.core.edges = append(s.core.edges, e)
		}
	}
	return s
}

// reach returns the state in step at the present transfers.
func (s *stripped) reach() ([]float64, error) {
	theta := make([]float64, s.full.n)
	if s.core.n > 1 {
		core, err := s.core.reach(s.p, 1)
		if err != nil {
			return nil, err
		}
		for i, v := range s.node {
			theta[v] = core[i]
		}
	}
	for i := len(s.off) - 1; i >= 0; i-- {
		c := s.off[i]
		theta[c.node] = theta[c.to] + math.Asin(c.sine)
	}
	first := theta[0]
	for i := range theta {
		theta[i] -= first
	}
	return theta, nil
}

// wheel is a network's equations p = B A sin(B' theta).
type wheel struct {
	n     int
	edges []Edge
}

// laplacian is B diag(a cos(angle)) B' without the row and column of the first
// node.
func (w *wheel) laplacian(theta []float64) *mat.SymDense {
	l := mat.NewSymDense(w.n-1, nil)
	add := func(i, j int, x float64) {
		if i > 0 && j > 0 {
			l.SetSym(i-1, j-1, l.At(i-1, j-1)+x)
		}
	}
	for _, e := range w.edges {
		a := e.A
		if theta != nil {
			a *= math.Cos(theta[e.From] - theta[e.To])
		}
		add(e.From, e.From, a)
		add(e.To, e.To, a)
		add(e.From, e.To, -a)
	}
	return l
}

// linear returns the flows of the linear network, A B' L^+ p.
func (w *wheel) linear(p []float64) ([]float64, error) {
	x := make([]float64, w.n)
	if w.n > 1 {
		var c mat.Cholesky
		if !c.Factorize(w.laplacian(nil)) {
			return nil, errors.New("screen: the network's matrix isn't positive definite")
		}
		var v mat.VecDense
		if err := c.SolveVecTo(&v, mat.NewVecDense(w.n-1, append([]float64(nil), p[1:]...))); err != nil {
			var ill mat.Condition
			if !errors.As(err, &ill) {
				return nil, fmt.Errorf("screen: %w", err)
			}
		}
		copy(x[1:], v.RawVector().Data)
	}
	f := make([]float64, len(w.edges))
	for k, e := range w.edges {
		f[k] = e.A * (x[e.From] - x[e.To])
	}
	return f, nil
}

// newton solves for scale times p from a state, and reports whether it found a
// stable one.
func (w *wheel) newton(p []float64, scale float64, from []float64) ([]float64, bool) {
	theta := append([]float64(nil), from...)
	size := 0.0
	for _, x := range p {
		size = math.Max(size, math.Abs(x))
	}
	if size == 0 {
		for _, e := range w.edges {
			size = math.Max(size, e.A)
		}
	}
	res := make([]float64, w.n)
	for range 30 {
		for i := range res {
			res[i] = scale * p[i]
		}
		for _, e := range w.edges {
			f := e.A * math.Sin(theta[e.From]-theta[e.To])
			res[e.From] -= f
			res[e.To] += f
		}
		worst := 0.0
		for _, x := range res {
			worst = math.Max(worst, math.Abs(x))
		}
		var c mat.Cholesky
		if !c.Factorize(w.laplacian(theta)) {
			return nil, false
		}
		if worst <= 1e-12*size*math.Max(scale, 1) {
			return theta, true
		}
		var v mat.VecDense
		if err := c.SolveVecTo(&v, mat.NewVecDense(w.n-1, append([]float64(nil), res[1:]...))); err != nil {
			var ill mat.Condition
			if !errors.As(err, &ill) {
				return nil, false
			}
		}
		for i, d := range v.RawVector().Data {
			if math.Abs(d) > 1 {
				return nil, false // the branch followed has been left
			}
			theta[i+1] += d
		}
	}
	return nil, false
}

// reach goes to scale in steps.
func (w *wheel) reach(p []float64, scale float64) ([]float64, error) {
	theta := make([]float64, w.n)
	at, step := 0.0, scale
	for at < scale {
		next, ok := w.newton(p, math.Min(scale, at+step), theta)
		if !ok {
			if step /= 2; step < 1e-9*scale {
				return nil, errors.New("screen: the state in step can't be followed to the present transfers")
			}
			continue
		}
		at, theta = math.Min(scale, at+step), next
	}
	return theta, nil
}

func (w *wheel) widest(theta []float64) float64 {
	m := 0.0
	for _, e := range w.edges {
		m = math.Max(m, math.Abs(theta[e.From]-theta[e.To]))
	}
	return m
}
