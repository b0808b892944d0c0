package modes

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Step returns the deviations of the outputs at the times 0, dt, ... (n-1) dt
// after a step of an input by the given amount, from rest: row k is time k dt,
// a column an output. It is exact, by the matrix exponential of [A B; 0 0] dt.
// The error tells of an input that isn't there, a dt that isn't positive, or
// outputs that are missing.
func (s *StateSpace) Step(input int, amount, dt float64, n int) (*mat.Dense, error) {
	if input < 0 || input >= len(s.Inputs) || s.C == nil || s.A == nil || n < 1 || !(dt > 0) || math.IsInf(dt, 0) {
		return nil, fmt.Errorf("modes: step of input %d of %d, %d outputs, dt = %g s, %d times: want an input and outputs that are there, a positive dt and a time at least", input, len(s.Inputs), len(s.Outputs), dt, n)
	}
	ns := len(s.States)
	m := mat.NewDense(ns+1, ns+1, nil)
	for i := range ns {
		for j := range ns {
			m.Set(i, j, s.A.At(i, j)*dt)
		}
		m.Set(i, ns, s.B.At(i, input)*dt*amount)
	}
	var e mat.Dense
	e.Exp(m)
	x := mat.NewVecDense(ns+1, nil)
	x.SetVec(ns, 1)
	out := mat.NewDense(n, len(s.Outputs), nil)
	var next mat.VecDense
	for k := range n {
		for i := range s.Outputs {
			sum := s.D.At(i, input) * amount
			for j, c := range s.C.RawRowView(i) {
				sum += c * x.AtVec(j)
			}
			out.Set(k, i, sum)
		}
		next.MulVec(&e, x)
		x.CopyVec(&next)
	}
	return out, nil
}
