package output

import (
	"bytes"
	"image/png"
	"math"
	"strings"
	"testing"

	"gonum.org/v1/plot/plotter"

	"islet/engine/modes"
)

func reportOf(values ...complex128) *modes.Report {
	r := &modes.Report{}
	for i, v := range values {
		r.Modes = append(r.Modes, modes.Mode{Number: i + 1, Value: v})
	}
	return r
}

// Every picture of modes is whole as SVG and as PNG.
func TestModePictures(t *testing.T) {
	a, b := reportOf(-1+30i, -20, -5e4+314i), reportOf(2+33i, -21)
	a.Stable = true
	eigen, err := Eigenvalues(NamedReport{"as given", a}, NamedReport{"reduced", b})
	if err != nil {
		t.Fatal(err)
	}
	locus, err := RootLocus("m, rad/s/W", &modes.Locus{
		Points:   []modes.LocusPoint{{Value: 1, Report: a}, {Value: 2, Report: b}},
		Branches: [][]complex128{{-1 + 30i, 2 + 33i}, {-20, -21}, {-5e4 + 314i, complex(math.NaN(), math.NaN())}},
	})
	if err != nil {
		t.Fatal(err)
	}
	response, err := FrequencyPlot("response", "p to f", "Hz per W", []float64{0.1, 1, 10}, []FrequencyCurve{{"p to f", []complex128{1, 0.5 - 0.5i, -0.1i}}})
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		s    *Sheet
		text []string
	}{
		{eigen, []string{"eigenvalues", "near the imaginary axis", "as given", "reduced"}},
		{locus, []string{"root locus", "m, rad/s/W", "rightmost mode"}},
		{response, []string{"p to f", "magnitude, Hz per W", "phase"}},
	} {
		var svg, pic bytes.Buffer
		if err := c.s.WriteSVG(&svg); err != nil {
			t.Fatal(err)
		}
		for _, w := range c.text {
			if !strings.Contains(svg.String(), w) {
				t.Errorf("%s lacks %q", c.s.Name, w)
			}
		}
		if strings.Contains(svg.String(), "NaN") {
			t.Errorf("%s draws what is no number", c.s.Name)
		}
		if err := c.s.WritePNG(&pic); err != nil {
			t.Fatal(err)
		}
		if img, err := png.Decode(&pic); err != nil || img.Bounds().Dx() < 1000 {
			t.Errorf("%s as PNG: %v", c.s.Name, err)
		}
	}
	if _, err := FrequencyPlot("none", "nothing", "", []float64{1}, []FrequencyCurve{{"zero", []complex128{0}}}); err == nil {
		t.Error("a response of zero is drawn")
	}
	// One real eigenvalue is a picture too.
	if s, err := Eigenvalues(NamedReport{"", reportOf(-3)}); err != nil || s.WriteSVG(&bytes.Buffer{}) != nil {
		t.Errorf("a single eigenvalue: %v", err)
	}
}

// A phase that goes round starts anew at the other edge.
func TestPhasesAreCutWhereTheyGoRound(t *testing.T) {
	runs := cutAtWraps(plotter.XYs{{X: 1, Y: 170}, {X: 2, Y: 179}, {X: 3, Y: -178}, {X: 4, Y: -10}, {X: 5, Y: 175}})
	if len(runs) != 3 || len(runs[0]) != 2 || len(runs[1]) != 2 || len(runs[2]) != 1 {
		t.Errorf("runs %v, want two, two and one", runs)
	}
}
