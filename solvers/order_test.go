package solvers_test

import (
	"fmt"
	"math"
	"testing"

	"islet/solvers"
	tp "islet/solvers/testproblems"
)

// fixedSteps takes n equal steps and returns the error at the end and, at
// mid-step, of the dense output, both the largest over all components.
func fixedSteps(t testing.TB, c *tp.Case, m solvers.Method, n int) (end, dense float64) {
	t.Helper()
	h := (c.End - c.Start) / float64(n)
	// No error control: everything is within 1e30.
	o := solvers.Options{RelTol: 1e-3, AbsTol: 1e30, InitialStep: h}
	if m == solvers.Trapezoidal {
		o = solvers.Options{RelTol: 1e-11, AbsTol: 1e-11, MaxStep: h} // of Newton's method
	}
	s := begin(t, c, m, o)
	mid := make([]float64, c.Problem.N)
	for k := 1; k <= n; k++ {
		at := c.Start + float64(k)*h
		if k == n {
			at = c.End
		}
		if err := s.Step(at); err != nil {
			t.Fatal(err)
		}
		half := s.Previous() + (s.Time()-s.Previous())/2
		s.Interpolate(mid, nil, half)
		dense = math.Max(dense, maxError(mid, c.At(half)))
	}
	if st := s.Stats(); st.Steps != n || st.Rejected != 0 || s.Time() != c.End {
		t.Fatalf("%s, %s: %d steps to %g, %d rejected, want %d to %g", c.Name, m.Name(), st.Steps, s.Time(), st.Rejected, n, c.End)
	}
	return maxError(s.State(), c.At(c.End)), dense
}

func maxError(got, want []float64) float64 {
	e := 0.0
	for i := range got {
		e = math.Max(e, math.Abs(got[i]-want[i]))
	}
	return e
}

// slope is the least-squares order of errors e at steps halved each time.
func slope(e []float64) float64 {
	n, sx, sy, sxx, sxy := float64(len(e)), 0.0, 0.0, 0.0, 0.0
	for k, v := range e {
		x, y := float64(k), -math.Log2(v)
		sx, sy, sxx, sxy = sx+x, sy+y, sxx+x*x, sxy+x*y
	}
	return (n*sxy - sx*sy) / (n*sxx - sx*sx)
}

// TestOrder measures the order of the methods and of their dense output on a
// nonlinear ODE, on nonlinear index-1 DAEs and under explicit dependence on
// time. The first number of steps is where the error begins to follow the
// order; halving stops above rounding.
func TestOrder(t *testing.T) {
	problems := []struct {
		make func() *tp.Case
		n    int // first number of steps, for the Rosenbrock methods
	}{
		{func() *tp.Case { return tp.Kaps(1) }, 4},
		{func() *tp.Case { return tp.Kaps(0) }, 4},
		{tp.ExpSin, 16},
		{tp.ExpSinDAE, 32},
		{tp.InconsistentStart, 16},
	}
	methods := []struct {
		solvers.Method
		order, dense float64
		more         int // factor of the first number of steps
	}{
		{solvers.Rodas5P, 5, 4, 1},
		{solvers.Rodas4P, 4, 3, 1},
		{solvers.Trapezoidal, 2, 2, 4}, // its dense output is linear
	}
	for _, p := range problems {
		for _, m := range methods {
			c := p.make()
			t.Run(c.Name+"/"+m.Name(), func(t *testing.T) {
				var end, dense []float64
				for k := range 4 {
					e, d := fixedSteps(t, p.make(), m.Method, p.n*m.more<<k)
					end, dense = append(end, e), append(dense, d)
				}
				got, within := slope(end), slope(dense)
				t.Logf("order %.2f, within steps %.2f, errors %.2g", got, within, end)
				if got < m.order-0.25 {
					t.Errorf("order %.2f, want %g; errors %.3g", got, m.order, end)
				}
				if within < m.dense-0.25 {
					t.Errorf("order of dense output %.2f, want %g; errors %.3g", within, m.dense, dense)
				}
			})
		}
	}
}

// TestOrderDifferenced measures the order where df/dy and df/dt come from
// differences.
func TestOrderDifferenced(t *testing.T) {
	for _, m := range []struct {
		solvers.Method
		order float64
	}{{solvers.Rodas5P, 5}, {solvers.Rodas4P, 4}} {
		for _, p := range []struct {
			make func() *tp.Case
			n    int
		}{{tp.ExpSin, 8}, {tp.ExpSinDAE, 16}} {
			var end []float64
			for k := range 3 {
				c := p.make()
				c.Problem.Jacobian, c.Problem.TimeDerivative = nil, nil
				e, _ := fixedSteps(t, c, m.Method, p.n<<k)
				end = append(end, e)
			}
			if got := slope(end); got < m.order-0.4 {
				t.Errorf("%s, %s: order %.2f, want %g; errors %.3g", p.make().Name, m.Name(), got, m.order, end)
			}
		}
	}
}

// TestProtheroRobinsonOrder reports the order seen on the stiff test equation at
// steps of 1 to 1/16, where h L is between -6 and -1e6. There stiff accuracy
// makes the error h^q / L, and q, not the classical order, is seen: 3 for both
// Rosenbrock methods (order reduction, HW2 IV.15). The trapezoidal rule passes
// on undamped what its two backward Euler half steps leave, h / L.
func TestProtheroRobinsonOrder(t *testing.T) {
	for _, m := range []struct {
		solvers.Method
		order, end float64 // order in the limit, error times L at 1/16
	}{
		{solvers.Rodas5P, 3, 3e-6},
		{solvers.Rodas4P, 3, 3e-6},
		{solvers.Trapezoidal, 1, 3e-2},
	} {
		for _, l := range []float64{-1e2, -1e4, -1e6} {
			var end []float64
			for k := range 5 {
				e, _ := fixedSteps(t, tp.ProtheroRobinson(l, 1), m.Method, 10<<k)
				end = append(end, e)
			}
			local := ""
			for k := 1; k < len(end); k++ {
				local += fmt.Sprintf(" %.2f", math.Log2(end[k-1]/end[k]))
			}
			t.Logf("%s, L = %g: order %.2f, by halving%s, errors %.2g", m.Name(), l, slope(end), local, end)
			if got := slope(end); got < m.order-0.25 {
				t.Errorf("%s, L = %g: order %.2f, want %g; errors %.3g", m.Name(), l, got, m.order, end)
			}
			if e := end[4] * math.Abs(l); e > m.end {
				t.Errorf("%s, L = %g: error at h = 1/16 is %.2g / L, want at most %.2g / L", m.Name(), l, e, m.end)
			}
		}
	}
}
