package devices

import (
	"fmt"
	"math"
	"reflect"
	"testing"

	"islet/devices/devicetest"
)

// mixedStar is a star of three legs, R = (0.5, 0.2, 0.1) ohm and L = (1, 2, 0.5) mH,
// without its centre, as two circuits. Rates and admittances are outside values
// (testdata/SOURCES.md, power-checks, section E3); the circuits follow from them:
// the rows of Drive are b_j = 1/(R_j - rate L_j) scaled to a largest entry of 1, and
// R of each circuit keeps the sum of b b^T/L at 1/L's Kron-reduced Laplacian.
func mixedStar() ReducedNetworkParams {
	r, l := []float64{0.5, 0.2, 0.1}, []float64{1e-3, 2e-3, 0.5e-3}
	p := ReducedNetworkParams{RatedCurrent: 100}
	for _, rate := range []float64{118.4244438810, 410.1469846904} {
		// A leg's current in the mode is b_j = c/(R_j - rate L_j), since all legs
		// have the centre's voltage; it stores sum L_j b_j^2 = L.
		b, largest, stored := make([]float64, 3), 0.0, 0.0
		for j := range b {
			b[j] = 1 / (r[j] - rate*l[j])
			largest = max(largest, math.Abs(b[j]))
		}
		for j := range b {
			b[j] /= largest
			stored += l[j] * b[j] * b[j]
		}
		p.R, p.L, p.Drive = append(p.R, rate*stored), append(p.L, stored), append(p.Drive, b)
	}
	return p
}

func TestReducedNetworkConforms(t *testing.T) {
	peak := PeakVolts(400)
	for name, p := range map[string]ReducedNetworkParams{
		"one branch": {R: []float64{0.3}, L: []float64{1e-3}, Drive: [][]float64{{1, -1}}, RatedCurrent: 100},
		"star":       mixedStar(),
		"load":       {R: []float64{5, 8}, L: []float64{1e-3, 30e-3}, Drive: [][]float64{{1}, {0.4}}, RatedCurrent: 100},
		"grounded": {R: []float64{0.3, 5, 9}, L: []float64{1e-3, 20e-3, 2e-3}, Drive: [][]float64{{1, -1, 0}, {0.2, 1, 0.5}, {0, 0.3, 1}},
			RatedCurrent: 100},
		"transformers": {R: []float64{0.3, 0.5, 9}, L: []float64{1e-3, 2e-3, 2e-3}, Drive: [][]float64{{1, -1, 0}, {0.2, -1, 0.8}, {0.1, -0.1, 0}},
			Ratio: []complex128{1, 0.5i, complex(0.6, 0.8)}, RatedCurrent: 100},
		"grounded transformers": {R: []float64{0.3, 0.5, 9}, L: []float64{1e-3, 2e-3, 2e-3}, Drive: [][]float64{{1, -1, 0}, {0.2, -1, 0.8}, {0.1, 0.1, 1}},
			Ratio: []complex128{1, 0.5i, complex(0.6, 0.8)}, RatedCurrent: 100},
		"lossless": {R: []float64{0, 0}, L: []float64{1e-3, 2e-3}, Drive: [][]float64{{1, -1, 0}, {0, 1, -1}}, RatedCurrent: 100},
	} {
		t.Run(name, func(t *testing.T) {
			volts := make([]float64, p.terminals())
			for k := range volts {
				volts[k] = peak
				if p.Ratio != nil {
					volts[k] *= abs(p.Ratio[k])
				}
			}
			conform(t, func() (*ReducedNetwork, error) { return NewReducedNetwork(p) }, devicetest.Options{Voltages: volts})
		})
	}
}

// One circuit between two terminals is a line without capacitance.
func TestReducedNetworkIsALine(t *testing.T) {
	const frame = 2 * math.Pi * 50
	line := must(NewLine(LineParams{R: 0.3, L: 1e-3, RatedCurrent: 100}))
	net := must(NewReducedNetwork(ReducedNetworkParams{R: []float64{0.3}, L: []float64{1e-3}, Drive: [][]float64{{1, -1}}, RatedCurrent: 100}))
	line.SetFrame(frame)
	net.SetFrame(frame)
	v, x := []float64{300, 20, 290, -10}, []float64{12, -7}
	f1, f2, r1, r2 := make([]float64, 4), make([]float64, 4), make([]float64, 2), make([]float64, 2)
	if err := line.Eval(f1, r1, 0, v, x); err != nil {
		t.Fatal(err)
	}
	if err := net.Eval(f2, r2, 0, v, x); err != nil {
		t.Fatal(err)
	}
	for k := range f1 {
		near(t, fmt.Sprintf("flow %d", k), f2[k], f1[k], 1e-15)
	}
	for k := range r1 {
		near(t, fmt.Sprintf("rate %d", k), r2[k], r1[k], 1e-14)
	}
	if line.Energy(0, v, x) != net.Energy(0, v, x) {
		t.Errorf("energy %+v, the line has %+v", net.Energy(0, v, x), line.Energy(0, v, x))
	}
}

