// Package summary turns a finished run into what an engineer asks of it, event
// by event: extremes of frequency and voltage, rate of change of frequency,
// inverter currents against their limits, sharing, settling, the energy ledger
// and the cost. It computes and writes; it prints nothing by itself.
//
// # Definitions
//
// A segment lasts from one event to the next. Extremes are taken over the rows
// of the trace, so they are as fine as its sampling; voltages are per unit of
// the bus's rated voltage. Buses that are dead give no extremes and are named.
//
// The rate of change of frequency is the largest mean slope of a bus's island
// frequency over a window of 100 ms within the segment (standards average over
// at least 0.1 s: IEEE Std 1547-2018, 6.5.2.5, value from memory) and, beside
// it, over 20 ms.
//
// A segment has settled when every island frequency, source power and bus
// voltage stays within a band around its value at the segment's end: 2 % of its
// range in the segment, but at least 2 mHz, 0.2 % of the source's rating and
// 0.001 per unit. A band that is only kept in the last tenth of the segment
// counts as not settled. The definition is our own.
package summary

import (
	"errors"
	"math"
	"slices"
	"strings"

	"islet/engine"
	"islet/solvers/facet"
)

// Extreme is a value with its place and time.
type Extreme struct {
	Value float64 `json:"value"`
	At    string  `json:"at"`
	Time  float64 `json:"time_s"`
}

// Source is a source's state at the end of a segment.
type Source struct {
	Name string   `json:"name"`
	P    float64  `json:"p_kW"`
	Q    *float64 `json:"q_kvar,omitempty"` // nil if not recorded
	// Loading is P over the rating of a source that holds the network by
	// droop or the like; nil where no rating bounds P (a grid's is its
	// short-circuit power).
	Loading *float64 `json:"p_pu,omitempty"`
}

// Segment is what happened from one event to the next.
type Segment struct {
	From     float64  `json:"from_s"`
	To       float64  `json:"to_s"`
	Events   []string `json:"events"`
	Followed []string `json:"consequences"`

	FrequencyLow  *Extreme `json:"frequency_low_Hz,omitempty"`
	FrequencyHigh *Extreme `json:"frequency_high_Hz,omitempty"`
	VoltageLow    *Extreme `json:"voltage_low_pu,omitempty"`
	VoltageHigh   *Extreme `json:"voltage_high_pu,omitempty"`
	// VoltageLow and VoltageHigh from 20 ms after the event on, without the
	// spike of the switching itself.
	LaterLow  *Extreme `json:"voltage_low_after_20ms_pu,omitempty"`
	LaterHigh *Extreme `json:"voltage_high_after_20ms_pu,omitempty"`
	Dead      []string `json:"dead_buses,omitempty"`
	ROCOF     *Extreme `json:"rocof_100ms_Hz_per_s,omitempty"`
	ROCOF20   *Extreme `json:"rocof_20ms_Hz_per_s,omitempty"`

	Current  *Extreme           `json:"peak_current_over_limit,omitempty"`
	Limiting map[string]float64 `json:"time_limiting_s,omitempty"`

	Settled   bool     `json:"settled"`
	Settling  float64  `json:"settling_time_s"`
	Frequency *Extreme `json:"final_frequency_Hz,omitempty"` // of the first live bus
	Sources   []Source `json:"sources"`

	Steps          int `json:"steps"`
	Rejected       int `json:"rejected"`
	Evaluations    int `json:"evaluations"`
	Factorizations int `json:"factorizations"`
}

// Summary is the summary of a run.
type Summary struct {
	From     float64 `json:"from_s"`
	To       float64 `json:"to_s"`
	Unknowns int     `json:"unknowns"`

	Frequencies []float64 `json:"initial_frequencies_Hz"`
	Iterations  int       `json:"operating_point_iterations"`
	Drift       float64   `json:"operating_point_drift_per_s"`

	// Reduced lists devices below full detail. Quasi-steady elements take their
	// reactance at the speed of their island's network frame, FrameSpeeds at
	// the end of the run, and store no energy.
	Reduced     []string             `json:"reduced,omitempty"`
	FrameSpeeds []float64            `json:"frame_speeds_Hz"`
	Segments    []Segment            `json:"segments"`
	NotRecorded []string             `json:"not_recorded,omitempty"`
	Energy      engine.EnergyBalance `json:"energy_J"`
	Closure     float64              `json:"energy_closure"`
}

// signal is a recorded channel with what is needed to judge it.
type signal struct {
	owner string
	x     []float64
	base  float64 // rated volts, rating in W, limit in A rms
	floor float64 // smallest settling band, in the channel's unit
}

