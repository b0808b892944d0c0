package testproblems_test

import (
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"islet/solvers"
	tp "islet/solvers/testproblems"
)

func all() []*tp.Case {
	cases := append(tp.Smooth(), tp.Hybrid()...)
	return append(cases, tp.OneWayValveConducting(), tp.OneWayValveBlocked())
}

// states returns states at which a case is tried: known ones, and known ones
// shaken by a tenth of their size.
func states(c *tp.Case) (times []float64, ys [][]float64) {
	rng := rand.New(rand.NewPCG(1, 2))
	add := func(t float64, y []float64) {
		shaken := make([]float64, len(y))
		for i, v := range y {
			shaken[i] = v*(1+0.1*(2*rng.Float64()-1)) + 1e-3*rng.Float64()
		}
		times = append(times, t, t)
		ys = append(ys, y, shaken)
	}
	add(c.Start, c.Initial)
	for _, p := range c.Points {
		add(p.Time, p.State)
	}
	if c.Exact != nil {
		for _, w := range []float64{0.13, 0.57, 0.91} {
			t := c.Start + w*(c.End-c.Start)
			add(t, c.At(t))
		}
	}
	return times, ys
}

func TestShapes(t *testing.T) {
	names := map[string]bool{}
	for _, c := range all() {
		if names[c.Name] {
			t.Errorf("%s: name used twice", c.Name)
		}
		names[c.Name] = true
		if _, err := c.Problem.System(); err != nil {
			t.Errorf("%s: %v", c.Name, err)
		}
		if len(c.Initial) != c.Problem.N {
			t.Errorf("%s: %d initial values for %d unknowns", c.Name, len(c.Initial), c.Problem.N)
		}
		last := c.Start
		for _, p := range c.Points {
			if len(p.State) != c.Problem.N || p.Time <= last {
				t.Errorf("%s: bad point at %g", c.Name, p.Time)
			}
			last = p.Time
		}
		for i, e := range c.Events {
			if i > 0 && e.Time <= c.Events[i-1].Time || e.Time > c.End || e.Root >= c.Handlers.Roots.N {
				t.Errorf("%s: bad event %d", c.Name, i)
			}
		}
	}
}

func TestJacobians(t *testing.T) {
	for _, c := range all() {
		t.Run(c.Name, func(t *testing.T) {
			n, p := c.Problem.N, c.Problem
			pattern := p.Pattern
			if pattern == nil {
				for i := range n {
					for j := range n {
						pattern = append(pattern, solvers.Entry{Row: i, Col: j})
					}
				}
			}
			values := make([]float64, len(pattern))
			up, down := make([]float64, n), make([]float64, n)
			times, ys := states(c)
			for k, y := range ys {
				for i := range values {
					values[i] = math.NaN() // every entry must be written
				}
				if err := p.Jacobian(values, times[k], y); err != nil {
					t.Fatal(err)
				}
				jac := make([]float64, n*n)
				for i, e := range pattern {
					jac[e.Row*n+e.Col] += values[i]
				}
				x := append([]float64(nil), y...)
				for j := range n {
					// Central differences; the cube root of the rounding
					// unit balances truncation and rounding.
					h := 6e-6 * math.Max(math.Abs(y[j]), 1e-2)
					x[j] = y[j] + h
					hi := x[j]
					if err := p.F(up, times[k], x); err != nil {
						t.Fatal(err)
					}
					x[j] = y[j] - h
					span := hi - x[j]
					if err := p.F(down, times[k], x); err != nil {
						t.Fatal(err)
					}
					x[j] = y[j]
					for i := range n {
						got, want := jac[i*n+j], (up[i]-down[i])/span
						// Rounding: a few units of the function's size.
						floor := 1e-15 * (math.Abs(up[i]) + math.Abs(down[i])) / span
						for _, v := range jac[i*n : i*n+n] {
							floor = math.Max(floor, 1e-8*math.Abs(v))
						}
						if !(math.Abs(got-want) <= 1e-6*math.Abs(want)+10*floor+1e-10) {
							t.Errorf("t = %g: df%d/dy%d is %g, differences give %g", times[k], i, j, got, want)
						}
					}
				}
			}
		})
	}
}

