package screen

import (
	"errors"
	"fmt"
	"math"
)

// Node is a node of a network of phase oscillators.
type Node struct {
	Name string
	// D is the damping 1/m of a source, W s/rad; 0 where there is none (a bus),
	// +Inf for a source that holds its speed.
	D float64
	// Speed is w*, rad/s, the speed a source runs at when it gives P. It means
	// nothing where D is 0.
	Speed float64
	// P is P*, W: what a source gives at its Speed, or, negative, what is drawn.
	P float64
	// Share is what a source gives with the angles of all nodes alike, W: its part
	// of what is drawn and lost in a network whose buses are eliminated (see
	// [Circuit.Reduce]).
	Share float64
	// Rating is a source's rating, VA; 0 if unknown.
	Rating float64
}

// Edge is a branch between two nodes.
type Edge struct {
	Name     string
	From, To int
	// A is the most it can carry, W: (3/2) V_from V_to b.
	A float64
}

// Network is a network of phase oscillators.
type Network struct {
	Nodes []Node
	Edges []Edge
}

// check finds all faults.
func (n *Network) check() error {
	var errs []error
	bad := func(format string, a ...any) { errs = append(errs, fmt.Errorf("screen: "+format, a...)) }
	if len(n.Nodes) == 0 {
		bad("no nodes")
	}
	for i := range n.Nodes {
		v := &n.Nodes[i]
		if !(v.D >= 0) {
			bad("node %s: D is %g W s/rad, want 0 or more", v.Name, v.D)
		}
		if math.IsNaN(v.P) || math.IsInf(v.P, 0) || math.IsNaN(v.Share) || math.IsInf(v.Share, 0) || math.IsNaN(v.Speed) || math.IsInf(v.Speed, 0) {
			bad("node %s: P is %g W, the share %g W and the speed %g rad/s, want finite values", v.Name, v.P, v.Share, v.Speed)
		}
	}
	for _, e := range n.Edges {
		if e.From < 0 || e.To < 0 || e.From >= len(n.Nodes) || e.To >= len(n.Nodes) || e.From == e.To {
			bad("branch %s joins nodes %d and %d of %d", e.Name, e.From, e.To, len(n.Nodes))
			continue
		}
		if !(e.A > 0) || math.IsInf(e.A, 1) {
			bad("branch %s can carry %g W, want a positive finite power", e.Name, e.A)
		}
	}
	return errors.Join(errs...)
}

// Islands splits a network into its connected parts, in order of their first
// nodes. Nodes and edges keep their order.
func (n *Network) Islands() []*Network {
	root := make([]int, len(n.Nodes))
	for i := range root {
		root[i] = i
	}
	var find func(i int) int
	find = func(i int) int {
		if root[i] != i {
			root[i] = find(root[i])
		}
		return root[i]
	}
	for _, e := range n.Edges {
		a, b := find(e.From), find(e.To)
		root[max(a, b)] = min(a, b)
	}
	at := make([]int, len(n.Nodes)) // index within the part
	part := make(map[int]*Network)
	var out []*Network
	for i, v := range n.Nodes {
		r := find(i)
		p := part[r]
		if p == nil {
			p = &Network{}
			part[r] = p
			out = append(out, p)
		}
		at[i] = len(p.Nodes)
		p.Nodes = append(p.Nodes, v)
	}
	for _, e := range n.Edges {
		p := part[find(e.From)]
		e.From, e.To = at[e.From], at[e.To]
		p.Edges = append(p.Edges, e)
	}
	return out
}

// merged adds up parallel edges.
func (n *Network) merged() []Edge {
	first := make(map[[2]int]int)
	var out []Edge
	for _, e := range n.Edges {
		key := [2]int{min(e.From, e.To), max(e.From, e.To)}
		if k, ok := first[key]; ok {
			out[k].A += e.A
			out[k].Name += " and " + e.Name
			continue
		}
		first[key] = len(out)
		out = append(out, e)
	}
	return out
}
