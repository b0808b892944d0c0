package devices

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/solvers/facet"
)

// settleAlgebraic solves the equations of the unknowns without mass by Newton's
// method, from the values in x, at given terminal voltage.
func settleAlgebraic(b inverter, v, x []float64) error {
	units := b.Describe().Unknowns
	own := len(units)
	mass := make([]float64, own)
	b.Mass(make([]float64, 2), mass)
	var fast []int
	for i, m := range mass {
		if m == 0 {
			fast = append(fast, i)
		}
	}
	if len(fast) == 0 {
		return nil
	}
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

// reducible is an inverter with a detail ladder.
type reducible interface {
	inverter
	facet.Detailed
	DroppedDynamics(level string) []string
}

// The two roads to each level of detail: the reduced equations, and the full ones
// with the mass of the dropped groups set to zero. At the same terminal voltage and
// slow unknowns, away from steady state, flow and slow rates agree.
func TestTwoRoads(t *testing.T) {
	type variant struct {
		name  string
		full  reducible
		limit bool // I_max acts at some points, so the levels without it differ
	}
	var list []variant
	machine := machineOf(0.9)
	unfiltered, prompt := machine, machine
	unfiltered.OmegaC = math.Inf(1)
	prompt.Tv = 0
	for _, c := range []struct {
		name    string
		control PrimaryControl
	}{
		{"droop", Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40, Psi: math.Pi / 2}},
		{"droop rotated", Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40, Psi: 0.7}},
		{"droop resistive", Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40}},
		{"machine", machineOf(math.Pi / 2)},
		{"machine rotated", machine},
		{"machine without power filter", unfiltered},
		{"machine without delay", prompt},
		{"oscillator", oscillatorOf(math.Pi / 2)},
		{"oscillator rotated", oscillatorOf(0.7)},
		{"oscillator resistive", oscillatorOf(0)},
	} {
		for _, o := range []struct {
			name  string
			edit  func(*GridFormingParams)
			limit bool
		}{
			{"plain", func(*GridFormingParams) {}, false},
			{"virtual impedance, own speed", func(p *GridFormingParams) { p.Rv, p.Xv, p.OwnSpeed = 0.4, 0.6, true }, false},
			{"limiting impedance", func(p *GridFormingParams) {
				p.Rv, p.Xv = 0.1, 0.2
				p.LimitImpedance = LimitImpedance{5, 0.3, 2}
			}, false},
			{"limit", func(p *GridFormingParams) { p.IMax = 12 }, true},
			{"limit d first", func(p *GridFormingParams) { p.IMax, p.Priority = 12, DFirst }, true},
			{"limit q first", func(p *GridFormingParams) { p.IMax, p.Priority = 12, QFirst }, true},
		} {
			p := testForming()
			p.Primary = c.control
			o.edit(&p)
			list = append(list, variant{"forming, " + c.name + ", " + o.name, mustForming(t, p), o.limit})
		}
	}
	for _, c := range []struct {
		name string
		edit func(*GridFollowingParams)
	}{
		{"plain", func(*GridFollowingParams) {}},
		{"limits", func(p *GridFollowingParams) { p.IMax, p.SpeedLimit = 10, 20 }},
		{"limit d first", func(p *GridFollowingParams) { p.IMax, p.Priority = 10, DFirst }},
		{"limit q first", func(p *GridFollowingParams) { p.IMax, p.Priority = 10, QFirst }},
		{"no capacitor current, fixed amplitude", func(p *GridFollowingParams) { p.OmitCapacitor, p.FixedAmplitude = true, true }},
		{"feed-forward", func(p *GridFollowingParams) { p.Kff = 0.8 }},
	} {
		for _, filter := range []LCL{testFollowing().Filter, {Lf: 2e-3, Rf: 0.1}} {
			p := testFollowing()
			c.edit(&p)
			p.Filter = filter
			list = append(list, variant{fmt.Sprintf("following, %s, L filter %v", c.name, filter.isL()), mustFollowing(t, p), false})
		}
	}
	for _, c := range list {
		_, nf := c.full.Dims()
		base := c.full.Describe().Unknowns
		limited := 0
		for _, level := range c.full.Details()[1:] {
			if c.limit && level != CurrentLoopGone {
				continue
			}
			block, err := c.full.WithDetail(level)
			if err != nil {
				t.Fatal(err)
			}
			short := block.(inverter)
			if block, err = ZeroMass(c.full, c.full.DroppedDynamics(level)...); err != nil {
				t.Fatal(err)
			}
			long := block.(inverter)
			if got, want := long.Describe().Terminals[0].Flow, short.Describe().Terminals[0].Flow; got != want {
				t.Errorf("%s, %s: flow of kind %d by zero mass, %d reduced", c.name, level, got, want)
			}
			kept := short.Describe().Unknowns
			where := make([]int, len(kept)) // in the full x
			for k, u := range kept {
				where[k] = slices.IndexFunc(base, func(w facet.Unknown) bool { return w == u })
				if where[k] < 0 {
					t.Fatalf("%s, %s: %v is no unknown of the full equations", c.name, level, u)
				}
			}
			shortMass := make([]float64, len(kept))
			short.Mass(make([]float64, 2), shortMass)
			rnd := rand.New(rand.NewPCG(7, 1))
			for range 12 {
				w := 2 * math.Pi * (49 + 2*rnd.Float64())
				long.SetFrame(w)
				short.SetFrame(w)
				v := []float64{300 * (0.9 + 0.2*rnd.Float64()), 60 * (rnd.Float64() - 0.5)}
				xf, xs := make([]float64, nf), make([]float64, len(kept))
				long.Guess(xf, 0, v)
				short.Guess(xs, 0, v)
				// slow unknowns away from the steady state, by up to about a tenth
				for k, i := range where {
					if shortMass[k] != 0 {
						xf[i] += 0.1 * (rnd.Float64() - 0.5) * base[i].Base
						xs[k] = xf[i]
					}
				}
				if err := settleAlgebraic(long, v, xf); err != nil {
					t.Fatalf("%s, %s: zero mass: %v", c.name, level, err)
				}
				if err := settleAlgebraic(short, v, xs); err != nil {
					t.Fatalf("%s, %s: reduced: %v", c.name, level, err)
				}
				ff, rf := make([]float64, 2), make([]float64, nf)
				fs, rs := make([]float64, 2), make([]float64, len(kept))
				if err := long.Eval(ff, rf, 0, v, xf); err != nil {
					t.Fatal(err)
				}
				if err := short.Eval(fs, rs, 0, v, xs); err != nil {
					t.Fatal(err)
				}
				for i := range 2 {
					if !(math.Abs(ff[i]-fs[i]) < 1e-9*20) { // 20 A: the rated current
						t.Errorf("%s, %s: flow %v by zero mass, %v reduced", c.name, level, ff, fs)
					}
				}
				for k, i := range where {
					if shortMass[k] == 0 {
						if !(math.Abs(xf[i]-xs[k]) < 1e-9*base[i].Base) {
							t.Errorf("%s, %s: %s %.12g by zero mass, %.12g reduced", c.name, level, base[i].Name, xf[i], xs[k])
						}
						continue
					}
					// A rate's terms are the base by the group's rate, 1/s.
					scale := math.Max(base[i].Base, math.Abs(rf[i]))
					if !(math.Abs(rf[i]-rs[k]) < 1e-9*scale) {
						t.Errorf("%s, %s: rate of %s %.12g by zero mass, %.12g reduced", c.name, level, base[i].Name, rf[i], rs[k])
					}
				}
				if m, ok := short.(facet.Measurer); ok && c.limit {
					ch := make([]float64, len(m.Channels()))
					m.Measure(ch, 0, v, xs)
					if ch[8] > 0 {
						limited++
					}
				}
			}
		}
		if c.limit && limited == 0 {
			t.Errorf("%s: the limit acts at no point", c.name)
		}
	}
}

// Guess gives the steady state that goes with the terminal voltage and speed,
// to the accuracy of the terminal voltage: at the steady state of a rig it is
// that state.
func TestGuessAtSteadyState(t *testing.T) {
	var invs []inverter
	for _, detail := range []string{Full, CurrentLoopGone, InnerLoopsGone, PrimaryOnly, PhaseOnly} {
		for _, psi := range []float64{0, 45, 90} {
			for _, control := range []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl} {
				plate := formingPlate()
				plate.Control = control
				plate.Psi, plate.P, plate.Q = &psi, 4e3, 1e3
				b, err := plateForming(t, plate).WithDetail(detail)
				if err != nil {
					t.Fatal(err)
				}
				invs = append(invs, b.(inverter))
				plate.LimitThreshold = new(0.2)
				if b, err = plateForming(t, plate).WithDetail(detail); err != nil {
					t.Fatal(err)
				}
				invs = append(invs, b.(inverter))
			}
		}
	}
	for _, detail := range []string{Full, CurrentLoopGone, PrimaryOnly, InjectionOnly} {
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
