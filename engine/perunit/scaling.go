package perunit

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"

	"islet/engine/modes"
)

// Scaling holds base values of a linear system in state-space form: of its states,
// inputs, outputs, and of time. A nil slice means ones.
type Scaling struct {
	States, Inputs, Outputs []float64
	Time                    float64 // s; 0 means 1
}

// Then is the scaling that leads from this one's per-unit values on by another: the
// bases of the two multiply. It panics if lengths differ.
func (s Scaling) Then(next Scaling) Scaling {
	product := func(a, b []float64) []float64 {
		if a == nil {
			return append([]float64(nil), b...)
		}
		out := append([]float64(nil), a...)
		if b != nil && len(b) != len(a) {
			panic("perunit: scalings of different systems")
		}
		for i := range b {
			out[i] *= b[i]
		}
		return out
	}
	return Scaling{product(s.States, next.States), product(s.Inputs, next.Inputs), product(s.Outputs, next.Outputs), s.time() * next.time()}
}

func (s Scaling) time() float64 {
	if s.Time == 0 {
		return 1
	}
	return s.Time
}

// Change is the scaling from one set of bases to another of the same system: values
// per unit of from become values per unit of to, without going through SI.
func Change(from, to Scaling) Scaling {
	quotient := func(a, b []float64) []float64 {
		if a == nil && b == nil {
			return nil
		}
		n := max(len(a), len(b))
		out := make([]float64, n)
		for i := range out {
			out[i] = 1
			if b != nil {
				out[i] = b[i]
			}
			if a != nil {
				out[i] /= a[i]
			}
		}
		return out
	}
	return Scaling{quotient(from.States, to.States), quotient(from.Inputs, to.Inputs), quotient(from.Outputs, to.Outputs), to.time() / from.time()}
}

// Apply returns the system per unit: A T scaled by the states' bases from both
// sides, and so on. Eigenvalues are those of A times T, and a transfer function
// H(s) becomes (bases of outputs)^-1 H(s/T) (bases of inputs). The error tells of
// lengths that don't fit, or of bases that aren't positive.
func (s Scaling) Apply(l *modes.StateSpace) (*modes.StateSpace, error) {
	if err := s.check("states", s.States, len(l.States)); err != nil {
		return nil, err
	}
	if err := s.check("inputs", s.Inputs, len(l.Inputs)); err != nil {
		return nil, err
	}
	if err := s.check("outputs", s.Outputs, len(l.Outputs)); err != nil {
		return nil, err
	}
	if t := s.time(); !(t > 0) || math.IsInf(t, 1) {
		return nil, fmt.Errorf("perunit: base of time is %g s, want a positive value", t)
	}
	at := func(b []float64, i int) float64 {
		if b == nil {
			return 1
		}
		return b[i]
	}
	scaled := func(m *mat.Dense, rows, cols []float64, factor float64) *mat.Dense {
		if m == nil {
			return nil
		}
		r, c := m.Dims()
		out := mat.NewDense(r, c, nil)
		for i := range r {
			for j := range c {
				out.Set(i, j, factor*m.At(i, j)*at(cols, j)/at(rows, i))
			}
		}
		return out
	}
	out := *l
	out.A = scaled(l.A, s.States, s.States, s.time())
	out.B = scaled(l.B, s.States, s.Inputs, s.time())
	out.C = scaled(l.C, s.Outputs, s.States, 1)
	out.D = scaled(l.D, s.Outputs, s.Inputs, 1)
	return &out, nil
}

func (s Scaling) check(what string, b []float64, n int) error {
	if b == nil {
		return nil
	}
	if len(b) != n {
		return fmt.Errorf("perunit: %d bases of %d %s", len(b), n, what)
	}
	for i, x := range b {
		if !(x > 0) || math.IsInf(x, 1) {
			return fmt.Errorf("perunit: base %d of the %s is %g, want a positive value", i+1, what, x)
		}
	}
	return nil
}
