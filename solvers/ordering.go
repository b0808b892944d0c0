package solvers

import "math"

// orderMinDegree returns an elimination order of n variables that keeps the
// fill of a symmetric factorisation low. adj[i] lists the neighbours of i in
// any order, without i and without repetition; j stands in adj[i] if and only
// if i stands in adj[j]. The lists are overwritten.
//
// Method: approximate minimum degree on the quotient graph, with element
// absorption (aggressive too), mass elimination, merging of indistinguishable
// variables found by hashing, and deferral of nearly dense variables; at the
// end a postorder of the assembly tree, so that columns of like structure
// become neighbours.
//
// Source: P. R. Amestoy, T. A. Davis, I. S. Duff, "An approximate minimum
// degree ordering algorithm", SIAM J. Matrix Anal. Appl. 17 (1996) 886-905.
func orderMinDegree(adj [][]int32) []int32 {
	n := len(adj)
	g := &orderGraph{
		n:      n,
		vars:   adj,
		elems:  make([][]int32, n),
		bound:  make([][]int32, n),
		weight: make([]int32, n),
		degree: make([]int32, n),
		head:   make([]int32, n+1),
		next:   make([]int32, n),
		prev:   make([]int32, n),
		mark:   make([]int, n),
		base:   1,
		parent: make([]int32, n),
		merged: make([]bool, n),
		bucket: make([]int32, n),
		chain:  make([]int32, n),
		hash:   make([]int32, n),
	}
	for d := range g.head {
		g.head[d] = -1
	}
	for i := range n {
		g.weight[i] = 1
		g.parent[i] = -1
		g.bucket[i] = -1
	}

	// Variables with very many neighbours go last at once: their place hardly
	// changes the fill, but every elimination nearby would visit them. The
	// bound 10 sqrt(n), at least 16, is common practice, no source.
	dense := int(max(16, 10*math.Sqrt(float64(n))))
	var last []int32
	for i := range n {
		if len(adj[i]) > dense {
			last = append(last, int32(i))
			g.weight[i] = 0
			g.left++
		}
	}
	for i := range n {
		if g.weight[i] != 0 {
			d := 0
			for _, j := range adj[i] {
				if g.weight[j] != 0 {
					d++
				}
			}
			g.insert(int32(i), int32(d))
		}
	}

	for g.left < n {
		g.eliminate(g.smallest())
	}
	return append(g.postorder(last), last...)
}

// orderGraph is the quotient graph: variables not yet eliminated, and elements
// (cliques of variables) that eliminated ones have left. A variable that was
// merged into another, or an element that was absorbed, hangs below it in the
// tree parent.
type orderGraph struct {
	n      int
	left   int       // variables eliminated or deferred so far
	vars   [][]int32 // len n: neighbours of a variable not covered by an element
	elems  [][]int32 // len n: elements a variable belongs to
	bound  [][]int32 // len n: variables of an element
	weight []int32   // len n: variables a supervariable stands for; 0: none, negative: in the pivot element
	degree []int32   // len n: approximate external degree; of an element its weight

	// Lists of variables by degree, for finding the smallest.
	head, next, prev []int32
	low              int32 // no list below is occupied

	mark []int // len n: of an element, base + weight outside the pivot element
	base int   // smaller marks are stale

	parent []int32 // len n
	merged []bool  // len n: joined its parent as a variable

	// Hash table of the pivot element's variables.
	bucket, chain, hash []int32
}

// insert puts variable i into the list for degree d.
func (g *orderGraph) insert(i, d int32) {
	g.degree[i] = d
	h := g.head[d]
	g.next[i], g.prev[i] = h, -1
	if h >= 0 {
		g.prev[h] = i
	}
	g.head[d] = i
	g.low = min(g.low, d)
}

// remove takes variable i out of its list.
func (g *orderGraph) remove(i int32) {
	if p := g.prev[i]; p >= 0 {
		g.next[p] = g.next[i]
	} else {
		g.head[g.degree[i]] = g.next[i]
	}
	if s := g.next[i]; s >= 0 {
		g.prev[s] = g.prev[i]
	}
}

// smallest returns a variable of least approximate degree.
func (g *orderGraph) smallest() int32 {
	for g.head[g.low] < 0 {
		g.low++
	}
	return g.head[g.low]
}

