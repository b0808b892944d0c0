package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"

	"islet/cases"
	"islet/engine"
	"islet/engine/compare"
)

// shrinkOptions are the options of islet shrink.
type shrinkOptions struct {
	keep           list
	loads          bool
	plainBranches  bool
	noConfirmation bool
	aggregate      bool
	spread         float64 // %
}

func shrinkFlags(c *call) {
	c.fs.Var(&c.sets, "set", "`PATH=VALUE`: override a value of the case first; may be repeated")
	c.fs.Var(&c.shrink.keep, "keep", "`BUS,...`: buses to keep, all others go if they can; may be repeated (default: every bus goes that can)")
	c.fs.BoolVar(&c.shrink.loads, "loads-as-impedances", false, "take loads of resistance and inductance into the reduced network, so that their buses can go")
	c.fs.BoolVar(&c.shrink.plainBranches, "plain-branches", false, "write plain lines that are right at the nominal frequency, in place of the exact form; the error is shown")
	c.fs.BoolVar(&c.shrink.aggregate, "aggregate", false, "first put inverters in parallel that are the same per unit of their ratings together, one a bus")
	c.fs.Float64Var(&c.shrink.spread, "aggregate-tolerance", 0, "with --aggregate, accept parameters that deviate by so many `%` from the mean per unit; the error is measured (default: none)")
	c.fs.StringVar(&c.out, "out", "", "write the reduced case to `FILE`; - for standard output without the report")
	c.fs.BoolVar(&c.shrink.noConfirmation, "no-run", false, "don't run both cases to compare them")
	c.fs.Float64Var(&c.until, "until", 0, "end of the runs compared, `s` (default: the case's)")
	c.fs.Float64Var(&c.tolerance, "tolerance", 0, "accuracy asked of the waveforms compared, relative to their range (default: the case's, or 1e-6)")
	c.fs.BoolVar(&c.quiet, "quiet", false, "no progress")
	c.fs.BoolVar(&c.verbose, "verbose", false, "tell more on standard error")
}

func cmdShrink(ctx context.Context, c *call) error {
	full, err := c.openCase()
	if err != nil {
		return err
	}
	if c.until < 0 {
		return fmt.Errorf("%w: --until %g: want a positive time", errUsage, c.until)
	}
	name, source, err := cases.ReadSource(c.args[0])
	if err != nil {
		return fmt.Errorf("%w: %w", errInput, err)
	}
	ov, err := c.overrides()
	if err != nil {
		return err
	}
	o := cases.ShrinkOptions{LoadsAsImpedances: c.shrink.loads, PlainBranches: c.shrink.plainBranches}
	for _, k := range c.shrink.keep {
		for _, b := range strings.Split(k, ",") {
			if b = strings.TrimSpace(b); b != "" {
				o.Keep = append(o.Keep, b)
			}
		}
	}
	if len(c.shrink.keep) > 0 && len(o.Keep) == 0 {
		return fmt.Errorf("%w: --keep %q: want names of buses with commas between them", errUsage, c.shrink.keep.String())
	}
	// A step takes a case's text and gives that of a smaller case, so that one can
	// follow another. The first writes the overrides into it.
	var report bytes.Buffer
	fmt.Fprintf(&report, "%s: %s\n\n", full.Name, full.Title)
	smaller, approximate := false, o.PlainBranches
	if c.shrink.spread != 0 && !c.shrink.aggregate {
		return fmt.Errorf("%w: --aggregate-tolerance %g goes with --aggregate", errUsage, c.shrink.spread)
	}
	if c.shrink.aggregate {
		a, err := cases.Aggregate(name, source, cases.AggregateOptions{Tolerance: c.shrink.spread / 100}, ov...)
		if err != nil {
			return fmt.Errorf("%w: %w", errInput, err)
		}
		source, ov = a.Source, nil
		smaller, approximate = len(a.Sums) > 0, approximate || c.shrink.spread > 0
		reportAggregated(&report, a)
	}
	s, err := cases.Shrink(name, source, o, ov...)
	if err != nil {
		return fmt.Errorf("%w: %w", errInput, err)
	}
	source = s.Source
	smaller = smaller || len(s.Groups) > 0
	reportShrunk(&report, s, o)
	if c.out == "-" {
		_, err := c.stdout.Write(source)
		return err
	}
	if _, err := report.WriteTo(c.stdout); err != nil {
		return err
	}
	if !smaller {
		if c.out != "" {
			fmt.Fprintf(c.stdout, "\nnothing to write to %s\n", c.out)
		}
		return nil
	}
	if !c.shrink.noConfirmation {
		if err := confirmShrunk(ctx, c, full, source, approximate); err != nil {
			return err
		}
	}
	if c.out == "" {
		fmt.Fprintf(c.stdout, "\nNot written; --out FILE writes the reduced case.\n")
		return nil
	}
	if err := os.MkdirAll(filepath.Dir(c.out), 0o777); err != nil {
		return err
	}
	if err := os.WriteFile(c.out, source, 0o666); err != nil {
		return err
	}
	fmt.Fprintf(c.stdout, "\nwritten to %s; islet run %s runs it\n", c.out, c.out)
	return nil
}