// Summarise summarises what sim has run so far. It fails if nothing was
// recorded.
func Summarise(sim *engine.Simulation) (*Summary, error) {
	tr := sim.Trace()
	if tr.Rows() == 0 {
		return nil, errors.New("summary: the run has no recorded rows")
	}
	op := sim.OperatingPoint()
	s := &Summary{From: tr.Time[0], To: tr.Time[tr.Rows()-1], Unknowns: sim.Unknowns(),
		Frequencies: op.Frequencies, Iterations: op.Iterations, Drift: op.Drift, Energy: sim.Energy()}
	s.Closure = s.Energy.Closure()
	g := gather(sim, tr)
	sys := sim.System()
	for _, name := range sys.DeviceNames() {
		if d, ok := sys.Device(name).(facet.Detailed); ok && len(d.Details()) > 0 && d.Detail() != d.Details()[0] {
			s.Reduced = append(s.Reduced, name)
		}
	}
	for _, b := range sys.BusNames() {
		if w := sim.FrameSpeed(b) / (2 * math.Pi); w > 0 && !slices.Contains(s.FrameSpeeds, w) {
			s.FrameSpeeds = append(s.FrameSpeeds, w)
		}
	}
	for _, m := range []struct {
		list []signal
		name string
	}{{g.frequency, "frequencies"}, {g.voltage, "voltages"}, {g.power, "powers of sources"}, {g.current, "inverter currents"}} {
		if len(m.list) == 0 {
			s.NotRecorded = append(s.NotRecorded, m.name)
		}
	}
	notes := sim.Notes()
	costs := sim.Costs()
	start := 0
	for start < tr.Rows() {
		end := start
		for end+1 < tr.Rows() && !(tr.Before[end] && tr.Time[end+1] == tr.Time[end]) {
			end++
		}
		seg := segment(tr, g, start, end)
		if seg.To == seg.From && end+1 < tr.Rows() {
			// Several events at one time: the next segment has the last.
			start = end + 1
			continue
		}
		for _, n := range notes {
			if n.Time < seg.From || n.Time >= seg.To && !(end+1 == tr.Rows() && n.Time == seg.To) {
				continue
			}
			if n.Event {
				seg.Events = append(seg.Events, n.Text)
			} else {
				seg.Followed = append(seg.Followed, n.Text)
			}
		}
		for _, c := range costs {
			if c.To > seg.From && c.From < seg.To {
				seg.Steps += c.Stats.Steps
				seg.Rejected += c.Stats.Rejected + c.Stats.Failed
				seg.Evaluations += c.Stats.Evals
				seg.Factorizations += c.Stats.Factorizations
			}
		}
		s.Segments = append(s.Segments, seg)
		start = end + 1
	}
	return s, nil
}

// signals are the recorded channels by what they tell.
type signals struct {
	frequency, voltage, power, current, limiting []signal
	q                                            map[string][]float64
}

func gather(sim *engine.Simulation, tr *engine.Trace) *signals {
	g := &signals{q: make(map[string][]float64)}
	sys := sim.System()
	for i, ch := range tr.Channels {
		x := tr.Values(i)
		name := strings.TrimPrefix(ch.Name, ch.Owner+".")
		if ch.Bus {
			b, _ := sys.FindBus(ch.Owner)
			switch name {
			case "v":
				g.voltage = append(g.voltage, signal{ch.Owner, x, b.Rated(), 1e-3 * b.Rated()})
			case "frequency":
				g.frequency = append(g.frequency, signal{ch.Owner, x, 1, 2e-3})
			}
			continue
		}
		d := sys.Device(ch.Owner)
		switch {
		case name == "p" && strings.HasPrefix(ch.Unit, "W generated"):
			rating := 0.0
			// A source whose current isn't bounded is a grid, and its
			// weight its short-circuit power.
			if f, ok := d.(facet.Former); ok {
				if _, ok := d.(facet.Sized); ok {
					rating = f.Weight()
				}
			}
			lo, hi := extent(x)
			floor := 2e-3 * rating
			if rating == 0 {
				floor = 2e-3 * math.Max(math.Abs(lo), math.Abs(hi))
			}
			g.power = append(g.power, signal{ch.Owner, x, rating, floor})
		case name == "q" && strings.HasPrefix(ch.Unit, "var generated"):
			g.q[ch.Owner] = x
		case name == "limiting":
			g.limiting = append(g.limiting, signal{owner: ch.Owner, x: x})
		}
		if f, ok := d.(facet.Sized); ok && inverter(d) {
			limit, k := f.CurrentLimit()
			if m, ok := d.(facet.Measurer); ok && k >= 0 && k < len(m.Channels()) && m.Channels()[k].Name == name && limit > 0 && !math.IsInf(limit, 0) {
				g.current = append(g.current, signal{owner: ch.Owner, x: x, base: limit / math.Sqrt2})
			}
		}
	}
	return g
}

// inverter reports whether the device generates at one terminal.
func inverter(d engine.Device) bool {
	m, ok := d.(facet.Measurer)
	if !ok || len(d.Describe().Terminals) != 1 {
		return false
	}
	for _, c := range m.Channels() {
		if c.Name == "p" {
			return strings.HasPrefix(c.Unit, "W generated")
		}
	}
	return false
}

