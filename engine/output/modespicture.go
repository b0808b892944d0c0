package output

import (
	"fmt"
	"image/color"
	"io"
	"math"
	"math/cmplx"
	"strconv"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgsvg"

	"islet/engine/modes"
)

// Sheet is a picture of one or two plots side by side that isn't about time:
// eigenvalues, a root locus, a response.
type Sheet struct {
	// Name is the file's name without its ending.
	Name  string
	plots []*plot.Plot
}

const (
	sheetPlot   = 15 * vg.Centimeter
	sheetHeight = 12 * vg.Centimeter
)

func (s *Sheet) draw(dc draw.Canvas) {
	each := (dc.Max.X - dc.Min.X) / vg.Length(len(s.plots))
	for i, p := range s.plots {
		area := dc
		area.Min.X = dc.Min.X + vg.Length(i)*each + 0.2*vg.Centimeter
		area.Max.X = area.Min.X + each - 0.6*vg.Centimeter
		area.Min.Y, area.Max.Y = dc.Min.Y+0.2*vg.Centimeter, dc.Max.Y-0.2*vg.Centimeter
		p.Draw(area)
	}
}

// WriteSVG writes the picture as SVG.
func (s *Sheet) WriteSVG(w io.Writer) error {
	c := vgsvg.New(sheetPlot*vg.Length(len(s.plots)), sheetHeight)
	s.draw(draw.New(c))
	_, err := c.WriteTo(w)
	return err
}

// WritePNG writes the picture as PNG at 96 dots an inch.
func (s *Sheet) WritePNG(w io.Writer) error {
	c := vgimg.New(sheetPlot*vg.Length(len(s.plots)), sheetHeight)
	dc := draw.New(c)
	dc.SetColor(color.White)
	dc.Fill(dc.Rectangle.Path())
	s.draw(dc)
	_, err := (vgimg.PngCanvas{Canvas: c}).WriteTo(w)
	return err
}

// bothLog is an axis that is logarithmic to both sides of a linear stretch from
// -1 to 1, for eigenvalues of a dozen magnitudes and either sign.
type bothLog struct{}

func bend(x float64) float64 { return math.Copysign(math.Log10(1+math.Abs(x)), x) }

// Normalize implements plot.Normalizer.
func (bothLog) Normalize(min, max, x float64) float64 {
	return (bend(x) - bend(min)) / (bend(max) - bend(min))
}

// Ticks implements plot.Ticker.
func (bothLog) Ticks(min, max float64) []plot.Tick {
	var out []plot.Tick
	for _, sign := range []float64{-1, 1} {
		for e := 0; e <= 12; e++ {
			v := sign * math.Pow(10, float64(e))
			if v < min || v > max {
				continue
			}
			label := strconv.FormatFloat(v, 'g', 3, 64)
			if e%2 == 1 && bend(max)-bend(min) > 6 {
				label = "" // too many to name
			}
			out = append(out, plot.Tick{Value: v, Label: label})
		}
	}
	if min <= 0 && max >= 0 {
		out = append(out, plot.Tick{Value: 0, Label: "0"})
	}
	return out
}

func newPlot(title, x, y string) *plot.Plot {
	p := plot.New()
	p.Title.Text, p.X.Label.Text, p.Y.Label.Text = title, x, y
	p.Title.TextStyle.Font.Size = 12
	p.X.Tick.Marker, p.Y.Tick.Marker = ticks{}, ticks{}
	g := plotter.NewGrid()
	g.Horizontal.Color, g.Vertical.Color = color.RGBA{235, 235, 235, 255}, color.RGBA{235, 235, 235, 255}
	p.Add(g)
	p.Legend.Top, p.Legend.Left = true, true
	p.Legend.TextStyle.Font.Size = 9
	return p
}

// widen leaves room around what an axis shows; equal ends get some.
func widen(a *plot.Axis, least float64) {
	if a.Max-a.Min < least {
		mid := (a.Max + a.Min) / 2
		a.Min, a.Max = mid-least/2, mid+least/2
	}
	pad := 0.06 * (a.Max - a.Min)
	a.Min, a.Max = a.Min-pad, a.Max+pad
}

// NamedReport is a report with the name it has in a picture.
type NamedReport struct {
	Name   string
	Report *modes.Report
}

