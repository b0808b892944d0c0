package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"islet/cases"
	"islet/devices"
	"islet/engine"
	"islet/engine/screen"
)

// screenOptions are the options of islet screen.
type screenOptions struct {
	confirm string
	at      float64
	rated   bool
}

func screenFlags(c *call) {
	caseFlags(c)
	c.fs.StringVar(&c.screen.confirm, "confirm", devices.PhaseOnly, "confirm by a simulation at this `LEVEL` of detail: phase only, primary only, ..., full, or none")
	c.fs.Float64Var(&c.screen.at, "at", 0, "screen the state after a run to this time, `s`, its events included (default: the operating point)")
	c.fs.BoolVar(&c.screen.rated, "rated", false, "screen at rated voltages and powers, without an operating point (done anyhow where there is none)")
}

func cmdScreen(ctx context.Context, c *call) error {
	k, err := c.openCase()
	if err != nil {
		return err
	}
	base, err := rules(c.details)
	if err != nil {
		return err
	}
	if !(c.screen.at >= 0) || math.IsInf(c.screen.at, 0) {
		return fmt.Errorf("%w: --at %g: want a time in s", errUsage, c.screen.at)
	}
	if c.screen.at > 0 && c.screen.rated {
		return fmt.Errorf("%w: --at and --rated exclude each other", errUsage)
	}
	level, err := confirmLevel(k, c.screen.confirm)
	if err != nil {
		return err
	}
	n, at, err := oscillators(ctx, c, k, base)
	if err != nil {
		return err
	}
	fmt.Fprintf(c.stdout, "%s: %s\n", k.Name, k.Title)
	shares := "loads, followers and losses"
	if n.Rated {
		shares = "loads and followers, without losses"
	}
	fmt.Fprintf(c.stdout, `
Sources as phase oscillators, %s, all buses eliminated:
  D dtheta/dt = set power + D (nominal speed - speed) - P,  P = share + sum of a sin(theta - theta') over the other sources
Each source holds the voltage behind its impedance; its share is of %s.
Left out are changes of voltage and of shares, the loops within inverters, and resistance as far as it couples sources.
`, at, shares)
	if n.ConductanceAt != "" {
		fmt.Fprintf(c.stdout, "Resistance couples up to %.2g of what reactance does, at %s; R/X of branches up to %.3g, %s.\n", n.Conductance, n.ConductanceAt, n.ResistanceToReactance, n.Branch)
	}
	if n.Conductance > 1 {
		fmt.Fprintf(c.stdout, "CAUTION: where resistance couples more than reactance, power moves with voltages rather than with angles;\ntake angles and margins as rough.\n")
	}
	for _, s := range n.Notes {
		fmt.Fprintf(c.stdout, "note: %s\n", s)
	}
	several := false // sources in one island
	p := prediction{inStep: true, given: make(map[string]float64), speed: make(map[string]float64)}
	for _, island := range n.Islands() {
		r, err := screen.Screen(island, nil)
		if err != nil {
			fmt.Fprintf(c.stdout, "\nisland of %s: %s\n", island.Nodes[0].Name, strings.TrimPrefix(err.Error(), "screen: "))
			continue
		}
		reportScreen(c.stdout, island, r)
		p.inStep = p.inStep && r.InStep
		several = several || len(r.Sources) > 1
		for _, s := range r.Sources {
			p.names = append(p.names, s.Name)
			p.given[s.Name], p.speed[s.Name] = s.Given, r.Speed
		}
	}
	switch {
	case level == "none":
	case !several:
		fmt.Fprintf(c.stdout, "\nNo simulation: there is nothing to confirm.\n")
	case c.screen.at > 0:
		fmt.Fprintf(c.stdout, "\nNo simulation: it starts at the operating point; leave --at out to have it.\n")
	default:
		if err := confirmScreen(ctx, c, k, base, level, p); err != nil {
			return err
		}
	}
	fmt.Fprintln(c.stdout, "\nResults support, and never replace, local codes, utility requirements and a licensed engineer's judgement.")
	return nil
}

// count writes how many there are.
func count(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}