func TestTimeDerivatives(t *testing.T) {
	for _, c := range all() {
		p := c.Problem
		n := p.N
		up, down, exact := make([]float64, n), make([]float64, n), make([]float64, n)
		times, ys := states(c)
		for k, y := range ys {
			// A little beyond the times of the states, some of which are
			// kinks.
			h := 1e-6 * math.Min(c.End-c.Start, 1e3)
			at := times[k] + 2*h
			if err := p.F(up, at+h, y); err != nil {
				t.Fatal(err)
			}
			if err := p.F(down, at-h, y); err != nil {
				t.Fatal(err)
			}
			if p.TimeDerivative != nil {
				if err := p.TimeDerivative(exact, at, y); err != nil {
					t.Fatal(err)
				}
			} else if !p.Autonomous {
				t.Errorf("%s: neither autonomous nor with a derivative in time", c.Name)
			}
			for i := range n {
				want := (up[i] - down[i]) / (2 * h)
				floor := 1e-15 * (math.Abs(up[i]) + math.Abs(down[i])) / h
				if !(math.Abs(exact[i]-want) <= 1e-6*math.Abs(want)+10*floor) {
					t.Errorf("%s, t = %g: df%d/dt is %g, differences give %g", c.Name, at, i, exact[i], want)
				}
			}
		}
	}
}

// TestExactSolutions puts the closed forms of cases without events into their
// equations: M y' = f, with y' by central differences.
func TestExactSolutions(t *testing.T) {
	for _, c := range append(tp.Smooth(), tp.OneWayValveBlocked()) {
		if c.Exact == nil {
			continue
		}
		n := c.Problem.N
		f, mdy := make([]float64, n), make([]float64, n)
		mass := c.Problem.Mass
		if mass == nil {
			mass = solvers.Diagonal(ones(n)...)
		}
		for _, w := range []float64{0.011, 0.13, 0.57, 0.91} {
			at := c.Start + w*(c.End-c.Start)
			h := 2e-6 * math.Min(1, c.End-c.Start)
			y, up, down := c.At(at), c.At(at+h), c.At(at-h)
			if err := c.Problem.F(f, at, y); err != nil {
				t.Fatal(err)
			}
			clear(mdy)
			size := ones(n)
			for _, e := range mass {
				d := (up[e.Col] - down[e.Col]) / (2 * h)
				mdy[e.Row] += e.Value * d
				size[e.Row] += math.Abs(e.Value * d)
			}
			jac := make([]float64, max(n*n, len(c.Problem.Pattern)))
			if err := c.Problem.Jacobian(jac, at, y); err != nil {
				t.Fatal(err)
			}
			stiff := 0.0 // f can't be known better than the Jacobian times rounding
			for _, v := range jac {
				stiff = math.Max(stiff, math.Abs(v))
			}
			for i := range n {
				if !(math.Abs(mdy[i]-f[i]) <= 1e-7*size[i]+1e-14*stiff) {
					t.Errorf("%s, t = %g: equation %d: M y' = %.12g, f = %.12g", c.Name, at, i, mdy[i], f[i])
				}
			}
		}
	}
}

func ones(n int) []float64 {
	s := make([]float64, n)
	for i := range s {
		s[i] = 1
	}
	return s
}

// TestPointsAgree holds the printed points against the closed forms, which are
// written independently of them.
func TestPointsAgree(t *testing.T) {
	for _, c := range all() {
		if c.Exact == nil {
			continue
		}
		for _, p := range c.Points {
			at := c.At(p.Time)
			for i, want := range p.State {
				if !(math.Abs(at[i]-want) <= 2e-13*math.Max(1, math.Abs(want))) {
					t.Errorf("%s, t = %g: y%d by formula %.16g, printed %.16g", c.Name, p.Time, i, at[i], want)
				}
			}
		}
	}
}

