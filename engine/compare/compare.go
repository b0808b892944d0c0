// Package compare runs one study at several settings of detail and tells what
// each setting saves and what it hides: unknowns, steps and time, and for every
// channel the deviation from the reference setting, in the windows after events
// in which reductions differ most. For systems that aren't large it matches the
// modes at the operating point as well.
//
// A run that fails or diverges at some setting is part of the result, not an
// error.
package compare

import (
	"context"
	"errors"
	"fmt"
	"math"
	"sort"
	"strings"
	"time"

	"islet/engine"
)

// Setting is a way to run the study.
type Setting struct {
	Name string
	// Start makes a fresh simulation with its events scheduled. It must honour
	// the options given, which choose channels, sampling and ledger.
	Start func(o *engine.Options) (*engine.Simulation, error)
}

// Options steer a comparison; zero values give the stated defaults.
type Options struct {
	// Until is the end of the runs, s; required.
	Until float64
	// Sample is the spacing at which waveforms are compared, s; 0 means 0.5 ms.
	Sample float64
	// Channels are patterns of channels to compare; nil means the default
	// record of the engine.
	Channels []string
	// Repetitions is the number of timed runs of each setting, taken in turns;
	// 0 means 5. One more run of each, untimed, is compared. A setting that
	// takes more than five times the reference's steps plus 5000 counts as
	// failed, unless Engine.Solver.MaxSteps says otherwise, and isn't timed.
	Repetitions int
	// Windows are the ends, s after an event, of the first and the second
	// window in which deviations are told apart; zeros mean 0.02 and 0.3.
	Windows [2]float64
	// Engine holds method, tolerances and frame options for all runs.
	Engine engine.Options
	// Modes is the number of unknowns of the reference up to which the modes
	// of every setting are matched with the reference's; 0 means
	// DefaultModes, a negative value none.
	Modes int
	// Progress is called before every run; nil is left out.
	Progress func(setting string, run, of int)
}

// Window is a stretch of time after an event.
type Window int

// Windows. The first two are counted from every event, as far as
// Options.Windows says; Rest is everything else, the time before the first event
// included.
const (
	Early Window = iota
	Middle
	Rest
	numWindows
)

// WindowName is what a window of this comparison is, in words: "first 20 ms".
func (c *Comparison) WindowName(w Window) string {
	a, b := 1e3*c.Windows[0], 1e3*c.Windows[1]
	switch w {
	case Early:
		return fmt.Sprintf("first %.4g ms", a)
	case Middle:
		return fmt.Sprintf("%.4g to %.4g ms", a, b)
	}
	return "rest"
}

// Deviation is how far a channel strays from the reference in a window.
type Deviation struct {
	Max   float64 // largest, in the channel's unit
	RMS   float64 // root mean square over the window
	At    float64 // time of the largest, s
	Range float64 // range of the reference over the whole run
	Count int     // samples
}

// Relative is Max over the reference's range; 0 for a channel that doesn't
// move in either run, +Inf for one that moves in this run alone.
func (d Deviation) Relative() float64 { return ratio(d.Max, d.Range) }

// RelativeRMS is RMS over the reference's range.
func (d Deviation) RelativeRMS() float64 { return ratio(d.RMS, d.Range) }

func ratio(a, b float64) float64 {
	if a == 0 {
		return 0
	}
	return a / b
}

// Channel is the comparison of one channel.
type Channel struct {
	Name, Unit, Group string
	Windows           [numWindows]Deviation
}

// Worst returns the window with the largest deviation.
func (c *Channel) Worst() Window {
	w := Early
	for k := range c.Windows {
		if c.Windows[k].Max > c.Windows[w].Max {
			w = Window(k)
		}
	}
	return w
}

// Group is the worst of a group of channels (power, frequency, voltage,
// current).
type Group struct {
	Name string
	// Channel with the largest deviation relative to range, by window.
	Worst [numWindows]*Channel
}

