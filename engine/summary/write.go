package summary

import (
	"fmt"
	"io"
	"math"
	"sort"
	"strings"
)

// WriteText tells the run in words and numbers, event by event, in lines of at
// most width characters where words allow it.
func (s *Summary) WriteText(w io.Writer, width int) error {
	p := &writer{w: w, width: max(width, 40)}
	var f []string
	for _, x := range s.Frequencies {
		f = append(f, num(x, 4)+" Hz")
	}
	p.line("Start: steady state at %s, %d unknowns, found in %d iterations.", strings.Join(f, " and "), s.Unknowns, s.Iterations)
	for i := range s.Segments {
		p.segment(&s.Segments[i])
	}
	if len(s.NotRecorded) > 0 {
		p.line("")
		p.line("Not recorded, so not judged: %s.", strings.Join(s.NotRecorded, ", "))
	}
	p.line("")
	p.line("%-22s %9s %9s %13s %15s", "cost of", "steps", "rejected", "evaluations", "factorisations")
	var steps, rejected, evals, factors int
	for _, g := range s.Segments {
		p.line("%8.4f to %8.4f s  %9d %9d %13d %15d", g.From, g.To, g.Steps, g.Rejected, g.Evaluations, g.Factorizations)
		steps, rejected, evals, factors = steps+g.Steps, rejected+g.Rejected, evals+g.Evaluations, factors+g.Factorizations
	}
	p.line("%-22s %9d %9d %13d %15d", "the whole run", steps, rejected, evals, factors)
	if e := s.Energy; e.Throughput > 0 {
		p.line("")
		p.wrap("", fmt.Sprintf("Energy: %s kJ supplied, %s kJ dissipated or used, %s kJ more stored, %s J destroyed at switching; the ledger closes to %.1e of the throughput.",
			num(e.Supplied/1e3, 3), num((e.Dissipated+e.Elsewhere)/1e3, 3), num(e.StoredChange/1e3, 4), figures(e.Destroyed), s.Closure))
	}
	if len(s.Energy.LeftOut) > 0 {
		p.wrap("", "Devices that keep no energy account, taken by their terminal power: "+strings.Join(s.Energy.LeftOut, ", ")+".")
	}
	if n := len(s.Reduced); n > 0 {
		var f []string
		for _, w := range s.FrameSpeeds {
			f = append(f, num(w, 4)+" Hz")
		}
		p.wrap("", fmt.Sprintf("%d devices below full detail: what is quasi-steady stores no energy, and takes its reactance at the speed of the network frame (%s at the end).", n, strings.Join(f, ", ")))
	}
	return p.err
}

type writer struct {
	w     io.Writer
	width int
	err   error
}

func (p *writer) line(format string, a ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintf(p.w, format+"\n", a...)
	}
}

// wrap prints text with the indent, broken at spaces.
func (p *writer) wrap(indent, text string) {
	line := indent
	for _, word := range strings.Fields(text) {
		if len(line)+1+len(word) > p.width && line != indent {
			p.line("%s", line)
			line = indent + "  "
		}
		if line != indent && !strings.HasSuffix(line, " ") {
			line += " "
		}
		line += word
	}
	if strings.TrimSpace(line) != "" {
		p.line("%s", line)
	}
}

