package compare

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
)

// WriteText prints the comparison as tables and a sentence for each setting.
func (c *Comparison) WriteText(w io.Writer) error {
	p := &printer{w: w}
	p.printf("%-42s %9s %8s %8s %8s %10s %8s\n", "setting", "unknowns", "steps", "rejected", "factor.", "time", "speed-up")
	for _, r := range c.Results {
		t, s := "-", "-"
		if r.Time > 0 {
			t, s = duration(r.Time), fmt.Sprintf("%.2f", r.Speedup)
		}
		p.printf("%-42s %9d %8d %8d %8d %10s %8s\n", r.Setting, r.Unknowns, r.Steps, r.Rejected, r.Factorizations, t, s)
	}
	for _, r := range c.Results[1:] {
		if len(r.Groups) == 0 {
			continue
		}
		p.printf("\n%s against %s: largest deviation and its channel's rms, %% of the channel's range\n", r.Setting, c.Results[0].Setting)
		table := [][]string{{""}}
		for k := range numWindows {
			table[0] = append(table[0], c.WindowName(k))
		}
		for _, g := range r.Groups {
			row := []string{g.Name}
			for k, ch := range g.Worst {
				cell := "-"
				if ch != nil {
					d := ch.Windows[k]
					cell = fmt.Sprintf("%.3g %% (rms %.2g %%) %s at %.4g s", 100*d.Relative(), 100*d.RelativeRMS(), ch.Name, d.At)
				}
				row = append(row, cell)
			}
			table = append(table, row)
		}
		p.table(table)
	}
	p.printf("\n")
	for _, r := range c.Results {
		p.printf("%s\n", r.Summary)
	}
	c.writeModes(p)
	return p.err
}

type printer struct {
	w   io.Writer
	err error
}

func (p *printer) printf(format string, a ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintf(p.w, format, a...)
	}
}

// table prints rows of cells, each column as wide as its widest cell.
func (p *printer) table(rows [][]string) {
	width := make([]int, len(rows[0]))
	for _, r := range rows {
		for i, c := range r {
			width[i] = max(width[i], len(c))
		}
	}
	for _, r := range rows {
		line := " "
		for i, c := range r {
			line += fmt.Sprintf(" %-*s ", width[i], c)
		}
		p.printf("%s\n", strings.TrimRight(line, " "))
	}
}

// WriteCSV writes a row for every setting, channel and window.
func (c *Comparison) WriteCSV(w io.Writer) error {
	out := csv.NewWriter(w)
	row := []string{"setting", "channel", "unit", "group", "window", "max", "rms", "range", "max_over_range", "rms_over_range", "at_s"}
	if err := out.Write(row); err != nil {
		return err
	}
	num := func(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }
	for _, r := range c.Results {
		for _, ch := range r.Channels {
			for k, d := range ch.Windows {
				if d.Count == 0 {
					continue
				}
				if err := out.Write([]string{r.Setting, ch.Name, ch.Unit, ch.Group, c.WindowName(Window(k)), num(d.Max), num(d.RMS), num(d.Range), num(d.Relative()), num(d.RelativeRMS()), num(d.At)}); err != nil {
					return err
				}
			}
		}
	}
	out.Flush()
	return out.Error()
}

// WriteJSON writes the results without the waveforms.
func (c *Comparison) WriteJSON(w io.Writer) error {
	type deviation struct {
		Window   string   `json:"window"`
		Max      float64  `json:"max"`
		RMS      float64  `json:"rms"`
		At       float64  `json:"at_s"`
		Relative *float64 `json:"max_over_range"` // null where the channel doesn't move
	}
	type channel struct {
		Name    string      `json:"name"`
		Unit    string      `json:"unit"`
		Group   string      `json:"group"`
		Range   float64     `json:"range"`
		Windows []deviation `json:"windows"`
	}
	type modesJSON struct {
		Stable    bool     `json:"stable"`
		Rightmost string   `json:"rightmost,omitempty"`
		Shared    int      `json:"shared"`
		Differ    int      `json:"damping_differs"`
		Only      int      `json:"only_here"`
		Missing   int      `json:"missing"`
		Warnings  []string `json:"warnings,omitempty"`
		Failure   string   `json:"failure,omitempty"`
	}
	type result struct {
		Setting        string     `json:"setting"`
		Unknowns       int        `json:"unknowns"`
		Steps          int        `json:"steps"`
		Rejected       int        `json:"rejected"`
		Factorizations int        `json:"factorizations"`
		Time           float64    `json:"time_s"`
		Speedup        float64    `json:"speedup"`
		Diverged       bool       `json:"diverged"`
		Failure        string     `json:"failure,omitempty"`
		Reached        float64    `json:"reached_s"`
		Verdicts       []string   `json:"verdicts"`
		Changes        []string   `json:"changes"`
		Summary        string     `json:"summary"`
		Channels       []channel  `json:"channels,omitempty"`
		Modes          *modesJSON `json:"modes,omitempty"`
	}
	doc := struct {
		Until   float64   `json:"until_s"`
		Events  []float64 `json:"events_s"`
		Results []result  `json:"results"`
	}{Until: c.Until, Events: c.Events}
	for _, r := range c.Results {
		x := result{Setting: r.Setting, Unknowns: r.Unknowns, Steps: r.Steps, Rejected: r.Rejected, Factorizations: r.Factorizations,
			Time: r.Time.Seconds(), Speedup: r.Speedup, Diverged: r.Diverged, Failure: r.Failure, Reached: r.Reached,
			Verdicts: r.Verdicts, Changes: r.Changes, Summary: r.Summary}
		for _, ch := range r.Channels {
			y := channel{Name: ch.Name, Unit: ch.Unit, Group: ch.Group, Range: ch.Windows[0].Range}
			for k, d := range ch.Windows {
				if d.Count == 0 {
					continue
				}
				v := deviation{Window: c.WindowName(Window(k)), Max: finite(d.Max), RMS: finite(d.RMS), At: d.At}
				if rel := d.Relative(); !math.IsInf(rel, 0) && rel == rel {
					v.Relative = &rel
				}
				y.Windows = append(y.Windows, v)
			}
			x.Channels = append(x.Channels, y)
		}
		if m := r.Modes; m != nil {
			x.Modes = &modesJSON{m.Stable, m.Rightmost, m.Shared, m.Differ, m.Only, m.Missing, m.Warnings, m.Failure}
		}
		doc.Results = append(doc.Results, x)
	}
	e := json.NewEncoder(w)
	e.SetIndent("", " ")
	return e.Encode(doc)
}

// finite keeps JSON valid for a run that left all bounds.
func finite(x float64) float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return math.MaxFloat64
	}
	return x
}

// Text returns what WriteText prints.
func (c *Comparison) Text() string {
	var b strings.Builder
	c.WriteText(&b) // a Builder doesn't fail
	return b.String()
}
