package cases

import (
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"islet/devices"
	"islet/engine/perunit"
)

// The per-unit values listed are those that stand in the scaled equations: an
// inverter's Jacobian and masses, divided by the bases of its equations and multiplied
// by those of its unknowns, hold them entry by entry.
func TestGainsEmerge(t *testing.T) {
	c, err := Open("starter")
	if err != nil {
		t.Fatal(err)
	}
	list, err := c.Gains()
	if err != nil {
		t.Fatal(err)
	}
	d := list[0]
	dev, err := c.devices[0].build()
	if err != nil {
		t.Fatal(err)
	}
	g := dev.(*devices.GridForming)
	_, n := g.Dims()
	v, x := []float64{320, 3}, make([]float64, n)
	g.SetFrame(314)
	g.Guess(x, 0, v)
	w := n + 2
	jac, port, mass := make([]float64, w*w), make([]float64, 2), make([]float64, n)
	g.Jacobian(jac, 0, v, x)
	g.Mass(port, mass)
	at := make(map[string]int)
	for i, u := range g.Describe().Unknowns {
		at[u.Name] = 2 + i
	}
	b := perunit.Bases{Power: 75e3, Voltage: 300, Time: 1 / 314.0}
	// Bases of unknowns by their units, of equations by what they balance.
	unknown := func(name string) float64 {
		d, err := perunit.OfUnit(g.Describe().Unknowns[at[name]-2].Unit)
		if err != nil {
			t.Fatal(err)
		}
		return b.Of(d)
	}
	entry := func(row string, rowBase float64, col string) float64 {
		return jac[at[row]*w+at[col]] * unknown(col) / rowBase
	}
	volt, ampere := b.Voltage, b.Current()
	values := map[string]float64{
		// L_f di_f/dt = ... in volts
		"K_ic": entry("i_f.d", volt, "gamma.d"),
		"L_f":  mass[at["i_f.d"]-2] * ampere / (volt * b.Time),
		// dgamma/dt = i_ref - i_f in amperes: i_ref holds K_iv phi
		"K_iv": entry("gamma.d", ampere, "phi.d"),
		"C_f":  mass[at["v_c.d"]-2] * volt / (ampere * b.Time),
		"L_g":  mass[at["i_g.d"]-2] * ampere / (volt * b.Time),
		// ddelta/dt in radians per base of time: -m P
		"m": -entry("delta", 1/b.Time, "P"),
		// dP/dt: -w_c P
		"w_c": -entry("P", b.Power/b.Time, "P"),
		// dphi/dt = V - n Q ... in volts
		"n": -entry("phi.d", volt, "Q"),
	}
	// L_f di_f/dt: -(K_pc + R_f) i_f, which decoupling at w_0 leaves alone.
	sum := -entry("i_f.d", volt, "i_f.d")
	perUnit := make(map[string]float64)
	for _, x := range d.Gains {
		perUnit[x.Symbol] = x.Value / x.Base(b, nil)
	}
	values["K_pc"] = sum - perUnit["R_f"]
	for symbol, want := range values {
		if got := perUnit[symbol]; math.Abs(got-want) > 1e-12*math.Abs(want) {
			t.Errorf("%s is %.12g per unit, in the scaled equations %.12g", symbol, got, want)
		}
	}
}

// Bases of control signals are free: they move the gains at either end by the same
// factor and nothing else, so that what goes from physical quantity to physical
// quantity stays.
func TestFreeBases(t *testing.T) {
	c, err := Open("harbour")
	if err != nil {
		t.Fatal(err)
	}
	list, err := c.Gains()
	if err != nil {
		t.Fatal(err)
	}
	b := perunit.Bases{Power: 1e5, Voltage: 326, Time: 1}
	free := map[string]float64{"i_ref": 3, "i_err": 3, "v_err": 0.7, "v_i": 55, "v_q": 11, "v_ref": 2}
	for _, d := range list {
		at := func(symbol string, free map[string]float64) float64 {
			for _, g := range d.Gains {
				if g.Symbol == symbol {
					return g.Value / g.Base(b, free)
				}
			}
			return math.NaN()
		}
		if d.Kind != "grid-forming inverter" {
			continue
		}
		// v_err -> i_ref -> i_err -> v_i: the product moves by v_err and v_i alone.
		product := at("K_pv", free) * at("K_pc", free) / (at("K_pv", nil) * at("K_pc", nil))
		if want := (free["v_err"] / 326) * (326 / free["v_i"]); math.Abs(product-want) > 1e-12*want {
			t.Errorf("%s: the cascade moves by %g, want %g", d.Name, product, want)
		}
		for _, physical := range []string{"L_f", "R_f", "C_f", "L_g", "R_g", "m", "w_c", "S_r"} {
			if x, y := at(physical, nil), at(physical, free); x == x && x != y {
				t.Errorf("%s: %s is %g per unit, %g with other bases of control signals", d.Name, physical, x, y)
			}
		}
	}
}

