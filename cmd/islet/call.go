package main

import (
	"bytes"
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"github.com/sirupsen/logrus"

	"islet/cases"
	"islet/engine"
	"islet/solvers"
)

// call is one use of a command: its options and where it writes.
type call struct {
	cmd            command
	stdout, stderr io.Writer
	log            *logrus.Logger
	fs             *flag.FlagSet
	args           []string
	helped         bool

	sets    list
	details list
	verbose bool

	until     float64
	tolerance float64
	method    string
	step      float64
	sample    float64
	record    list
	fixed     bool
	general   bool

	out      string
	noPlots  bool
	quiet    bool
	asJSON   bool
	asCSV    bool
	settings list
	repeat   int
	windows  string
	noModes  bool

	shrink  shrinkOptions
	modes   modesOptions
	screen  screenOptions
	perunit perunitOptions
}

// list is a flag that may be given several times.
type list []string

func (l *list) String() string     { return strings.Join(*l, ", ") }
func (l *list) Set(s string) error { *l = append(*l, s); return nil }

func newCall(cmd command, stdout, stderr io.Writer) *call {
	c := &call{cmd: cmd, stdout: stdout, stderr: stderr, log: logrus.New()}
	c.log.SetOutput(stderr)
	c.log.SetFormatter(&logrus.TextFormatter{DisableTimestamp: true})
	c.fs = flag.NewFlagSet("islet "+cmd.name, flag.ContinueOnError)
	c.fs.SetOutput(io.Discard)
	if cmd.flags != nil {
		cmd.flags(c)
	}
	return c
}

// caseFlags are the options of every command that reads a case.
func caseFlags(c *call) {
	c.fs.Var(&c.sets, "set", "`PATH=VALUE`: override a value of the case, device.battery-1.power_kVA=250; may be repeated")
	c.fs.Var(&c.details, "detail", "`PATTERN=LEVEL`: detail of devices by name, 'solar-*=primary only'; may be repeated, the last that matches counts")
	c.fs.BoolVar(&c.verbose, "verbose", false, "tell more on standard error")
}

// studyFlags are the options of every command that runs a case.
func studyFlags(c *call) {
	caseFlags(c)
	c.fs.Float64Var(&c.until, "until", 0, "end of the run, `s` (default: the case's)")
	c.fs.Float64Var(&c.tolerance, "tolerance", 0, "accuracy asked of waveforms, relative to their range (default: the case's, or 1e-6)")
	c.fs.StringVar(&c.method, "method", "", "integrator: `NAME` is Rodas5P (default), Rodas4P or Trapezoidal")
	c.fs.Float64Var(&c.step, "step", 0, "largest step, `s`; the fixed step of Trapezoidal")
	c.fs.Float64Var(&c.sample, "sample", 0, "spacing of recorded waveforms, `s` (default: the case's)")
	c.fs.BoolVar(&c.fixed, "fixed-frame", false, "keep every network frame at the speed it starts with")
	c.fs.BoolVar(&c.general, "general-lu", false, "solve with one general sparse LU instead of static condensation")
}

// parse reads options and arguments, in any order.
func (c *call) parse(args []string) error {
	for {
		err := c.fs.Parse(args)
		if errors.Is(err, flag.ErrHelp) {
			c.help(c.stdout)
			c.helped = true
			return nil
		}
		if err != nil {
			return fmt.Errorf("%w: %w; islet %s --help lists the options", errUsage, err, c.cmd.name)
		}
		args = c.fs.Args()
		if len(args) == 0 {
			break
		}
		c.args = append(c.args, args[0])
		args = args[1:]
	}
	need := 1
	if strings.HasPrefix(c.cmd.args, "[") {
		need = 0
	}
	if len(c.args) < need || len(c.args) > 1 {
		return fmt.Errorf("%w: islet %s takes %s, %d arguments given", errUsage, c.cmd.name, c.cmd.args, len(c.args))
	}
	if c.verbose {
		c.log.SetLevel(logrus.DebugLevel)
	}
	return nil
}

func (c *call) help(w io.Writer) {
	fmt.Fprintf(w, "islet %s %s: %s\n\n  example: %s\n", c.cmd.name, c.cmd.args, c.cmd.about, c.cmd.example)
	var b bytes.Buffer
	c.fs.VisitAll(func(f *flag.Flag) {
		name, usage := flag.UnquoteUsage(f)
		fmt.Fprintf(&b, "  --%s %s\n        %s\n", f.Name, name, usage)
	})
	if b.Len() > 0 {
		fmt.Fprintf(w, "\noptions:\n%s", b.String())
	}
}

