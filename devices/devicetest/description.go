package devicetest

import (
	"math"
	"math/cmplx"
	"slices"
	"strings"

	"islet/solvers/facet"
)

// checkDescription checks that dimensions, description and facets fit.
func checkDescription(t reporter, s *subject) {
	t.Helper()
	d := s.d
	if d.Kind == "" {
		t.Errorf("Describe: no Kind")
	}
	if got := 2 * len(d.Terminals); got != s.ports {
		t.Errorf("Dims gives %d port components, Describe %d terminals", s.ports, len(d.Terminals))
	}
	if len(d.Unknowns) != s.own {
		t.Errorf("Dims gives %d own unknowns, Describe %d", s.own, len(d.Unknowns))
		return
	}
	names := map[string]bool{}
	for k, term := range d.Terminals {
		if term.Name == "" || names[term.Name] {
			t.Errorf("terminal %d: name %q is empty or used twice", k, term.Name)
		}
		names[term.Name] = true
		if term.Flow == facet.FlowUndeclared || term.Flow > facet.FlowInjected {
			t.Errorf("terminal %q: flow kind %d undeclared or unknown", term.Name, term.Flow)
		}
	}
	for k, tie := range d.Ties {
		n := len(d.Terminals)
		if tie.A < 0 || tie.A >= n || tie.B < 0 || tie.B >= n || tie.A == tie.B {
			t.Errorf("tie %d: terminals %d and %d: want two of the %d terminals", k, tie.A, tie.B, n)
		}
		if tie.Ratio == 0 || cmplx.IsInf(tie.Ratio) || cmplx.IsNaN(tie.Ratio) {
			t.Errorf("tie %d: ratio %v: want a finite ratio other than 0", k, tie.Ratio)
		}
	}

	// Mass
	for k, m := range s.portMass {
		if !(m >= 0) || math.IsInf(m, 0) {
			t.Errorf("port component %d: mass %v: want >= 0", k, m)
		}
		if k%2 == 1 && m != s.portMass[k-1] {
			t.Errorf("terminal %d: masses %v and %v of the d and q part differ", k/2, s.portMass[k-1], m)
		}
	}
	for k, m := range s.mass {
		if !(m >= 0) || math.IsInf(m, 0) {
			t.Errorf("unknown %q: mass %v: want >= 0", d.Unknowns[k].Name, m)
		}
	}

	// Unknowns
	names = map[string]bool{}
	for k, u := range d.Unknowns {
		if u.Name == "" || names[u.Name] {
			t.Errorf("unknown %d: name %q is empty or used twice", k, u.Name)
		}
		names[u.Name] = true
		if u.Unit == "" {
			t.Errorf("unknown %q: no unit", u.Name)
		}
		if u.Dynamics == "" {
			t.Errorf("unknown %q: no group of dynamics", u.Name)
		}
		if !(u.Base > 0) || math.IsInf(u.Base, 0) {
			t.Errorf("unknown %q: base %v: want > 0", u.Name, u.Base)
		}
		switch u.Frame {
		case facet.Invariant, facet.Angle:
		case facet.PairD:
			if k+1 >= len(d.Unknowns) || d.Unknowns[k+1].Frame != facet.PairQ {
				t.Errorf("unknown %q: d part of a pair that no q part follows", u.Name)
			} else if s.mass[k] != s.mass[k+1] || u.Base != d.Unknowns[k+1].Base {
				t.Errorf("unknown %q: mass or base differs from the pair's q part", u.Name)
			}
		case facet.PairQ:
			if k == 0 || d.Unknowns[k-1].Frame != facet.PairD {
				t.Errorf("unknown %q: q part of a pair that follows no d part", u.Name)
			}
		default:
			t.Errorf("unknown %q: frame kind %d unknown", u.Name, u.Frame)
		}
	}

	// Facets
	var channels []facet.Channel
	if m, ok := s.b.(facet.Measurer); ok {
		channels = m.Channels()
		for k, c := range channels {
			if c.Name == "" || names[c.Name] {
				t.Errorf("channel %d: name %q is empty or used twice (unknowns count too)", k, c.Name)
			}
			names[c.Name] = true
			if c.Unit == "" || c.Doc == "" {
				t.Errorf("channel %q: no unit or no doc", c.Name)
			}
		}
	}
	if f, ok := s.b.(facet.Former); ok {
		if k := f.AngleUnknown(); k < 0 || k >= s.own || d.Unknowns[k].Frame != facet.Angle {
			t.Errorf("AngleUnknown: %d is not an unknown of frame kind Angle", k)
		}
		if w := f.Weight(); !(w > 0) || math.IsInf(w, 0) {
			t.Errorf("Weight: %v: want > 0", w)
		}
	}
	if f, ok := s.b.(facet.Sized); ok {
		limit, k := f.CurrentLimit()
		if !(limit > 0) {
			t.Errorf("CurrentLimit: %v A: want > 0", limit)
		}
		if k < 0 || k >= len(channels) {
			t.Errorf("CurrentLimit: channel %d of %d", k, len(channels))
		} else if !strings.HasPrefix(channels[k].Unit, "A rms") {
			t.Errorf("CurrentLimit: channel %q is in %q: want A rms", channels[k].Name, channels[k].Unit)
		}
	}
	if g, ok := s.b.(facet.Starter); ok {
		x := floats(s.own)
		g.Guess(x, 0, s.steadyVoltages())
		if !finite(x) {
			t.Errorf("Guess: %v not finite", x)
		}
	}
	if d, ok := s.b.(facet.Detailed); ok && d.Detail() != s.level {
		t.Errorf("Detail: %q after WithDetail(%q)", d.Detail(), s.level)
	}
	if sw, ok := s.b.(facet.Switchable); ok {
		if sw.Closed() != s.closing {
			t.Errorf("Closed: %v after SetClosed(%v)", sw.Closed(), s.closing)
		}
		checkSwitched(t, s, channels)
	}
}

// checkSwitched checks that switching leaves alone what mustn't change in the
// life of a block: dimensions, masses, unknowns, channels.
func checkSwitched(t reporter, s *subject, channels []facet.Channel) {
	t.Helper()
	b, err := s.fresh()
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	b.(facet.Switchable).SetClosed(!s.closing)
	if ports, own := b.Dims(); ports != s.ports || own != s.own {
		t.Errorf("Dims: %d, %d, and %d, %d when switched", s.ports, s.own, ports, own)
		return
	}
	d := b.(facet.Described).Describe()
	if len(d.Terminals) != len(s.d.Terminals) {
		t.Errorf("Describe: %d terminals, %d when switched", len(s.d.Terminals), len(d.Terminals))
	}
	if !slices.Equal(d.Unknowns, s.d.Unknowns) {
		t.Errorf("Describe: unknowns %v, %v when switched", s.d.Unknowns, d.Unknowns)
	}
	port, own := floats(s.ports), floats(s.own)
	b.Mass(port, own)
	if !sameBits(port, s.portMass) || !sameBits(own, s.mass) {
		t.Errorf("Mass: %v, %v, and %v, %v when switched", s.portMass, s.mass, port, own)
	}
	if m, ok := b.(facet.Measurer); ok && !slices.Equal(m.Channels(), channels) {
		t.Errorf("Channels: %v, %v when switched", channels, m.Channels())
	}
}
