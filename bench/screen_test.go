package bench

import (
	"errors"
	"fmt"
	"math"
	"testing"

	"islet/cases"
	"islet/devices"
	"islet/engine"
	"islet/engine/modes"
	"islet/engine/screen"
)

// line2 is two inverters, whose voltage Q doesn't move, over a lossless line in pieces.
func line2(kilowatts float64, pieces int) string {
	text := "[study]\ntitle = \"Two sources\"\nuntil_s = 1\n"
	for k := range pieces + 1 {
		text += fmt.Sprintf("[bus.b%d]\nvoltage_kV = 0.4\n", k)
	}
	for k, sign := range []float64{1, -1} {
		text += fmt.Sprintf("[device.source-%d]\nkind = \"grid-forming inverter\"\nbus = \"b%d\"\npower_kVA = 100\np_kW = %.17g\nn = 0.0\n", k, k*pieces, sign*kilowatts)
	}
	for k := range pieces {
		text += fmt.Sprintf("[device.piece-%d]\nkind = \"line\"\nfrom = \"b%d\"\nto = \"b%d\"\nR_ohm = 0\nL_H = %.17g\nrated_current_A = 300\n", k, k, k+1, 3.6e-3/float64(pieces))
	}
	return text
}

// phaseOnly are the rules of the rung whose model the screen is.
var phaseOnly = []cases.DetailRule{{Pattern: "*", Level: devices.QuasiSteady}, {Pattern: "*", Level: devices.PhaseOnly}}

func startLine2(kilowatts float64, pieces int) (*cases.Case, *engine.Simulation, error) {
	c, err := cases.Parse("line-2", []byte(line2(kilowatts, pieces)))
	if err != nil {
		return nil, nil, err
	}
	sim, err := c.Start(&engine.Options{Record: []string{}}, phaseOnly...)
	return c, sim, err
}

// The margin is where the simulated system loses its operating point, however many
// buses there are on the way: set powers are raised until there is none.
func TestScreenMarginAgainstSimulation(t *testing.T) {
	const set = 60.0 // kW
	for _, pieces := range []int{1, 3, 6} {
		c, sim, err := startLine2(set, pieces)
		if err != nil {
			t.Fatal(err)
		}
		n, err := c.Oscillators(sim)
		if err != nil {
			t.Fatal(err)
		}
		r, err := screen.Screen(&n.Network, nil)
		if err != nil {
			t.Fatal(err)
		}
		lo, hi := 1.0, 3.0
		for hi-lo > 1e-4 {
			mid := (lo + hi) / 2
			_, _, err := startLine2(set*mid, pieces)
			var none *engine.OperatingPointError
			switch {
			case err == nil:
				lo = mid
			case errors.As(err, &none):
				hi = mid
			default:
				t.Fatal(err)
			}
		}
		t.Logf("%d pieces: step lost at %.5f by the screen, %.5f in the simulation", pieces, r.MarginLost, lo)
		// Newton's method stalls within about the square root of its tolerance of the
		// fold, and transfers here include the losses that the inverters' resistance
		// adds.
		if math.Abs(r.MarginLost-lo) > 2e-3*lo {
			t.Errorf("%d pieces: step lost at %.6g by the screen, %.6g in the simulation", pieces, r.MarginLost, lo)
		}
	}
}

// The screen's mode is the eigenvalue of the simulated system at the rung "phase only".
func TestScreenModesAgainstSimulation(t *testing.T) {
	for _, kilowatts := range []float64{0, 30, 60, 90} {
		c, sim, err := startLine2(kilowatts, 3)
		if err != nil {
			t.Fatal(err)
		}
		n, err := c.Oscillators(sim)
		if err != nil {
			t.Fatal(err)
		}
		r, err := screen.Screen(&n.Network, nil)
		if err != nil {
			t.Fatal(err)
		}
		l, err := sim.Linearise(&engine.LinearOptions{Inputs: []string{}, Outputs: []string{}})
		if err != nil {
			t.Fatal(err)
		}
		report, err := modes.Analyse(l, nil)
		if err != nil {
			t.Fatal(err)
		}
		got := real(nearestTo(report, complex(r.Modes[0], 0)))
		// R/X of the whole is 0.3 %, and the resistive coupling's part is second order
		// but for its product with the angle's sine.
		if math.Abs(got-r.Modes[0]) > 2e-3*math.Abs(r.Modes[0]) {
			t.Errorf("%g kW: mode %.6g 1/s by the screen, %.6g in the simulation", kilowatts, r.Modes[0], got)
		}
	}
}

