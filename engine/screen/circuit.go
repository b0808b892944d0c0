package screen

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"

	"islet/engine/reduction"
)

// Circuit is a three-phase network at one frequency, one phase of it: sources of
// fixed inner voltage behind impedances, buses, branches between buses, and what is
// drawn at buses.
type Circuit struct {
	Sources  []CircuitSource
	Buses    []CircuitBus
	Branches []CircuitBranch
}

// CircuitSource is a source of a [Circuit]. The Share of its Node isn't read.
type CircuitSource struct {
	Node
	E   complex128 // inner voltage, V peak; not 0
	Z   complex128 // from there to the bus, ohm; not 0
	Bus int
	// Gives is the power at the operating point to which the angles of E belong, W;
	// NaN if there is none, and angles mean nothing.
	Gives float64
}

// CircuitBus is a bus of a [Circuit].
type CircuitBus struct {
	Name string
	V    float64    // magnitude of the voltage, V peak, > 0
	Draw complex128 // P + jQ drawn, VA; read where a source has no Gives
}

// CircuitBranch is a branch of a [Circuit]: I_from = y (V_from/KFrom - V_to/KTo)/KFrom.
type CircuitBranch struct {
	Name       string
	From, To   int
	Y          complex128 // S
	KFrom, KTo float64    // turns ratios, > 0; 1 for a line
}

// Reduced is a [Circuit] as a network of phase oscillators between its sources.
type Reduced struct {
	Network
	// Conductance is the largest sum of |g_ij| over that of b_ij at a source, that of
	// ConductanceAt: how much of the coupling is resistive and neglected.
	Conductance   float64
	ConductanceAt string
	// Capacitive is the largest negative b_ij left out, over the sum of the positive
	// ones at its source; 0 if there is none. Branches of different R/X can bring it
	// about.
	Capacitive float64
	// Loose are buses without a path to a source. What they draw is left out.
	Loose []string
}

// Reduce eliminates all buses of a circuit (phasor Kron reduction), so that sources of
// fixed inner voltage E are coupled by
//
//	P_i = c_i + sum_j a_ij sin(theta_i - theta_j)     a_ij = (3/2) |E_i| |E_j| b_ij
//
// where g_ij - j b_ij is the admittance between i and j: b is |y| where the network is
// lossless. What that neglects is the resistive coupling's change with angle, (3/2) |E_i|
// |E_j| g_ij (1 - cos(theta_i - theta_j)), and all change of voltage and of what is
// drawn.
//
// c_i, the Share of source i in what is drawn and lost, is exact at an operating point:
// what is left of Gives. Without one, draws are the currents conj(S/V), carried to the
// sources by the network as a divider, all angles alike:
//
//	c_i = (3/2) Re( E_i conj( sum_j Y_ij E_j + (K J)_i ) )     K = -Y_SB Y_BB^-1
//
// Source of the reduction: F. Dorfler, F. Bullo, "Kron reduction of graphs with
// applications to electrical networks", IEEE Trans. Circuits and Systems I 60(1), 2013.
func (c *Circuit) Reduce() (*Reduced, error) {
	if err := c.check(); err != nil {
		return nil, err
	}
	out := &Reduced{}
	n, nb := len(c.Sources), len(c.Buses)
	held := c.held()
	at := make([]int, nb) // index of each bus that a source holds
	size := n
	for b := range c.Buses {
		if !held[b] {
			out.Loose = append(out.Loose, c.Buses[b].Name)
			continue
		}
		at[b] = size
		size++
	}
	// One more node, kept, whose column holds the currents drawn: its column is K J
	// in the end.
	y := mat.NewCDense(size+1, size+1, nil)
	join := func(i, j int, kI, kJ float64, v complex128) {
		add := func(r, c int, x complex128) { y.Set(r, c, y.At(r, c)+x) }
		add(i, i, v/complex(kI*kI, 0))
		add(j, j, v/complex(kJ*kJ, 0))
		add(i, j, -v/complex(kI*kJ, 0))
		add(j, i, -v/complex(kI*kJ, 0))
	}
	for i, s := range c.Sources {
		join(i, at[s.Bus], 1, 1, 1/s.Z)
	}
	for _, b := range c.Branches {
		if held[b.From] && b.From != b.To {
			join(at[b.From], at[b.To], b.KFrom, b.KTo, b.Y)
		}
	}
	for b, bus := range c.Buses {
		if held[b] {
			y.Set(at[b], size, cmplx.Conj(bus.Draw/complex(1.5*bus.V, 0)))
		}
	}
	keep := make([]int, n+1)
	for i := range n {
		keep[i] = i
	}
	keep[n] = size
	red, err := reduction.KronPhasor(y, keep)
	if err != nil {
		return nil, fmt.Errorf("screen: %w", err)
	}
	for i, s := range c.Sources {
		v := s.Node
		e := cmplx.Abs(s.E)
		v.Share = s.Gives
		if math.IsNaN(s.Gives) {
			current := red.At(i, n)
			for j, o := range c.Sources {
				current += red.At(i, j) * complex(cmplx.Abs(o.E), 0)
			}
			v.Share = 1.5 * e * real(current)
		}
		out.Nodes = append(out.Nodes, v)
	}
	sumG, sumB := make([]float64, n), make([]float64, n)
	least := make([]float64, n) // most negative b
	for i := range c.Sources {
		for j := range i {
			a, b := &c.Sources[j], &c.Sources[i]
			v := (red.At(i, j) + red.At(j, i)) / 2
			power := 1.5 * cmplx.Abs(a.E) * cmplx.Abs(b.E)
			for _, k := range []int{i, j} {
				sumG[k] += power * math.Abs(real(v))
				sumB[k] += power * math.Max(imag(v), 0)
				least[k] = math.Min(least[k], power*imag(v))
			}
			if !(imag(v) > 0) {
				continue
			}
			e := Edge{Name: a.Name + " to " + b.Name, From: j, To: i, A: power * imag(v)}
			out.Edges = append(out.Edges, e)
			if flow := e.A * math.Sin(cmplx.Phase(a.E/b.E)); !math.IsNaN(a.Gives) && !math.IsNaN(b.Gives) {
				out.Nodes[j].Share -= flow
				out.Nodes[i].Share += flow
			}
		}
	}
	for i := range c.Sources {
		if r := sumG[i] / sumB[i]; r > out.Conductance {
			out.Conductance, out.ConductanceAt = r, c.Sources[i].Name
		}
		if r := -least[i] / sumB[i]; r > out.Capacitive {
			out.Capacitive = r
		}
	}
	return out, nil
}

