package perunit

import (
	"fmt"
	"math"
	"strings"
)

// Dimension is a product of powers of volt, ampere, watt, var, second and radian. Watt
// and var share a base; they are apart so that a gain on reactive power says so.
type Dimension struct{ V, A, W, Var, S, Rad int }

// Dimensions of signals.
var (
	One     = Dimension{}
	Volt    = Dimension{V: 1}
	Ampere  = Dimension{A: 1}
	Watt    = Dimension{W: 1}
	Var     = Dimension{Var: 1}
	Second  = Dimension{S: 1}
	Radian  = Dimension{Rad: 1}
	Speed   = Radian.Over(Second)
	Weber   = Volt.Times(Second)
	Coulomb = Ampere.Times(Second)
)

// Times is the dimension of a product.
func (d Dimension) Times(e Dimension) Dimension {
	return Dimension{d.V + e.V, d.A + e.A, d.W + e.W, d.Var + e.Var, d.S + e.S, d.Rad + e.Rad}
}

// Over is the dimension of a quotient.
func (d Dimension) Over(e Dimension) Dimension {
	return Dimension{d.V - e.V, d.A - e.A, d.W - e.W, d.Var - e.Var, d.S - e.S, d.Rad - e.Rad}
}

// Gain is the dimension of what turns a signal into another: of the quotient of
// their dimensions, once more over a second for every time it is integrated.
func Gain(to, from Dimension, integrations int) Dimension {
	g := to.Over(from)
	g.S -= integrations
	return g
}

// trade lists what products are called.
var trade = []struct {
	d    Dimension
	name string
}{
	{Dimension{V: 1, A: -1}, "ohm"},
	{Dimension{V: 1, A: -1, S: -1}, "ohm/s = 1/F"},
	{Dimension{V: 1, A: -1, S: 1}, "H"},
	{Dimension{V: -1, A: 1}, "S"},
	{Dimension{V: -1, A: 1, S: 1}, "F"},
	{Dimension{V: -1, A: 1, S: -1}, "S/s = 1/H"},
	{Dimension{V: 1, S: 1}, "Wb"},
	{Dimension{A: 1, S: 1}, "C"},
	{Dimension{V: 1, A: -1, Rad: 1, S: -1}, "ohm rad/s"},
	{Dimension{V: -1, S: -1, Rad: 1}, "rad/Wb"},
	{Dimension{V: -1, S: -2, Rad: 1}, "rad/(Wb s)"},
	{Dimension{}, "1"},
}

// String writes the dimension as the trade does, and as a product of powers where
// there is no name.
func (d Dimension) String() string {
	for _, t := range trade {
		if d == t.d {
			return t.name
		}
	}
	var up, down []string
	for _, p := range []struct {
		n    int
		unit string
	}{{d.V, "V"}, {d.A, "A"}, {d.W, "W"}, {d.Var, "var"}, {d.Rad, "rad"}, {d.S, "s"}} {
		list, n := &up, p.n
		if n < 0 {
			list, n = &down, -n
		}
		switch {
		case n == 1:
			*list = append(*list, p.unit)
		case n > 1:
			*list = append(*list, fmt.Sprintf("%s^%d", p.unit, n))
		}
	}
	s := strings.Join(up, " ")
	if s == "" {
		s = "1"
	}
	switch len(down) {
	case 0:
		return s
	case 1:
		return s + "/" + down[0]
	}
	return s + "/(" + strings.Join(down, " ") + ")"
}

// OfUnit reads the dimension of a unit as unknowns, setpoints and channels name it;
// what follows the unit ("generated", "rms") doesn't matter. The error names a unit
// that isn't known.
func OfUnit(unit string) (Dimension, error) {
	known := []struct {
		prefix string
		d      Dimension
	}{
		{"rad/s", Speed}, {"rad", Radian}, {"V s", Weber}, {"A s", Coulomb}, {"var", Var}, {"VA", Watt}, {"W", Watt},
		{"V", Volt}, {"A", Ampere}, {"Hz", Dimension{S: -1}}, {"s", Second}, {"S", Dimension{V: -1, A: 1}},
		{"ohm", Dimension{V: 1, A: -1}}, {"1", One}, {"%", One}, {"deg", Radian},
	}
	for _, k := range known {
		if unit == k.prefix || strings.HasPrefix(unit, k.prefix+" ") {
			return k.d, nil
		}
	}
	if unit == "" {
		return One, nil
	}
	return One, fmt.Errorf("perunit: unit %q isn't known", unit)
}

// Bases are base values.
type Bases struct {
	Power   float64 // VA, three phases
	Voltage float64 // V peak phase-to-neutral
	// Time is the base of time, s: 1 keeps the second, 1/omega_b counts in radians
	// of the base frequency.
	Time float64
}

// Check returns what is wrong with the bases.
func (b Bases) Check() error {
	for _, x := range []struct {
		name  string
		value float64
	}{{"power", b.Power}, {"voltage", b.Voltage}, {"time", b.Time}} {
		if !(x.value > 0) || math.IsInf(x.value, 1) {
			return fmt.Errorf("perunit: base of %s is %g, want a positive value", x.name, x.value)
		}
	}
	return nil
}

// Current is the base of current, A peak: Power over (3/2) Voltage.
func (b Bases) Current() float64 { return b.Power / (1.5 * b.Voltage) }

// Of is the base value of a dimension, in SI.
func (b Bases) Of(d Dimension) float64 {
	return math.Pow(b.Voltage, float64(d.V)) * math.Pow(b.Current(), float64(d.A)) * math.Pow(b.Power, float64(d.W+d.Var)) * math.Pow(b.Time, float64(d.S))
}