// shownApart is how many inverters that stay apart are printed.
const shownApart = 12

// reportAggregated prints which inverters went together.
func reportAggregated(w io.Writer, a *cases.Aggregated) {
	if len(a.Sums) == 0 {
		fmt.Fprintf(w, "No inverters go together.\n")
	} else {
		fmt.Fprintf(w, "%-10s %8s %8s\n", "", "before", "after")
		fmt.Fprintf(w, "%-10s %8d %8d\n", "devices", a.Devices[0], a.Devices[1])
		fmt.Fprintf(w, "%-10s %8d %8d\n", "unknowns", a.Unknowns[0], a.Unknowns[1])
		fmt.Fprintf(w, "\n%-24s %-12s %10s  %-34s %s\n", "inverter", "bus", "kVA", "deviation of parameters, per unit", "in place of")
	}
	for _, s := range a.Sums {
		spread := "none: exact"
		if s.Spread.Largest > 1e-9 {
			spread = fmt.Sprintf("%s, %s", percent(s.Spread.Largest), s.Spread.Parameter)
		}
		fmt.Fprintf(w, "%-24s %-12s %10.4g  %-34s %s\n", s.Name, s.Bus, s.Rating/1e3, spread, wrap(s.Of, 86))
	}
	for k, d := range a.Apart {
		if k == 0 {
			fmt.Fprintf(w, "\n%-24s why it stays apart\n", "inverter")
		}
		if k == shownApart && len(a.Apart) > shownApart+1 {
			fmt.Fprintf(w, "and %d more\n", len(a.Apart)-k)
			break
		}
		fmt.Fprintf(w, "%-24s %s\n", d.Device, d.Why)
	}
	for _, n := range a.Notes {
		fmt.Fprintf(w, "note: %s\n", n)
	}
	fmt.Fprintln(w)
}

// shownReasons is how many of a bus's reasons to stay are printed.
const shownReasons = 3

// reportShrunk prints what was taken out, what stands for it, and why buses stay.
func reportShrunk(w io.Writer, s *cases.Shrunk, o cases.ShrinkOptions) {
	if len(s.Groups) == 0 {
		fmt.Fprintf(w, "No bus can go; all %d stay.\n", s.Buses[0])
	} else {
		fmt.Fprintf(w, "%-10s %8s %8s\n", "", "before", "after")
		for _, r := range []struct {
			name string
			n    [2]int
		}{{"buses", s.Buses}, {"devices", s.Devices}, {"unknowns", s.Unknowns}} {
			fmt.Fprintf(w, "%-10s %8d %8d\n", r.name, r.n[0], r.n[1])
		}
	}
	for _, g := range s.Groups {
		fmt.Fprintf(w, "\ntaken out  %s\n", wrap(g.Removed, 11))
		fmt.Fprintf(w, "  with     %s\n", wrap(g.Absorbed, 11))
		fmt.Fprintf(w, "  between  %s\n", wrap(g.Kept, 11))
		switch {
		case len(g.Became) == 0:
			fmt.Fprintf(w, "  now      nothing: a dead end, in which no current flows\n")
			continue
		case g.Kind == "reduced network":
			fmt.Fprintf(w, "  now      %s, %d RL circuits driven by combinations of the voltages\n", g.Became[0], len(g.Rates))
		default:
			kind := g.Kind
			if len(g.Became) > 1 && !strings.HasSuffix(kind, "s") {
				kind += "s"
			}
			fmt.Fprintf(w, "  now      %s (%s)\n", wrap(g.Became, 11), kind)
		}
		if len(g.Rates) > 0 {
			fmt.Fprintf(w, "  decays   %s 1/s%s\n", rates(g.Rates), map[bool]string{true: ", one ratio R/L throughout"}[g.Uniform])
		}
		switch {
		case g.Plain:
			fmt.Fprintf(w, "  error    of the admittance of plain branches:")
			for i, d := range g.Deviations {
				if i > 0 {
					fmt.Fprint(w, ",")
				}
				fmt.Fprintf(w, " %s at %g Hz", percent(d.Relative), d.Frequency)
			}
			fmt.Fprintln(w)
		case g.PlainFault != "":
			fmt.Fprintf(w, "  exact    after all, plain branches won't do: %s\n", g.PlainFault)
		default:
			fmt.Fprintf(w, "  error    none: exact at all frequencies and in transients\n")
		}
	}
	if len(s.Stay) > 0 {
		fmt.Fprintf(w, "\n%-20s why it stays\n", "bus")
	}
	draws := false
	for _, b := range s.Stay {
		why := strings.Join(b.Reasons, "; ")
		if n := len(b.Reasons); n > shownReasons {
			why = fmt.Sprintf("%s; and %d more", strings.Join(b.Reasons[:shownReasons], "; "), n-shownReasons)
		}
		if b.Asked {
			why = "asked for"
		}
		alone := len(b.Reasons) > 0 && !b.Asked
		for _, r := range b.Reasons {
			alone = alone && strings.HasSuffix(r, "draws current")
		}
		draws = draws || alone
		fmt.Fprintf(w, "%-20s %s\n", b.Bus, why)
	}
	if draws && !o.LoadsAsImpedances {
		fmt.Fprintf(w, "Where loads are the only reason, --loads-as-impedances takes them in.\n")
	}
	for _, n := range s.Notes {
		fmt.Fprintf(w, "note: %s\n", n)
	}
}