// oscillators reduces the case, at rated voltages if asked or where there is no
// operating point, and tells at which state.
func oscillators(ctx context.Context, c *call, k *cases.Case, base []cases.DetailRule) (n *cases.OscillatorNetwork, at string, err error) {
	at = "at rated voltages and powers"
	if !c.screen.rated {
		sim, err := k.Start(&engine.Options{Record: []string{}}, base...)
		var none *engine.OperatingPointError
		switch {
		case err == nil:
			if c.screen.at > 0 {
				if _, err := sim.Run(ctx, c.screen.at); err != nil {
					return nil, "", startError(err)
				}
			}
			at = "at the operating point"
			if c.screen.at > 0 {
				at = fmt.Sprintf("at t = %.4g s", sim.Time())
			}
			n, err = k.Oscillators(sim)
			return n, at, err
		case !errors.As(err, &none):
			return nil, "", startError(err)
		case c.screen.at > 0:
			return nil, "", err
		}
		at = "at rated values, since no operating point was found"
	}
	sys, err := k.Build(base...)
	if err != nil {
		return nil, "", fmt.Errorf("%w: %w", errInput, err)
	}
	n, err = k.RatedOscillators(sys)
	return n, at, err
}

// confirmLevel checks the level of detail to confirm at. Where no device offers the
// default one, it is full.
func confirmLevel(k *cases.Case, level string) (string, error) {
	if level == "none" || level == devices.Full {
		return level, nil
	}
	for _, levels := range k.Details() {
		if slices.Contains(levels, level) {
			return level, nil
		}
	}
	if level == devices.PhaseOnly {
		return devices.Full, nil
	}
	return "", fmt.Errorf("%w: --confirm %q: no device of the case offers that level", errUsage, level)
}

// hertz of a speed.
func hertz(speed float64) float64 { return speed / (2 * math.Pi) }

// kilowatts writes a power.
func kilowatts(p float64) string { return decimal("%.3f", p/1e3) }

// shownSources is how many sources a table of the page holds.
const shownSources = 12

// more says how many lines were left out.
func more(w io.Writer, n int) {
	if n > shownSources {
		fmt.Fprintf(w, "  and %d more\n", n-shownSources)
	}
}

func reportScreen(w io.Writer, n *screen.Network, r *screen.Result) {
	if len(r.Sources) == 1 {
		fmt.Fprintf(w, "\nisland of %s: the only source, nothing to be in step with; %.6f Hz, %s kW\n", r.Sources[0].Name, hertz(r.Speed), kilowatts(r.Sources[0].Given))
		return
	}
	shape := "with loops"
	if r.Tree {
		shape = "a tree"
	}
	fmt.Fprintf(w, "\nisland of %s: %d sources, %s, %s\n", n.Nodes[0].Name, len(r.Sources), count(len(n.Edges), "coupling"), shape)
	line := func(what, format string, a ...any) {
		fmt.Fprintf(w, "  %-12s %s\n", what, fmt.Sprintf(format, a...))
	}
	if r.InStep {
		line("in step", "yes, at %.6f Hz (closed form)", hertz(r.Speed))
	} else {
		line("in step", "NO: no state found in which all turn alike with less than 90 degrees across every coupling; it would be at %.6f Hz", hertz(r.Speed))
	}
	switch {
	case r.Tree:
		line("decided by", "%s, which must carry %.4g of the %.5g kW it can; exact for a tree", r.Critical, r.Loading, r.Capacity/1e3)
	case r.Loading < 1:
		line("decided by", "the published norm condition, %.4g of 1 (%s): angles below %.4g degrees; and Newton's method", r.Loading, r.Critical, r.Certified*180/math.Pi)
	default:
		line("decided by", "Newton's method; the published norm condition, %.4g where it must be below 1 (%s), promises nothing", r.Loading, r.Critical)
	}
	if r.InStep {
		line("angles", "up to %.4g degrees across a coupling", r.Widest*180/math.Pi)
	}
	switch {
	case math.IsInf(r.MarginLost, 1):
		line("margin", "none needed: nothing is transferred beyond shares")
	case r.Tree:
		line("margin", "step is lost when all transfers are %.6g times as large", r.MarginLost)
	case !r.InStep:
		line("margin", "step is lost at %.6g times these transfers", r.MarginLost)
	default:
		line("margin", "90 degrees across a coupling when all transfers are %.6g times as large; step is lost at %.6g times", r.Margin90, r.MarginLost)
	}
	switch m := r.Modes; {
	case len(m) == 1:
		line("settling", "phases alone: mode %.4g 1/s", m[0])
	case len(m) > 1:
		line("settling", "phases alone: slowest mode %.4g 1/s, fastest %.4g 1/s", m[0], m[len(m)-1])
	}
	droops := 0 // sources whose speed gives way
	for _, s := range r.Sources {
		if !math.IsInf(s.D, 1) {
			droops++
		}
	}
	if !r.InStep {
		return // nobody gives or shares anything that lasts
	}
	if droops == 0 {
		line("references", "none: %s holds the speed and takes up the balance", r.Sources[0].Name)
	} else if r.Tracked {
		line("references", "every source gives what is set")
	} else {
		line("references", "not tracked: %s", r.NotTracked)
	}
	switch {
	case droops < 2:
	case r.Proportional:
		line("sharing", "what moves is shared in proportion to rating")
	default:
		line("sharing", "what moves is shared in proportion to D, which isn't in proportion to rating")
	}
	over := 0
	for _, s := range r.Sources {
		if !math.IsInf(s.D, 1) && s.Rating > 0 && math.Abs(s.Given) > s.Rating {
			over++
		}
	}
	if over > 0 {
		line("ratings", "EXCEEDED by the active power of %d of %d sources", over, len(r.Sources))
	}
	fmt.Fprintf(w, "  %-22s %12s %12s %12s %12s %9s\n", "source", "D kW/Hz", "set kW", "share kW", "gives kW", "of rating")
	for k, s := range r.Sources {
		if k == shownSources {
			more(w, len(r.Sources))
			break
		}
		d, set, of := "holds speed", "", ""
		if !math.IsInf(s.D, 1) {
			d, set = fmt.Sprintf("%.4g", s.D*2*math.Pi/1e3), kilowatts(s.P)
			if s.Rating > 0 {
				of = decimal("%.1f", 100*s.Given/s.Rating) + " %"
			}
		}
		fmt.Fprintf(w, "  %-22s %12s %12s %12s %12s %9s\n", s.Name, d, set, kilowatts(s.Share), kilowatts(s.Given), of)
	}
}

