// Command islet runs electromagnetic-transient studies of networks full of
// inverters from case files. See islet --help.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
)

// Exit codes.
const (
	exitOK          = 0
	exitFailed      = 1 // the study could not be completed
	exitUsage       = 2 // the command line or the case file is wrong
	exitInterrupted = 3 // stopped by the user; what was computed is kept
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt)
	code := run(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// command is one of islet's commands.
type command struct {
	name, args, about string
	example           string
	run               func(ctx context.Context, c *call) error
	flags             func(c *call)
}

func commands() []command {
	return []command{
		{"run", "CASE", "simulate a case and tell what happened", "islet run harbour --out results --set study.until_s=5", cmdRun, runFlags},
		{"check", "CASE", "validate a case without running it; all faults at once", "islet check my-site.toml", cmdCheck, caseFlags},
		{"steady", "CASE", "find the operating point and print it", "islet steady harbour --csv > point.csv", cmdSteady, steadyFlags},
		{"compare", "CASE", "run a case at several settings of detail and compare", "islet compare harbour --setting 'reduced: solar-*=primary only, *=full'", cmdCompare, compareFlags},
		{"modes", "CASE", "find the modes of the linearised system: damping, who takes part, critical gains", "islet modes short-lines --vary device.inverter-1.m,device.inverter-2.m,device.inverter-3.m=5e-5:3e-4", cmdModes, modesFlags},
		{"screen", "CASE", "tell whether the sources can run in step, at which frequency and sharing, with which margin", "islet screen starter --confirm 'primary only'", cmdScreen, screenFlags},
		{"perunit", "CASE", "print every parameter and gain in SI and per unit, or take per-unit values into SI", "islet perunit harbour --device battery-quay --time radian", cmdPerunit, perunitFlags},
		{"shrink", "CASE", "take out buses without injection, and write the case without them", "islet shrink cigre-lv --keep R1,R2,R15 --out small.toml", cmdShrink, shrinkFlags},
		{"cases", "[NAME]", "list the shipped cases, or print one to copy", "islet cases starter > my-site.toml", cmdCases, nil},
		{"keys", "[KIND]", "list the keys of a case file, or of one kind of device", "islet keys 'grid forming inverter'", cmdKeys, nil},
	}
}

// errUsage marks a fault of the command line.
var errUsage = errors.New("usage")

// errInput marks a fault of the case file.
var errInput = errors.New("input")

func run(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	if len(args) == 0 || args[0] == "--help" || args[0] == "-h" || args[0] == "help" && len(args) == 1 {
		printHelp(stdout)
		return exitOK
	}
	name := args[0]
	rest := args[1:]
	if name == "help" {
		name, rest = rest[0], []string{"--help"}
	}
	for _, cmd := range commands() {
		if cmd.name != name {
			continue
		}
		c := newCall(cmd, stdout, stderr)
		err := c.parse(rest)
		if err == nil && !c.helped {
			err = cmd.run(ctx, c)
		}
		return c.exit(err)
	}
	fmt.Fprintf(stderr, "islet: there is no command %q; islet --help lists them\n", name)
	return exitUsage
}

func printHelp(w io.Writer) {
	fmt.Fprint(w, `islet simulates electromagnetic transients in networks in which inverters hold
voltage and frequency.

  islet COMMAND CASE [options]      CASE is a shipped case's name or a file

`)
	for _, c := range commands() {
		fmt.Fprintf(w, "  %-8s %-7s %s\n", c.name, c.args, c.about)
	}
	fmt.Fprint(w, `
islet COMMAND --help tells a command's options, with an example.

Exit codes: 0 done; 1 the study could not be completed; 2 the command line or
the case is wrong; 3 interrupted, with what was computed kept.

Results support, and never replace, local codes, utility requirements and a
licensed engineer's judgement.
`)
}