func TestInvariantsAtPoints(t *testing.T) {
	for _, c := range all() {
		for _, inv := range c.Invariants {
			want := inv.Func(c.Initial)
			for _, p := range c.Points {
				size := 1.0
				if c.Name[:2] == "E5" {
					size = math.Abs(p.State[1]) // what is added up there
				}
				if c.Name == "PLEI" {
					size = 200 // sum of the magnitudes of the energies' terms
				}
				if got := inv.Func(p.State); !(math.Abs(got-want) <= 1e-15*size) {
					t.Errorf("%s, t = %g: %s is %.17g, want %.17g", c.Name, p.Time, inv.Name, got, want)
				}
			}
		}
	}
}

// TestTransistorSlope puts y'(0) into M y' = f and into the time derivatives of
// the three algebraic equations, the sums of rows 1 and 2, 4 and 5, 7 and 8.
func TestTransistorSlope(t *testing.T) {
	c := tp.TransistorAmplifier()
	d, p := tp.TransistorAmplifierSlope(), c.Problem
	f, ft, jac := make([]float64, 8), make([]float64, 8), make([]float64, len(p.Pattern))
	if err := p.F(f, 0, c.Initial); err != nil {
		t.Fatal(err)
	}
	if err := p.TimeDerivative(ft, 0, c.Initial); err != nil {
		t.Fatal(err)
	}
	if err := p.Jacobian(jac, 0, c.Initial); err != nil {
		t.Fatal(err)
	}
	mdy := make([]float64, 8)
	for _, e := range p.Mass {
		mdy[e.Row] += e.Value * d[e.Col]
	}
	for k, e := range p.Pattern {
		ft[e.Row] += jac[k] * d[e.Col]
	}
	for i := range f {
		if math.Abs(mdy[i]-f[i]) > 1e-17 { // f is 3e-4
			t.Errorf("equation %d: M y' = %.12g, f = %.12g", i, mdy[i], f[i])
		}
	}
	for _, i := range []int{0, 3, 6} {
		if s := f[i] + f[i+1]; math.Abs(s) > 1e-18 {
			t.Errorf("f%d + f%d = %g at the start, want 0", i, i+1, s)
		}
		if s := ft[i] + ft[i+1]; math.Abs(s) > 1e-14 { // terms of 6e-2
			t.Errorf("derivative of f%d + f%d is %g, want 0", i, i+1, s)
		}
	}
}

// TestEventsAreRoots checks the printed event data against the closed forms and
// the figures of the sources.
func TestEventsAreRoots(t *testing.T) {
	for _, c := range all() {
		if c.Exact == nil || c.Events == nil || c.Name == "valve" {
			continue
		}
		g := make([]float64, c.Handlers.Roots.N)
		for _, e := range c.Events {
			// Just before: the state that leads there.
			at := e.Time - 1e-9
			c.Handlers.Roots.Func(g, at, c.At(at))
			if math.Abs(g[e.Root]) > 1e-7 {
				t.Errorf("%s: root %d is %g at its event at %.12g", c.Name, e.Root, g[e.Root], e.Time)
			}
		}
	}
	near := func(what string, got, want float64) {
		t.Helper()
		if math.Abs(got-want) > 1e-14*math.Abs(want) {
			t.Errorf("%s is %.17g, want %.17g", what, got, want)
		}
	}
	for n, want := range map[int]float64{
		1: 1.4278431229270644670, 2: 3.7123921196103676141, 3: 5.5400313169570101318, 4: 7.0021426748343241460,
		5: 8.1718317611361753573, 10: 11.317453227146017783, 20: 12.685969002180819170, 30: 12.832912264626683300,
	} {
		near("impact of the ball", tp.BallImpact(0.8, n), want)
	}
	near("limit of the impacts", tp.BallLimit(0.8), 12.850588106343580203)
	near("limit of the second ball", tp.BallLimit(0.5), 4.2835293687811934009)
	ball := tp.Balls(0.8)
	for _, p := range []tp.Point{
		{Time: 5, State: []float64{3.4106847818149392194, -3.6668630436370121562}},
		{Time: 10, State: []float64{0.32101060372168265553, 1.5266758692553682656}},
	} {
		y := ball.At(p.Time)
		for i := range y {
			if math.Abs(y[i]-p.State[i]) > 1e-13 {
				t.Errorf("ball at %g: %.17g, want %.17g", p.Time, y, p.State)
			}
		}
	}
	two := tp.TwoPointController().Events
	near("second switch", two[1].Time, 2.0512706647131396063)
	near("tenth switch", two[9].Time, 8.8296535478107685160)
	near("last switch", two[22].Time, 19.844525732844415494)
	near("valve current at 2.5 ms", tp.ValveCurrent(0.0025), 8.5774982824676529028)
	near("valve current at 5 ms", tp.ValveCurrent(0.005), 26.730248475639018392)
	near("valve current at 10 ms", tp.ValveCurrent(0.01), 39.535201510645914871)
	near("valve's peak", tp.ValveCurrent(tp.ValvePeaksAt), tp.ValvePeak)
	if i := tp.ValveCurrent(tp.ValveBlocks); math.Abs(i) > 1e-13 {
		t.Errorf("valve current where it blocks is %g", i)
	}
}

