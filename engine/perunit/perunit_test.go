package perunit

import (
	"math"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/engine"
	"islet/engine/modes"
	"islet/solvers"
)

func near(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Abs(want)) {
		t.Errorf("%s is %.12g, want %.12g", what, got, want)
	}
}

// Units of gains come out of the signals they connect.
func TestDimensions(t *testing.T) {
	for _, c := range []struct {
		what         string
		to, from     Dimension
		integrations int
		want         string
	}{
		{"current loop, proportional", Volt, Ampere, 0, "ohm"},
		{"current loop, integral", Volt, Ampere, 1, "ohm/s = 1/F"},
		{"voltage loop, proportional", Ampere, Volt, 0, "S"},
		{"voltage loop, integral", Ampere, Volt, 1, "S/s = 1/H"},
		{"PLL, proportional", Speed, Volt, 0, "rad/Wb"},
		{"PLL, integral", Speed, Volt, 1, "rad/(Wb s)"},
		{"inductance", Volt, Ampere, -1, "H"},
		{"capacitance", Ampere, Volt, -1, "F"},
		{"frequency droop", Speed, Watt, 0, "rad/(W s)"},
		{"voltage droop", Volt, Var, 0, "V/var"},
		{"inertia", Watt, Speed, -1, "W s^2/rad"},
		{"damping", Watt, Speed, 0, "W s/rad"},
		{"time constant", Watt, Watt, -1, "s"},
		{"corner", Volt, Volt, 1, "1/s"},
		{"feed-forward", Ampere, Ampere, 0, "1"},
		{"flux", Weber, One, 0, "Wb"},
		{"double integral", Speed, One, 1, "rad/s^2"},
	} {
		if got := Gain(c.to, c.from, c.integrations).String(); got != c.want {
			t.Errorf("%s has the unit %s, want %s", c.what, got, c.want)
		}
	}
	for unit, want := range map[string]Dimension{"W generated": Watt, "var generated": Var, "V line-line rms": Volt, "A s": Coulomb, "V s": Weber, "rad/s": Speed, "rad": Radian, "1": One, "": One} {
		if d, err := OfUnit(unit); err != nil || d != want {
			t.Errorf("unit %q is %v, %v", unit, d, err)
		}
	}
	if _, err := OfUnit("furlong"); err == nil {
		t.Error("a furlong is taken")
	}
}

// Base impedances of handbooks, and the change of base of a machine's reactance from
// 18 kV, 500 MVA to 20 kV, 100 MVA: 0.25 becomes 0.0405 (J. J. Grainger, W. D.
// Stevenson, Power System Analysis, McGraw-Hill 1994, chapter 1; value from memory).
func TestHandbook(t *testing.T) {
	ohm := Volt.Over(Ampere)
	bases := func(kV, mva float64) Bases {
		return Bases{Power: mva * 1e6, Voltage: kV * 1e3 * math.Sqrt(2.0/3), Time: 1}
	}
	// kV^2/MVA.
	for _, c := range [][3]float64{{11, 100, 1.21}, {20, 100, 4}, {400, 100, 1600}, {0.4, 0.1, 1.6}} {
		near(t, "base impedance", bases(c[0], c[1]).Of(ohm), c[2], 1e-12)
	}
	// Base current S/(sqrt(3) V): 100 MVA at 138 kV is 418.4 A rms.
	near(t, "base current", bases(138, 100).Current()/math.Sqrt2, 418.37, 1e-5)
	old, new := bases(18, 500), bases(20, 100)
	near(t, "reactance on the new base", 0.25*old.Of(ohm)/new.Of(ohm), 0.0405, 1e-12)
	// In radians of the base frequency an inductance is its reactance.
	w := 100 * math.Pi
	b := bases(0.4, 0.1)
	b.Time = 1 / w
	l := 1e-3
	near(t, "inductance in radians", l/b.Of(Gain(Volt, Ampere, -1)), w*l/b.Of(ohm), 1e-12)
	// p = (3/2) v i per unit is v i.
	near(t, "power", 1.5*b.Voltage*b.Current()/b.Of(Watt), 1, 1e-12)
	near(t, "reactive power", b.Of(Var), b.Of(Watt), 1e-15)
	for _, b := range []Bases{{}, {Power: 1, Voltage: -1, Time: 1}, {Power: 1, Voltage: 1, Time: math.Inf(1)}} {
		if b.Check() == nil {
			t.Errorf("bases %+v are taken", b)
		}
	}
}

// A system of one state by hand: x' = -2 x + 6 u, w = 5 x + 7 u with the bases 10,
// 100, 1000 and half a second.
func TestScalingByHand(t *testing.T) {
	s := &modes.StateSpace{
		A: mat.NewDense(1, 1, []float64{-2}), B: mat.NewDense(1, 1, []float64{6}), C: mat.NewDense(1, 1, []float64{5}), D: mat.NewDense(1, 1, []float64{7}),
		States: make([]engine.LinearUnknown, 1), Inputs: make([]engine.LinearSignal, 1), Outputs: make([]engine.LinearSignal, 1),
	}
	b := Scaling{States: []float64{10}, Inputs: []float64{100}, Outputs: []float64{1000}, Time: 0.5}
	p, err := b.Apply(s)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "A", p.A.At(0, 0), -1, 1e-15)
	near(t, "B", p.B.At(0, 0), 30, 1e-15)
	near(t, "C", p.C.At(0, 0), 0.05, 1e-15)
	near(t, "D", p.D.At(0, 0), 0.7, 1e-15)
	if s.A.At(0, 0) != -2 {
		t.Error("the system given was changed")
	}
	back, err := Change(b, Scaling{}).Apply(p)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "A in SI again", back.A.At(0, 0), -2, 1e-15)
	near(t, "B in SI again", back.B.At(0, 0), 6, 1e-15)
	for want, x := range map[string]Scaling{
		"2 bases of 1 states":      {States: []float64{1, 2}},
		"base 1 of the inputs is":  {Inputs: []float64{0}},
		"base 1 of the outputs is": {Outputs: []float64{math.Inf(1)}},
		"base of time is":          {Time: -1},
	} {
		if _, err := x.Apply(s); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v, want %q", err, want)
		}
	}
}

// The method refuses what it can't scale.
func TestMethodFaults(t *testing.T) {
	n := solvers.NewNetwork(1, 2)
	if err := n.Configure(solvers.Configuration{}); err != nil {
		t.Fatal(err)
	}
	for want, m := range map[string]Method{
		"base of unknown 0": {Of: solvers.Rodas5P, Base: func(int, float64) float64 { return 0 }},
		"base of time":      {Of: solvers.Rodas5P, Time: math.NaN()},
	} {
		if _, err := m.NewStepper(n, solvers.Options{}); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v, want %q", err, want)
		}
	}
	if name := (Method{Of: solvers.Rodas5P}).Name(); name != "Rodas5P per unit" {
		t.Errorf("it is called %q", name)
	}
}
