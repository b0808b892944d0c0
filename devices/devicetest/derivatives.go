package devicetest

import (
	"math"

	"islet/solvers"
)

// Differences of order four with a step of 1e-3 of the base have a truncation
// error of about 1e-12 for functions that bend on the scale of the base, and a
// round-off error of 1e-13 of the row's terms divided by 1e-3. Where the
// function has a kink within the step, a step of 1e-6 is tried, which loses
// three more digits.
const (
	wideStep, wideTolerance     = 1e-3, 1e-8
	narrowStep, narrowTolerance = 1e-6, 1e-6
)

// checkJacobian compares the Jacobian with differences.
func checkJacobian(t reporter, s *subject) {
	t.Helper()
	for _, b := range s.blocks(t) {
		d, ok := b.(solvers.Differentiable)
		if !ok {
			return // the solvers will difference it
		}
		checkJacobianOf(t, s, b, d)
	}
}

func checkJacobianOf(t reporter, s *subject, b solvers.Block, d solvers.Differentiable) {
	t.Helper()
	n := s.ports + s.own
	inside := make([]bool, n*n)
	for _, e := range d.Pattern() {
		if e.Row < 0 || e.Row >= n || e.Col < 0 || e.Col >= n {
			t.Errorf("Pattern: entry %v outside the %d x %d matrix", e, n, n)
			return
		}
		if inside[e.Row*n+e.Col] {
			t.Errorf("Pattern: entry (%s, %s) listed twice", s.name(e.Row), s.name(e.Col))
		}
		inside[e.Row*n+e.Col] = true
	}

	r := random()
	f, again := floats(n), floats(n)
	jac := floats(n * n)
	col, spread, narrow, narrowSpread := floats(n), floats(n), floats(n), floats(n)
	scale := floats(n)
	compared, bad := make([]bool, n*n), make([]bool, n*n)
	for range points {
		time, v, x, ok := s.point(t, b, r)
		if !ok {
			return
		}
		vCopy, xCopy := append(floats(0), v...), append(floats(0), x...)

		// Eval and Jacobian are functions: same arguments, same result.
		if err := s.eval(b, f, time, v, x); err != nil {
			t.Errorf("Eval: %v, after it was right", err)
			return
		}
		for k := range jac {
			jac[k] = math.Pi // stands for whatever the caller holds there
			if inside[k] {
				jac[k] = math.NaN()
			}
		}
		d.Jacobian(jac, time, v, x)
		if err := s.eval(b, again, time, v, x); err != nil || !sameBits(f, again) {
			t.Errorf("Eval: two calls with the same arguments gave %v and %v, error %v", f, again, err)
			return
		}
		if !sameBits(v, vCopy) || !sameBits(x, xCopy) {
			t.Errorf("Eval or Jacobian changed its arguments")
			return
		}
		for k, a := range jac {
			row, col := k/n, k%n
			switch {
			case bad[k]:
			case inside[k] && math.IsNaN(a):
				bad[k] = true
				t.Errorf("Jacobian: entry (%s, %s) of the pattern not written, or NaN", s.name(row), s.name(col))
			case !inside[k] && a != math.Pi:
				bad[k] = true
				t.Errorf("Jacobian: entry (%s, %s) outside the pattern written", s.name(row), s.name(col))
			}
			if !inside[k] || math.IsNaN(a) {
				jac[k] = 0
			}
		}

		for i := range n {
			scale[i] = math.Abs(f[i])
			for j := range n {
				scale[i] = max(scale[i], math.Abs(jac[i*n+j])*s.bases[j])
			}
		}
		for j := range n {
			if s.column(b, col, spread, wideStep, j, time, v, x) != nil ||
				s.column(b, narrow, narrowSpread, narrowStep, j, time, v, x) != nil {
				continue // at the edge of the domain
			}
			for i := range n {
				k := i*n + j
				got, want, tolerance := jac[k], col[i], wideTolerance
				if spread[i]*s.bases[j] > wideTolerance*scale[i] {
					if narrowSpread[i]*s.bases[j] > narrowTolerance*scale[i] {
						continue // a kink
					}
					want, tolerance = narrow[i], narrowTolerance
				}
				compared[k] = true
				if !bad[k] && !(math.Abs(got-want)*s.bases[j] <= tolerance*scale[i]) {
					bad[k] = true
					where := ""
					if !inside[k] {
						where = ", outside the pattern"
					}
					t.Errorf("Jacobian: d(%s)/d(%s) = %.12g, differences give %.12g%s", s.name(i), s.name(j), got, want, where)
				}
			}
		}
	}
	for k, ok := range compared {
		if !ok && !bad[k] {
			t.Errorf("Jacobian: d(%s)/d(%s) could not be compared at any of %d states: not smooth", s.name(k/n), s.name(k%n), points)
		}
	}
}

// checkTimeDerivative compares the partial derivative in t with differences,
// with setpoints at rest and moving.
func checkTimeDerivative(t reporter, s *subject) {
	t.Helper()
	n := s.ports + s.own
	r := random()
	for _, b := range s.blocks(t) {
		d, ok := b.(solvers.TimeDependent)
		if !ok {
			return // the solvers will difference it
		}
		bad := make([]bool, n)
		for range points {
			time, v, x, ok := s.point(t, b, r)
			if !ok {
				return
			}
			// It adds to what is there: start from 1.
			got := floats(n)
			for k := range got {
				got[k] = 1
			}
			depends := d.TimeDerivative(got[:s.ports:s.ports], got[s.ports:], time, v, x)
			scale, err := s.rowScales(b, time, v, x)
			if err != nil {
				t.Errorf("%v", err)
				return
			}
			want, spread := floats(n), floats(n)
			err = derivative(want, spread, 1e-3, func(dst []float64, ds float64) error {
				return s.eval(b, dst, time+ds, v, x)
			})
			if err != nil {
				t.Errorf("%v", err)
				return
			}
			for k := range n {
				if !depends && got[k] != 1 && !bad[k] {
					bad[k] = true
					t.Errorf("TimeDerivative: wrote d(%s)/dt but returned false", s.name(k))
				}
				tolerance := 1e-11*scale[k] + 1e-7*math.Abs(want[k])
				// got - 1 has lost what is below the round-off of 1 + d.
				tolerance += 4e-16 * (1 + math.Abs(got[k]))
				if !bad[k] && !(math.Abs(got[k]-1-want[k]) <= tolerance) {
					bad[k] = true
					t.Errorf("TimeDerivative: d(%s)/dt = %.12g, differences give %.12g", s.name(k), got[k]-1, want[k])
				}
			}
		}
	}
}