// TestVanDerPolScalings turns the state of one scaling into that of the other.
func TestVanDerPolScalings(t *testing.T) {
	a, b := tp.VanDerPol().Points[0], tp.VanDerPolUnscaled().Points[0]
	if a.State[0] != b.State[0] || math.Abs(a.State[1]/b.State[1]-1000) > 1e-12 || a.Time*1000 != b.Time {
		t.Errorf("end states %v and %v don't agree", a, b)
	}
}

// TestOverflow shows that the amplifier's exponentials reject.
func TestOverflow(t *testing.T) {
	c := tp.TransistorAmplifier()
	f, jac := make([]float64, 8), make([]float64, len(c.Problem.Pattern))
	for i, bad := range map[int]float64{1: 11, 4: 11, 2: -5, 5: -5} {
		y := append([]float64(nil), c.Initial...)
		y[i] = bad
		if err := c.Problem.F(f, 0, y); !errors.Is(err, solvers.ErrReject) {
			t.Errorf("y%d = %g: F returns %v", i, bad, err)
		}
		if err := c.Problem.Jacobian(jac, 0, y); !errors.Is(err, solvers.ErrReject) {
			t.Errorf("y%d = %g: Jacobian returns %v", i, bad, err)
		}
	}
}

func TestDigits(t *testing.T) {
	c := &tp.Case{Problem: &solvers.Problem{N: 2, Scale: []float64{1, 1e-3}}}
	if d := c.SCD([]float64{1.01, 2}, []float64{1, 2}); math.Abs(d-2) > 1e-9 {
		t.Errorf("SCD is %g, want 2", d)
	}
	if d := c.SCD([]float64{0, 2}, []float64{0, 2}); !math.IsInf(d, 1) {
		t.Errorf("SCD of equal states is %g", d)
	}
	if d := c.SCD([]float64{0, math.NaN()}, []float64{0, 2}); !math.IsNaN(d) {
		t.Errorf("SCD of a state that is not a number is %g", d)
	}
	// |error| / (0.1 * 1e-3 / 0.1 + 0) = 1e-5/1e-3
	if d := c.MESCD([]float64{1, 1e-5}, []float64{1, 0}, solvers.Tolerance{Rel: 0.1, Abs: 0.1}); math.Abs(d-2) > 1e-9 {
		t.Errorf("MESCD is %g, want 2", d)
	}
	c.Measured = []int{1}
	if d := c.SCD([]float64{7, 2}, []float64{1, 2}); !math.IsInf(d, 1) {
		t.Errorf("SCD of the measured component is %g", d)
	}
}