// On shipped cases, the phases' slowest and fastest mode and those of the simulation at
// "phase only". There resistance couples too and voltages move with Q.
func TestScreenModesOfShippedCases(t *testing.T) {
	for name, tol := range map[string]float64{"harbour": 0.1, "starter": 0.1, "mesh-10": 0.25} {
		c, err := cases.Open(name)
		if err != nil {
			t.Fatal(err)
		}
		sim, err := c.Start(&engine.Options{Record: []string{}}, phaseOnly...)
		if err != nil {
			t.Fatal(err)
		}
		n, err := c.Oscillators(sim)
		if err != nil {
			t.Fatal(err)
		}
		r, err := screen.Screen(&n.Network, nil)
		if err != nil {
			t.Fatal(err)
		}
		l, err := sim.Linearise(&engine.LinearOptions{Inputs: []string{}, Outputs: []string{}})
		if err != nil {
			t.Fatal(err)
		}
		report, err := modes.Analyse(l, nil)
		if err != nil {
			t.Fatal(err)
		}
		for _, want := range []float64{r.Modes[0], r.Modes[len(r.Modes)-1]} {
			got := nearestTo(report, complex(want, 0))
			t.Logf("%s: mode %.5g 1/s by the screen, %.5g in the simulation", name, want, got)
			if math.Abs(real(got)-want) > tol*math.Abs(want) {
				t.Errorf("%s: mode %.5g 1/s by the screen, %.5g in the simulation", name, want, got)
			}
		}
	}
}

// Predicted without an operating point, at rated values alone, the sharing of the shipped
// islands is that simulated but for losses and for what loads draw less at lower voltage.
// Loads are impedances: with the largest |1 - V^2/V_rated^2| of all buses times what they
// would draw at rated voltage as the bound of what they draw less, no source that shares in
// proportion to rating may be further off than its part of that. Losses are less.
func TestScreenPredictsShippedIslands(t *testing.T) {
	for _, name := range []string{"starter", "droop3", "short-lines", "mesh-10", "mesh-100"} {
		c, err := cases.Open(name)
		if err != nil {
			t.Fatal(err)
		}
		sys, err := c.Build()
		if err != nil {
			t.Fatal(err)
		}
		n, err := c.RatedOscillators(sys)
		if err != nil {
			t.Fatal(err)
		}
		r, err := screen.Screen(&n.Network, nil)
		if err != nil {
			t.Fatal(err)
		}
		sim, err := c.Start(&engine.Options{Record: []string{}})
		if err != nil {
			t.Fatal(err)
		}
		value := func(channel string) float64 {
			v, err := sim.Value(channel)
			if err != nil {
				t.Fatal(err)
			}
			return v
		}
		square := func(bus string) float64 {
			b, _ := sim.System().FindBus(bus)
			return math.Pow(value(bus+".v")/b.Rated(), 2)
		}
		sag, load, rating, worst, curved := 0.0, 0.0, 0.0, 0.0, 0.0 // curved is of oscillators
		for _, bus := range c.BusNames() {
			sag = math.Max(sag, math.Abs(1-square(bus)))
		}
		for _, d := range c.DeviceNames() {
			if k := c.Kind(d); k == "load" || k == "series load" {
				load += value(d+".p") / square(sim.System().Connections(d)[0])
			}
		}
		for _, s := range r.Sources {
			rating += s.Rating
			off := math.Abs(value(s.Name+".p_control")-s.Given) / s.Rating
			if _, ok := sim.System().Device(s.Name).(*devices.GridForming).Params().Primary.(devices.Oscillator); ok {
				curved = math.Max(curved, off)
			} else {
				worst = math.Max(worst, off)
			}
		}
		bound := sag * load / rating
		t.Logf("%s: %.6f Hz at rated values, simulated %.6f; powers within %.3g of rating (oscillators %.3g), voltages allow %.3g", name, r.Speed/(2*math.Pi), sim.OperatingPoint().Frequencies[0], worst, curved, bound)
		// An oscillator's speed is w* + eta (p*/v*^2 - p/|v|^2): at a given speed its power
		// goes with |v|^2 too, and is less than its rating.
		if !r.InStep || !r.Proportional || worst > bound || curved > bound+sag {
			t.Errorf("%s: in step %v, powers %.3g of rating apart, voltages allow %.3g", name, r.InStep, worst, bound)
		}
	}
}
