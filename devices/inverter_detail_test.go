package devices

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/solvers/facet"
)

// settleFast solves the right-hand sides of the unknowns not in slow to zero by
// Newton's method, from the values in x, at given terminal voltage.
func settleFast(b inverter, v, x []float64, slow map[string]bool) error {
	units := b.Describe().Unknowns
	var fast []int
	for i, u := range units {
		if !slow[u.Name] {
			fast = append(fast, i)
		}
	}
	if len(fast) == 0 {
		return nil
	}
	own := len(units)
	n := 2 + own
	flow, rate := make([]float64, 2), make([]float64, own)
	for range 50 {
		if err := b.Eval(flow, rate, 0, v, x); err != nil {
			return err
		}
		jac := make([]float64, n*n)
		b.Jacobian(jac, 0, v, x)
		a := mat.NewDense(len(fast), len(fast), nil)
		f := mat.NewVecDense(len(fast), nil)
		for r, i := range fast {
			f.SetVec(r, rate[i])
			for c, k := range fast {
				a.Set(r, c, jac[(2+i)*n+2+k])
			}
		}
		step := mat.NewVecDense(len(fast), nil)
		if err := step.SolveVec(a, f); err != nil {
			if _, ok := err.(mat.Condition); !ok {
				return err
			}
		}
		worst := 0.0
		for r, i := range fast {
			x[i] -= step.AtVec(r)
			worst = math.Max(worst, math.Abs(step.AtVec(r))/units[i].Base)
		}
		if worst < 1e-13 {
			return nil
		}
	}
	return fmt.Errorf("no convergence")
}

// The two roads to detail "primary only": the reduced equations, and the full
// equations with the right-hand sides of all fast unknowns solved to zero at
// the same terminal voltage and slow unknowns. Flow and slow rates agree. (The
// flow of the full equations is then their quasi-steady i_g.)
func TestPrimaryOnlyTwoRoads(t *testing.T) {
	type variant struct {
		name string
		full inverter
		slow []string
		base float64 // A
	}
	var list []variant
	for _, c := range []struct {
		name string
		edit func(*GridFormingParams)
	}{
		{"droop", func(*GridFormingParams) {}},
		{"rotated, virtual impedance, own speed", func(p *GridFormingParams) {
			p.Primary = Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40, Psi: 0.7}
			p.Rv, p.Xv, p.OwnSpeed = 0.4, 0.6, true
		}},
		{"resistive, virtual resistance", func(p *GridFormingParams) {
			p.Primary = Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40}
			p.Rv = 0.8
		}},
	} {
		p := testForming()
		c.edit(&p)
		list = append(list, variant{"forming, " + c.name, mustForming(t, p), []string{"delta", "P", "Q"}, 20})
	}
	for _, c := range []struct {
		name string
		edit func(*GridFollowingParams)
	}{
		{"plain", func(*GridFollowingParams) {}},
		{"limits", func(p *GridFollowingParams) { p.IMax, p.SpeedLimit = 10, 20 }},
		{"no capacitor current, fixed amplitude", func(p *GridFollowingParams) { p.OmitCapacitor, p.FixedAmplitude = true, true }},
		{"feed-forward", func(p *GridFollowingParams) { p.Kff = 0.8 }},
	} {
		for _, filter := range []LCL{testFollowing().Filter, {Lf: 2e-3, Rf: 0.1}} {
			p := testFollowing()
			c.edit(&p)
			p.Filter = filter
			list = append(list, variant{fmt.Sprintf("following, %s, L filter %v", c.name, filter.isL()),
				mustFollowing(t, p), []string{"delta", "eps", "v_md"}, 20})
		}
	}
	for _, c := range list {
		block, err := c.full.(facet.Detailed).WithDetail(PrimaryOnly)
		if err != nil {
			t.Fatal(err)
		}
		short := block.(inverter)
		slow := map[string]bool{}
		for _, s := range c.slow {
			slow[s] = true
		}
		rnd := rand.New(rand.NewPCG(7, 1))
		for range 20 {
			w := 2 * math.Pi * (49 + 2*rnd.Float64())
			c.full.SetFrame(w)
			short.SetFrame(w)
			v := []float64{300 * (0.9 + 0.2*rnd.Float64()), 60 * (rnd.Float64() - 0.5)}
			_, nf := c.full.Dims()
			_, ns := short.Dims()
			xf, xs := make([]float64, nf), make([]float64, ns)
			c.full.Guess(xf, 0, v)
			short.Guess(xs, 0, v)
			// slow unknowns away from the steady state, by up to about a tenth
			for i := range 3 {
				d := 0.1 * (rnd.Float64() - 0.5) * short.Describe().Unknowns[i].Base
				xf[i] += d
				xs[i] = xf[i]
			}
			if err := settleFast(c.full, v, xf, slow); err != nil {
				t.Fatalf("%s: full: %v", c.name, err)
			}
			if err := settleFast(short, v, xs, slow); err != nil {
				t.Fatalf("%s: primary only: %v", c.name, err)
			}
			ff, rf := make([]float64, 2), make([]float64, nf)
			fs, rs := make([]float64, 2), make([]float64, ns)
			if err := c.full.Eval(ff, rf, 0, v, xf); err != nil {
				t.Fatal(err)
			}
			if err := short.Eval(fs, rs, 0, v, xs); err != nil {
				t.Fatal(err)
			}
			for i := range 2 {
				if !(math.Abs(ff[i]-fs[i]) < 1e-9*c.base) {
					t.Errorf("%s: flow %v by the full equations, %v reduced", c.name, ff, fs)
				}
			}
			for i := range 3 {
				u := short.Describe().Unknowns[i]
				scale := math.Max(u.Base, math.Abs(rf[i]))
				if !(math.Abs(rf[i]-rs[i]) < 1e-9*scale) {
					t.Errorf("%s: rate of %s %.12g by the full equations, %.12g reduced", c.name, u.Name, rf[i], rs[i])
				}
			}
		}
	}
}

