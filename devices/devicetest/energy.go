package devicetest

import (
	"math"
	"math/cmplx"

	"islet/solvers/facet"
)

// checkEnergy checks, along the motion that the equations prescribe for the
// own unknowns and for terminal voltages that move as they like,
//
//	d Stored/dt = Supplied - Dissipated + (3/2) sum Re(v (flow + M_port v')*)
//
// The unknowns without mass follow from their equations.
func checkEnergy(t reporter, s *subject) {
	t.Helper()
	if _, ok := s.b.(facet.Accountable); !ok {
		return
	}
	r := random()
	n := s.ports + s.own
	algebraic := s.unknowns(false)
	for _, b := range s.blocks(t) {
		a := b.(facet.Accountable)
		done := 0
		var last error
		for try := 0; try < 20*points && done < points; try++ {
			time, v, x, ok := s.point(t, b, r)
			if !ok {
				return
			}
			if last = s.solve(b, time, v, x, algebraic); last != nil {
				continue
			}
			f := floats(n)
			if last = s.eval(b, f, time, v, x); last != nil {
				continue
			}
			vdot, xdot := floats(s.ports), floats(s.own)
			fastest := 1 / rampTime
			var in, scale float64
			for k, volts := range s.o.Voltages {
				dv := cmplx.Rect(s.o.Frame*volts*r.Float64(), 2*math.Pi*r.Float64())
				put(vdot[2*k:], dv)
				fastest = max(fastest, cmplx.Abs(dv)/volts)
				i := get(f[2*k:]) + complex(s.portMass[2*k], 0)*dv
				in += 1.5 * real(get(v[2*k:])*cmplx.Conj(i))
				scale += 1.5 * cmplx.Abs(get(v[2*k:])) * cmplx.Abs(i)
			}
			for k, m := range s.mass {
				if m > 0 {
					xdot[k] = f[s.ports+k] / m
					fastest = max(fastest, math.Abs(xdot[k])/s.bases[s.ports+k])
				}
			}
			e := a.Energy(time, v, x)
			scale += math.Abs(e.Supplied) + math.Abs(e.Dissipated)

			h := 1e-3 / fastest
			d, spread := floats(1), floats(1)
			vAt, xAt := floats(s.ports), floats(s.own)
			last = derivative(d, spread, h, func(dst []float64, ds float64) error {
				for k := range vAt {
					vAt[k] = v[k] + ds*vdot[k]
				}
				for k := range xAt {
					xAt[k] = x[k] + ds*xdot[k]
				}
				if err := s.solve(b, time+ds, vAt, xAt, algebraic); err != nil {
					return err
				}
				dst[0] = a.Energy(time+ds, vAt, xAt).Stored
				return nil
			})
			if last != nil {
				continue
			}
			scale += math.Abs(d[0])
			tolerance := 1e-8*scale + 1e-14*math.Abs(e.Stored)/h
			if len(algebraic) > 0 { // solved to about 1e-13 of their size
				tolerance += 1e-11 * math.Abs(e.Stored) / h
			}
			if spread[0] > tolerance {
				continue // a kink
			}
			done++
			if want := e.Supplied - e.Dissipated + in; !(math.Abs(d[0]-want) <= tolerance) {
				t.Errorf("Energy: d Stored/dt = %.10g W, but Supplied %.10g - Dissipated %.10g + in %.10g = %.10g W",
					d[0], e.Supplied, e.Dissipated, in, want)
				return
			}
		}
		if done < points/2 {
			t.Errorf("Energy: only %d states of %d could be compared; last error: %v", done, 20*points, last)
		}
	}
}
