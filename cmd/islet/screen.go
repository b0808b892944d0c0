package main

import (
	"context"
	"fmt"
	"io"
	"math"
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
}

func screenFlags(c *call) {
	caseFlags(c)
	c.fs.StringVar(&c.screen.confirm, "confirm", devices.PhaseOnly, "confirm by a simulation at this `LEVEL` of detail: phase only, primary only, ..., full, or none")
	c.fs.Float64Var(&c.screen.at, "at", 0, "screen the state after a run to this time, `s`, its events included (default: the operating point)")
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
	sim, err := k.Start(&engine.Options{Record: []string{}}, base...)
	if err != nil {
		return startError(err)
	}
	if c.screen.at > 0 {
		if _, err := sim.Run(ctx, c.screen.at); err != nil {
			return err
		}
	}
	n, err := k.Oscillators(sim)
	if err != nil {
		return err
	}
	fmt.Fprintf(c.stdout, "%s: %s\n", k.Name, k.Title)
	if n.Branch != "" {
		fmt.Fprintf(c.stdout, "as phase oscillators at t = %.4g s: D dtheta/dt = P* - sum a sin(theta - theta'); resistance is left out but for its losses (R/X up to %.3g, %s)\n", sim.Time(), n.ResistanceToReactance, n.Branch)
	}
	if n.ResistanceToReactance > 1 {
		fmt.Fprintf(c.stdout, "CAUTION: where R exceeds X, active power moves with voltages as well as with angles; take angles and margins as rough\n")
	}
	for _, s := range n.Notes {
		fmt.Fprintf(c.stdout, "note: %s\n", s)
	}
	screened := 0
	given := make(map[string]float64)
	speed := make(map[string]float64)
	for _, island := range n.Islands() {
		r, err := screen.Screen(island, nil)
		if err != nil {
			fmt.Fprintf(c.stdout, "\nisland of %s: %s\n", island.Nodes[0].Name, strings.TrimPrefix(err.Error(), "screen: "))
			continue
		}
		screened++
		reportScreen(c.stdout, island, r)
		for _, s := range r.Sources {
			given[s.Name], speed[s.Name] = s.Given, r.Speed
		}
	}
	if c.screen.confirm != "none" && screened > 0 {
		if c.screen.at > 0 {
			fmt.Fprintf(c.stdout, "\nconfirmed at the operating point alone: leave --at out\n")
		} else if err := confirmScreen(ctx, c, k, base, given, speed); err != nil {
			return err
		}
	}
	fmt.Fprintln(c.stdout, "\nResults support, and never replace, local codes, utility requirements and a licensed engineer's judgement.")
	return nil
}

// hertz of a speed.
func hertz(speed float64) float64 { return speed / (2 * math.Pi) }

// kilowatts writes a power.
func kilowatts(p float64) string { return decimal("%.3f", p/1e3) }