// Result is one setting's outcome.
type Result struct {
	Setting  string
	Failure  string  // why the run ended early, "" if it didn't
	Reached  float64 // s
	Diverged bool    // failed, or left every bound of the reference
	Unknowns int
	Steps, Rejected,
	Factorizations int
	Time     time.Duration // median of the timed runs
	Speedup  float64       // reference time over Time
	Channels []Channel     // empty for the reference
	Groups   []Group
	Verdicts []string // what holds in this run
	Changes  []string // verdicts that differ from the reference's
	Summary  string   // one sentence
	Trace    *engine.Trace
	Notes    []engine.Note
	Modes    *Modes // nil where they weren't looked for
}

// Comparison is the outcome of all settings, the reference first.
type Comparison struct {
	Until   float64
	Windows [2]float64 // s after an event
	Events  []float64  // times of events in the reference run
	Results []Result
}

// Run runs every setting and compares with the first, the reference. It fails
// if the reference can't be run, if options are wrong, or if ctx ends.
func Run(ctx context.Context, settings []Setting, o Options) (*Comparison, error) {
	var errs []error
	if len(settings) < 2 {
		errs = append(errs, fmt.Errorf("compare: %d settings given, want at least 2", len(settings)))
	}
	if !(o.Until > 0) || math.IsInf(o.Until, 0) {
		errs = append(errs, fmt.Errorf("compare: the end of the runs is %g s, want a positive time", o.Until))
	}
	if !(o.Sample >= 0) {
		errs = append(errs, fmt.Errorf("compare: the sample spacing is %g s, want 0 (default) or more", o.Sample))
	}
	if o.Windows == [2]float64{} {
		o.Windows = [2]float64{0.02, 0.3}
	}
	if !(o.Windows[0] > 0 && o.Windows[1] > o.Windows[0]) {
		errs = append(errs, fmt.Errorf("compare: the windows end at %g and %g s, want two ascending times", o.Windows[0], o.Windows[1]))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	if o.Sample == 0 {
		o.Sample = 0.5e-3
	}
	if o.Repetitions == 0 {
		o.Repetitions = 5
	}
	c := &Comparison{Until: o.Until, Windows: o.Windows}
	total := (o.Repetitions + 1) * len(settings)
	done := 0
	progress := func(name string) {
		done++
		if o.Progress != nil {
			o.Progress(name, done, total)
		}
	}
	for i, s := range settings {
		progress(s.Name)
		opt := o.Engine
		opt.Sample, opt.Record, opt.NoLedger = o.Sample, o.Channels, true
		if i > 0 && opt.Solver.MaxSteps == 0 {
			opt.Solver.MaxSteps = patience * (c.Results[0].Steps + 1000)
		}
		r := Result{Setting: s.Name}
		sim, err := s.Start(&opt)
		if err == nil {
			r.Unknowns = sim.Unknowns()
			r.Trace, err = sim.Run(ctx, o.Until)
			st := sim.Stats()
			r.Steps, r.Rejected, r.Factorizations = st.Steps, st.Rejected, st.Factorizations
			r.Reached, r.Notes = sim.Time(), sim.Notes()
		}
		if ctx.Err() != nil {
			return nil, ctx.Err()
		}
		if err != nil {
			if i == 0 {
				return nil, fmt.Errorf("compare: the reference %q can't be run: %w", s.Name, err)
			}
			r.Failure = err.Error()
		}
		c.Results = append(c.Results, r)
	}
	times := make([][]time.Duration, len(settings))
	for range o.Repetitions {
		for i, s := range settings {
			progress(s.Name)
			if c.Results[i].Failure != "" {
				continue
			}
			opt := o.Engine
			opt.Record, opt.NoLedger = []string{}, true
			sim, err := s.Start(&opt)
			if err != nil {
				continue
			}
			begin := time.Now()
			_, err = sim.Run(ctx, o.Until)
			if ctx.Err() != nil {
				return nil, ctx.Err()
			}
			if err == nil {
				times[i] = append(times[i], time.Since(begin))
			}
		}
	}
	for i := range c.Results {
		if n := len(times[i]); n > 0 {
			sort.Slice(times[i], func(a, b int) bool { return times[i][a] < times[i][b] })
			c.Results[i].Time = times[i][n/2]
		}
	}
	ref := &c.Results[0]
	for k, before := range ref.Trace.Before {
		if before {
			c.Events = append(c.Events, ref.Trace.Time[k])
		}
	}
	for i := range c.Results {
		r := &c.Results[i]
		r.Verdicts = verdicts(r)
		if r.Time > 0 {
			r.Speedup = float64(ref.Time) / float64(r.Time)
		}
		if i == 0 || r.Trace == nil {
			r.Diverged = r.Failure != ""
			continue
		}
		c.compare(ref, r, o.Sample)
	}
	if o.Modes == 0 {
		o.Modes = DefaultModes
	}
	if ref.Unknowns <= o.Modes {
		c.matchModes(settings, o.Engine)
	}
	for i := range c.Results {
		r := &c.Results[i]
		if i > 0 {
			r.Changes = changes(ref.Verdicts, r.Verdicts)
		}
		r.Summary = c.sentence(ref, r, i == 0)
	}
	return c, nil
}

// patience is how many times the reference's steps (and a thousand) a setting
// may take before it counts as failed: a reduction that rings on undamped modes
// can take a thousand times as many.
const patience = 5

// group tells which group a channel belongs to by its unit.
func group(unit string) string {
	switch {
	case strings.HasPrefix(unit, "W") || strings.HasPrefix(unit, "var"):
		return "power"
	case strings.HasPrefix(unit, "Hz"):
		return "frequency"
	case strings.HasPrefix(unit, "V"):
		return "voltage"
	case strings.HasPrefix(unit, "A"):
		return "current"
	}
	return "other"
}

// onGrid picks the values of column col at multiples of the spacing; at an
// event the value after it.
func onGrid(tr *engine.Trace, col []float64, sample float64) []float64 {
	if len(tr.Time) == 0 {
		return nil
	}
	n := int(math.Floor(tr.Time[len(tr.Time)-1]/sample*(1+1e-12))) + 1
	out := make([]float64, n)
	k := 0
	for i := range out {
		t := float64(i) * sample
		for k+1 < len(tr.Time) && tr.Time[k+1] <= t {
			k++
		}
		out[i] = col[k]
	}
	return out
}

func (c *Comparison) compare(ref, r *Result, sample float64) {
	groups := make(map[string]*Group)
	var order []string
	for i, ch := range ref.Trace.Channels {
		col := r.Trace.Column(ch.Name)
		if col == nil {
			continue
		}
		a, b := onGrid(ref.Trace, ref.Trace.Values(i), sample), onGrid(r.Trace, col, sample)
		n := min(len(a), len(b))
		if n == 0 {
			continue
		}
		lo, hi := a[0], a[0]
		for _, v := range a {
			lo, hi = math.Min(lo, v), math.Max(hi, v)
		}
		cc := Channel{Name: ch.Name, Unit: ch.Unit, Group: group(ch.Unit)}
		var sum [numWindows]float64
		e := -1
		for k := range n {
			t := float64(k) * sample
			for e+1 < len(c.Events) && c.Events[e+1] <= t {
				e++
			}
			w := Rest
			if e >= 0 {
				switch d := t - c.Events[e]; {
				case d < c.Windows[0]-1e-9: // a sample on the edge is in the next
					w = Early
				case d < c.Windows[1]-1e-9:
					w = Middle
				}
			}
			dv := &cc.Windows[w]
			d := math.Abs(b[k] - a[k])
			sum[w] += d * d
			dv.Count++
			if d > dv.Max || d != d {
				dv.Max, dv.At = d, t
			}
		}
		for w := range cc.Windows {
			cc.Windows[w].Range = hi - lo
			if cc.Windows[w].Count > 0 {
				cc.Windows[w].RMS = math.Sqrt(sum[w] / float64(cc.Windows[w].Count))
			}
		}
		r.Channels = append(r.Channels, cc)
		if groups[cc.Group] == nil {
			groups[cc.Group] = &Group{Name: cc.Group}
			order = append(order, cc.Group)
		}
	}
	// A channel that hardly moves in the reference gives no measure: the
	// range of its group's widest channel bounds the smallest that counts.
	widest := make(map[string]float64)
	for i := range r.Channels {
		cc := &r.Channels[i]
		widest[cc.Unit] = math.Max(widest[cc.Unit], cc.Windows[0].Range)
	}
	for i := range r.Channels {
		cc := &r.Channels[i]
		if cc.Windows[0].Range < 0.01*widest[cc.Unit] {
			continue
		}
		g := groups[cc.Group]
		for w := range g.Worst {
			if cc.Windows[w].Count == 0 {
				continue
			}
			if g.Worst[w] == nil || cc.Windows[w].Relative() > g.Worst[w].Windows[w].Relative() {
				g.Worst[w] = cc
			}
		}
		if cc.Windows[Rest].Relative() > 10 {
			r.Diverged = true
		}
	}
	r.Diverged = r.Diverged || r.Failure != ""
	sort.Strings(order)
	for _, name := range order {
		r.Groups = append(r.Groups, *groups[name])
	}
}

// verdicts lists what an engineer would conclude from a run.
func verdicts(r *Result) []string {
	var v []string
	if r.Failure != "" {
		v = append(v, "the run fails")
	}
	if r.Trace == nil {
		return v
	}
	growing, moving := false, false
	for i, ch := range r.Trace.Channels {
		col := r.Trace.Values(i)
		switch {
		case strings.HasSuffix(ch.Name, ".limiting"):
			for _, x := range col {
				if x > 0 {
					v = append(v, ch.Owner+" reaches its current limit")
					break
				}
			}
		case strings.HasSuffix(ch.Name, ".frequency"):
			growing = growing || grows(r.Trace.Time, col)
			moving = moving || unsettled(r.Trace.Time, col)
		}
	}
	switch {
	case growing:
		v = append(v, "frequencies swing with growing amplitude")
	case moving:
		v = append(v, "frequencies have not settled at the end")
	}
	for _, n := range r.Notes {
		if strings.Contains(n.Text, "trip") && n.Device != "" {
			v = append(v, n.Device+" trips")
		}
	}
	sort.Strings(v)
	return unique(v)
}

// grows reports whether the swing of a signal grows over the time since the
// last event: its range in the last quarter exceeds that in the second, by a
// tenth, and is not negligible.
func grows(t, x []float64) bool {
	if len(t) == 0 {
		return false
	}
	start, end := lastEvent(t), t[len(t)-1]
	q := (end - start) / 4
	early, late := span(t, x, start+q, start+2*q), span(t, x, end-q, end+1)
	return late > 1.1*early && late > 1e-3*math.Abs(x[len(x)-1])
}

// unsettled reports whether a frequency still moves at the end: in the last
// tenth of the time since the last event by more than 2 % of what it did in all
// of it, and more than 2 mHz.
func unsettled(t, x []float64) bool {
	if len(t) == 0 {
		return false
	}
	start, end := lastEvent(t), t[len(t)-1]
	return span(t, x, end-0.1*(end-start), end+1) > math.Max(0.02*span(t, x, start, end+1), 2e-3)
}

// lastEvent is the time of the last pair of rows of one time, or of the start.
func lastEvent(t []float64) float64 {
	at := t[0]
	for k := 1; k < len(t); k++ {
		if t[k] == t[k-1] {
			at = t[k]
		}
	}
	return at
}

// span is the range of x over a <= t < b.
func span(t, x []float64, a, b float64) float64 {
	lo, hi := math.Inf(1), math.Inf(-1)
	for k := range t {
		if t[k] >= a && t[k] < b {
			lo, hi = math.Min(lo, x[k]), math.Max(hi, x[k])
		}
	}
	return hi - lo
}

func unique(v []string) []string {
	out := v[:0]
	for i, s := range v {
		if i == 0 || s != v[i-1] {
			out = append(out, s)
		}
	}
	return out
}

func changes(a, b []string) []string {
	in := func(list []string, s string) bool {
		for _, x := range list {
			if x == s {
				return true
			}
		}
		return false
	}
	var out []string
	for _, s := range b {
		if !in(a, s) {
			out = append(out, "here only: "+s)
		}
	}
	for _, s := range a {
		if !in(b, s) {
			out = append(out, "not shown: "+s)
		}
	}
	return out
}

// sentence sums up a result.
func (c *Comparison) sentence(ref, r *Result, isRef bool) string {
	if isRef {
		return fmt.Sprintf("%s is the reference: %d unknowns, %d steps, %s.", r.Setting, r.Unknowns, r.Steps, duration(r.Time))
	}
	if r.Trace == nil {
		return fmt.Sprintf("%s can't be run: %s.", r.Setting, brief(r.Failure))
	}
	var b strings.Builder
	fmt.Fprintf(&b, "%s keeps %d of %d unknowns", r.Setting, r.Unknowns, ref.Unknowns)
	if r.Time > 0 {
		fmt.Fprintf(&b, " and takes %s", duration(r.Time))
	}
	if r.Speedup > 0 {
		fmt.Fprintf(&b, " (%.2g times as fast)", r.Speedup)
	}
	if r.Diverged {
		fmt.Fprintf(&b, "; it leaves the reference for good")
		if r.Failure != "" {
			fmt.Fprintf(&b, " and ends at %.4g s: %s", r.Reached, brief(r.Failure))
		}
		b.WriteString(".")
		return b.String()
	}
	var parts []string
	for _, g := range r.Groups {
		if g.Name == "other" {
			continue
		}
		var first, later float64
		var at *Channel
		for w, ch := range g.Worst {
			if ch == nil {
				continue
			}
			x := ch.Windows[w].Relative()
			if Window(w) == Early {
				first, at = x, ch
			} else {
				later = math.Max(later, x)
			}
		}
		s := fmt.Sprintf("%s by up to %s of a channel's range in the first %.4g ms after an event", g.Name, percent(first), 1e3*c.Windows[0])
		if at != nil {
			s += fmt.Sprintf(" (%s, rms %s)", at.Name, percent(at.Windows[Early].RelativeRMS()))
		}
		s += fmt.Sprintf(" and %s later", percent(later))
		parts = append(parts, s)
	}
	fmt.Fprintf(&b, "; it misses %s", strings.Join(parts, ", "))
	if len(r.Changes) > 0 {
		fmt.Fprintf(&b, "; verdicts change: %s", strings.Join(r.Changes, "; "))
	} else {
		b.WriteString("; no verdict changes")
	}
	b.WriteString(".")
	return b.String()
}

// percent prints a ratio with two figures that count, without an exponent.
func percent(x float64) string {
	if x >= 0.0995 {
		return fmt.Sprintf("%.0f %%", 100*x)
	}
	return fmt.Sprintf("%.2g %%", 100*x)
}

// brief is the first of several joined errors.
func brief(failure string) string {
	first, rest, more := strings.Cut(failure, "\n")
	if !more {
		return first
	}
	return fmt.Sprintf("%s (and %d more of the kind)", first, strings.Count(rest, "\n")+1)
}

func duration(d time.Duration) string {
	if d == 0 {
		return "no time measured"
	}
	return fmt.Sprintf("%.3g ms", float64(d)/1e6)
}
