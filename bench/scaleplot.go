package bench

import (
	"fmt"
	"image/color"
	"math"
	"os"
	"path/filepath"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
)

var plotColors = []color.RGBA{{0, 90, 160, 255}, {200, 80, 0, 255}, {120, 120, 120, 255}, {0, 130, 80, 255}, {140, 40, 120, 255}}

// logAxes makes both axes logarithmic.
func logAxes(p *plot.Plot) {
	p.X.Scale, p.Y.Scale = plot.LogScale{}, plot.LogScale{}
	p.X.Tick.Marker, p.Y.Tick.Marker = plot.LogTicks{Prec: -1}, plot.LogTicks{Prec: -1}
	p.Add(plotter.NewGrid())
}

// save writes a plot to a file whose name tells the format, with its legend to
// the right of it.
func save(p *plot.Plot, file string) error {
	const width, height, side = 23 * vg.Centimeter, 13 * vg.Centimeter, 6.5 * vg.Centimeter
	c, err := draw.NewFormattedCanvas(width, height, strings.TrimPrefix(filepath.Ext(file), "."))
	if err != nil {
		return err
	}
	legend := p.Legend
	legend.Left, legend.Top = true, true
	legend.TextStyle.Font.Size = 9
	legend.Padding = vg.Points(3)
	p.Legend = plot.NewLegend()
	p.BackgroundColor = nil
	dc := draw.New(c)
	dc.SetColor(color.White)
	dc.Fill(dc.Rectangle.Path())
	p.Draw(draw.Crop(dc, 0, -side, 0, 0))
	legend.Draw(draw.Crop(dc, width-side+0.4*vg.Centimeter, 0, 0, -0.8*vg.Centimeter))
	f, err := os.Create(file)
	if err != nil {
		return err
	}
	if _, err = c.WriteTo(f); err != nil {
		f.Close()
		return err
	}
	return f.Close()
}

func addLine(p *plot.Plot, name string, xy plotter.XYs, c color.Color, shape draw.GlyphDrawer) error {
	if len(xy) == 0 {
		return nil
	}
	l, pts, err := plotter.NewLinePoints(xy)
	if err != nil {
		return err
	}
	l.Color, pts.Color, pts.Shape, pts.Radius = c, c, shape, vg.Points(3)
	p.Add(l, pts)
	p.Legend.Add(name, l, pts)
	return nil
}

// PlotEqualErrors draws time against error, a line for every setup and study,
// and writes it to a file whose name tells the format.
func PlotEqualErrors(file string, setups []Setup, targets []Target) error {
	p := plot.New()
	p.Title.Text = "Time at equal error, one thread"
	p.X.Label.Text = "error, relative to the range of a signal"
	p.Y.Label.Text = "time for 15 s, s"
	shapes := []draw.GlyphDrawer{draw.CircleGlyph{}, draw.SquareGlyph{}, draw.TriangleGlyph{}, draw.CrossGlyph{}, draw.RingGlyph{}, draw.PlusGlyph{}}
	studies := []string{}
	for _, t := range targets {
		if len(studies) == 0 || studies[len(studies)-1] != t.Study {
			studies = append(studies, t.Study)
		}
	}
	for k, name := range studies {
		for i, s := range setups {
			var xy plotter.XYs
			seen := math.NaN()
			for _, t := range targets {
				if r := t.Rows[i]; t.Study == name && r != nil && r.RelTol != seen {
					seen = r.RelTol
					xy = append(xy, plotter.XY{X: r.Difference.Largest, Y: r.Median().Seconds()})
				}
			}
			if err := addLine(p, fmt.Sprintf("%s, %s", s.Name, name), xy, plotColors[i%len(plotColors)], shapes[k%len(shapes)]); err != nil {
				return err
			}
		}
	}
	logAxes(p)
	return save(p, file)
}

// PlotCosts draws time against the number of inverters.
func PlotCosts(file string, costs []Costs) error {
	p := plot.New()
	p.Title.Text = "Time of a study of 15 s with 8 load steps, one thread"
	p.X.Label.Text = "inverters"
	p.Y.Label.Text = "time, s"
	var run, start plotter.XYs
	for _, c := range costs {
		run = append(run, plotter.XY{X: float64(c.Inverters), Y: c.Run.Seconds()})
		start = append(start, plotter.XY{X: float64(c.Inverters), Y: c.Start.Seconds()})
	}
	if err := addLine(p, "simulation", run, plotColors[0], draw.CircleGlyph{}); err != nil {
		return err
	}
	if err := addLine(p, "operating point and set-up", start, plotColors[1], draw.SquareGlyph{}); err != nil {
		return err
	}
	logAxes(p)
	return save(p, file)
}