// exit prints an error and returns the exit code.
func (c *call) exit(err error) int {
	switch {
	case err == nil:
		return exitOK
	case errors.Is(err, context.Canceled):
		fmt.Fprintf(c.stderr, "islet: interrupted: %v\n", err)
		return exitInterrupted
	case errors.Is(err, errUsage):
		fmt.Fprintf(c.stderr, "islet: %s\n", strings.TrimPrefix(err.Error(), errUsage.Error()+": "))
		return exitUsage
	case errors.Is(err, errInput):
		fmt.Fprintf(c.stderr, "%s\n", strings.TrimPrefix(err.Error(), errInput.Error()+": "))
		return exitUsage
	}
	fmt.Fprintf(c.stderr, "islet: %v\n", err)
	return exitFailed
}

// overrides reads --set options.
func (c *call) overrides() ([]cases.Override, error) {
	var ov []cases.Override
	for _, s := range c.sets {
		p, v, ok := strings.Cut(s, "=")
		if !ok || p == "" {
			return nil, fmt.Errorf("%w: --set %q: want PATH=VALUE", errUsage, s)
		}
		ov = append(ov, cases.Override{Path: strings.TrimSpace(p), Value: strings.TrimSpace(v)})
	}
	return ov, nil
}

// openCase reads the case named on the command line, with overrides.
func (c *call) openCase() (*cases.Case, error) {
	ov, err := c.overrides()
	if err != nil {
		return nil, err
	}
	k, err := cases.Open(c.args[0], ov...)
	if err != nil {
		return nil, fmt.Errorf("%w: %w", errInput, err)
	}
	c.log.Debugf("case %s: %s", k.Name, k.Title)
	return k, nil
}

// rules reads --detail options, or the part of a --setting after the colon.
func rules(options []string) ([]cases.DetailRule, error) {
	var out []cases.DetailRule
	for _, s := range options {
		p, l, ok := strings.Cut(s, "=")
		if !ok || p == "" || l == "" {
			return nil, fmt.Errorf("%w: detail %q: want PATTERN=LEVEL", errUsage, s)
		}
		out = append(out, cases.DetailRule{Pattern: strings.TrimSpace(p), Level: strings.TrimSpace(l)})
	}
	return out, nil
}

// engineOptions turns the options into the engine's.
func (c *call) engineOptions() (engine.Options, error) {
	o := engine.Options{Sample: c.sample, FixedFrame: c.fixed, GeneralLU: c.general}
	if len(c.record) > 0 {
		o.Record = c.record
	}
	o.Tolerance = c.tolerance
	o.Solver.MaxStep = c.step
	switch strings.ToLower(c.method) {
	case "", "rodas5p":
	case "rodas4p":
		o.Method = solvers.Rodas4P
	case "trapezoidal":
		o.Method = solvers.Trapezoidal
		if c.step == 0 {
			return o, fmt.Errorf("%w: --method Trapezoidal needs its fixed step: --step 20e-6", errUsage)
		}
	default:
		return o, fmt.Errorf("%w: --method %q: want Rodas5P, Rodas4P or Trapezoidal", errUsage, c.method)
	}
	return o, nil
}

// progress returns a hook that draws a bar on a terminal, and a function that
// clears it; both do nothing in a pipe.
func (c *call) progress() (hook func(t, until float64), clear func()) {
	f, ok := c.stderr.(*os.File)
	if !ok || c.quiet || !isTerminal(f) {
		return nil, func() {}
	}
	const width = 40
	var last time.Time
	drawn := false
	hook = func(t, until float64) {
		if now := time.Now(); now.Sub(last) < 100*time.Millisecond {
			return
		} else {
			last = now
		}
		n := int(float64(width) * t / until)
		fmt.Fprintf(f, "\r[%s%s] %.3f of %.3g s", strings.Repeat("#", n), strings.Repeat("-", width-n), t, until)
		drawn = true
	}
	return hook, func() {
		if drawn {
			fmt.Fprintf(f, "\r%s\r", strings.Repeat(" ", width+30))
		}
	}
}

func isTerminal(f *os.File) bool {
	st, err := f.Stat()
	return err == nil && st.Mode()&os.ModeCharDevice != 0
}
