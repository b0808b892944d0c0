package bench

import (
	"context"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"runtime"
	"strconv"
	"time"

	"islet/engine"
	"islet/solvers"
)

// Target is a line of a table of equal errors: what each of several setups
// needs to keep the error below a bound.
type Target struct {
	Study string
	Error float64 // bound
	// Rows holds, for each setup, the cheapest of its runs whose error is
	// within the bound, timed; nil where none was.
	Rows []*Row
}

// EqualErrors runs a study in every setup over its own ladder of tolerances,
// once each, recorded, for the errors; then, for each bound, it times the
// cheapest runs within it, the setups in turn, repeat times. It returns all
// runs and the table of bounds.
func (s Study) EqualErrors(ctx context.Context, setups []Setup, ladders [][]float64, bounds []float64, ref *engine.Trace,
	record []string, sample float64, repeat int) (runs []Row, targets []Target, err error) {
	bySetup := make([][]Row, len(setups))
	for i, with := range setups {
		for _, tol := range ladders[i] {
			with.Solver.RelTol = tol
			tr, st, err := s.Waveforms(ctx, with, record, sample)
			if err != nil {
				return nil, nil, fmt.Errorf("bench: %s with %s at %g: %w", s.Name, with.Name, tol, err)
			}
			bySetup[i] = append(bySetup[i], Row{Study: s.Name, Setup: with.Name, RelTol: tol, Stats: st, Difference: Compare(tr, ref, sample, flatChannel)})
		}
	}
	timed := make(map[*Row]bool)
	for _, bound := range bounds {
		t := Target{Study: s.Name, Error: bound}
		for i := range setups {
			var best *Row
			for k := range bySetup[i] {
				r := &bySetup[i][k]
				if r.Difference.Largest <= bound && (best == nil || r.Stats.Evals < best.Stats.Evals) {
					best = r
				}
			}
			t.Rows = append(t.Rows, best)
		}
		for range repeat {
			for i, r := range t.Rows {
				if r == nil || timed[r] {
					continue
				}
				with := setups[i]
				with.Solver.RelTol = r.RelTol
				d, _, err := s.Time(ctx, with)
				if err != nil {
					return nil, nil, err
				}
				r.Times = append(r.Times, d)
			}
		}
		for _, r := range t.Rows {
			if r != nil {
				timed[r] = true
			}
		}
		targets = append(targets, t)
	}
	for _, rows := range bySetup {
		runs = append(runs, rows...)
	}
	return runs, targets, nil
}

// WriteTargets prints tables of equal errors, with the time of each setup over
// that of the first.
func WriteTargets(w io.Writer, setups []Setup, targets []Target) error {
	_, err := fmt.Fprintf(w, "%-16s %7s", "study", "error")
	for i, s := range setups {
		if i == 0 {
			_, err = fmt.Fprintf(w, " | %-34s", s.Name)
			continue
		}
		_, err = fmt.Fprintf(w, " | %-42s", s.Name)
	}
	fmt.Fprintln(w)
	for _, t := range targets {
		_, err = fmt.Fprintf(w, "%-16s %7.0e", t.Study, t.Error)
		for i, r := range t.Rows {
			cell := "not within its tolerances"
			if r != nil {
				cell = fmt.Sprintf("%7.0e %6d steps %10.2f ms", r.RelTol, r.Stats.Steps, 1e3*r.Median().Seconds())
				if i > 0 && t.Rows[0] != nil {
					cell += fmt.Sprintf(" %6.2fx", r.Median().Seconds()/t.Rows[0].Median().Seconds())
				}
			}
			if i == 0 {
				_, err = fmt.Fprintf(w, " | %-34s", cell)
			} else {
				_, err = fmt.Fprintf(w, " | %-42s", cell)
			}
		}
		fmt.Fprintln(w)
	}
	return err
}

// Costs tells what a study of one size costs.
type Costs struct {
	Inverters, Unknowns int
	Build, Start        time.Duration // describing the network; operating point and all before the first step
	Run                 time.Duration
	Stats               solvers.Stats
	Events              int
	Bytes               float64 // heap held by the running simulation, after a collection
}

// PerInverterStep is the time of a step divided by the number of inverters.
func (c Costs) PerInverterStep() time.Duration {
	return time.Duration(float64(c.Run) / float64(c.Inverters) / float64(max(1, c.Stats.Steps)))
}

// MicrogridCosts measures the costs of a microgrid's study at the engine's
// defaults and the given tolerance, with the frame turning, one signal recorded
// and no ledger.
func MicrogridCosts(ctx context.Context, inverters int, tol float64) (Costs, error) {
	c := Costs{Inverters: inverters, Events: 8}
	var before, after runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&before)
	from := time.Now()
	sys, err := Microgrid(inverters)
	if err != nil {
		return c, err
	}
	c.Build = time.Since(from)
	from = time.Now()
	m, err := engine.Start(sys, &engine.Options{Record: []string{"bus-0.v"}, NoLedger: true, Solver: solvers.Options{RelTol: tol}})
	if err != nil {
		return c, err
	}
	c.Start = time.Since(from)
	c.Unknowns = m.Unknowns()
	if err := microgridSteps(m); err != nil {
		return c, err
	}
	from = time.Now()
	if _, err := m.Run(ctx, 15); err != nil {
		return c, err
	}
	c.Run = time.Since(from)
	c.Stats = m.Stats()
	runtime.GC()
	runtime.ReadMemStats(&after)
	c.Bytes = float64(after.HeapAlloc) - float64(before.HeapAlloc)
	runtime.KeepAlive(m)
	return c, nil
}

