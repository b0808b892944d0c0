package devicetest

import (
	"math"
	"math/cmplx"

	"islet/solvers/facet"
)

// checkDetail checks that WithDetail keeps setpoints, switch position and the
// receiver, and that the level's steady state is that of the most detailed one.
func checkDetail(t reporter, s *subject) {
	t.Helper()
	detailed, ok := s.b.(facet.Detailed)
	if !ok {
		return
	}
	levels := detailed.Details()
	seen := map[string]bool{}
	for _, level := range levels {
		if level == "" || seen[level] {
			t.Errorf("Details: %q is empty or listed twice", level)
		}
		seen[level] = true
	}
	if _, err := detailed.WithDetail("no such level"); err == nil {
		t.Errorf("WithDetail: accepted an unknown level")
	}

	// Setpoints, switch position, receiver
	b := s.b
	if moving := s.moving(t); moving != nil {
		b = moving
	}
	before := snapshot(b)
	for _, level := range levels {
		c, err := b.(facet.Detailed).WithDetail(level)
		if err != nil {
			t.Errorf("WithDetail(%q): %v", level, err)
			continue
		}
		if got := c.(facet.Detailed).Detail(); got != level {
			t.Errorf("WithDetail(%q): gave a block at level %q", level, got)
		}
		if a, ok := b.(facet.Adjustable); ok {
			for _, time := range []float64{0, rampStart + rampTime/2, 2 * (rampStart + rampTime)} {
				if !sameSetpoints(a.Setpoints(time), c.(facet.Adjustable).Setpoints(time)) {
					t.Errorf("WithDetail(%q): setpoints at %v s not kept", level, time)
				}
			}
		}
		if sw, ok := b.(facet.Switchable); ok && sw.Closed() != c.(facet.Switchable).Closed() {
			t.Errorf("WithDetail(%q): switch position not kept", level)
		}
		// Changing the copy leaves the receiver as it is.
		if a, ok := c.(facet.Adjustable); ok {
			for _, p := range a.Setpoints(9) {
				if err := a.Set(p.Name, 9, s.target(p), 1); err != nil {
					t.Errorf("%v", err)
				}
			}
		}
		if sw, ok := c.(facet.Switchable); ok {
			sw.SetClosed(!sw.Closed())
		}
		if got := b.(facet.Detailed).Detail(); got != s.level {
			t.Errorf("WithDetail(%q): changed the receiver's level to %q", level, got)
		}
		if string(before) != string(snapshot(b)) {
			t.Errorf("WithDetail(%q): the copy shares setpoints or switch with the receiver", level)
		}
	}

	// Steady state
	if s.first {
		return
	}
	full, err := newSubject(s.make, variant{levels[0], true, s.switches, s.closing}, s.o)
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	v := s.steadyVoltages()
	x, f, err := s.steady(v)
	if err != nil {
		t.Errorf("no steady state: %v", err)
		return
	}
	y, g, err := full.steady(v)
	if err != nil {
		t.Errorf("no steady state at level %q: %v", levels[0], err)
		return
	}
	scale, err := s.rowScales(s.b, 0, v, x)
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	scaleFull, err := full.rowScales(full.b, 0, v, y)
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	for k := range s.ports {
		if math.Abs(f[k]-g[k]) > 1e-8*max(scale[k], scaleFull[k]) {
			t.Errorf("steady state: flow at %s is %.12g, at level %q %.12g", s.name(k), f[k], levels[0], g[k])
		}
	}
	for k, u := range s.d.Unknowns {
		for l, w := range full.d.Unknowns {
			if u.Name != w.Name {
				continue
			}
			diff := math.Abs(x[k] - y[l])
			if u.Frame == facet.Angle {
				diff = math.Abs(math.Remainder(x[k]-y[l], 2*math.Pi))
			}
			if diff > 1e-8*max(u.Base, math.Abs(x[k])) {
				t.Errorf("steady state: %s = %.12g, at level %q %.12g", u.Name, x[k], levels[0], y[l])
			}
		}
	}
}

// steadyVoltages returns terminal voltages near the rated ones, or those of
// the options.
func (s *subject) steadyVoltages() []float64 {
	v := floats(s.ports)
	if s.o.Steady != nil {
		for k, z := range s.o.Steady {
			put(v[2*k:], z)
		}
		return v
	}
	ratio, ratioed := s.b.(facet.Ratioed)
	for k, volts := range s.o.Voltages {
		z := cmplx.Rect(1.02*volts, 0.3)
		if ratioed && k > 0 {
			z = ratio.OpenRatio(0, k) * get(v)
		}
		put(v[2*k:], z*cmplx.Rect(1-0.02*float64(k), -0.02*float64(k)))
	}
	return v
}

// steady solves for own unknowns at rest, with terminal voltages v and
// setpoints at time 0, and returns them with [flow | rate].
func (s *subject) steady(v []float64) (x, f []float64, err error) {
	x, f = floats(s.own), floats(s.ports+s.own)
	if g, ok := s.b.(facet.Starter); ok {
		g.Guess(x, 0, v)
	}
	if err := s.solve(s.b, 0, v, x, s.unknowns(true)); err != nil {
		return nil, nil, err
	}
	return x, f, s.eval(s.b, f, 0, v, x)
}

// checkOpenRatio checks that a terminal at the open-circuit voltage that
// follows from another one carries no current in steady state.
func checkOpenRatio(t reporter, s *subject) {
	t.Helper()
	ratio, ok := s.b.(facet.Ratioed)
	if !ok {
		return
	}
	terminals := s.ports / 2
	for from := range terminals {
		for to := range terminals {
			if from == to {
				continue
			}
			v := s.steadyVoltages()
			for other := range terminals { // more than two: all are open but from
				if other != from {
					put(v[2*other:], ratio.OpenRatio(from, other)*get(v[2*from:]))
				}
			}
			x, f, err := s.steady(v)
			if err != nil {
				t.Errorf("OpenRatio(%d, %d): no steady state: %v", from, to, err)
				continue
			}
			scale, err := s.rowScales(s.b, 0, v, x)
			if err != nil {
				t.Errorf("%v", err)
				continue
			}
			// In a model with unknowns the flow's terms show in V / Z, which
			// its row doesn't hold; the flow at another voltage does.
			put(v[2*to:], 1.1*get(v[2*to:]))
			_, g, err := s.steady(v)
			if err != nil {
				t.Errorf("OpenRatio(%d, %d): no steady state: %v", from, to, err)
				continue
			}
			size := scale[2*to] + cmplx.Abs(get(g[2*to:]))
			if i := get(f[2*to:]); cmplx.Abs(i) > 1e-9*size {
				t.Errorf("OpenRatio(%d, %d): flow %v at the terminal that should carry none", from, to, i)
			}
		}
	}
}