func extent(x []float64) (lo, hi float64) {
	lo, hi = math.Inf(1), math.Inf(-1)
	for _, v := range x {
		lo, hi = math.Min(lo, v), math.Max(hi, v)
	}
	return lo, hi
}

// segment measures rows a to b, both included.
func segment(tr *engine.Trace, g *signals, a, b int) Segment {
	t := tr.Time[a : b+1]
	seg := Segment{From: t[0], To: t[len(t)-1], Settled: true}
	low := func(e **Extreme, v float64, at string, when float64) {
		if *e == nil || v < (*e).Value {
			*e = &Extreme{v, at, when}
		}
	}
	high := func(e **Extreme, v float64, at string, when float64) {
		if *e == nil || v > (*e).Value {
			*e = &Extreme{v, at, when}
		}
	}
	for _, s := range g.voltage {
		x := s.x[a : b+1]
		if dead(x) {
			seg.Dead = append(seg.Dead, s.owner)
			continue
		}
		for k, v := range x {
			low(&seg.VoltageLow, v/s.base, s.owner, t[k])
			high(&seg.VoltageHigh, v/s.base, s.owner, t[k])
			if t[k] >= seg.From+0.02 {
				low(&seg.LaterLow, v/s.base, s.owner, t[k])
				high(&seg.LaterHigh, v/s.base, s.owner, t[k])
			}
		}
	}
	for _, s := range g.frequency {
		x := s.x[a : b+1]
		if dead(x) {
			continue
		}
		for k, v := range x {
			low(&seg.FrequencyLow, v, s.owner, t[k])
			high(&seg.FrequencyHigh, v, s.owner, t[k])
		}
		for _, w := range []struct {
			span float64
			e    **Extreme
		}{{0.1, &seg.ROCOF}, {0.02, &seg.ROCOF20}} {
			if slope, when, ok := steepest(t, x, w.span); ok && (*w.e == nil || math.Abs(slope) > math.Abs((*w.e).Value)) {
				*w.e = &Extreme{slope, s.owner, when}
			}
		}
		if seg.Frequency == nil {
			seg.Frequency = &Extreme{x[len(x)-1], s.owner, seg.To}
		}
	}
	for _, s := range g.current {
		for k, v := range s.x[a : b+1] {
			high(&seg.Current, v/s.base, s.owner, t[k])
		}
	}
	for _, s := range g.limiting {
		if d := timeAbove(t, s.x[a:b+1]); d > 0 {
			if seg.Limiting == nil {
				seg.Limiting = make(map[string]float64)
			}
			seg.Limiting[s.owner] = d
		}
	}
	for _, list := range [][]signal{g.frequency, g.voltage, g.power} {
		for _, s := range list {
			seg.Settling = math.Max(seg.Settling, settling(t, s.x[a:b+1], s.floor))
		}
	}
	if d := seg.To - seg.From; d > 0 && seg.Settling > 0.9*d {
		seg.Settled = false
	}
	for _, s := range g.power {
		src := Source{Name: s.owner, P: s.x[b] / 1e3}
		if q := g.q[s.owner]; q != nil {
			kvar := q[b] / 1e3
			src.Q = &kvar
		}
		if s.base > 0 {
			l := s.x[b] / s.base
			src.Loading = &l
		}
		seg.Sources = append(seg.Sources, src)
	}
	return seg
}

func dead(x []float64) bool {
	for _, v := range x {
		if v != 0 {
			return false
		}
	}
	return true
}

// steepest finds the largest mean slope by magnitude over a window of the given
// span, the signal being linear between rows. when is the window's end; ok is
// false if the rows span less than the window.
func steepest(t, x []float64, span float64) (slope, when float64, ok bool) {
	j := 0
	for k := range t {
		at := t[k] - span
		if at < t[0]-1e-12 {
			continue
		}
		for j+1 < len(t) && t[j+1] <= at {
			j++
		}
		v := x[j]
		if j+1 < len(t) && t[j+1] > t[j] {
			v += (x[j+1] - x[j]) * (at - t[j]) / (t[j+1] - t[j])
		}
		if s := (x[k] - v) / span; !ok || math.Abs(s) > math.Abs(slope) {
			slope, when, ok = s, t[k], true
		}
	}
	return slope, when, ok
}

// timeAbove is the time for which x > 0, rows holding until the next.
func timeAbove(t, x []float64) float64 {
	sum := 0.0
	for k := 0; k+1 < len(t); k++ {
		if x[k] > 0 {
			sum += t[k+1] - t[k]
		}
	}
	return sum
}

// settling is the time from the first row after which x stays within 2 % of
// its range, or floor if that is more, of its last value.
func settling(t, x []float64, floor float64) float64 {
	lo, hi := extent(x)
	band := math.Max(0.02*(hi-lo), floor)
	end := x[len(x)-1]
	for k := len(x) - 1; k >= 0; k-- {
		if math.Abs(x[k]-end) > band {
			return t[min(k+1, len(t)-1)] - t[0]
		}
	}
	return 0
}
