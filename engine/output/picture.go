package output

import (
	"fmt"
	"image/color"
	"io"
	"math"
	"slices"
	"sort"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgsvg"

	"islet/engine"
	"islet/engine/compare"
	"islet/solvers/facet"
)

// Picture is a picture that can be written in several formats.
type Picture struct {
	// Name is the file's name without its ending.
	Name   string
	panels []panel
	notes  []string // numbered events below the panels
	width  vg.Length
	height vg.Length
}

// panel is one set of axes: the whole run, or a zoom.
type panel struct {
	title, y   string
	from, to   float64
	curves     []curve
	grey       []curve // shown, not named
	caption    string
	marks      []mark
	lowerLimit float64 // smallest height of the y range
	cut        bool    // the y range leaves out the first 5 ms after events
}

type curve struct {
	name string
	t, y []float64 // y is NaN where there is nothing to show
	dash bool
}

type mark struct {
	t     float64
	label string
}

// palette holds the colour-blind-safe colours of M. Okabe, K. Ito, Color
// Universal Design, 2008 (value from memory), the yellow left out for being
// faint on white.
var palette = []color.Color{
	color.RGBA{0, 114, 178, 255},
	color.RGBA{213, 94, 0, 255},
	color.RGBA{0, 158, 115, 255},
	color.RGBA{204, 121, 167, 255},
	color.RGBA{230, 159, 0, 255},
	color.RGBA{86, 180, 233, 255},
	color.RGBA{0, 0, 0, 255},
}

var grey = color.RGBA{190, 190, 190, 255}

// named is the number of curves a panel names; the others are drawn in grey.
const named = 7

// Plots makes the pictures of a run: bus voltages, source currents over their
// limits, active and reactive powers of sources, and frequencies. Each shows
// the whole run and the tenth of a second around its largest disturbance.
// Quantities that were not recorded have no picture.
func Plots(sim *engine.Simulation) []*Picture {
	tr := sim.Trace()
	if tr.Rows() < 2 {
		return nil
	}
	sys := sim.System()
	sets := []struct {
		name, title, y string
		least          float64
		curves         []curve
	}{
		{"voltages", "Bus voltages", "per unit of rated", 0.01, nil},
		{"currents", "Inverter currents", "per unit of limit", 0.05, nil},
		{"powers", "Active power of sources", "kW", 1, nil},
		{"reactive-powers", "Reactive power of sources", "kvar", 1, nil},
		{"frequencies", "Frequencies", "Hz", 0.02, nil},
	}
	add := func(k int, name string, x []float64, scale float64) {
		y := make([]float64, len(x))
		for i, v := range x {
			y[i] = v * scale
			if v == 0 && (k == 0 || k == 4) {
				y[i] = math.NaN() // a dead bus
			}
		}
		sets[k].curves = append(sets[k].curves, curve{name: name, t: tr.Time, y: y})
	}
	same := make(map[string]bool)
	for i, ch := range tr.Channels {
		name := strings.TrimPrefix(ch.Name, ch.Owner+".")
		x := tr.Values(i)
		if ch.Bus {
			b, _ := sys.FindBus(ch.Owner)
			switch name {
			case "v":
				add(0, ch.Owner, x, 1/b.Rated())
			case "frequency":
				// Buses of one island over the whole run have one curve.
				if key := fingerprint(x); !same[key] {
					same[key] = true
					add(4, "at "+ch.Owner, x, 1)
				}
			}
			continue
		}
		d := sys.Device(ch.Owner)
		switch {
		case name == "p" && strings.HasPrefix(ch.Unit, "W generated"):
			add(2, ch.Owner, x, 1e-3)
		case name == "q" && strings.HasPrefix(ch.Unit, "var generated"):
			add(3, ch.Owner, x, 1e-3)
		}
		s, sized := d.(facet.Sized)
		m, measured := d.(facet.Measurer)
		if !sized || !measured || len(d.Describe().Terminals) != 1 {
			continue
		}
		limit, k := s.CurrentLimit()
		if k >= 0 && k < len(m.Channels()) && m.Channels()[k].Name == name && limit > 0 && !math.IsInf(limit, 0) {
			add(1, ch.Owner, x, math.Sqrt2/limit)
		}
	}
	events, notes := eventMarks(sim)
	var out []*Picture
	for _, s := range sets {
		if len(s.curves) == 0 {
			continue
		}
		p := &Picture{Name: s.name, notes: notes, width: 26 * vg.Centimeter}
		main := makePanel(s.title, s.y, s.curves, tr.Time[0], tr.Time[tr.Rows()-1], events, s.least)
		main.cut = true
		p.panels = append(p.panels, main)
		if t0, ok := busiest(s.curves, events); ok {
			zoom := makePanel(fmt.Sprintf("%s, 100 ms around %.4g s", s.title, t0), s.y, s.curves, math.Max(tr.Time[0], t0-0.01), math.Min(t0+0.09, tr.Time[tr.Rows()-1]), events, s.least)
			p.panels = append(p.panels, zoom)
		}
		p.layout()
		out = append(out, p)
	}
	return out
}