func reportScreen(w io.Writer, n *screen.Network, r *screen.Result) {
	shape := "with loops"
	if r.Tree {
		shape = "a tree"
	}
	fmt.Fprintf(w, "\nisland of %s: %d sources, %d nodes, %d branches, %s\n", n.Nodes[0].Name, len(r.Sources), len(n.Nodes), len(n.Edges), shape)
	line := func(what, format string, a ...any) {
		fmt.Fprintf(w, "  %-12s %s\n", what, fmt.Sprintf(format, a...))
	}
	if r.InStep {
		line("in step", "yes, at %.6f Hz (closed form)", hertz(r.Speed))
	} else {
		line("in step", "NO: no state in which all turn alike with less than 90 degrees across every branch; by the closed form it would be at %.6f Hz", hertz(r.Speed))
	}
	if r.Tree {
		line("decided by", "%s, which carries %.4g of what it can; in a tree that is exact", r.Critical, r.Loading)
	} else if r.Loading < 1 {
		line("decided by", "the norm of B' L^+ P over branches, %.4g < 1 (at %s): angles below %.4g degrees", r.Loading, r.Critical, r.Certified*180/math.Pi)
	} else {
		line("decided by", "Newton's method; the norm of B' L^+ P over branches, %.4g (at %s), promises nothing", r.Loading, r.Critical)
	}
	if r.InStep {
		line("angles", "up to %.4g degrees across a branch", r.Widest*180/math.Pi)
	}
	switch {
	case math.IsInf(r.MarginLost, 1):
		line("margin", "nothing is transferred")
	case r.Tree:
		line("margin", "step is lost when all transfers are %.6g times as large", r.MarginLost)
	default:
		line("margin", "90 degrees across a branch when all transfers are %.6g times as large; step is lost at %.6g times", r.Margin90, r.MarginLost)
	}
	droops := 0 // sources whose speed gives way
	for _, s := range r.Sources {
		if !math.IsInf(s.D, 1) {
			droops++
		}
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
	fmt.Fprintf(w, "  %-22s %12s %12s %12s %9s\n", "source", "D kW/Hz", "set kW", "gives kW", "of rating")
	for _, s := range r.Sources {
		d, set, share := "holds speed", "", ""
		if !math.IsInf(s.D, 1) {
			d, set = fmt.Sprintf("%.4g", s.D*2*math.Pi/1e3), kilowatts(s.P)
			if s.Rating > 0 {
				share = fmt.Sprintf("%.1f %%", 100*s.Given/s.Rating)
			}
		}
		fmt.Fprintf(w, "  %-22s %12s %12s %12s %9s\n", s.Name, d, set, kilowatts(s.Given), share)
	}
}

// confirmation of the screen: how long after the push, and how close in step.
const (
	confirmPush   = 0.1  // s
	confirmEnd    = 4.0  // s
	confirmInStep = 5e-3 // Hz
)

// confirmScreen runs the case at a level of detail from its operating point, without
// its events but with a push, and tells whether the sources come back in step, at
// which frequency and sharing.
func confirmScreen(ctx context.Context, c *call, k *cases.Case, base []cases.DetailRule, given, speed map[string]float64) error {
	level := c.screen.confirm
	all := append([]cases.DetailRule(nil), base...)
	offered := level == devices.Full
	has := make(map[string]bool)
	for _, levels := range k.Details() {
		for _, l := range levels {
			offered = offered || l == level
			has[l] = true
		}
	}
	if !offered {
		return fmt.Errorf("%w: --confirm %q: no device of the case offers that level", errUsage, level)
	}
	if level != devices.Full {
		if (level == devices.PhaseOnly || level == devices.PrimaryOnly) && has[networkLevel] {
			all = append(all, cases.DetailRule{Pattern: "*", Level: networkLevel})
		}
		all = append(all, cases.DetailRule{Pattern: "*", Level: level})
	}
	sys, err := k.Build(all...)
	if err != nil {
		return fmt.Errorf("%w: %w", errInput, err)
	}
	var record []string
	pushed := ""
	for name := range given {
		record = append(record, name+".p", name+".frequency")
		if k.Kind(name) == "grid-forming inverter" && (pushed == "" || name < pushed) {
			pushed = name
		}
	}
	sim, err := engine.Start(sys, &engine.Options{Record: record})
	if err != nil {
		return fmt.Errorf("the simulation at %q: %w", level, err)
	}
	how := ""
	if d, ok := sys.Device(pushed).(*devices.GridForming); ok {
		p := d.Params()
		set := p.P + 0.05*p.Rating
		if err := sim.At(0.1, engine.Set(pushed, "p", set)); err != nil {
			return err
		}
		if err := sim.At(0.1+confirmPush, engine.Set(pushed, "p", p.P)); err != nil {
			return err
		}
		how = fmt.Sprintf(", %s pushed by 5 %% of its rating for %g s", pushed, confirmPush)
	}
	if _, err := sim.Run(ctx, confirmEnd); err != nil {
		fmt.Fprintf(c.stdout, "\nsimulation at %q%s: NOT CONFIRMED: %v\n", level, how, err)
		return nil
	}
	inStep, worstF, worstP := true, 0.0, 0.0
	at := ""
	for name, p := range given {
		f, err := sim.Value(name + ".frequency")
		if err != nil {
			return err
		}
		q, err := sim.Value(name + ".p")
		if err != nil {
			return err
		}
		worstF = math.Max(worstF, math.Abs(f-hertz(speed[name])))
		inStep = inStep && math.Abs(f-hertz(speed[name])) <= confirmInStep
		if d := math.Abs(q - p); d >= worstP {
			worstP, at = d, name
		}
	}
	verdict := "CONFIRMED: in step"
	if !inStep {
		verdict = "NOT CONFIRMED"
	}
	fmt.Fprintf(c.stdout, "\nsimulation at %q, %g s%s: %s; frequency within %.2g Hz of the screen's, powers at the terminals within %.3g kW (%s)\n", level, confirmEnd, how, verdict, worstF, worstP/1e3, at)
	return nil
}
