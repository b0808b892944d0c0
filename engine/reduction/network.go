package reduction

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Ground is the node whose voltage is zero, as an end of a branch.
const Ground = -1

// Branch is a resistance (ohm) and an inductance (H) in series, both >= 0 and
// not both 0. Its current counts from From to To, two different nodes of the
// network or [Ground].
type Branch struct {
	From, To int
	R, L     float64
}

// Network is a set of branches between nodes 0 to Nodes-1.
type Network struct {
	Nodes    int
	Branches []Branch
}

// check returns all faults of the network and of the list of kept nodes.
func (n Network) check(keep []int) error {
	var errs []error
	if n.Nodes < 1 {
		errs = append(errs, fmt.Errorf("reduction: %d nodes: want at least 1", n.Nodes))
	}
	for k, b := range n.Branches {
		bad := func(format string, a ...any) {
			errs = append(errs, fmt.Errorf("reduction: branch %d: "+format, append([]any{k}, a...)...))
		}
		for _, end := range []int{b.From, b.To} {
			if end != Ground && (end < 0 || end >= n.Nodes) {
				bad("node %d: want 0 to %d, or Ground", end, n.Nodes-1)
			}
		}
		if b.From == b.To {
			bad("both ends are node %d: want two nodes", b.From)
		}
		if !(b.R >= 0) || math.IsInf(b.R, 1) {
			bad("R = %v ohm: want a finite value >= 0", b.R)
		}
		if !(b.L >= 0) || math.IsInf(b.L, 1) {
			bad("L = %v H: want a finite value >= 0", b.L)
		}
		if b.R == 0 && b.L == 0 {
			bad("R = 0 and L = 0: want one of them > 0")
		}
	}
	return errors.Join(append(errs, checkKeep(n.Nodes, keep))...)
}

// checkKeep wants different nodes of nodes, at least one.
func checkKeep(nodes int, keep []int) error {
	if len(keep) == 0 {
		return errors.New("reduction: no node is kept: want at least 1")
	}
	var errs []error
	seen := make(map[int]bool)
	for _, k := range keep {
		switch {
		case k < 0 || k >= nodes:
			errs = append(errs, fmt.Errorf("reduction: kept node %d: want 0 to %d", k, nodes-1))
		case seen[k]:
			errs = append(errs, fmt.Errorf("reduction: kept node %d is listed twice", k))
		}
		seen[k] = true
	}
	return errors.Join(errs...)
}

// others lists the nodes of 0 to n-1 that aren't in keep, in order.
func others(n int, keep []int) []int {
	kept := make([]bool, n)
	for _, k := range keep {
		kept[k] = true
	}
	var list []int
	for k := range n {
		if !kept[k] {
			list = append(list, k)
		}
	}
	return list
}

// incidence returns the rows of the incidence matrix for the given nodes,
// len(nodes) x len(Branches): +1 where a branch leaves a node, -1 where it
// enters. It is nil if either number is 0.
func (n Network) incidence(nodes []int) *mat.Dense {
	if len(nodes) == 0 || len(n.Branches) == 0 {
		return nil
	}
	row := make(map[int]int)
	for r, k := range nodes {
		row[k] = r
	}
	a := mat.NewDense(len(nodes), len(n.Branches), nil)
	for c, b := range n.Branches {
		if r, ok := row[b.From]; ok {
			a.Set(r, c, 1)
		}
		if r, ok := row[b.To]; ok {
			a.Set(r, c, -1)
		}
	}
	return a
}

// Admittance returns the nodal admittance matrix at s = j omega or any other
// complex frequency (1/s), Nodes x Nodes, S. The error names branches whose
// impedance R + sL is zero.
func (n Network) Admittance(s complex128) (*mat.CDense, error) {
	if err := n.check([]int{0}); err != nil {
		return nil, err
	}
	var errs []error
	y := mat.NewCDense(n.Nodes, n.Nodes, nil)
	add := func(i, j int, x complex128) {
		if i != Ground && j != Ground {
			y.Set(i, j, y.At(i, j)+x)
		}
	}
	for k, b := range n.Branches {
		z := complex(b.R, 0) + s*complex(b.L, 0)
		if z == 0 {
			errs = append(errs, fmt.Errorf("reduction: branch %d: R + sL is 0 at s = %v 1/s", k, s))
			continue
		}
		add(b.From, b.From, 1/z)
		add(b.To, b.To, 1/z)
		add(b.From, b.To, -1/z)
		add(b.To, b.From, -1/z)
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	return y, nil
}