// Overlays makes, for every setting but the reference, a picture of the channel
// that deviates most in each group: both waveforms, and below them their
// difference.
func Overlays(c *compare.Comparison) []*Picture {
	ref := c.Results[0]
	var out []*Picture
	for _, r := range c.Results[1:] {
		if r.Trace == nil || r.Trace.Rows() < 2 {
			continue
		}
		for _, g := range r.Groups {
			// The first 300 ms tell more than a spike at the switching.
			ch := g.Worst[compare.Middle]
			if ch == nil {
				ch = g.Worst[compare.Early]
			}
			if ch == nil || g.Name == "other" {
				continue
			}
			a, b := ref.Trace.Column(ch.Name), r.Trace.Column(ch.Name)
			diff := make([]float64, len(r.Trace.Time))
			for k, t := range r.Trace.Time {
				diff[k] = b[k] - ref.Trace.At(ch.Name, t)
			}
			p := &Picture{Name: slug(r.Setting) + "-" + g.Name, width: 26 * vg.Centimeter}
			var marks []mark
			for _, t := range c.Events {
				marks = append(marks, mark{t: t})
			}
			end := c.Until
			both := makePanel(ch.Name, ch.Unit, []curve{{name: ref.Setting, t: ref.Trace.Time, y: a}, {name: r.Setting, t: r.Trace.Time, y: b, dash: true}}, 0, end, marks, 0)
			less := makePanel("difference", ch.Unit, []curve{{name: "difference", t: r.Trace.Time, y: diff}}, 0, end, marks, 0)
			p.panels = []panel{both, less}
			p.layout()
			out = append(out, p)
		}
	}
	return out
}

// slug makes a file name of a setting's name.
func slug(s string) string {
	return strings.Trim(strings.ReplaceAll(strings.Map(func(r rune) rune {
		switch {
		case r >= 'a' && r <= 'z', r >= '0' && r <= '9':
			return r
		case r >= 'A' && r <= 'Z':
			return r + 'a' - 'A'
		}
		return '-'
	}, s), "--", "-"), "-")
}

func fingerprint(x []float64) string {
	sum, sq := 0.0, 0.0
	for k, v := range x {
		sum += v * float64(k+1)
		sq += v * v
	}
	return fmt.Sprintf("%.9g %.9g", sum, sq)
}

// eventMarks numbers the events of a run and says what each was.
func eventMarks(sim *engine.Simulation) (marks []mark, notes []string) {
	var texts []string
	var times []float64
	for _, n := range sim.Notes() {
		if !n.Event {
			continue
		}
		if k := len(times); k > 0 && times[k-1] == n.Time {
			texts[k-1] += "; " + n.Text
			continue
		}
		times, texts = append(times, n.Time), append(texts, n.Text)
	}
	for k, t := range times {
		label := fmt.Sprint(k + 1)
		marks = append(marks, mark{t, label})
		text := texts[k]
		if len(text) > 150 {
			text = text[:147] + "..."
		}
		notes = append(notes, fmt.Sprintf("%s: %.4g s  %s", label, t, text))
	}
	return marks, notes
}

// busiest finds the event after which the curves move most within 50 ms.
func busiest(curves []curve, events []mark) (t0 float64, ok bool) {
	most := 0.0
	for _, e := range events {
		sum := 0.0
		for _, c := range curves {
			lo, hi := math.Inf(1), math.Inf(-1)
			for k, t := range c.t {
				if t >= e.t-0.005 && t <= e.t+0.05 && c.y[k] == c.y[k] {
					lo, hi = math.Min(lo, c.y[k]), math.Max(hi, c.y[k])
				}
			}
			if hi > lo {
				sum += hi - lo
			}
		}
		if sum > most {
			most, t0, ok = sum, e.t, true
		}
	}
	return t0, ok
}

// makePanel chooses which curves to name, those that reach furthest from the
// others, and draws the rest in grey.
func makePanel(title, y string, curves []curve, from, to float64, marks []mark, least float64) panel {
	p := panel{title: title, y: y, from: from, to: to, marks: marks, lowerLimit: least}
	type rank struct {
		i    int
		span float64
	}
	var order []rank
	for i, c := range curves {
		lo, hi := math.Inf(1), math.Inf(-1)
		for k, t := range c.t {
			if t >= from && t <= to && c.y[k] == c.y[k] {
				lo, hi = math.Min(lo, c.y[k]), math.Max(hi, c.y[k])
			}
		}
		order = append(order, rank{i, hi - lo})
	}
	sort.SliceStable(order, func(a, b int) bool { return order[a].span > order[b].span })
	chosen := make(map[int]bool)
	for k, r := range order {
		if k < named || len(curves) <= named {
			chosen[r.i] = true
		}
	}
	for i, c := range curves {
		if chosen[i] {
			p.curves = append(p.curves, c)
		} else {
			p.grey = append(p.grey, c)
		}
	}
	if n := len(p.grey); n > 0 {
		p.caption = fmt.Sprintf("%d more in grey; named are those that move most", n)
	}
	return p
}

