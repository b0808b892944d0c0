package bench

import (
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"time"

	"islet/engine"
	"islet/solvers"
)

// Study is a run to be measured: a system, its schedule and its length.
type Study struct {
	Name string
	// Until is the simulated time, s.
	Until float64
	// Start makes a fresh simulation with its events scheduled.
	Start func(o *engine.Options) (*engine.Simulation, error)
	// Signal is the channel that a timed run records.
	Signal string
}

// MicrogridStudy is 15 s of [Microgrid] with eight load steps.
func MicrogridStudy(inverters int) Study {
	return microgridStudy(fmt.Sprintf("microgrid-%d", inverters), inverters, shipped)
}

func microgridStudy(name string, inverters int, which formers) Study {
	return Study{
		Name:   name,
		Until:  15,
		Signal: "bus-0.v",
		Start: func(o *engine.Options) (*engine.Simulation, error) {
			s, err := microgrid(inverters, which)
			if err != nil {
				return nil, err
			}
			m, err := engine.Start(s, o)
			if err != nil {
				return nil, err
			}
			return m, microgridSteps(m)
		},
	}
}

// Setup is a way to integrate a study.
type Setup struct {
	Name   string
	Method solvers.Method // nil: the engine's default
	Solver solvers.Options
	// TurningFrame lets the network frame follow the frequency, the engine's
	// default, which changes the right-hand side between steps. A multistep
	// method takes that as a discontinuity, so comparisons leave it fixed.
	TurningFrame bool
	// GeneralLU solves with a sparse LU of the whole matrix.
	GeneralLU bool
}

func (s Setup) options() *engine.Options {
	return &engine.Options{Method: s.Method, Solver: s.Solver, FixedFrame: !s.TurningFrame, GeneralLU: s.GeneralLU, NoLedger: true}
}

// Waveforms runs a study with the channels (patterns; nil: the engine's
// choice) recorded at a uniform spacing.
func (s Study) Waveforms(ctx context.Context, with Setup, record []string, sample float64) (*engine.Trace, solvers.Stats, error) {
	o := with.options()
	o.Record, o.Sample = record, sample
	m, err := s.Start(o)
	if err != nil {
		return nil, solvers.Stats{}, err
	}
	tr, err := m.Run(ctx, s.Until)
	return tr, m.Stats(), err
}

// Time measures a run that records a single channel at the solver's own
// steps, without the operating point.
func (s Study) Time(ctx context.Context, with Setup) (time.Duration, solvers.Stats, error) {
	o := with.options()
	o.Record = []string{s.Signal}
	m, err := s.Start(o)
	if err != nil {
		return 0, solvers.Stats{}, err
	}
	runtime.GC() // what the start left behind isn't the run's
	from := time.Now()
	_, err = m.Run(ctx, s.Until)
	return time.Since(from), m.Stats(), err
}

// Difference is how far two traces of one study are apart.
type Difference struct {
	// Largest is the largest difference at a common sample, relative to the
	// range of the channel in the reference.
	Largest float64
	Channel string
	Time    float64
	// Channels and Samples are what was compared.
	Channels, Samples int
}

// Compare compares a trace with a reference at the uniform samples both hold
// (after an event, where one falls on a sample). Channels that hardly move in
// the reference, by less than flat of their largest magnitude, are measured by
// that magnitude times flat instead of by their range.
func Compare(got, ref *engine.Trace, sample, flat float64) Difference {
	d := Difference{}
	a, b := samples(got, sample), samples(ref, sample)
	// The magnitude of a device's active and reactive power is that of the
	// larger: the vars of a resistor are no signal.
	size := make(map[string]float64)
	kind := func(ch engine.TraceChannel) string {
		if strings.HasPrefix(ch.Unit, "var") {
			return ch.Owner + " W" + strings.TrimPrefix(ch.Unit, "var")
		}
		return ch.Owner + " " + ch.Unit
	}
	for i, ch := range ref.Channels {
		y, k := ref.Values(i), kind(ch)
		for _, r := range b {
			size[k] = math.Max(size[k], math.Abs(y[r]))
		}
	}
	for i, ch := range ref.Channels {
		j := got.Index(ch.Name)
		if j < 0 {
			continue
		}
		x, y := got.Values(j), ref.Values(i)
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, r := range b {
			lo, hi = math.Min(lo, y[r]), math.Max(hi, y[r])
		}
		span := math.Max(hi-lo, flat*size[kind(ch)])
		if span == 0 {
			continue
		}
		d.Channels++
		d.Samples = 0
		for k, r := range b {
			q, ok := a[k]
			if !ok {
				continue
			}
			d.Samples++
			if e := math.Abs(x[q]-y[r]) / span; e > d.Largest || e != e {
				d.Largest, d.Channel, d.Time = e, ch.Name, ref.Time[r]
			}
		}
	}
	return d
}

