package devices

import (
	"math"
	"math/cmplx"
	"reflect"
	"strings"
	"testing"
)

func within(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if math.Abs(got-want) > rel*(math.Abs(want)+1e-300) {
		t.Errorf("%s is %v, want %v", what, got, want)
	}
}

// A nameplate of another power is the same inverter per unit: what Params makes of
// it is what Scaled makes of the first.
func TestScaledAsNameplate(t *testing.T) {
	flat := func(v any) map[string]float64 {
		out := make(map[string]float64)
		var walk func(name string, v reflect.Value)
		walk = func(name string, v reflect.Value) {
			switch v.Kind() {
			case reflect.Interface:
				walk(name, v.Elem())
			case reflect.Struct:
				for i := range v.NumField() {
					walk(name+"."+v.Type().Field(i).Name, v.Field(i))
				}
			case reflect.Float64:
				out[name] = v.Float()
			}
		}
		walk("", reflect.ValueOf(v))
		return out
	}
	for _, control := range []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl} {
		plate := formingPlate()
		plate.Control = control
		threshold := 1.1
		plate.LimitThreshold = &threshold
		p, err := plate.Params()
		if err != nil {
			t.Fatal(err)
		}
		plate.Power, plate.P, plate.Q = 3*plate.Power, 3*plate.P, 3*plate.Q
		big, err := plate.Params()
		if err != nil {
			t.Fatal(err)
		}
		got := flat(p.Scaled(3))
		for name, want := range flat(big) {
			within(t, string(control)+name, got[name], want, 1e-12)
		}
	}
	plate := followingPlate()
	p, err := plate.Params()
	if err != nil {
		t.Fatal(err)
	}
	plate.Power, plate.P, plate.Q = 3*plate.Power, 3*plate.P, 3*plate.Q
	big, err := plate.Params()
	if err != nil {
		t.Fatal(err)
	}
	got := flat(p.Scaled(3))
	for name, want := range flat(big) {
		within(t, name, got[name], want, 1e-12)
	}
}

// Proportional inverters sum up exactly: with extensive unknowns scaled, the
// rates of the sum are those of the parts, at every level of detail.
func TestParallelEquations(t *testing.T) {
	shares := []float64{0.2, 0.5, 1.3}
	for _, control := range []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl} {
		plate := formingPlate()
		plate.Control = control
		p, err := plate.Params()
		if err != nil {
			t.Fatal(err)
		}
		var list []GridFormingParams
		for _, k := range shares {
			list = append(list, p.Scaled(k))
		}
		sum, spread, err := ParallelForming(list)
		if err != nil || spread != (Spread{}) {
			t.Fatalf("spread %+v, error %v", spread, err)
		}
		within(t, "rating", sum.Rating, 2*p.Rating, 1e-14)
		one := mustForming(t, p)
		for _, level := range one.Details() {
			a, err := one.WithDetail(level)
			if err != nil {
				t.Fatal(err)
			}
			b, err := mustForming(t, sum).WithDetail(level)
			if err != nil {
				t.Fatal(err)
			}
			sameScaled(t, string(control)+" "+level, a.(inverter), b.(inverter), 2)
		}
	}
	plate := followingPlate()
	p, err := plate.Params()
	if err != nil {
		t.Fatal(err)
	}
	sum, spread, err := ParallelFollowing([]GridFollowingParams{p.Scaled(0.2), p.Scaled(0.5), p.Scaled(1.3)})
	if err != nil || spread != (Spread{}) {
		t.Fatalf("spread %+v, error %v", spread, err)
	}
	one := mustFollowing(t, p)
	for _, level := range one.Details() {
		a, err := one.WithDetail(level)
		if err != nil {
			t.Fatal(err)
		}
		b, err := mustFollowing(t, sum).WithDetail(level)
		if err != nil {
			t.Fatal(err)
		}
		sameScaled(t, "following "+level, a.(inverter), b.(inverter), 2)
	}
}

// sameScaled wants that b, k times as large as a, has k times the flow and rates
// of a where an unknown or its equation is extensive. Which are shows in the bases
// and masses: a rate times its mass has the unit of base times mass.
func sameScaled(t *testing.T, what string, a, b inverter, k float64) {
	t.Helper()
	_, n := a.Dims()
	ua, ub := a.Describe().Unknowns, b.Describe().Unknowns
	pa, ma, mb := make([]float64, 2), make([]float64, n), make([]float64, n)
	a.Mass(pa, ma)
	b.Mass(pa, mb)
	a.SetFrame(315)
	b.SetFrame(315)
	rnd := scatter(5)
	for range 20 {
		v := []float64{326 * (1 + 0.1*rnd.next()), 30 * rnd.next()}
		xa, xb := make([]float64, n), make([]float64, n)
		a.Guess(xa, 0, v)
		for i := range xa {
			xa[i] += 0.1 * ua[i].Base * rnd.next()
			xb[i] = xa[i] * (ub[i].Base / ua[i].Base)
		}
		fa, ra := make([]float64, 2), make([]float64, n)
		fb, rb := make([]float64, 2), make([]float64, n)
		ea, eb := a.Eval(fa, ra, 0, v, xa), b.Eval(fb, rb, 0, v, xb)
		if (ea == nil) != (eb == nil) {
			t.Fatalf("%s: %v, scaled %v", what, ea, eb)
		}
		if ea != nil {
			continue
		}
		if d := cmplx.Abs(pair(fb, 0) - complex(k, 0)*pair(fa, 0)); d > 1e-10*cmplx.Abs(pair(fb, 0)) {
			t.Errorf("%s: flow is %v, want %v times %v", what, fb, k, fa)
		}
		size := 0.0
		for i := range ra {
			size = math.Max(size, math.Abs(ra[i])*ub[i].Base/ua[i].Base)
		}
		for i := range ra {
			ratio := ub[i].Base / ua[i].Base
			if ma[i] != 0 {
				ratio *= mb[i] / ma[i]
			}
			if math.Abs(rb[i]-ratio*ra[i]) > 1e-10*math.Abs(ratio*ra[i])+1e-12*size {
				t.Errorf("%s: rate of %s is %v, want %v times %v", what, ua[i].Name, rb[i], ratio, ra[i])
			}
		}
	}
}

func TestParallelSpread(t *testing.T) {
	p, err := formingPlate().Params()
	if err != nil {
		t.Fatal(err)
	}
	q := p.Scaled(1)
	q.Kpc *= 1.1
	sum, spread, err := ParallelForming([]GridFormingParams{p, q})
	if err != nil {
		t.Fatal(err)
	}
	// The mean of 1 and 1.1 is 1.05, from which either is 1/21 away.
	if spread.Parameter != "Kpc" || math.Abs(spread.Largest-1.0/21) > 1e-12 {
		t.Errorf("spread is %+v", spread)
	}
	within(t, "Kpc", sum.Kpc, 1.05*p.Kpc/2, 1e-12)

	o, err := func() (GridFormingParams, error) {
		n := formingPlate()
		n.Control, n.Priority = OscillatorControl, QFirst
		return n.Params()
	}()
	if err != nil {
		t.Fatal(err)
	}
	q.IMax = math.Inf(1)
	for want, list := range map[string][]GridFormingParams{
		"primary controls":    {p, o},
		"limit priorities":    {p, o},
		"IMax finite":         {p, q},
		"no inverters":        nil,
		"Rating":              {p, {}},
		"own and at nominal ": {p, func() GridFormingParams { r := p; r.OwnSpeed = true; return r }()},
	} {
		if _, _, err := ParallelForming(list); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v, want one that tells %q", err, want)
		}
	}
}
