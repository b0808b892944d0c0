package modes

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"sort"

	"islet/engine"
)

// Builder makes the simulation of a system, at its operating point, for a
// value of a parameter. It builds the system anew each time.
type Builder func(value float64) (*engine.Simulation, error)

// report analyses the system for a value; only modes are of interest.
func (build Builder) report(value float64, o *Options) (*Report, error) {
	m, err := build(value)
	if err != nil {
		return nil, err
	}
	l, err := m.Linearise(&engine.LinearOptions{Inputs: []string{}, Outputs: []string{}})
	if err != nil {
		return nil, err
	}
	return Analyse(l, o)
}

// Locus is a root locus: the modes over a parameter.
type Locus struct {
	Points []LocusPoint
	// Branches follow eigenvalues from point to point by nearness: a value a
	// point, cmplx.NaN() where the branch isn't there.
	Branches [][]complex128
	// Edges are the critical values between points, once FindEdges has been
	// called.
	Edges []*Critical
}

// LocusPoint is the analysis for one value of the parameter.
type LocusPoint struct {
	Value  float64
	Report *Report // nil with an error
	Err    error   // there is no operating point, or no analysis of it
}

// Trace analyses the system for each value. A value without an operating point
// leaves a gap. The error is ctx's, or tells that no value has one.
func Trace(ctx context.Context, values []float64, build Builder, o *Options) (*Locus, error) {
	l := &Locus{}
	any := false
	var errs []error
	for _, v := range values {
		if err := ctx.Err(); err != nil {
			return l, fmt.Errorf("modes: root locus stopped at %g: %w", v, err)
		}
		r, err := build.report(v, o)
		any = any || err == nil
		if err != nil {
			errs = append(errs, fmt.Errorf("modes: at %g: %w", v, err))
		}
		l.Points = append(l.Points, LocusPoint{v, r, err})
	}
	l.branch()
	if !any {
		return l, errors.Join(append(errs, fmt.Errorf("modes: no operating point for any of %d values", len(values)))...)
	}
	return l, nil
}

// FindEdges finds the critical value between every two neighbouring points
// whose verdicts differ. build and o are those of Trace.
func (l *Locus) FindEdges(ctx context.Context, build Builder, o *Options) error {
	l.Edges = nil
	co := &CriticalOptions{}
	if o != nil {
		co.Modes = *o
	}
	stable := func(p LocusPoint) bool { return p.Report != nil && p.Report.Stable }
	for i := 1; i < len(l.Points); i++ {
		a, b := l.Points[i-1], l.Points[i]
		if stable(a) == stable(b) {
			continue
		}
		c, err := FindCritical(ctx, a.Value, b.Value, build, co)
		if err != nil {
			return err
		}
		l.Edges = append(l.Edges, c)
	}
	return nil
}

// branch connects eigenvalues, the nearest first.
func (l *Locus) branch() {
	type link struct {
		branch, mode int
		distance     float64
	}
	last := []complex128{} // by branch: the last value it had
	for k, p := range l.Points {
		for b := range l.Branches {
			l.Branches[b] = append(l.Branches[b], cmplx.NaN())
		}
		if p.Report == nil {
			continue
		}
		var links []link
		for b, z := range last {
			for m := range p.Report.Modes {
				w := p.Report.Modes[m].Value
				links = append(links, link{b, m, cmplx.Abs(z-w) / (1 + math.Max(cmplx.Abs(z), cmplx.Abs(w)))})
			}
		}
		sort.SliceStable(links, func(i, j int) bool { return links[i].distance < links[j].distance })
		taken := make([]bool, len(last))
		placed := make([]bool, len(p.Report.Modes))
		for _, x := range links {
			if taken[x.branch] || placed[x.mode] {
				continue
			}
			taken[x.branch], placed[x.mode] = true, true
			l.Branches[x.branch][k] = p.Report.Modes[x.mode].Value
			last[x.branch] = p.Report.Modes[x.mode].Value
		}
		for m, done := range placed {
			if done {
				continue
			}
			b := make([]complex128, k+1)
			for i := range b {
				b[i] = cmplx.NaN()
			}
			b[k] = p.Report.Modes[m].Value
			l.Branches = append(l.Branches, b)
			last = append(last, b[k])
		}
	}
}

