package main

import (
	"context"
	"fmt"
	"sort"
	"strings"

	"islet/cases"
	"islet/engine"
	"islet/engine/compare"
	"islet/engine/output"
)

func compareFlags(c *call) {
	studyFlags(c)
	c.fs.Var(&c.settings, "setting", "`NAME: PATTERN=LEVEL, ...`: a setting to compare, applied after --detail; may be repeated (default: every level that the devices offer, each on all devices that offer it, with the network as given and quasi-steady)")
	c.fs.Var(&c.record, "record", "`PATTERN`: channels to compare; may be repeated")
	c.fs.StringVar(&c.windows, "windows", "", "`A,B`: ends of the two windows after an event in which deviations are told apart, s (default 0.02,0.3)")
	c.fs.IntVar(&c.repeat, "repeat", 5, "timed runs of each setting, taken in turns; the median counts")
	c.fs.BoolVar(&c.noModes, "no-modes", false, "don't match the modes of the settings (nor is it done beyond 400 unknowns)")
	c.fs.StringVar(&c.out, "out", "", "write table (text), deviations (CSV), results (JSON) and overlay plots into `DIR`")
	c.fs.BoolVar(&c.noPlots, "no-plots", false, "with --out: leave the plots out")
	c.fs.BoolVar(&c.quiet, "quiet", false, "no progress")
	c.fs.BoolVar(&c.asJSON, "json", false, "print JSON instead of text")
	c.fs.BoolVar(&c.asCSV, "csv", false, "print CSV instead of text")
}

func cmdCompare(ctx context.Context, c *call) error {
	k, err := c.openCase()
	if err != nil {
		return err
	}
	o, err := c.engineOptions()
	if err != nil {
		return err
	}
	base, err := rules(c.details)
	if err != nil {
		return err
	}
	setting := func(name string, extra []cases.DetailRule) compare.Setting {
		all := append(append([]cases.DetailRule(nil), base...), extra...)
		return compare.Setting{Name: name, Start: func(o *engine.Options) (*engine.Simulation, error) { return k.Start(o, all...) }}
	}
	settings := []compare.Setting{setting("as given", nil)}
	for _, s := range c.settings {
		name, spec, ok := strings.Cut(s, ":")
		if !ok {
			return fmt.Errorf("%w: --setting %q: want NAME: PATTERN=LEVEL and more of those behind commas", errUsage, s)
		}
		extra, err := rules(strings.Split(spec, ","))
		if err != nil {
			return err
		}
		settings = append(settings, setting(strings.TrimSpace(name), extra))
	}
	if len(c.settings) == 0 {
		for _, s := range everyLevel(k) {
			settings = append(settings, setting(s.name, s.rules))
		}
	}
	co := compare.Options{Until: k.Until, Sample: c.sample, Repetitions: c.repeat, Engine: o}
	if c.until != 0 {
		co.Until = c.until
	}
	if len(c.record) > 0 {
		co.Channels = c.record
	}
	if c.windows != "" {
		if n, err := fmt.Sscanf(c.windows, "%g,%g", &co.Windows[0], &co.Windows[1]); n != 2 || err != nil {
			return fmt.Errorf("%w: --windows %q: want two times, 0.02,0.3", errUsage, c.windows)
		}
	}
	if c.noModes {
		co.Modes = -1
	}
	if c.repeat < 1 {
		return fmt.Errorf("%w: --repeat %d: want at least 1", errUsage, c.repeat)
	}
	hook, clear := c.progress()
	if hook != nil {
		co.Progress = func(name string, run, of int) { hook(float64(run-1), float64(of)) }
	}
	result, err := compare.Run(ctx, settings, co)
	clear()
	if err != nil {
		return startError(err)
	}
	switch {
	case c.asJSON:
		err = result.WriteJSON(c.stdout)
	case c.asCSV:
		err = result.WriteCSV(c.stdout)
		for _, r := range result.Results {
			if r.Modes == nil {
				continue
			}
			for _, w := range r.Modes.Warnings {
				fmt.Fprintf(c.stderr, "WARNING: %s: %s\n", r.Setting, w)
			}
		}
	default:
		fmt.Fprintf(c.stdout, "%s: %s\n\n", k.Name, k.Title)
		if err = result.WriteText(c.stdout); err == nil && result.Results[0].Modes != nil {
			_, err = fmt.Fprintln(c.stdout, "islet modes CASE --against 'NAME: PATTERN=LEVEL' shows all modes side by side")
		}
	}
	if err != nil || c.out == "" {
		return err
	}
	files, err := output.WriteComparison(c.out, result, !c.noPlots)
	if err != nil {
		return err
	}
	if !c.asJSON && !c.asCSV {
		fmt.Fprintf(c.stdout, "written to %s: %s\n", c.out, strings.Join(files, ", "))
	}
	return nil
}

type levelSetting struct {
	name  string
	rules []cases.DetailRule
}

// networkLevel is the level that lines, loads and transformers offer.
const networkLevel = "quasi-steady"

// everyLevel lists the settings to compare by default: the network at
// quasi-steady state, and every reduced level of the inverters on all devices
// that offer it, with the network as given and with it quasi-steady.
func everyLevel(k *cases.Case) []levelSetting {
	at := make(map[string][]cases.DetailRule)
	rank := make(map[string]int)
	for name, levels := range k.Details() {
		for i, l := range levels {
			if i == 0 {
				continue // the fullest
			}
			at[l] = append(at[l], cases.DetailRule{Pattern: name, Level: l})
			rank[l] = max(rank[l], i)
		}
	}
	var names []string
	for l, r := range at {
		sort.Slice(r, func(i, j int) bool { return r[i].Pattern < r[j].Pattern })
		if l != networkLevel {
			names = append(names, l)
		}
	}
	sort.Slice(names, func(i, j int) bool {
		if rank[names[i]] != rank[names[j]] {
			return rank[names[i]] < rank[names[j]]
		}
		return names[i] < names[j]
	})
	var out []levelSetting
	network := at[networkLevel]
	if network != nil {
		out = append(out, levelSetting{"network " + networkLevel, network})
	}
	for _, l := range names {
		out = append(out, levelSetting{l, at[l]})
		if network != nil {
			out = append(out, levelSetting{l + ", network " + networkLevel, append(append([]cases.DetailRule(nil), at[l]...), network...)})
		}
	}
	return out
}