// Eigenvalues draws the eigenvalues of one or more reports in the complex plane:
// all of them on axes that are logarithmic to both sides, and those near the
// imaginary axis on linear ones.
func Eigenvalues(list ...NamedReport) (*Sheet, error) {
	whole := newPlot("eigenvalues", "real part, 1/s (logarithmic)", "imaginary part, 1/s (logarithmic)")
	near := newPlot("near the imaginary axis", "real part, 1/s", "imaginary part, 1/s")
	whole.X.Scale, whole.Y.Scale = bothLog{}, bothLog{}
	whole.X.Tick.Marker, whole.Y.Tick.Marker = bothLog{}, bothLog{}
	const reach = 100.0 // real parts of the second plot start at minus this
	shapes := []draw.GlyphDrawer{draw.CrossGlyph{}, draw.RingGlyph{}, draw.PlusGlyph{}, draw.BoxGlyph{}}
	whole.X.Min, whole.X.Max = -1, 1
	for i, r := range list {
		var all, some plotter.XYs
		for k := range r.Report.Modes {
			v := r.Report.Modes[k].Value
			for _, z := range []complex128{v, cmplx.Conj(v)} {
				all = append(all, plotter.XY{X: real(z), Y: imag(z)})
				if real(z) >= -reach {
					some = append(some, plotter.XY{X: real(z), Y: imag(z)})
				}
				if imag(v) == 0 {
					break
				}
			}
		}
		for k, xy := range []plotter.XYs{all, some} {
			if len(xy) == 0 {
				continue
			}
			s, err := plotter.NewScatter(xy)
			if err != nil {
				return nil, fmt.Errorf("output: eigenvalues of %s: %w", r.Name, err)
			}
			s.Color, s.Shape, s.Radius = palette[i%len(palette)], shapes[i%len(shapes)], vg.Points(3.5)
			p := []*plot.Plot{whole, near}[k]
			p.Add(s)
			if r.Name != "" {
				p.Legend.Add(r.Name, s)
			}
		}
	}
	whole.X.Max = math.Max(whole.X.Max, 1)
	axis := plotter.NewFunction(func(float64) float64 { return 0 })
	axis.Color = color.RGBA{150, 150, 150, 255}
	for _, p := range []*plot.Plot{whole, near} {
		p.X.Max = math.Max(p.X.Max, 0)
		v, err := plotter.NewLine(plotter.XYs{{X: 0, Y: p.Y.Min}, {X: 0, Y: p.Y.Max}})
		if err != nil {
			return nil, err
		}
		v.Color = color.RGBA{150, 150, 150, 255}
		p.Add(v)
	}
	widen(&near.X, 1)
	widen(&near.Y, 1)
	whole.X.Min, whole.Y.Min, whole.Y.Max = 1.6*whole.X.Min, 1.6*math.Min(whole.Y.Min, -1), 1.6*math.Max(whole.Y.Max, 1)
	return &Sheet{Name: "eigenvalues", plots: []*plot.Plot{whole, near}}, nil
}

// RootLocus draws the branches of a locus near the imaginary axis, from circle to
// cross, and the rightmost real part over the parameter.
func RootLocus(parameter string, l *modes.Locus) (*Sheet, error) {
	plane := newPlot("root locus: from circle to cross", "real part, 1/s", "imaginary part, 1/s")
	edge := newPlot("rightmost mode", parameter, "real part, 1/s")
	// Show what comes within a few times the distance at which the rightmost
	// modes are.
	span := 0.0
	var right plotter.XYs
	for _, p := range l.Points {
		if p.Report == nil {
			continue
		}
		if m := p.Report.Rightmost(); m != nil {
			span = math.Max(span, math.Abs(real(m.Value)))
			right = append(right, plotter.XY{X: p.Value, Y: real(m.Value)})
		}
	}
	span = math.Max(4*span, 20)
	shown := 0
	for _, b := range l.Branches {
		var xy plotter.XYs
		inside := false
		for _, z := range b {
			if cmplx.IsNaN(z) {
				continue
			}
			inside = inside || real(z) > -span
			xy = append(xy, plotter.XY{X: real(z), Y: imag(z)})
		}
		if !inside || len(xy) == 0 {
			continue
		}
		c := palette[shown%len(palette)]
		shown++
		line, err := plotter.NewLine(xy)
		if err != nil {
			return nil, fmt.Errorf("output: root locus: %w", err)
		}
		line.Color, line.Width = c, vg.Points(1.2)
		plane.Add(line)
		for k, end := range []plotter.XY{xy[0], xy[len(xy)-1]} {
			s, err := plotter.NewScatter(plotter.XYs{end})
			if err != nil {
				return nil, err
			}
			s.Color, s.Radius, s.Shape = c, vg.Points(3.5), draw.RingGlyph{}
			if k == 1 {
				s.Shape = draw.CrossGlyph{}
			}
			plane.Add(s)
		}
	}
	plane.X.Min = math.Max(plane.X.Min, -span)
	plane.X.Max = math.Max(plane.X.Max, 0)
	axis, err := plotter.NewLine(plotter.XYs{{X: 0, Y: plane.Y.Min}, {X: 0, Y: plane.Y.Max}})
	if err != nil {
		return nil, fmt.Errorf("output: root locus: %w", err)
	}
	axis.Color = color.RGBA{150, 150, 150, 255}
	plane.Add(axis)
	widen(&plane.X, 1)
	widen(&plane.Y, 1)
	if len(right) > 0 {
		line, pts, err := plotter.NewLinePoints(right)
		if err != nil {
			return nil, err
		}
		line.Color, pts.Color, pts.Radius = palette[0], palette[0], vg.Points(2)
		edge.Add(line, pts)
		zero, err := plotter.NewLine(plotter.XYs{{X: right[0].X, Y: 0}, {X: right[len(right)-1].X, Y: 0}})
		if err != nil {
			return nil, err
		}
		zero.Color = color.RGBA{150, 150, 150, 255}
		edge.Add(zero)
	}
	widen(&edge.Y, 1e-3)
	return &Sheet{Name: "root-locus", plots: []*plot.Plot{plane, edge}}, nil
}