// check finds all faults.
func (c *Circuit) check() error {
	var errs []error
	bad := func(format string, a ...any) { errs = append(errs, fmt.Errorf("screen: "+format, a...)) }
	finite := func(z complex128) bool { return !cmplx.IsNaN(z) && !cmplx.IsInf(z) }
	for _, s := range c.Sources {
		if s.Bus < 0 || s.Bus >= len(c.Buses) {
			bad("source %s stands at bus %d of %d", s.Name, s.Bus, len(c.Buses))
		}
		if s.E == 0 || !finite(s.E) {
			bad("source %s has an inner voltage of %g V, want a finite one other than 0", s.Name, s.E)
		}
		if s.Z == 0 || !finite(s.Z) {
			bad("source %s stands behind %g ohm, want a finite impedance other than 0", s.Name, s.Z)
		}
	}
	for _, b := range c.Buses {
		if !(b.V > 0) || math.IsInf(b.V, 1) || !finite(b.Draw) {
			bad("bus %s has %g V and draws %g VA, want a positive voltage and finite powers", b.Name, b.V, b.Draw)
		}
	}
	for _, b := range c.Branches {
		if b.From < 0 || b.To < 0 || b.From >= len(c.Buses) || b.To >= len(c.Buses) {
			bad("branch %s joins buses %d and %d of %d", b.Name, b.From, b.To, len(c.Buses))
		}
		if b.Y == 0 || !finite(b.Y) {
			bad("branch %s has an admittance of %g S, want a finite one other than 0", b.Name, b.Y)
		}
		if !(b.KFrom > 0) || !(b.KTo > 0) || math.IsInf(b.KFrom, 1) || math.IsInf(b.KTo, 1) {
			bad("branch %s has turns ratios of %g and %g, want positive finite ones", b.Name, b.KFrom, b.KTo)
		}
	}
	return errors.Join(errs...)
}

// held tells which buses have a path to a source.
func (c *Circuit) held() []bool {
	out := make([]bool, len(c.Buses))
	next := make([][]int, len(c.Buses))
	for _, b := range c.Branches {
		next[b.From] = append(next[b.From], b.To)
		next[b.To] = append(next[b.To], b.From)
	}
	var todo []int
	reach := func(b int) {
		if !out[b] {
			out[b] = true
			todo = append(todo, b)
		}
	}
	for _, s := range c.Sources {
		reach(s.Bus)
	}
	for len(todo) > 0 {
		b := todo[len(todo)-1]
		todo = todo[:len(todo)-1]
		for _, o := range next[b] {
			reach(o)
		}
	}
	return out
}