// Closed forms of the nameplate: with a bandwidth of 1 kHz and L_f of 10 % at 50 Hz,
// K_pc = w_i L_f is 2 per unit; I_max, C_f, X_v and droops are what the file says in
// per cent.
func TestGainsOfNameplate(t *testing.T) {
	c, err := Open("starter")
	if err != nil {
		t.Fatal(err)
	}
	list, err := c.Gains()
	if err != nil {
		t.Fatal(err)
	}
	d := list[0]
	b := perunit.Bases{Power: d.Rating, Voltage: d.Volts, Time: 1 / (100 * math.Pi)}
	for _, g := range d.Gains {
		want, ok := map[string]float64{"K_pc": 2, "I_max": 1.5, "C_f": 0.05, "L_f": 0.1, "L_g": 0.05, "X_v": 0.1, "m": 0.01, "n": 0.02, "w_0": 1, "w_c": 0.1, "S_r": 1}[g.Symbol]
		if got := g.Value / g.Base(b, nil); ok && math.Abs(got-want) > 1e-9*want {
			t.Errorf("%s is %.12g per unit, want %g", g.Symbol, got, want)
		}
	}
	// Transformers between buses of their rated voltages vanish: what is left is
	// their impedance.
	h, err := Open("harbour")
	if err != nil {
		t.Fatal(err)
	}
	list, err = h.Gains()
	if err != nil {
		t.Fatal(err)
	}
	transformers := 0
	for _, d := range list {
		for _, g := range d.Gains {
			if g.Symbol == "ratio" {
				transformers++
				if math.Abs(g.Value-1) > 1e-12 {
					t.Errorf("%s has the ratio %g per unit", d.Name, g.Value)
				}
			}
		}
	}
	if transformers != 7 {
		t.Errorf("%d transformers", transformers)
	}
}

// No device is left out, and every parameter has a unit and a finite base.
func TestGainsOfEveryDevice(t *testing.T) {
	for _, name := range []string{"starter", "harbour", "droop3", "cigre-lv", "mesh-10"} {
		c, err := Open(name)
		if err != nil {
			t.Fatal(err)
		}
		list, err := c.Gains()
		if err != nil {
			t.Fatal(err)
		}
		if len(list) != len(c.devices) {
			t.Errorf("%s: %d devices listed of %d", name, len(list), len(c.devices))
		}
		b := perunit.Bases{Power: 1e5, Voltage: 326, Time: 1}
		for _, d := range list {
			if len(d.Gains) == 0 || !(d.Volts > 0) {
				t.Errorf("%s: %s has %d parameters, %g V", name, d.Name, len(d.Gains), d.Volts)
			}
			for _, g := range d.Gains {
				if x := g.Base(b, nil); !(x > 0) || math.IsInf(x, 0) || math.IsNaN(g.Value) {
					t.Errorf("%s: %s.%s is %g with base %g", name, d.Name, g.Symbol, g.Value, x)
				}
			}
		}
	}
}

// A maker's droop is per unit of nominal speed, times being in seconds: with that base
// of the ordered speed m is the nameplate's 1 %, and nothing else but what orders or
// takes the speed moves.
func TestSpeedBase(t *testing.T) {
	c, err := Open("starter")
	if err != nil {
		t.Fatal(err)
	}
	list, err := c.Gains()
	if err != nil {
		t.Fatal(err)
	}
	d := list[0]
	b := perunit.Bases{Power: d.Rating, Voltage: d.Volts, Time: 1}
	w := map[string]float64{"w": 100 * math.Pi}
	for _, g := range d.Gains {
		was, is := g.Value/g.Base(b, nil), g.Value/g.Base(b, w)
		want, ok := map[string]float64{"m": 0.01, "w_0": 1}[g.Symbol]
		if !ok {
			want = was
		}
		if math.Abs(is-want) > 1e-12*math.Abs(want) {
			t.Errorf("%s is %.12g per unit, want %g", g.Symbol, is, want)
		}
	}
	var names []string
	for _, s := range d.ControlSignals() {
		names = append(names, s.Name)
	}
	if got := strings.Join(names, " "); got != "w v_ref v_err i_ref i_err v_i" {
		t.Errorf("control signals are %s", got)
	}
}

// Under matching bases a transformer is a branch like any other: its admittances
// between the terminals' per-unit voltages and currents, taken from its equations, are
// y and -y times the phase shift, with one y for both sides, whatever the ratio.
func TestTransformerVanishes(t *testing.T) {
	h, err := Open("harbour")
	if err != nil {
		t.Fatal(err)
	}
	seen := 0
	for i := range h.devices {
		dev, err := h.devices[i].build()
		if err != nil {
			t.Fatal(err)
		}
		full, ok := dev.(*devices.Transformer)
		if !ok {
			continue
		}
		seen++
		p := full.Params()
		p.CoreR, p.MagnetisingL, p.MagnetisingR = 0, 0, 0 // shunts, not the ratio
		bare, err := devices.NewTransformer(p)
		if err != nil {
			t.Fatal(err)
		}
		block, err := bare.WithDetail("quasi-steady")
		if err != nil {
			t.Fatal(err)
		}
		w := block.(*devices.Transformer)
		w.SetFrame(100 * math.Pi)
		jac := make([]float64, 16)
		w.Jacobian(jac, 0, make([]float64, 4), nil)
		high := perunit.Bases{Power: p.VA, Voltage: devices.PeakVolts(p.HV), Time: 1}
		low := perunit.Bases{Power: p.VA, Voltage: devices.PeakVolts(p.LV), Time: 1}
		entry := func(i, j int, row, col perunit.Bases) complex128 {
			return complex(jac[4*i+j], jac[4*(i+1)+j]) * complex(col.Voltage/row.Current(), 0)
		}
		y := entry(0, 0, high, high)
		for what, x := range map[string]complex128{"low side": entry(2, 2, low, low), "low on high": entry(0, 2, high, low), "high on low": entry(2, 0, low, high)} {
			if math.Abs(cmplx.Abs(x)-cmplx.Abs(y)) > 1e-12*cmplx.Abs(y) {
				t.Errorf("%s, %s: %v per unit, high side %v", h.devices[i].name, what, x, y)
			}
		}
		if d := cmplx.Abs(entry(2, 2, low, low) - y); d > 1e-12*cmplx.Abs(y) {
			t.Errorf("%s: the sides' admittances are %g apart", h.devices[i].name, d)
		}
	}
	if seen != 7 {
		t.Errorf("%d transformers", seen)
	}
}