// FrequencyCurve is a complex quantity over frequency.
type FrequencyCurve struct {
	Name string
	H    []complex128
}

// cutAtWraps cuts a curve of phases, in degrees, where it leaves the picture at one
// edge and comes back at the other.
func cutAtWraps(xy plotter.XYs) []plotter.XYs {
	var runs []plotter.XYs
	from := 0
	for k := 1; k < len(xy); k++ {
		if math.Abs(xy[k].Y-xy[k-1].Y) > 180 {
			runs, from = append(runs, xy[from:k]), k
		}
	}
	return append(runs, xy[from:])
}

// FrequencyPlot draws magnitude and phase of curves over frequency, Hz.
func FrequencyPlot(name, title, unit string, hz []float64, curves []FrequencyCurve) (*Sheet, error) {
	mag := newPlot(title, "frequency in the rotating frame, Hz", "magnitude, "+unit)
	arg := newPlot("phase", "frequency in the rotating frame, Hz", "degrees")
	mag.X.Scale, arg.X.Scale, mag.Y.Scale = plot.LogScale{}, plot.LogScale{}, plot.LogScale{}
	mag.X.Tick.Marker, arg.X.Tick.Marker, mag.Y.Tick.Marker = plot.LogTicks{Prec: -1}, plot.LogTicks{Prec: -1}, plot.LogTicks{Prec: -1}
	for i, c := range curves {
		var m, a plotter.XYs
		for k, f := range hz {
			if h := cmplx.Abs(c.H[k]); h > 0 && f > 0 {
				m = append(m, plotter.XY{X: f, Y: h})
				a = append(a, plotter.XY{X: f, Y: cmplx.Phase(c.H[k]) * 180 / math.Pi})
			}
		}
		if len(m) == 0 {
			continue
		}
		for k, runs := range [][]plotter.XYs{{m}, cutAtWraps(a)} {
			p := []*plot.Plot{mag, arg}[k]
			for n, xy := range runs {
				line, err := plotter.NewLine(xy)
				if err != nil {
					return nil, fmt.Errorf("output: %s: %w", c.Name, err)
				}
				line.Color, line.Width = palette[i%len(palette)], vg.Points(1.2)
				p.Add(line)
				if n == 0 {
					p.Legend.Add(c.Name, line)
				}
			}
		}
	}
	if math.IsInf(mag.X.Min, 1) {
		return nil, fmt.Errorf("output: %s: nothing to draw: all magnitudes are zero", title)
	}
	if mag.Y.Max <= mag.Y.Min {
		mag.Y.Min, mag.Y.Max = mag.Y.Min/2, mag.Y.Max*2
	}
	arg.Y.Min, arg.Y.Max = -180, 180
	arg.Y.Tick.Marker = plot.ConstantTicks{{Value: -180, Label: "-180"}, {Value: -90, Label: "-90"}, {Value: 0, Label: "0"}, {Value: 90, Label: "90"}, {Value: 180, Label: "180"}}
	mag.Legend.Left, arg.Legend.Left = false, false
	return &Sheet{Name: name, plots: []*plot.Plot{mag, arg}}, nil
}