// prediction is what the screen says of all sources.
type prediction struct {
	inStep       bool
	names        []string
	given, speed map[string]float64 // W, rad/s
}

// confirmation of the screen: a push, its length, the end of the run, and the time at
// its end in which sources must be in step within so much. All are our choice.
const (
	confirmStart  = 0.1  // s
	confirmPush   = 0.1  // s
	confirmEnd    = 4.0  // s
	confirmWindow = 1.0  // s
	confirmInStep = 5e-3 // Hz
	confirmGrowth = 1e-4 // Hz, from which growth counts
)

// confirmScreen runs the case at a level of detail from its operating point, without
// its events but with a push, and tells whether the sources come back in step, at
// which frequency and sharing.
func confirmScreen(ctx context.Context, c *call, k *cases.Case, base []cases.DetailRule, level string, p prediction) error {
	all := append([]cases.DetailRule(nil), base...)
	if level != devices.Full {
		for _, levels := range k.Details() {
			if slices.Contains(levels, networkLevel) && (level == devices.PhaseOnly || level == devices.PrimaryOnly) {
				all = append(all, cases.DetailRule{Pattern: "*", Level: networkLevel})
				break
			}
		}
		all = append(all, cases.DetailRule{Pattern: "*", Level: level})
	}
	sys, err := k.Build(all...)
	if err != nil {
		return fmt.Errorf("%w: %w", errInput, err)
	}
	var record []string
	pushed := ""
	for _, name := range p.names {
		record = append(record, name+".p", name+".p_control", name+".frequency")
		if k.Kind(name) == "grid-forming inverter" && pushed == "" {
			pushed = name
		}
	}
	record = slices.DeleteFunc(record, func(ch string) bool {
		return strings.HasSuffix(ch, ".p_control") && k.Kind(strings.TrimSuffix(ch, ".p_control")) != "grid-forming inverter"
	})
	agree := func(stepKept bool) string {
		if stepKept == p.inStep {
			return "CONFIRMED"
		}
		return "NOT CONFIRMED"
	}
	fmt.Fprintf(c.stdout, "\nSimulation, detail %q", level)
	sim, err := engine.Start(sys, &engine.Options{Record: record, Sample: 1e-3})
	if err != nil {
		var none *engine.OperatingPointError
		if !errors.As(err, &none) {
			fmt.Fprintln(c.stdout)
			return fmt.Errorf("the simulation at %q: %w", level, err)
		}
		fmt.Fprintf(c.stdout, "\n  %-12s %s: it finds no steady state\n", "verdict", agree(false))
		return nil
	}
	how := ""
	if d, ok := sys.Device(pushed).(*devices.GridForming); ok {
		q := d.Params()
		if err := sim.At(confirmStart, engine.Set(pushed, "p", q.P+0.05*q.Rating)); err != nil {
			return err
		}
		if err := sim.At(confirmStart+confirmPush, engine.Set(pushed, "p", q.P)); err != nil {
			return err
		}
		how = fmt.Sprintf(", set power of %s up by 5 %% of its rating for %g s", pushed, confirmPush)
	}
	fmt.Fprintf(c.stdout, ", %g s from the operating point%s\n", confirmEnd, how)
	line := func(what, format string, a ...any) {
		fmt.Fprintf(c.stdout, "  %-12s %s\n", what, fmt.Sprintf(format, a...))
	}
	if _, err := sim.Run(ctx, confirmEnd); err != nil {
		if ctx.Err() != nil {
			return err
		}
		line("verdict", "%s: the run ends, %s", agree(false), err)
		return nil
	}
	s := settled(sim.Trace(), p)
	switch {
	case s.late > confirmInStep:
		line("verdict", "%s: out of step or still swinging, by up to %.3g Hz in the last %g s (%s)", agree(false), s.late, confirmWindow, s.at)
	case s.late > confirmGrowth && s.late > s.early:
		line("verdict", "%s: a swing grows, from %.2g to %.2g Hz within %g s (%s)", agree(false), s.early, s.late, confirmWindow, s.at)
	default:
		line("verdict", "%s: all sources are in step, within %s mHz in the last %g s", agree(true), decimal("%.3f", 1e3*s.late), confirmWindow)
	}
	line("frequency", "%.6f Hz, the screen says %.6f Hz (%s): %s mHz apart", s.frequency[s.furthest], hertz(p.speed[s.furthest]), s.furthest, decimal("%.3f", 1e3*math.Abs(s.frequency[s.furthest]-hertz(p.speed[s.furthest]))))
	fmt.Fprintf(c.stdout, "  %-22s %12s %12s %12s %12s\n", "source", "Hz", "gives kW", "screen kW", "apart kW")
	for i, name := range p.names {
		if i == shownSources {
			more(c.stdout, len(p.names))
			break
		}
		fmt.Fprintf(c.stdout, "  %-22s %12.6f %12s %12s %12s\n", name, s.frequency[name], kilowatts(s.power[name]), kilowatts(p.given[name]), kilowatts(math.Abs(s.power[name]-p.given[name])))
	}
	return nil
}