// Critical is the edge of stability over a parameter.
type Critical struct {
	Value float64
	// Stable and Beyond are the ends of the bracket found.
	Stable, Beyond float64
	// Mode is the one that crosses: the rightmost beyond the edge, or at its
	// stable side where there is no operating point beyond.
	Mode Mode
	// Report is the analysis that Mode belongs to.
	Report *Report
	// Lost tells why there is no operating point beyond the edge; nil if a
	// mode crosses there.
	Lost        error
	Evaluations int
}

// CriticalOptions steer FindCritical. nil, or the zero value, gives the stated
// defaults.
type CriticalOptions struct {
	// Precision is the width of the bracket to reach, relative to the value
	// or, if that is less, to 1e-6 of the interval searched; 0 means 1e-7.
	Precision float64
	Modes     Options
}

// FindCritical finds by bisection the value of the parameter at which the
// system ceases to be stable, between a value at which it is stable and one at
// which it isn't, in either order. A value without an operating point counts
// as not stable; if the edge is where it is lost, Critical.Lost says so. The
// error tells which end doesn't fit, or is ctx's.
func FindCritical(ctx context.Context, from, to float64, build Builder, o *CriticalOptions) (*Critical, error) {
	if o == nil {
		o = &CriticalOptions{}
	}
	precision := o.Precision
	if precision == 0 {
		precision = 1e-7
	}
	if !(precision > 0 && precision < 1) || math.IsNaN(from-to) || math.IsInf(from-to, 0) {
		return nil, fmt.Errorf("modes: critical value between %g and %g to %g, want finite ends and a precision between 0 and 1", from, to, o.Precision)
	}
	c := &Critical{}
	type side struct {
		value  float64
		report *Report
		err    error
	}
	at := func(v float64) (side, error) {
		if err := ctx.Err(); err != nil {
			return side{}, fmt.Errorf("modes: search for the critical value stopped at %g: %w", v, err)
		}
		c.Evaluations++
		r, err := build.report(v, &o.Modes)
		return side{v, r, err}, nil
	}
	stable := func(s side) bool { return s.err == nil && s.report.Stable }
	in, err := at(from)
	if err != nil {
		return nil, err
	}
	out, err := at(to)
	if err != nil {
		return nil, err
	}
	if !stable(in) {
		in, out = out, in
	}
	describe := func(s side) string {
		if s.err != nil {
			return fmt.Sprintf("at %g there is no operating point (%v)", s.value, s.err)
		}
		if m := s.report.Rightmost(); m != nil {
			return fmt.Sprintf("at %g the rightmost is %s", s.value, m)
		}
		return fmt.Sprintf("at %g there is no mode", s.value)
	}
	switch {
	case !stable(in):
		return nil, fmt.Errorf("modes: the system is stable at neither end: %s, %s", describe(in), describe(out))
	case stable(out):
		return nil, fmt.Errorf("modes: the system is stable at both ends: %s, %s", describe(in), describe(out))
	}
	least := 1e-6 * math.Abs(to-from) // an edge at zero has no digits of its own
	for math.Abs(out.value-in.value) > precision*max(math.Abs(in.value), math.Abs(out.value), least) {
		v := in.value + (out.value-in.value)/2
		if v == in.value || v == out.value {
			break
		}
		s, err := at(v)
		if err != nil {
			return nil, err
		}
		if stable(s) {
			in = s
		} else {
			out = s
		}
	}
	c.Stable, c.Beyond = in.value, out.value
	if out.err != nil {
		c.Value, c.Lost, c.Report = in.value, out.err, in.report
	} else {
		c.Value, c.Report = out.value, out.report
		// A straight line between the ends of so small a bracket.
		if a, b := in.report.Rightmost(), out.report.Rightmost(); a != nil && b != nil {
			if x, y := real(a.Value), real(b.Value); y > x {
				c.Value = in.value - x/(y-x)*(out.value-in.value)
			}
		}
	}
	if m := c.Report.Rightmost(); m != nil {
		c.Mode = *m
	}
	return c, nil
}