func (p *Picture) layout() {
	p.height = vg.Length(len(p.panels))*9*vg.Centimeter + vg.Length(len(p.notes))*0.45*vg.Centimeter + 0.3*vg.Centimeter
}

// thin returns the stretches of a curve between from and to without its gaps,
// and keeps, for every one of n columns, the first, the lowest, the highest and
// the last point, so that nothing that shows is lost.
func thin(t, y []float64, from, to float64, n int) []plotter.XYs {
	var all []plotter.XYs
	var out plotter.XYs
	column := -1
	var pts []plotter.XY
	flush := func() {
		if len(pts) <= 4 {
			out = append(out, pts...)
		} else {
			lo, hi := 0, 0
			for i, q := range pts {
				if q.Y < pts[lo].Y {
					lo = i
				}
				if q.Y > pts[hi].Y {
					hi = i
				}
			}
			keep := []int{0, min(lo, hi), max(lo, hi), len(pts) - 1}
			keep = slices.Compact(keep)
			for _, i := range keep {
				out = append(out, pts[i])
			}
		}
		pts = pts[:0]
	}
	end := func() {
		flush()
		if len(out) > 0 {
			all = append(all, out)
		}
		out = nil
	}
	for k, x := range t {
		if x < from || x > to {
			continue
		}
		if math.IsNaN(y[k]) || math.IsInf(y[k], 0) {
			end()
			continue
		}
		c := int(float64(n) * (x - from) / (to - from))
		if c != column {
			flush()
			column = c
		}
		pts = append(pts, plotter.XY{X: x, Y: y[k]})
	}
	end()
	return all
}

// spike reports whether a time is so close behind an event that a switching
// spike would hide everything else. A zoom shows all.
func (p *panel) spike(t float64) bool {
	if !p.cut {
		return false
	}
	for _, m := range p.marks {
		if t >= m.t && t < m.t+0.005 {
			return true
		}
	}
	return false
}

// ticks labels the default ticks with as many figures as tell them apart.
type ticks struct{}

func (ticks) Ticks(lo, hi float64) []plot.Tick {
	marks := plot.DefaultTicks{}.Ticks(lo, hi)
	exact := func(decimals int) bool {
		scale := math.Pow(10, float64(decimals))
		for _, m := range marks {
			if x := m.Value * scale; m.Label != "" && math.Abs(x-math.Round(x)) > 1e-6*scale*(hi-lo) {
				return false
			}
		}
		return true
	}
	decimals := 0
	for decimals < 12 && !exact(decimals) {
		decimals++
	}
	for i, m := range marks {
		if m.Label != "" {
			marks[i].Label = fmt.Sprintf("%.*f", decimals, m.Value)
		}
	}
	return marks
}