// With one circuit and its ratio a reduced network is a transformer without a
// magnetising branch.
func TestReducedNetworkIsATransformer(t *testing.T) {
	const frame = 2 * math.Pi * 50
	r := distribution
	r.NoLoadCurrent, r.NoLoadLoss = 0, 0
	p := must(r.Params())
	w := must(NewTransformer(p))
	net := must(NewReducedNetwork(ReducedNetworkParams{R: []float64{p.R}, L: []float64{p.L}, Drive: [][]float64{{1, -1}},
		Ratio: []complex128{1 / w.OpenRatio(0, 1), 1}, RatedCurrent: 100}))
	w.SetFrame(frame)
	net.SetFrame(frame)
	v, x := []float64{16000, 200, 290, -10}, []float64{120, -70}
	f1, f2, r1, r2 := make([]float64, 4), make([]float64, 4), make([]float64, 2), make([]float64, 2)
	if err := w.Eval(f1, r1, 0, v, x); err != nil {
		t.Fatal(err)
	}
	if err := net.Eval(f2, r2, 0, v, x); err != nil {
		t.Fatal(err)
	}
	for k := range f1 {
		near(t, fmt.Sprintf("flow %d", k), f2[k], f1[k], 1e-14)
	}
	for k := range r1 {
		near(t, fmt.Sprintf("rate %d", k), r2[k], r1[k], 1e-13)
	}
	if d := abs(net.OpenRatio(0, 1) - w.OpenRatio(0, 1)); d > 1e-15 {
		t.Errorf("open ratio %v, the transformer's is %v", net.OpenRatio(0, 1), w.OpenRatio(0, 1))
	}
}

// The step response and the phasors of the star: outside values, section E3.
func TestReducedNetworkStar(t *testing.T) {
	net := must(NewReducedNetwork(mixedStar()))
	v, x := []float64{100, 0, 0, 0, 0, 0}, make([]float64, 4)
	from := 0.0
	for _, c := range []struct {
		t float64
		i [3]float64
	}{
		{1e-3, [3]float64{58.6408580733, -12.2090532529, -46.4318048204}},
		{5e-3, [3]float64{152.3864746048, -36.9365366787, -115.4499379261}},
		{10e-3, [3]float64{172.6074573464, -48.0868882455, -124.5205691010}},
	} {
		const steps = 400
		rungeKutta(x, from, (c.t-from)/steps, steps, func(dst []float64, t float64, x []float64) { derivatives(net, dst, t, v, x) })
		from = c.t
		flow := make([]float64, 6)
		if err := net.Eval(flow, make([]float64, 4), 0, v, x); err != nil {
			t.Fatal(err)
		}
		for j, want := range c.i {
			near(t, fmt.Sprintf("i[%d] at %g s", j, c.t), flow[2*j], want, 1e-8)
		}
	}
	// 50 Hz: y12, y13, y23 of the Kron reduction.
	q := quasiSteady(t, net, 2*math.Pi*50)
	for _, c := range []struct {
		from, to int
		y        complex128
	}{
		{0, 1, complex(0.2001009709, -0.2324607545)}, {0, 2, complex(0.8956034430, -0.6144606272)}, {1, 2, complex(0.2574026028, -0.9379950954)},
	} {
		volts := make([]complex128, 3)
		volts[c.from] = 1
		i := phasor(t, q, 0, nil, volts...)
		if d := abs(i[c.to] + c.y); d > 1e-9 {
			t.Errorf("current at %d for 1 V at %d: %v, want %v", c.to, c.from, i[c.to], -c.y)
		}
	}
}

func TestReducedNetworkFaults(t *testing.T) {
	_, err := NewReducedNetwork(ReducedNetworkParams{R: []float64{-1, 1}, L: []float64{0}, Drive: [][]float64{{1, math.NaN()}, {1}}})
	wantFaults(t, err, "R[0] = -1", "L[0] = 0", "R for 2 circuits", "Drive[0][1] = NaN", "Drive[1] has 1 entries", "RatedCurrent = 0")
	_, err = NewReducedNetwork(ReducedNetworkParams{RatedCurrent: 1})
	wantFaults(t, err, "no circuits")
	_, err = NewReducedNetwork(ReducedNetworkParams{R: []float64{1}, L: []float64{1}, Drive: [][]float64{{}}, RatedCurrent: 1})
	wantFaults(t, err, "no columns")
	_, err = NewReducedNetwork(ReducedNetworkParams{R: []float64{1}, L: []float64{1}, Drive: [][]float64{{1, -1}}, Ratio: []complex128{0}, RatedCurrent: 1})
	wantFaults(t, err, "Ratio for 1 terminals", "|Ratio[0]| = 0")
	for _, drive := range [][]float64{{1, -1, 0}, {1, -0.5, -0.5}, {0, 0, 0}} {
		_, err = NewReducedNetwork(ReducedNetworkParams{R: []float64{1}, L: []float64{1}, Drive: [][]float64{drive}, RatedCurrent: 1})
		wantFaults(t, err, "tie all terminals together")
	}
}

func TestReducedNetworkParams(t *testing.T) {
	p := mixedStar()
	if got := must(NewReducedNetwork(p)).Params(); !reflect.DeepEqual(got, p) {
		t.Errorf("%+v, want %+v", got, p)
	}
}