// eliminate turns variable p into an element and updates its neighbours.
func (g *orderGraph) eliminate(p int32) {
	g.remove(p)
	pivotWeight := g.weight[p]
	g.left += int(pivotWeight)
	g.weight[p] = 0

	// Lp = (vars(p) and the variables of p's elements) without p. Its
	// members get a negative weight.
	lp := make([]int32, 0, g.degree[p])
	size := int32(0) // weight of lp
	take := func(list []int32) {
		for _, i := range list {
			if w := g.weight[i]; w > 0 {
				g.weight[i] = -w
				g.remove(i)
				lp = append(lp, i)
				size += w
			}
		}
	}
	take(g.vars[p])
	for _, e := range g.elems[p] {
		if g.bound[e] != nil {
			take(g.bound[e])
			g.absorb(e, p)
		}
	}
	g.vars[p], g.elems[p] = nil, nil

	// mark[e] - base = weight of Le outside Lp, for every e that touches Lp.
	for _, i := range lp {
		w := int(-g.weight[i])
		for _, e := range g.elems[i] {
			if g.bound[e] == nil {
				continue
			}
			if g.mark[e] < g.base {
				g.mark[e] = g.base + int(g.degree[e])
			}
			g.mark[e] -= w
		}
	}

	// Approximate degrees, without the common part Lp.
	for _, i := range lp {
		d, h := 0, uint32(0)
		el := g.elems[i][:0]
		for _, e := range g.elems[i] {
			if g.bound[e] == nil {
				continue
			}
			out := g.mark[e] - g.base
			if out == 0 {
				g.absorb(e, p) // aggressive: Le is a part of Lp
				continue
			}
			d += out
			h += uint32(e)
			el = append(el, e)
		}
		vs := g.vars[i][:0]
		for _, j := range g.vars[i] {
			if w := g.weight[j]; w > 0 {
				d += int(w)
				h += uint32(j)
				vs = append(vs, j)
			}
		}
		if d == 0 {
			// i has no neighbour outside Lp: eliminate it with p.
			w := -g.weight[i]
			size -= w
			pivotWeight += w
			g.left += int(w)
			g.merge(i, p)
			continue
		}
		g.elems[i] = append(el, p)
		g.vars[i] = vs
		g.degree[i] = int32(min(int(g.degree[i]), d))
		h %= uint32(g.n)
		g.hash[i] = int32(h)
		g.chain[i] = g.bucket[h]
		g.bucket[h] = i
	}
	g.base += g.n + 1 // no mark reaches the new base

	// Variables with equal neighbourhoods become one.
	for _, i := range lp {
		if g.weight[i] == 0 {
			continue
		}
		first := g.bucket[g.hash[i]]
		g.bucket[g.hash[i]] = -1
		for ; first >= 0; first = g.chain[first] {
			g.mergeEqual(first)
		}
	}

	// Complete the degrees; Lp is the new element.
	rest := lp[:0]
	for _, i := range lp {
		w := -g.weight[i]
		if w == 0 {
			continue
		}
		g.weight[i] = w
		d := min(int(g.degree[i])+int(size-w), g.n-g.left-int(w))
		g.insert(i, int32(d))
		rest = append(rest, i)
	}
	g.degree[p] = size
	g.bound[p] = rest
	if len(rest) == 0 {
		g.bound[p] = nil
	}
}

// mergeEqual merges into i all variables behind it in its hash chain that have
// the same elements and the same other neighbours.
func (g *orderGraph) mergeEqual(i int32) {
	if g.chain[i] < 0 {
		return
	}
	for _, e := range g.elems[i] {
		g.mark[e] = g.base
	}
	for _, j := range g.vars[i] {
		g.mark[j] = g.base
	}
	before := i
	for j := g.chain[i]; j >= 0; j = g.chain[j] {
		if len(g.elems[i]) == len(g.elems[j]) && len(g.vars[i]) == len(g.vars[j]) &&
			g.allMarked(g.elems[j]) && g.allMarked(g.vars[j]) {
			g.weight[i] += g.weight[j] // both negative
			g.merge(j, i)
			g.chain[before] = g.chain[j]
		} else {
			before = j
		}
	}
	g.base++
}

func (g *orderGraph) allMarked(list []int32) bool {
	for _, j := range list {
		if g.mark[j] != g.base {
			return false
		}
	}
	return true
}

// absorb removes element e, which is a part of element p.
func (g *orderGraph) absorb(e, p int32) {
	g.bound[e] = nil
	g.parent[e] = p
}

// merge removes variable i, which is eliminated together with j.
func (g *orderGraph) merge(i, j int32) {
	g.weight[i] = 0
	g.parent[i] = j
	g.merged[i] = true
	g.vars[i], g.elems[i] = nil, nil
}

// postorder lists the forest of absorptions and merges, children first,
// without the deferred variables. The variables of one pivot stand together:
// the elements it absorbed come before all of them.
func (g *orderGraph) postorder(deferred []int32) []int32 {
	n := g.n
	order := make([]int32, 0, n)
	child, sibling := g.head[:n], g.next // lists of children
	for i := range child {
		child[i] = -1
	}
	for _, merged := range []bool{true, false} { // the last come first
		for i := n - 1; i >= 0; i-- {
			if p := g.parent[i]; p >= 0 && g.merged[i] == merged {
				sibling[i] = child[p]
				child[p] = int32(i)
			}
		}
	}
	skip := make([]bool, n)
	for _, i := range deferred {
		skip[i] = true
	}
	var stack []int32
	for root := range n {
		if g.parent[root] >= 0 || skip[root] {
			continue
		}
		stack = append(stack, int32(root))
		for len(stack) > 0 {
			i := stack[len(stack)-1]
			if c := child[i]; c >= 0 {
				child[i] = sibling[c]
				stack = append(stack, c)
				continue
			}
			order = append(order, i)
			stack = stack[:len(stack)-1]
		}
	}
	return order
}
