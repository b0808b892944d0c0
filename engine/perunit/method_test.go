package perunit

import (
	"math"
	"testing"

	"islet/solvers"
)

// circuit is a series R-L-C at a voltage step: L i' = e - R i - v, C v' = i, and an
// algebraic unknown p = v i with it.
func circuit(t *testing.T) (solvers.System, func(t float64) (i, v float64)) {
	t.Helper()
	const e, r, l, c = 400.0, 0.5, 2e-3, 50e-6
	p := &solvers.Problem{
		N:    3,
		Mass: []solvers.Element{{Row: 0, Col: 0, Value: l}, {Row: 1, Col: 1, Value: c}},
		F: func(dst []float64, _ float64, y []float64) error {
			dst[0], dst[1], dst[2] = e-r*y[0]-y[1], y[0], y[0]*y[1]-y[2]
			return nil
		},
		Jacobian: func(dst []float64, _ float64, y []float64) error {
			copy(dst, []float64{-r, -1, 0, 1, 0, 0, y[1], y[0], -1})
			return nil
		},
		Autonomous: true,
		Scale:      []float64{100, 300, 3e4},
	}
	s, err := p.System()
	if err != nil {
		t.Fatal(err)
	}
	// Underdamped, at rest at t = 0.
	a := r / (2 * l)
	w := math.Sqrt(1/(l*c) - a*a)
	return s, func(t float64) (float64, float64) {
		decay := math.Exp(-a * t)
		return e / (w * l) * decay * math.Sin(w*t), e * (1 - decay*(math.Cos(w*t)+a/w*math.Sin(w*t)))
	}
}

func integrate(t *testing.T, s solvers.System, m solvers.Method, o solvers.Options, until float64) ([]float64, solvers.Stats) {
	t.Helper()
	st, err := m.NewStepper(s, o)
	if err != nil {
		t.Fatal(err)
	}
	if err := st.Reset(0, []float64{0, 0, 0}); err != nil {
		t.Fatal(err)
	}
	for st.Time() < until {
		if err := st.Step(until); err != nil {
			t.Fatal(err)
		}
	}
	return append([]float64(nil), st.State()...), st.Stats()
}

// The scaled circuit meets the closed form and takes the steps of the one in SI, with
// states off by rounding alone: by the adaptive and by the fixed-step method, in
// seconds and in another time, and scaled once more on top.
func TestMethodAgainstClosedForm(t *testing.T) {
	bases := []float64{7, 0.3, 1234}
	of := func(i int, _ float64) float64 { return bases[i] }
	for _, c := range []struct {
		what     string
		of       solvers.Method
		o        solvers.Options
		accuracy float64
	}{
		{"Rodas5P", solvers.Rodas5P, solvers.Options{RelTol: 1e-9, InitialStep: 1e-6}, 1e-6},
		{"trapezoidal", solvers.Trapezoidal, solvers.Options{RelTol: 1e-9, MaxStep: 5e-6}, 1e-3},
	} {
		for what, m := range map[string]func(solvers.Method) solvers.Method{
			"in seconds": func(m solvers.Method) solvers.Method { return Method{Of: m, Base: of} },
			"in radians": func(m solvers.Method) solvers.Method { return Method{Of: m, Base: of, Time: 1 / (100 * math.Pi)} },
			"by scales":  func(m solvers.Method) solvers.Method { return Method{Of: m} },
			"scaled once more": func(m solvers.Method) solvers.Method {
				return Method{Of: Method{Of: m, Base: of, Time: 0.02}, Time: 0.3}
			},
		} {
			const until = 7e-3
			s, exact := circuit(t)
			si, a := integrate(t, s, c.of, c.o, until)
			s, _ = circuit(t)
			pu, b := integrate(t, s, m(c.of), c.o, until)
			if a.Steps != b.Steps || a.Steps < 20 {
				t.Errorf("%s %s: %d steps in SI, %d per unit", c.what, what, a.Steps, b.Steps)
			}
			i, v := exact(until)
			for k, size := range []float64{60, 600, 36000} {
				want := []float64{i, v, i * v}[k]
				if d := math.Abs(pu[k]-want) / size; !(d < c.accuracy) {
					t.Errorf("%s %s: unknown %d is %.9g, closed form %.9g", c.what, what, k, pu[k], want)
				}
				// What Newton's method leaves is a thousandth of the tolerance.
				if d := math.Abs(pu[k]-si[k]) / size; !(d < 1e-11) {
					t.Errorf("%s %s: unknown %d deviates by %.2g from SI", c.what, what, k, d)
				}
			}
		}
	}
}

// The swing equation 2 H S/w_0 dw/dt = dP per unit is 2 H dw/dt = dP with speed on the
// base w_0 and times in seconds, and H is the stored energy at rated speed over the
// rating. A rotor of 27,547.8 kg m^2 at 3600 rpm in a unit of 555 MVA has H = 3.525 s
// (P. Kundur, Power System Stability and Control, McGraw-Hill 1994, section 3.9; value
// from memory; printed constants have three to four digits).
func TestInertia(t *testing.T) {
	const j, s, w0 = 27547.8, 555e6, 2 * math.Pi * 60
	h := 0.5 * j * w0 * w0 / s
	near(t, "H", h, 3.525, 1e-3)
	// J w_0 dw/dt = dP: the gain leads from the derivative of speed to power.
	g := j * w0
	d := Gain(Watt, Speed, -1)
	if got := d.String(); got != "W s^2/rad" {
		t.Errorf("J w_0 is in %s", got)
	}
	b := Bases{Power: s, Voltage: 1, Time: 1}
	near(t, "2 H", g*w0/b.Of(d), 2*h, 1e-12) // speed's base w_0 instead of 1 rad/s
	b.Time = 1 / w0
	near(t, "2 H in radians", g/b.Of(d), 2*h*w0, 1e-12)
}

// Changes of base of handbooks: a reactance of 10 % on 10 MVA is 0.1 (100/10) on
// 100 MVA and 0.1 (100/10) (11/12)^2 if the voltage base goes from 11 to 12 kV too:
// X_new = X_old (S_new/S_old) (V_old/V_new)^2 (Grainger and Stevenson, Power System
// Analysis, McGraw-Hill 1994, section 1.11, number from memory). A transformer's reactance
// is one number per unit seen from either side.
func TestChangeOfBase(t *testing.T) {
	ohm := Volt.Over(Ampere)
	bases := func(kV, mva float64) Bases {
		return Bases{Power: mva * 1e6, Voltage: kV * 1e3 * math.Sqrt(2.0/3), Time: 1}
	}
	for _, c := range []struct{ x, kV, mva, kVNew, mvaNew, want float64 }{
		{0.1, 11, 10, 11, 100, 1},
		{0.1, 11, 10, 12, 100, 1 * 121.0 / 144},
		{0.08, 132, 50, 138, 100, 0.16 * (132.0 / 138) * (132.0 / 138)},
	} {
		near(t, "reactance", c.x*bases(c.kV, c.mva).Of(ohm)/bases(c.kVNew, c.mvaNew).Of(ohm), c.want, 1e-12)
	}
	// 0.1 per unit of 10 MVA, 110/20 kV.
	high, low := bases(110, 10), bases(20, 10)
	x := 0.1 * low.Of(ohm)
	near(t, "seen from the other side", x*(110.0/20)*(110.0/20)/high.Of(ohm), 0.1, 1e-12)
}