// Guess gives the steady state that goes with the terminal voltage and speed,
// to the accuracy of the terminal voltage: at the steady state of a rig it is
// that state.
func TestGuessAtSteadyState(t *testing.T) {
	var invs []inverter
	for _, detail := range []string{Full, PrimaryOnly} {
		for _, psi := range []float64{0, 45, 90} {
			plate := formingPlate()
			plate.Psi, plate.P, plate.Q = &psi, 4e3, 1e3
			b, err := plateForming(t, plate).WithDetail(detail)
			if err != nil {
				t.Fatal(err)
			}
			invs = append(invs, b.(inverter))
		}
		for _, l := range []bool{false, true} {
			plate := followingPlate()
			plate.LFilter, plate.P, plate.Q = l, 7e3, 2e3
			b, err := plateFollowing(t, plate).WithDetail(detail)
			if err != nil {
				t.Fatal(err)
			}
			invs = append(invs, b.(inverter))
		}
	}
	for k, b := range invs {
		r := newRig(b).scr(plateVolts, plateVA, 6, 3)
		r.omega = RadPerSecond(49.98)
		if err := r.steady(); err != nil {
			t.Errorf("inverter %d: %v", k, err)
			continue
		}
		y := make([]float64, len(r.x[0]))
		b.Guess(y, 0, r.v)
		for i, u := range b.Describe().Unknowns {
			if !(math.Abs(y[i]-r.x[0][i]) < 1e-7*u.Base) {
				t.Errorf("inverter %d (%s): guess of %s = %.9g, steady state %.9g",
					k, b.Describe().Kind, u.Name, y[i], r.x[0][i])
			}
		}
	}
}

// At a constant frequency P stays P*, which Guess takes in place of the speed.
func TestGuessIsochronous(t *testing.T) {
	plate := formingPlate()
	plate.FrequencyDroop, plate.P, plate.Q = new(0.0), 4e3, 1e3
	g := plateForming(t, plate)
	g.SetFrame(RadPerSecond(50))
	v := []float64{322, -20}
	x, flow, rate := make([]float64, 13), make([]float64, 2), make([]float64, 13)
	g.Guess(x, 0, v)
	if err := g.Eval(flow, rate, 0, v, x); err != nil {
		t.Fatal(err)
	}
	for i, u := range g.Describe().Unknowns {
		if !(math.Abs(rate[i]) < 1e-6*u.Base) {
			t.Errorf("rate of %s = %g at the guess", u.Name, rate[i])
		}
	}
	if math.Abs(x[1]-plate.P) > 1e-3 {
		t.Errorf("P = %.6f, want %.6f W", x[1], plate.P)
	}
}

// A guess stays finite and within the rating whatever the voltage.
func TestGuessWithoutVoltage(t *testing.T) {
	dark := plateForming(t, formingPlate()) // before a black start
	if err := dark.Set("voltage", 0, 0, 0); err != nil {
		t.Fatal(err)
	}
	for _, b := range []inverter{plateForming(t, formingPlate()), dark, plateFollowing(t, followingPlate())} {
		for _, v := range [][]float64{{0, 0}, {1e-3, 0}, {100, -50}, {-700, 300}} {
			b.SetFrame(314)
			x := make([]float64, len(b.Describe().Unknowns))
			b.Guess(x, 0, v)
			for i, u := range b.Describe().Unknowns {
				if math.IsNaN(x[i]) || math.Abs(x[i]) > 5*u.Base {
					t.Errorf("%s, v = %v: guess of %s = %g", b.Describe().Kind, v, u.Name, x[i])
				}
			}
		}
	}
}
