package main

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"time"

	"islet/cases"
	"islet/engine"
	"islet/engine/output"
	"islet/engine/summary"
)

func runFlags(c *call) {
	studyFlags(c)
	c.fs.Var(&c.record, "record", "`PATTERN`: channels to record, 'battery-*.p'; may be repeated (default: the case's)")
	c.fs.StringVar(&c.out, "out", "", "write waveforms (CSV), summary (JSON) and plots into `DIR`")
	c.fs.BoolVar(&c.noPlots, "no-plots", false, "with --out: leave the plots out")
	c.fs.BoolVar(&c.quiet, "quiet", false, "no progress bar and no report")
	c.fs.BoolVar(&c.asJSON, "json", false, "print the summary as JSON instead of text")
}

func cmdRun(ctx context.Context, c *call) error {
	k, err := c.openCase()
	if err != nil {
		return err
	}
	o, err := c.engineOptions()
	if err != nil {
		return err
	}
	r, err := rules(c.details)
	if err != nil {
		return err
	}
	hook, clear := c.progress()
	o.Hooks.Progress = hook
	begin := time.Now()
	sim, err := k.Start(&o, r...)
	if err != nil {
		return startError(err)
	}
	started := time.Since(begin)
	until := k.Until
	if c.until != 0 {
		until = c.until
	}
	if !(until > 0) {
		return fmt.Errorf("%w: --until %g: want a positive time", errUsage, until)
	}
	begin = time.Now()
	trace, runErr := sim.Run(ctx, until)
	elapsed := time.Since(begin)
	clear()
	if runErr != nil && trace.Rows() == 0 {
		return runErr
	}
	s, err := summary.Summarise(sim)
	if err != nil {
		return errors.Join(runErr, err)
	}
	if !c.quiet {
		if c.asJSON {
			err = output.WriteJSON(c.stdout, s)
		} else {
			fmt.Fprintf(c.stdout, "%s: %s\n", k.Name, k.Title)
			if runErr != nil {
				fmt.Fprintf(c.stdout, "THE RUN ENDED EARLY, at %.6g of %.6g s; what follows is what was computed.\n", sim.Time(), until)
			}
			err = s.WriteText(c.stdout, 100)
			fmt.Fprintf(c.stdout, "\noperating point in %s; %.6g s simulated in %s, %.3g times real time\n",
				roundTime(started), sim.Time(), roundTime(elapsed), sim.Time()/elapsed.Seconds())
			fmt.Fprintln(c.stdout, "Results support, and never replace, local codes, utility requirements and a licensed engineer's judgement.")
		}
		if err != nil {
			return errors.Join(runErr, err)
		}
	}
	if c.out != "" {
		files, err := output.WriteAll(c.out, sim, s, !c.noPlots)
		if err != nil {
			return errors.Join(runErr, err)
		}
		if !c.quiet && !c.asJSON {
			fmt.Fprintf(c.stdout, "written to %s: %s\n", c.out, strings.Join(files, ", "))
		}
	}
	return runErr
}

// startError tells faults of the case from failures of the start.
func startError(err error) error {
	var op *engine.OperatingPointError
	var re *engine.RunError
	if errors.As(err, &op) || errors.As(err, &re) {
		return err
	}
	return fmt.Errorf("%w: %w", errInput, err)
}

func roundTime(d time.Duration) string {
	switch {
	case d < time.Millisecond:
		return d.Round(time.Microsecond).String()
	case d < time.Second:
		return d.Round(10 * time.Microsecond).String()
	}
	return d.Round(time.Millisecond).String()
}

func cmdCheck(ctx context.Context, c *call) error {
	k, err := c.openCase()
	if err != nil {
		return err
	}
	r, err := rules(c.details)
	if err != nil {
		return err
	}
	sys, err := k.Build(r...)
	if err != nil {
		return fmt.Errorf("%w: %w", errInput, err)
	}
	fmt.Fprintf(c.stdout, "%s: no fault found; %d buses, %d devices, %.6g s\n", k.Name, len(sys.BusNames()), len(sys.DeviceNames()), k.Until)
	return nil
}

func cmdCases(ctx context.Context, c *call) error {
	if len(c.args) == 1 {
		src, err := cases.Source(c.args[0])
		if err != nil {
			return fmt.Errorf("%w: %w", errInput, err)
		}
		_, err = c.stdout.Write(src)
		return err
	}
	for _, i := range cases.Shipped() {
		fmt.Fprintf(c.stdout, "%-16s %s\n", i.Name, i.Title)
	}
	fmt.Fprintln(c.stdout, "\nislet cases NAME prints a case's file; islet run NAME runs it.")
	return nil
}
