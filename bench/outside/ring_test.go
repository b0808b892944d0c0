package outside

import (
	"context"
	"math"
	"testing"

	"islet/devices"
	"islet/engine"
	"islet/solvers"
)

// ring builds four phase-only inverters on a lossless quasi-steady ring with a
// chord: coupling a = V^2/X in MW, injections w in MW, equal droops, each
// inverter behind lg, H, which the model of the reference doesn't have.
func ring(t *testing.T, lg float64) *engine.System {
	t.Helper()
	const volts, hertz = 1000.0, 50.0
	s := engine.NewSystem(hertz)
	add := func(name string, d engine.Device, err error, at ...engine.Bus) {
		t.Helper()
		if err == nil {
			err = s.Add(name, d, at...)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	var buses []engine.Bus
	for i, w := range []float64{0.9, -0.4, 0.3, -0.8} {
		name := string(rune('1' + i))
		b := s.Bus("node-"+name, volts)
		buses = append(buses, b)
		p, err := devices.GridFormingNameplate{Power: 2e6, Voltage: volts, Frequency: hertz, P: w * 1e6}.Params()
		if err != nil {
			t.Fatal(err)
		}
		p.Primary = devices.Droop{M: 1e-6, OmegaC: 31.41, Psi: math.Pi / 2}
		p.Rv, p.Xv = 0, 0
		p.Filter.Lg, p.Filter.Rg = lg, 0
		p.IMax = math.Inf(1)
		full, err := devices.NewGridForming(p)
		if err != nil {
			t.Fatal(err)
		}
		d, err := full.WithDetail(devices.PhaseOnly)
		if err != nil {
			t.Fatal(err)
		}
		add("inverter-"+name, d.(engine.Device), nil, b)
	}
	for _, l := range []struct {
		i, j int
		a    float64
	}{{1, 2, 1.5}, {2, 3, 1.0}, {3, 4, 1.2}, {4, 1, 0.8}, {1, 3, 0.7}} {
		x := volts * volts / (l.a * 1e6)
		line, err := devices.NewLine(devices.LineParams{L: x / (2 * math.Pi * hertz), RatedCurrent: 1000})
		if err != nil {
			t.Fatal(err)
		}
		d, err := line.WithDetail(devices.QuasiSteady)
		if err != nil {
			t.Fatal(err)
		}
		add("line-"+string(rune('0'+l.i))+"-"+string(rune('0'+l.j)), d.(engine.Device), nil, buses[l.i-1], buses[l.j-1])
	}
	return s
}

// TestPhaseOnlyRing holds the phase-only rung against the four-node ring with a
// chord of power-checks D (computed there; phase-oscillator model of F. Dorfler,
// M. Chertkov, F. Bullo, PNAS 110(6), 2005-2010, 2013): angles of the
// synchronised state, frequency, and the injections up to which it exists.
func TestPhaseOnlyRing(t *testing.T) {
	want := []float64{0, -0.2403018334, -0.1972822622, -0.5319948119}
	const small = 1e-7
	angles := func(m *engine.Simulation) (a [4]float64) {
		for i := range a {
			name := "inverter-" + string(rune('1'+i))
			a[i] = math.Remainder(m.State(name)["delta"]-m.State("inverter-1")["delta"], 2*math.Pi)
		}
		return a
	}
	coarse, err := engine.Start(ring(t, 10*small), nil)
	if err != nil {
		t.Fatal(err)
	}
	m, err := engine.Start(ring(t, small), nil)
	if err != nil {
		t.Fatal(err)
	}
	before, far := angles(m), angles(coarse)
	for i := range want {
		// Linear in the inverters' own inductance: taken to zero.
		if got := (10*before[i] - far[i]) / 9; math.Abs(got-want[i]) > 2e-8 {
			t.Errorf("angle of node %d is %.10f, want %.10f", i+1, got, want[i])
		}
	}
	if f, _ := m.Value("node-1.frequency"); math.Abs(f-50) > 1e-9 {
		t.Errorf("synchronised at %.12g Hz, want 50: the injections sum to zero", f)
	}
	// The state is stable: kicked, it comes back.
	if err := m.At(0.1, engine.Set("inverter-1", "p", 1.0e6)); err != nil {
		t.Fatal(err)
	}
	if err := m.At(0.2, engine.Set("inverter-1", "p", 0.9e6)); err != nil {
		t.Fatal(err)
	}
	if _, err := m.Run(context.Background(), 40); err != nil {
		t.Fatal(err)
	}
	for i, d := range angles(m) {
		if math.Abs(d-before[i]) > 1e-6 {
			t.Errorf("angle of node %d comes back to %.8f, was %.8f", i+1, d, before[i])
		}
	}
	// The equilibrium is lost at 2.362652604 times these injections: with more,
	// the angles run away, with less a ramp to them stays in step.
	for _, c := range []struct {
		scale float64
		holds bool
	}{{2.3, true}, {2.42, false}} {
		m, err := engine.Start(ring(t, small), &engine.Options{Solver: solvers.Options{RelTol: 1e-7}})
		if err != nil {
			t.Fatal(err)
		}
		for i, w := range []float64{0.9, -0.4, 0.3, -0.8} {
			if err := m.At(0.1, engine.Ramp("inverter-"+string(rune('1'+i)), "p", c.scale*w*1e6, 30)); err != nil {
				t.Fatal(err)
			}
		}
		if _, err := m.Run(context.Background(), 120); err != nil {
			t.Fatal(err)
		}
		spread := 0.0
		for i := range want {
			spread = math.Max(spread, math.Abs(m.State("inverter-" + string(rune('1'+i)))["delta"]-m.State("inverter-1")["delta"]))
		}
		if holds := spread < math.Pi; holds != c.holds {
			t.Errorf("at %g times the injections the largest angle is %.3g rad; held %v, want %v", c.scale, spread, holds, c.holds)
		}
	}
}