func (p *panel) build() (*plot.Plot, error) {
	pl := plot.New()
	pl.Title.Text = p.title
	pl.Title.TextStyle.Font.Size = 12
	pl.X.Label.Text = "time, s"
	if p.caption != "" {
		pl.X.Label.Text += "    (" + p.caption + ")"
	}
	pl.Y.Label.Text = p.y
	pl.X.Min, pl.X.Max = p.from, p.to
	pl.X.Tick.Marker, pl.Y.Tick.Marker = ticks{}, ticks{}
	lo, hi := math.Inf(1), math.Inf(-1)
	low, high := lo, hi // of everything, spikes included
	line := func(c curve, col color.Color, width vg.Length, columns int) ([]*plotter.Line, error) {
		var lines []*plotter.Line
		for _, xy := range thin(c.t, c.y, p.from, p.to, columns) {
			for _, q := range xy {
				low, high = math.Min(low, q.Y), math.Max(high, q.Y)
				if !p.spike(q.X) {
					lo, hi = math.Min(lo, q.Y), math.Max(hi, q.Y)
				}
			}
			l, err := plotter.NewLine(xy)
			if err != nil {
				return nil, err
			}
			l.Color, l.Width = col, width
			if c.dash {
				l.Dashes = []vg.Length{vg.Points(5), vg.Points(3)}
			}
			lines = append(lines, l)
		}
		return lines, nil
	}
	grid := plotter.NewGrid()
	grid.Horizontal.Color, grid.Vertical.Color = color.RGBA{235, 235, 235, 255}, color.RGBA{235, 235, 235, 255}
	pl.Add(grid)
	for _, c := range p.grey {
		l, err := line(c, grey, vg.Points(0.6), 200)
		if err != nil {
			return nil, err
		}
		for _, x := range l {
			pl.Add(x)
		}
	}
	for i, c := range p.curves {
		l, err := line(c, palette[i%len(palette)], vg.Points(1.2), 500)
		if err != nil {
			return nil, err
		}
		for _, x := range l {
			pl.Add(x)
		}
		if len(l) > 0 {
			pl.Legend.Add(c.name, l[0])
		}
	}
	if lo > hi {
		lo, hi = low, high
	}
	if lo > hi {
		lo, hi = 0, 1
	}
	if hi-lo < p.lowerLimit {
		mid := (lo + hi) / 2
		lo, hi = mid-p.lowerLimit/2, mid+p.lowerLimit/2
	}
	if hi == lo {
		hi, lo = hi+0.5, lo-0.5
	}
	pad := 0.06 * (hi - lo)
	lo, hi = lo-pad, hi+1.6*pad
	if low < lo || high > hi {
		pl.X.Label.Text += fmt.Sprintf("    (spikes at the switching, %.4g to %.4g, cut off)", low, high)
	}
	pl.Y.Min, pl.Y.Max = lo, hi
	for _, m := range p.marks {
		if m.t < p.from || m.t > p.to {
			continue
		}
		v, err := plotter.NewLine(plotter.XYs{{X: m.t, Y: lo}, {X: m.t, Y: hi}})
		if err != nil {
			return nil, err
		}
		v.Color, v.Width, v.Dashes = color.RGBA{120, 120, 120, 255}, vg.Points(0.7), []vg.Length{vg.Points(2), vg.Points(2)}
		pl.Add(v)
		if m.label == "" {
			continue
		}
		label, err := plotter.NewLabels(plotter.XYLabels{XYs: plotter.XYs{{X: m.t, Y: hi - 0.05*(hi-lo)}}, Labels: []string{" " + m.label}})
		if err != nil {
			return nil, err
		}
		pl.Add(label)
	}
	pl.Legend.Top = true
	pl.Legend.TextStyle.Font.Size = 9
	return pl, nil
}

// draw draws the panels, each with its legend to the right, and the notes.
func (p *Picture) draw(dc draw.Canvas) error {
	notes := vg.Length(len(p.notes)) * 0.45 * vg.Centimeter
	top := dc.Max.Y
	each := (dc.Max.Y - dc.Min.Y - notes - 0.3*vg.Centimeter) / vg.Length(len(p.panels))
	const legend = 4.2 * vg.Centimeter
	for i := range p.panels {
		pl, err := p.panels[i].build()
		if err != nil {
			return fmt.Errorf("output: picture %s: %w", p.Name, err)
		}
		l := pl.Legend
		pl.Legend = plot.NewLegend()
		pl.Legend.ThumbnailWidth = 0
		area := draw.Crop(dc, 0.2*vg.Centimeter, -legend, 0, 0)
		area.Min.Y, area.Max.Y = top-each+0.15*vg.Centimeter, top-0.15*vg.Centimeter
		pl.Draw(area)
		side := area
		side.Min.X, side.Max.X = area.Max.X+0.2*vg.Centimeter, dc.Max.X-0.1*vg.Centimeter
		side.Max.Y -= 0.7 * vg.Centimeter
		l.Left, l.Top = true, true
		l.Draw(side)
		top -= each
	}
	style := draw.TextStyle{Color: color.Black, Font: font.From(plot.DefaultFont, 9), Handler: plot.DefaultTextHandler}
	for i, n := range p.notes {
		y := dc.Min.Y + notes - vg.Length(i+1)*0.45*vg.Centimeter + 0.15*vg.Centimeter
		dc.FillText(style, vg.Point{X: dc.Min.X + 0.3*vg.Centimeter, Y: y}, n)
	}
	return nil
}

// WriteSVG writes the picture as SVG.
func (p *Picture) WriteSVG(w io.Writer) error {
	c := vgsvg.New(p.width, p.height)
	if err := p.draw(draw.New(c)); err != nil {
		return err
	}
	_, err := c.WriteTo(w)
	return err
}

// WritePNG writes the picture as PNG at 96 dots an inch.
func (p *Picture) WritePNG(w io.Writer) error {
	c := vgimg.New(p.width, p.height)
	dc := draw.New(c)
	dc.SetColor(color.White)
	dc.Fill(dc.Rectangle.Path())
	if err := p.draw(dc); err != nil {
		return err
	}
	_, err := (vgimg.PngCanvas{Canvas: c}).WriteTo(w)
	return err
}