func (p *writer) segment(g *Segment) {
	p.line("")
	head := "before any event"
	if len(g.Events) > 0 {
		head = strings.Join(g.Events, "; ")
	} else if g.From > 0 {
		head = "(" + strings.Join(g.Followed, "; ") + ")"
	}
	p.wrap("", fmt.Sprintf("%.4f s %s", g.From, head))
	if len(g.Events) > 0 {
		for _, c := range g.Followed {
			p.wrap("    - ", c)
		}
	}
	pair := func(name string, lo, hi *Extreme, digits int, unit string) {
		if lo == nil {
			return
		}
		if hi.Value-lo.Value < math.Pow(10, -float64(digits)) {
			p.line("    %-11s %s %s throughout", name, num(hi.Value, digits), unit)
			return
		}
		p.line("    %-11s lowest %s %s (%s, %s s), highest %s %s (%s, %s s)", name, num(lo.Value, digits), unit, lo.At, num(lo.Time, 4), num(hi.Value, digits), unit, hi.At, num(hi.Time, 4))
	}
	pair("frequency", g.FrequencyLow, g.FrequencyHigh, 4, "Hz")
	if r := g.ROCOF; r != nil && math.Abs(r.Value) >= 5e-4 {
		extra := ""
		if q := g.ROCOF20; q != nil {
			extra = fmt.Sprintf("; over 20 ms %s Hz/s (%s)", num(q.Value, 3), q.At)
		}
		p.line("    %-11s %s Hz/s over 100 ms (%s, until %s s)%s", "ROCOF", num(r.Value, 3), r.At, num(r.Time, 4), extra)
	} else if q := g.ROCOF20; q != nil && math.Abs(q.Value) >= 5e-4 {
		p.line("    %-11s %s Hz/s over 20 ms (%s)", "ROCOF", num(q.Value, 3), q.At)
	}
	pair("voltage", g.VoltageLow, g.VoltageHigh, 4, "pu")
	if l := g.LaterLow; l != nil && g.VoltageLow != nil && g.VoltageHigh != nil && len(g.Events) > 0 &&
		(l.Value > g.VoltageLow.Value+1e-3 || g.LaterHigh.Value < g.VoltageHigh.Value-1e-3) {
		pair("  from 20 ms", g.LaterLow, g.LaterHigh, 4, "pu")
	}
	if len(g.Dead) > 0 {
		p.labelled("dead", strings.Join(g.Dead, ", "))
	}
	if c := g.Current; c != nil {
		p.line("    %-11s peak %s of limit (%s, %s s)", "inverters", num(c.Value, 3), c.At, num(c.Time, 4))
	}
	if len(g.Limiting) > 0 {
		var names []string
		for n := range g.Limiting {
			names = append(names, n)
		}
		sort.Strings(names)
		for i, n := range names {
			names[i] = fmt.Sprintf("%s %s ms", n, num(1e3*g.Limiting[n], 1))
		}
		p.labelled("limiting", strings.Join(names, ", "))
	}
	if len(g.Events) > 0 {
		if g.Settled {
			p.line("    %-11s after %s s", "settled", num(g.Settling, 3))
		} else {
			p.line("    %-11s not within the %s s to the next event or the end", "settled", num(g.To-g.From, 3))
		}
	}
	if g.Frequency != nil {
		p.line("    %-11s %s Hz (%s)", "at the end", num(g.Frequency.Value, 4), g.Frequency.At)
	}
	p.sources(g.Sources)
}

// sources prints powers and loadings, as many in a line as fit.
func (p *writer) sources(list []Source) {
	widest := 0
	for _, s := range list {
		widest = max(widest, len(s.Name))
	}
	line := ""
	for _, s := range list {
		pu := ""
		if s.Loading != nil {
			pu = num(*s.Loading, 3) + " pu"
		}
		kvar := "-"
		if s.Q != nil {
			kvar = num(*s.Q, 1)
		}
		cell := fmt.Sprintf("%-*s %9s kW %9s kvar %8s", widest, s.Name, num(s.P, 1), kvar, pu)
		if line != "" && len(line)+3+len(cell) > p.width {
			p.line("%s", strings.TrimRight(line, " "))
			line = ""
		}
		if line == "" {
			line = "      " + cell
		} else {
			line += "   " + cell
		}
	}
	if line != "" {
		p.line("%s", strings.TrimRight(line, " "))
	}
}

// labelled prints text behind a label, continued under itself.
func (p *writer) labelled(label, text string) {
	line, used := fmt.Sprintf("    %-11s", label), false
	for _, word := range strings.Fields(text) {
		if used && len(line)+1+len(word) > p.width {
			p.line("%s", line)
			line = strings.Repeat(" ", 15)
		}
		line, used = line+" "+word, true
	}
	p.line("%s", line)
}

// figures formats x with three figures that count, and less than 1e-6 as 0.
func figures(x float64) string {
	if math.Abs(x) < 1e-6 {
		return "0"
	}
	return num(x, max(0, 2-int(math.Floor(math.Log10(math.Abs(x))))))
}

// num formats x with the given number of decimals, without a minus sign for
// what rounds to zero.
func num(x float64, decimals int) string {
	s := fmt.Sprintf("%.*f", decimals, x)
	if strings.Trim(s, "-0.") == "" {
		return strings.TrimPrefix(s, "-")
	}
	return s
}