// wrap lists names in lines of moderate length, further ones indented.
func wrap(names []string, indent int) string {
	var b strings.Builder
	width := 0
	for i, n := range names {
		if i > 0 {
			b.WriteByte(',')
			if width+len(n) > 90 {
				b.WriteString("\n" + strings.Repeat(" ", indent))
				width = 0
			} else {
				b.WriteByte(' ')
			}
		}
		b.WriteString(n)
		width += len(n) + 2
	}
	return b.String()
}

// rates lists rates of decay, or their range if there are many.
func rates(r []float64) string {
	if len(r) > 6 {
		return fmt.Sprintf("%.4g to %.4g", r[0], r[len(r)-1])
	}
	out := make([]string, len(r))
	for i, x := range r {
		out[i] = fmt.Sprintf("%.4g", x)
	}
	return strings.Join(out, ", ")
}

// percent writes a ratio for people.
func percent(x float64) string {
	if x < 1e-9 {
		return "0 %"
	}
	return fmt.Sprintf("%.2g %%", 100*x)
}

// watched lists what the two cases are compared by: voltage and frequency of the
// buses that stay, and what their sources give. Channels of loads with capacitors
// are no measure: they leave out the current that a change of the frame's speed
// moves.
func watched(full, small *cases.Case) []string {
	var out []string
	for _, b := range small.BusNames() {
		out = append(out, b+".v", b+".frequency")
	}
	for _, d := range small.DeviceNames() {
		switch small.Kind(d) {
		case "grid", "grid-forming inverter", "grid-following inverter":
			if full.Kind(d) == small.Kind(d) {
				out = append(out, d+".p", d+".q", d+".i")
			}
		}
	}
	return out
}

// confirmShrunk runs both cases and prints by how much waveforms deviate that both
// have. source is the smaller one's text; approximate tells that it isn't meant to be
// the same.
func confirmShrunk(ctx context.Context, c *call, full *cases.Case, source []byte, approximate bool) error {
	small, err := cases.Parse(full.Name+"-reduced.toml", source)
	if err != nil {
		return err
	}
	// When frames are turned to a new speed depends on the steps, and what is
	// quasi-steady takes its reactance at the frame's speed.
	eo := engine.Options{Tolerance: c.tolerance, FixedFrame: len(full.Rules) > 0}
	setting := func(name string, k *cases.Case) compare.Setting {
		return compare.Setting{Name: name, Start: func(o *engine.Options) (*engine.Simulation, error) { return k.Start(o) }}
	}
	co := compare.Options{Until: full.Until, Repetitions: 3, Engine: eo, Channels: watched(full, small), Modes: -1}
	if c.until > 0 {
		co.Until = c.until
	}
	hook, clear := c.progress()
	if hook != nil {
		co.Progress = func(name string, run, of int) { hook(float64(run-1), float64(of)) }
	}
	r, err := compare.Run(ctx, []compare.Setting{setting("full", full), setting("reduced", small)}, co)
	clear()
	if err != nil {
		return startError(err)
	}
	a, b := r.Results[0], r.Results[1]
	fmt.Fprintf(c.stdout, "\nboth run to %g s: %d against %d unknowns, %d against %d steps, %s against %s (%.2f times as fast)\n",
		co.Until, a.Unknowns, b.Unknowns, a.Steps, b.Steps, roundTime(a.Time), roundTime(b.Time), b.Speedup)
	if b.Failure != "" {
		return errors.New("the reduced case fails: " + b.Failure)
	}
	fmt.Fprintf(c.stdout, "largest deviation at the buses and sources that stay, %% of each waveform's range\n")
	for _, g := range b.Groups {
		var worst *compare.Channel
		at := compare.Early
		for w, ch := range g.Worst {
			if ch != nil && (worst == nil || ch.Windows[w].Relative() > worst.Windows[at].Relative()) {
				worst, at = ch, compare.Window(w)
			}
		}
		if worst == nil || worst.Windows[at].Range == 0 {
			continue
		}
		d := worst.Windows[at]
		fmt.Fprintf(c.stdout, "  %-10s %-10s %s at %.4g s (%.3g of %.4g %s)\n", g.Name, percent(d.Relative()), worst.Name, d.At, d.Max, d.Range, worst.Unit)
	}
	for _, ch := range b.Changes {
		fmt.Fprintf(c.stdout, "VERDICT CHANGED: %s\n", ch)
	}
	if len(b.Changes) > 0 || approximate {
		fmt.Fprintln(c.stdout, "Results support, and never replace, local codes, utility requirements and a licensed engineer's judgement.")
	}
	return nil
}
