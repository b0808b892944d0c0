package devicetest

import (
	"testing"

	"islet/solvers"
	"islet/solvers/facet"
)

// checkAllocations checks that what an integrator calls allocates nothing.
func checkAllocations(t reporter, s *subject) {
	t.Helper()
	for _, b := range s.blocks(t) {
		r := random()
		time, v, x, ok := s.point(t, b, r)
		if !ok {
			return
		}
		n := s.ports + s.own
		f, jac := floats(n), floats(n*n)
		flow, rate := f[:s.ports:s.ports], f[s.ports:]
		none := func(what string, call func()) {
			t.Helper()
			if a := testing.AllocsPerRun(20, call); a != 0 {
				t.Errorf("%s allocates %v times a call", what, a)
			}
		}
		none("Eval", func() { _ = b.Eval(flow, rate, time, v, x) })
		if d, ok := b.(solvers.Differentiable); ok {
			none("Jacobian", func() { d.Jacobian(jac, time, v, x) })
		}
		if d, ok := b.(solvers.TimeDependent); ok {
			none("TimeDerivative", func() { d.TimeDerivative(flow, rate, time, v, x) })
		}
		if m, ok := b.(facet.Measurer); ok {
			dst := floats(len(m.Channels()))
			none("Measure", func() { m.Measure(dst, time, v, x) })
		}
		if a, ok := b.(facet.Accountable); ok {
			none("Energy", func() { a.Energy(time, v, x) })
		}
		if a, ok := b.(facet.Former); ok {
			none("Speed", func() { a.Speed(time, v, x) })
		}
		if a, ok := b.(facet.Framed); ok {
			none("SetFrame", func() { a.SetFrame(s.o.Frame) })
		}
	}
}
