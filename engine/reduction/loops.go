package reduction

import (
	"cmp"
	"math"
	"slices"
)

// disjoint is a set of disjoint sets of nodes.
type disjoint []int

func newDisjoint(n int) disjoint {
	d := make(disjoint, n)
	for i := range d {
		d[i] = i
	}
	return d
}

func (d disjoint) find(i int) int {
	for d[i] != i {
		d[i] = d[d[i]]
		i = d[i]
	}
	return i
}

// join joins two sets and reports whether they were two.
func (d disjoint) join(a, b int) bool {
	a, b = d.find(a), d.find(b)
	d[a] = b
	return a != b
}

// loops returns independent pseudo-flows: a basis, branches x loops row-major,
// of the currents that obey the current law at the interior nodes. Kept nodes
// and ground count as one node, at which no law holds; every branch outside a
// spanning tree of that graph closes a loop over the tree, and the unit current
// around it is one basis vector, with entries 1, 0 and -1. The tree takes the
// branches of the smallest R + sigma L first, so that a loop is ruled by the
// branch that closes it. resistive is the number of independent loops of
// branches without inductance.
func (n Network) loops(keep []int, sigma float64) (basis []float64, count, resistive int) {
	nb := len(n.Branches)
	hub := n.Nodes // kept nodes and ground
	at := make([]int, n.Nodes)
	for k := range at {
		at[k] = k
	}
	for _, k := range keep {
		at[k] = hub
	}
	end := func(k int) int {
		if k == Ground {
			return hub
		}
		return at[k]
	}
	order := make([]int, nb)
	for k := range order {
		order[k] = k
	}
	weight := func(k int) float64 { return n.Branches[k].R + sigma*n.Branches[k].L }
	slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(weight(a), weight(b)) })
	ohmic := newDisjoint(n.Nodes + 1)
	for _, b := range n.Branches {
		if b.L == 0 && !ohmic.join(end(b.From), end(b.To)) {
			resistive++
		}
	}
	// The tree, as a list of branches at each node.
	tree := newDisjoint(n.Nodes + 1)
	near := make([][]int, n.Nodes+1)
	var chords []int
	for _, k := range order {
		a, b := end(n.Branches[k].From), end(n.Branches[k].To)
		if !tree.join(a, b) {
			chords = append(chords, k)
			continue
		}
		near[a] = append(near[a], k)
		near[b] = append(near[b], k)
	}
	slices.Sort(chords)
	// Walk every tree from a root: parent branch and depth.
	parent, depth := make([]int, n.Nodes+1), make([]int, n.Nodes+1)
	for k := range depth {
		depth[k] = -1
	}
	other := func(branch, node int) int {
		if a := end(n.Branches[branch].From); a != node {
			return a
		}
		return end(n.Branches[branch].To)
	}
	for _, root := range append([]int{hub}, upTo(n.Nodes)...) {
		if depth[root] >= 0 {
			continue
		}
		depth[root], parent[root] = 0, -1
		stack := []int{root}
		for len(stack) > 0 {
			node := stack[len(stack)-1]
			stack = stack[:len(stack)-1]
			for _, k := range near[node] {
				next := other(k, node)
				if depth[next] < 0 {
					depth[next], parent[next] = depth[node]+1, k
					stack = append(stack, next)
				}
			}
		}
	}
	count = len(chords)
	basis = make([]float64, nb*count)
	for c, k := range chords {
		basis[k*count+c] = 1
		// Current arrives at To and returns over the tree to From.
		a, b := end(n.Branches[k].To), end(n.Branches[k].From)
		for a != b {
			if depth[a] >= depth[b] { // go up from a, along the current
				p := parent[a]
				sign := 1.0
				if end(n.Branches[p].To) == a {
					sign = -1
				}
				basis[p*count+c] += sign
				a = other(p, a)
			} else { // go up from b, against it
				p := parent[b]
				sign := -1.0
				if end(n.Branches[p].To) == b {
					sign = 1
				}
				basis[p*count+c] += sign
				b = other(p, b)
			}
		}
	}
	return basis, count, resistive
}

// upTo lists 0 to n-1.
func upTo(n int) []int {
	list := make([]int, n)
	for k := range list {
		list[k] = k
	}
	return list
}

// typicalRatio returns the geometric mean of the branches' R/L where both are
// there (1/s): what makes resistances and inductances comparable. 1 if there is
// none.
func (n Network) typicalRatio() float64 {
	sum, count := 0.0, 0
	for _, b := range n.Branches {
		if b.R > 0 && b.L > 0 {
			sum += math.Log(b.R / b.L)
			count++
		}
	}
	if count == 0 {
		return 1
	}
	return math.Exp(sum / float64(count))
}