// WriteCosts prints costs, and the exponent with which the time grows from the
// smallest to the largest.
func WriteCosts(w io.Writer, costs []Costs) error {
	if _, err := fmt.Fprintf(w, "%9s %9s %10s %10s %7s %10s %11s %16s %11s\n", "inverters", "unknowns", "build ms", "start ms",
		"steps", "an event", "run ms", "us/inverter/step", "kB/inverter"); err != nil {
		return err
	}
	ms := func(d time.Duration) float64 { return 1e3 * d.Seconds() }
	for _, c := range costs {
		if _, err := fmt.Fprintf(w, "%9d %9d %10.2f %10.2f %7d %10.1f %11.1f %16.2f %11.1f\n", c.Inverters, c.Unknowns, ms(c.Build), ms(c.Start),
			c.Stats.Steps, float64(c.Stats.Steps)/float64(c.Events), ms(c.Run), 1e6*c.PerInverterStep().Seconds(), c.Bytes/float64(c.Inverters)/1e3); err != nil {
			return err
		}
	}
	if len(costs) < 2 {
		return nil
	}
	a, b := costs[0], costs[len(costs)-1]
	grow := math.Log(b.Run.Seconds()/a.Run.Seconds()) / math.Log(float64(b.Inverters)/float64(a.Inverters))
	_, err := fmt.Fprintf(w, "time grows with the number of inverters to the power %.3f from %d to %d\n", grow, a.Inverters, b.Inverters)
	return err
}

// Floors are the times of the parts of a step on one system.
type Floors struct {
	Eval, Linearise, Factor, Solve, Norm time.Duration
	Step                                 time.Duration // an accepted step, on average
	Unknowns                             int
}

// Rest is what a step of Rodas5P takes beside nine evaluations, a Jacobian, a
// factorisation, eight solutions and a norm: the combination of stages, and the
// engine's own.
func (f Floors) Rest() time.Duration {
	return f.Step - 9*f.Eval - f.Linearise - f.Factor - 8*f.Solve - f.Norm
}

// probe is a method that lets the system through to a measurement.
type probe struct {
	solvers.Method
	system  solvers.System
	stepper solvers.Stepper
}

func (p *probe) NewStepper(s solvers.System, o solvers.Options) (st solvers.Stepper, err error) {
	p.system = s
	p.stepper, err = p.Method.NewStepper(s, o)
	return p.stepper, err
}

// MicrogridFloors measures the kernels of a microgrid at its operating point,
// and a step as the mean of a run.
func MicrogridFloors(ctx context.Context, inverters int, tol float64) (Floors, error) {
	var f Floors
	p := &probe{Method: solvers.Rodas5P}
	study := MicrogridStudy(inverters)
	m, err := study.Start(&engine.Options{Method: p, Record: []string{study.Signal}, NoLedger: true,
		Solver: solvers.Options{RelTol: tol}})
	if err != nil {
		return f, err
	}
	from := time.Now()
	if _, err := m.Run(ctx, study.Until); err != nil {
		return f, err
	}
	f.Step = time.Since(from) / time.Duration(m.Stats().Steps+m.Stats().Rejected)
	sys := p.system
	n := sys.Dim()
	f.Unknowns = n
	y := p.stepper.State()
	dst := make([]float64, n)
	var failed error
	// The best of five, each long enough for the clock.
	best := func(run func() error) time.Duration {
		repeat := max(1, 200000/n)
		b := time.Duration(math.MaxInt64)
		for range 5 {
			from := time.Now()
			for range repeat {
				failed = errors.Join(failed, run())
			}
			b = min(b, time.Since(from)/time.Duration(repeat))
		}
		return b
	}
	t := m.Time()
	f.Eval = best(func() error { return sys.Eval(dst, t, y) })
	f.Linearise = best(func() error { return sys.Linearise(t, y) })
	f.Factor = best(func() error { return sys.Factor(1e4) })
	f.Solve = best(func() error { sys.Solve(dst); return nil })
	tl := solvers.Tolerance{Rel: tol, Abs: tol}
	f.Norm = best(func() error { sys.Norm(dst, y, y, tl); return nil })
	return f, failed
}

// WriteTargetsCSV writes tables of equal errors as data.
func WriteTargetsCSV(w io.Writer, setups []Setup, targets []Target) error {
	c := csv.NewWriter(w)
	c.Write([]string{"study", "error_bound", "method", "rel_tol", "error", "steps", "median_s", "over_first"})
	g := func(x float64) string { return strconv.FormatFloat(x, 'g', 6, 64) }
	for _, t := range targets {
		for i, r := range t.Rows {
			if r == nil {
				c.Write([]string{t.Study, g(t.Error), setups[i].Name, "", "", "", "", ""})
				continue
			}
			over := ""
			if t.Rows[0] != nil {
				over = g(r.Median().Seconds() / t.Rows[0].Median().Seconds())
			}
			c.Write([]string{t.Study, g(t.Error), setups[i].Name, g(r.RelTol), g(r.Difference.Largest), strconv.Itoa(r.Stats.Steps), g(r.Median().Seconds()), over})
		}
	}
	c.Flush()
	return c.Error()
}