// samples maps the number of a sample to its last row.
func samples(tr *engine.Trace, sample float64) map[int]int {
	rows := make(map[int]int)
	for r, t := range tr.Time {
		k := math.Round(t / sample)
		if math.Abs(t-k*sample) <= 1e-9*sample {
			rows[int(k)] = r
		}
	}
	return rows
}

// Row is a line of a work-precision table.
type Row struct {
	Study, Setup string
	RelTol       float64
	Difference   Difference
	Stats        solvers.Stats
	Times        []time.Duration // of alternated repetitions
}

// Median is the median of the times.
func (r Row) Median() time.Duration {
	t := slices.Clone(r.Times)
	slices.Sort(t)
	if len(t) == 0 {
		return 0
	}
	return t[len(t)/2]
}

// WorkPrecision runs a study in every setup at every tolerance: once recorded,
// for the error against the reference trace, and repeat times for the time,
// the setups in turn so that a busy machine treats them alike.
func (s Study) WorkPrecision(ctx context.Context, setups []Setup, tols []float64, ref *engine.Trace, record []string, sample float64, repeat int) ([]Row, error) {
	var rows []Row
	for _, tol := range tols {
		first := len(rows)
		for _, with := range setups {
			with.Solver.RelTol = tol
			tr, st, err := s.Waveforms(ctx, with, record, sample)
			if err != nil {
				return rows, fmt.Errorf("bench: %s with %s at %g: %w", s.Name, with.Name, tol, err)
			}
			rows = append(rows, Row{Study: s.Name, Setup: with.Name, RelTol: tol, Stats: st, Difference: Compare(tr, ref, sample, flatChannel)})
		}
		for range repeat {
			for k, with := range setups {
				with.Solver.RelTol = tol
				d, _, err := s.Time(ctx, with)
				if err != nil {
					return rows, err
				}
				rows[first+k].Times = append(rows[first+k].Times, d)
			}
		}
	}
	return rows, nil
}

// flatChannel is the range, relative to its magnitude, under which a channel
// counts as constant.
const flatChannel = 1e-3

// WriteTable prints rows for people.
func WriteTable(w io.Writer, rows []Row) error {
	if _, err := fmt.Fprintf(w, "%-16s %-24s %8s %10s %7s %8s %8s %8s %10s  %s\n",
		"study", "method", "rel tol", "error", "steps", "rejected", "evals", "factors", "time ms", "worst channel"); err != nil {
		return err
	}
	for _, r := range rows {
		if _, err := fmt.Fprintf(w, "%-16s %-24s %8.0e %10.2e %7d %8d %8d %8d %10.2f  %s at %.4g s\n",
			r.Study, r.Setup, r.RelTol, r.Difference.Largest, r.Stats.Steps, r.Stats.Rejected+r.Stats.Failed, r.Stats.Evals,
			r.Stats.Factorizations, float64(r.Median().Microseconds())/1e3, r.Difference.Channel, r.Difference.Time); err != nil {
			return err
		}
	}
	return nil
}

// WriteCSV writes rows as raw data, a line for every repetition.
func WriteCSV(w io.Writer, rows []Row) error {
	c := csv.NewWriter(w)
	c.Write([]string{"study", "method", "rel_tol", "error", "steps", "rejected", "failed", "evals", "jacobians", "factorizations", "solves", "repetition", "time_s"})
	g := func(x float64) string { return strconv.FormatFloat(x, 'g', 8, 64) }
	for _, r := range rows {
		for k, t := range r.Times {
			c.Write([]string{r.Study, r.Setup, g(r.RelTol), g(r.Difference.Largest),
				strconv.Itoa(r.Stats.Steps), strconv.Itoa(r.Stats.Rejected), strconv.Itoa(r.Stats.Failed), strconv.Itoa(r.Stats.Evals),
				strconv.Itoa(r.Stats.Jacobians), strconv.Itoa(r.Stats.Factorizations), strconv.Itoa(r.Stats.Solves), strconv.Itoa(k), g(t.Seconds())})
		}
	}
	c.Flush()
	return c.Error()
}