// settlement is what a run shows at its end.
type settlement struct {
	early, late      float64            // largest deviation of a frequency from its mean in two windows, Hz
	at               string             // the source of the latter
	frequency, power map[string]float64 // means in the last window, Hz and W
	furthest         string             // the source whose frequency differs most from the screen's
}

func settled(tr *engine.Trace, p prediction) settlement {
	s := settlement{frequency: make(map[string]float64), power: make(map[string]float64)}
	channel := make(map[string]int)
	for i, ch := range tr.Channels {
		channel[ch.Name] = i
	}
	mean := func(v []float64, from, to float64) (m float64) {
		n := 0
		for k, t := range tr.Time {
			if t >= from && t <= to {
				m += v[k]
				n++
			}
		}
		return m / float64(n)
	}
	// All sources that turn alike have one mean.
	common := make(map[float64][]string)
	for _, name := range p.names {
		common[p.speed[name]] = append(common[p.speed[name]], name)
	}
	end := tr.Time[len(tr.Time)-1]
	for _, names := range common {
		for w := range 2 {
			to := end - float64(w)*confirmWindow
			from := to - confirmWindow
			all := 0.0
			for _, name := range names {
				all += mean(tr.Values(channel[name+".frequency"]), from, to) / float64(len(names))
			}
			for _, name := range names {
				for k, f := range tr.Values(channel[name+".frequency"]) {
					d := math.Abs(f - all)
					if t := tr.Time[k]; t < from || t > to {
						continue
					}
					if w == 1 {
						s.early = math.Max(s.early, d)
					} else if d > s.late || s.at == "" {
						s.late, s.at = d, name
					}
				}
			}
		}
	}
	worst := -1.0
	for _, name := range p.names {
		power := name + ".p"
		if _, ok := channel[name+".p_control"]; ok {
			power = name + ".p_control" // what the screen's powers are
		}
		s.power[name] = mean(tr.Values(channel[power]), end-confirmWindow, end)
		s.frequency[name] = mean(tr.Values(channel[name+".frequency"]), end-confirmWindow, end)
		if d := math.Abs(s.frequency[name] - hertz(p.speed[name])); d > worst {
			worst, s.furthest = d, name
		}
	}
	return s
}
