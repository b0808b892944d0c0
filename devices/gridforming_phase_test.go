package devices

import (
	"math"
	"sort"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// oscillators are phase oscillators of detail "phase only" around one bus of constant
// voltage magnitude and free angle, at which a constant power is drawn: the star of
// coupled oscillators
//
//	D_i dtheta_i/dt = P_i* - a_i sin(theta_i - theta_0)      0 = P_0 + sum a_i sin(theta_i - theta_0)
//
// with D = 1/m and a = (3/2) V^2/(omega L). One unit is 1 kW.
type oscillators struct {
	inv   []*GridForming
	draw  float64 // W
	v0    float64
	theta []float64 // and last that of the bus
}

// evaluate returns dtheta/dt, the power balance of the bus last, and the Jacobian,
// from the inverters' own Eval and Jacobian.
func (o *oscillators) evaluate(t *testing.T) (f []float64, jac *mat.Dense) {
	n := len(o.inv)
	f, jac = make([]float64, n+1), mat.NewDense(n+1, n+1, nil)
	v := make([]float64, 2)
	bus := times(o.v0, rotor(o.theta[n]))
	setPair(v, 0, bus)
	turn := jtimes(1, bus) // d v/d theta_0
	f[n] = -o.draw
	for i, g := range o.inv {
		flow, rate, j := make([]float64, 2), make([]float64, 1), make([]float64, 9)
		x := o.theta[i : i+1]
		if err := g.Eval(flow, rate, 0, v, x); err != nil {
			t.Fatal(err)
		}
		g.Jacobian(j, 0, v, x)
		f[i] = rate[0]
		jac.Set(i, i, j[8])
		jac.Set(i, n, j[6]*real(turn)+j[7]*imag(turn))
		f[n] -= 1.5 * dot(bus, pair(flow, 0))
		by := complex(j[0]*real(turn)+j[1]*imag(turn), j[3]*real(turn)+j[4]*imag(turn))
		jac.Set(n, n, jac.At(n, n)-1.5*(dot(turn, pair(flow, 0))+dot(bus, by)))
		jac.Set(n, i, -1.5*dot(bus, complex(j[2], j[5])))
	}
	return f, jac
}

// The star of three inverters with a = (5, 4, 2.5), P* = (0.8, 0.6, 0.4), D = (2, 1.5,
// 1) and a load of 1.5: w_sync = 0.0666666667, P = (0.6666666667, 0.5, 0.3333333333),
// angles to the load bus 7.662255661, 7.180755782 and 7.662255661 degrees, modes 0,
// -2.477678125 and -2.587249330 1/s. Theory: J. W. Simpson-Porco, F. Dorfler, F.
// Bullo, Automatica 49(9), 2013; figures computed from the closed form.
func TestPhaseOscillatorStar(t *testing.T) {
	a, pStar, d := []float64{5, 4, 2.5}, []float64{0.8, 0.6, 0.4}, []float64{2, 1.5, 1}
	const unit = 1e3 // W
	for _, kind := range []string{"droop", "machine"} {
		o := &oscillators{draw: 1.5 * unit, v0: 326, theta: make([]float64, 4)}
		for i := range a {
			p := testForming()
			p.P, p.Q = pStar[i]*unit, 0
			p.Filter.Rg = 0
			p.Filter.Lg = 1.5 * p.V0 * p.V0 / (a[i] * unit) / p.Omega0
			p.Primary = Droop{M: 1 / (d[i] * unit), OmegaC: 40, Psi: math.Pi / 2}
			if kind == "machine" {
				p.Primary = VirtualMachine{H: 2, D: d[i] * unit, Tv: 0.1, OmegaC: 40, Psi: math.Pi / 2}
			}
			o.inv = append(o.inv, formingAt(t, p, PhaseOnly))
		}
		// Synchronised: all speeds equal (theta_0 = 0 fixed, the common speed found).
		w := 0.0
		for range 20 {
			f, jac := o.evaluate(t)
			r := mat.NewVecDense(4, nil)
			m := mat.NewDense(4, 4, nil)
			for i := range 4 {
				r.SetVec(i, f[i])
				for k := range 3 {
					m.Set(i, k, jac.At(i, k))
				}
				if i < 3 {
					r.SetVec(i, f[i]-w)
					m.Set(i, 3, -1)
				}
			}
			var step mat.VecDense
			if err := step.SolveVec(m, r); err != nil {
				t.Fatal(err)
			}
			for i := range 3 {
				o.theta[i] -= step.AtVec(i)
			}
			w -= step.AtVec(3)
		}
		if math.Abs(w-0.0666666667) > 1e-9 {
			t.Errorf("%s: w_sync = %.10f, want 0.0666666667", kind, w)
		}
		for i, g := range o.inv {
			want := []float64{7.662255661, 7.180755782, 7.662255661}[i]
			if got := o.theta[i] * 180 / math.Pi; math.Abs(got-want) > 1e-8 {
				t.Errorf("%s: angle %d = %.9f degrees, want %.9f", kind, i+1, got, want)
			}
			ch := make([]float64, len(g.Channels()))
			g.Measure(ch, 0, []float64{326, 0}, o.theta[i:i+1])
			power := []float64{0.6666666667, 0.5, 0.3333333333}[i]
			if math.Abs(ch[5]/unit-power) > 1e-9 || math.Abs(ch[5]/unit/pStar[i]-0.8333333333) > 1e-9 {
				t.Errorf("%s: P%d = %.10f, want %.10f", kind, i+1, ch[5]/unit, power)
			}
		}
		// Modes: the bus angle follows.
		_, jac := o.evaluate(t)
		states, bus := []int{0, 1, 2}, []int{3}
		red, err := eliminated(jac, states, states, bus)
		if err != nil {
			t.Fatal(err)
		}
		modes, err := eigenvaluesOf(red)
		if err != nil {
			t.Fatal(err)
		}
		sort.Slice(modes, func(i, k int) bool { return real(modes[i]) > real(modes[k]) })
		for i, want := range []float64{0, -2.477678125, -2.587249330} {
			if math.Abs(real(modes[i])-want) > 2e-9 || math.Abs(imag(modes[i])) > 1e-9 {
				t.Errorf("%s: mode %d = %.10f, want %.9f 1/s", kind, i+1, modes[i], want)
			}
		}
	}
}

// What the power filter does to a phase oscillator: with one the angle obeys
// s (s + w_c) + m w_c K = 0, without (zero order) s + m K = 0, K = (3/2) V^2/X at no
// load. The power filter's loss shows as the gain grows.
func TestPhaseOnlyAgainstFilter(t *testing.T) {
	for _, m := range []float64{1e-5, 1e-4, 1e-3} {
		p := plainForming(Droop{M: m, OmegaC: 31.41, Psi: math.Pi / 2}, 0.2)
		k := p.Rating / 0.2 // W/rad at rated voltage
		v := []float64{p.V0, 0}
		g := formingAt(t, p, PhaseOnly)
		jac := make([]float64, 9)
		g.Jacobian(jac, 0, v, []float64{0})
		if math.Abs(jac[8]+m*k) > 1e-9*m*k {
			t.Errorf("m = %g: phase mode %.9g, want %.9g", m, jac[8], -m*k)
		}
		g = formingAt(t, p, PrimaryOnly)
		jac = make([]float64, 25)
		g.Jacobian(jac, 0, v, []float64{0, 0, 0})
		a := func(i, k int) float64 { return jac[(2+i)*5+2+k] }
		trace, det := a(0, 0)+a(1, 1), a(0, 0)*a(1, 1)-a(0, 1)*a(1, 0)
		if math.Abs(trace+31.41) > 1e-9 || math.Abs(det-m*31.41*k) > 1e-9*m*31.41*k {
			t.Errorf("m = %g: s^2 + %.9g s + %.9g", m, -trace, det)
		}
	}
}
