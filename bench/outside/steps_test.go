package outside

import (
	"fmt"
	"math"
	"sort"
	"testing"

	"islet/devices"
	"islet/engine"
	"islet/solvers"
)

// dc is the nominal frequency of a direct-current network, Hz: phase a's axis
// turns by 6e-8 rad in 10 ms.
const dc = 1e-6

// Series R-L-C on a step of 100 V, L = 10 mH, C = 100 uF (textbook closed forms; the
// voltage peaks at pi/w_d).
func TestSeriesRLC(t *testing.T) {
	type point struct{ ms, v, i float64 }
	none := math.NaN()
	for _, c := range []struct {
		name   string
		r      float64
		charge bool // the capacitor is the shunt capacitance of the line
		points []point
	}{
		{"zeta = 0.1, line's capacitor", 2, true, []point{{1, 43.10281091, 7.627576785}, {2, 125.8070263, 7.516155021}, {5, 90.14493324, -5.886967935}, {10, 133.6851681, -1.853457070}}},
		{"zeta = 0.1", 2, false, []point{{1, 43.10281091, 7.627576785}, {2, 125.8070263, 7.516155021}, {5, 90.14493324, -5.886967935}, {10, 133.6851681, -1.853457070}}},
		{"critical", 20, false, []point{{1, 26.42411177, none}, {2, 59.39941503, none}, {5, 95.9572318, none}}},
		{"over-damped", 50, false, []point{{1, 15.17838618, none}, {2, 31.12595914, none}, {5, 63.17608709, none}}},
	} {
		t.Run(c.name, func(t *testing.T) {
			check := newChecker(t)
			n := newNetwork(t, dc, devices.LineVolts(100))
			current := "line.from.i_a"
			if c.charge {
				// Half of it at the source, which holds its end: a microohm charges
				// that in 0.1 ns, and drops 10 uV later.
				n.add("source", "a")(devices.NewGrid(devices.GridParams{Voltage: devices.LineVolts(100), Frequency: dc, R: 1e-6, VA: 1500}))
				n.add("line", "a", "b")(devices.NewLine(devices.LineParams{R: c.r, L: 10e-3, C: 200e-6, RatedCurrent: 7}))
				current = "line.i.d"
			} else {
				n.add("source", "a")(devices.NewGrid(devices.GridParams{Voltage: devices.LineVolts(100), Frequency: dc, R: 0.25 * c.r, L: 4e-3, VA: 1500}))
				n.add("line", "a", "b")(devices.NewLine(devices.LineParams{R: 0.75 * c.r, L: 6e-3, RatedCurrent: 7}))
				n.add("capacitor", "b")(devices.NewShuntCapacitor(devices.ShuntCapacitorParams{C: 100e-6, Voltage: devices.LineVolts(100)}))
			}
			r := n.start(engine.Options{Solver: tight, FromRest: true, Sample: 1e-5, Record: []string{"b.v_a", current}})
			tol := 1e-9 // ten times the solver's
			if c.charge {
				tol = 1e-6 // the microohm's, 1e-7 of the voltage
			}
			for _, p := range c.points {
				r.until(p.ms / 1e3)
				check.want(fmt.Sprintf("v at %g ms", p.ms), r.value("b.v_a"), p.v, tol*170)
				if p.i == p.i {
					check.want(fmt.Sprintf("i at %g ms", p.ms), r.value(current), p.i, tol*17)
				}
			}
			if c.r != 2 {
				return
			}
			tr := r.sim.Trace()
			at, v := peak(t, tr, "b.v_a", 1, 0)
			check.want("peak v", v, 172.9247614, 173*tol)
			check.want("time of peak v", at, math.Pi/994.9874371, 3e-3*tol+1e-10)
			at, i := peak(t, tr, current, 1, 0)
			check.want("peak i", i, 8.626003697, 9*tol)
			check.want("time of peak i", at, 1.478037662e-3, 1e-9)
		})
	}
}

// legs is a star of R-L lines that meet at a bus with nothing else (index 2), the
// far ends on grids. Each leg's R and L are those given, grid included.
type legs struct {
	r, l []float64
	// inductive grids hold a part of each L, so that the ends are of index 2 too;
	// otherwise the grids are resistors behind their voltage.
	inductive bool
}

func (s legs) network(t *testing.T, hertz, vm float64) *network {
	n := newNetwork(t, hertz, devices.LineVolts(vm))
	for k := range s.r {
		end := fmt.Sprintf("end-%d", k+1)
		g := devices.GridParams{Voltage: devices.LineVolts(vm), Frequency: hertz, R: 0.3 * s.r[k], VA: 15e3}
		if s.inductive {
			g.L = 0.4 * s.l[k]
		}
		n.add(fmt.Sprintf("grid-%d", k+1), end)(devices.NewGrid(g))
		n.add(fmt.Sprintf("leg-%d", k+1), end, "star")(devices.NewLine(devices.LineParams{R: 0.7 * s.r[k], L: s.l[k] - g.L, RatedCurrent: 100}))
	}
	return n
}

var (
	threeLegs = legs{r: []float64{0.5, 0.2, 0.1}, l: []float64{1e-3, 2e-3, 0.5e-3}}
	fourLegs  = legs{r: []float64{0.4, 0.3, 0.2, 0.1}, l: []float64{1e-3, 2e-3, 3e-3, 0.5e-3}}
)

// The star on a step v = (100, 0, 0) V from rest. Eliminating the star bus exactly
// (S. Y. Caliskan, P. Tabuada, "Towards Kron reduction of generalized electrical
// networks", Automatica 50(10), 2014, treat the homogeneous case), i' = Pi L^-1 (v -
// R i); values of that system, computed independently.
func TestStarStep(t *testing.T) {
	for _, inductive := range []bool{false, true} {
		t.Run(fmt.Sprintf("inductive grids %v", inductive), func(t *testing.T) {
			check := newChecker(t)
			s := threeLegs
			s.inductive = inductive
			// All grids at 100 V carry no current; then two of them go to zero.
			r := s.network(t, dc, 100).start(engine.Options{Solver: tight, Record: []string{"star.v_d", "leg-*.i.d"}, Sample: 1e-3})
			for k := range 3 {
				check.want(fmt.Sprintf("i%d before", k+1), r.value(fmt.Sprintf("leg-%d.i.d", k+1)), 0, 1e-9)
			}
			r.at(0, engine.Set("grid-2", "voltage", 0))
			r.at(0, engine.Set("grid-3", "voltage", 0))
			r.until(0)
			v0 := r.value("star.v_d")
			check.want("v(0+)", v0, 28.5714285714, 1e-9)
			for k, want := range []float64{71428.5714286, -14285.7142857, -57142.8571429} {
				v := 0.0
				if k == 0 {
					v = 100
				}
				check.want(fmt.Sprintf("di%d/dt(0+)", k+1), (v-v0)/s.l[k], want, 1e-5)
			}
			for _, p := range []struct {
				ms float64
				i  [3]float64
				v  float64
			}{
				{1, [3]float64{58.6408580733, -12.2090532529, -46.4318048204}, 0},
				{5, [3]float64{152.3864746048, -36.9365366787, -115.4499379261}, 14.4544011288},
				{10, [3]float64{172.6074573464, -48.0868882455, -124.5205691010}, 0},
				{300, [3]float64{176.4705882353, -58.8235294118, -117.6470588235}, 11.7647058824},
			} {
				r.until(p.ms / 1e3)
				sum := 0.0
				for k, want := range p.i {
					i := r.value(fmt.Sprintf("leg-%d.i.d", k+1))
					check.want(fmt.Sprintf("i%d at %g ms", k+1, p.ms), i, want, 1e-7)
					sum += i
				}
				check.want("Kirchhoff's current law", sum, 0, 1e-11)
				if p.v != 0 {
					check.want(fmt.Sprintf("v at %g ms", p.ms), r.value("star.v_d"), p.v, 1e-7)
				}
			}
		})
	}
}

// currents is the star's solution in closed form, written independently of the
// engine: currents in a frame at rest for voltages v_k e^{jwt} at the ends and i0 at t =
// 0. Modes are the roots s of sum 1/(R_k + s L_k) = 0, with i_k in proportion to 1/(R_k
// + s L_k), and orthogonal with the weights L_k; the phasor part follows from Y_k = 1/(R_k
// + j w L_k).
func (s legs) currents(roots []float64, v, i0 []complex128, w, t float64) []complex128 {
	n := len(s.r)
	var num, den complex128
	y := make([]complex128, n)
	for k := range y {
		y[k] = 1 / complex(s.r[k], w*s.l[k])
		num += y[k] * v[k]
		den += y[k]
	}
	i, offset := make([]complex128, n), make([]complex128, n)
	for k := range i {
		steady := y[k] * (v[k] - num/den)
		i[k] = steady * turn(w*t)
		offset[k] = i0[k] - steady
	}
	for _, root := range roots {
		var c complex128
		norm := 0.0
		shape := make([]float64, n)
		for k := range shape {
			shape[k] = 1 / (s.r[k] + root*s.l[k])
			c += complex(s.l[k]*shape[k], 0) * offset[k]
			norm += s.l[k] * shape[k] * shape[k]
		}
		for k := range i {
			i[k] += c * complex(shape[k]/norm*math.Exp(root*t), 0)
		}
	}
	return i
}

// The star at 50 Hz, all grids in phase at first and without current; then voltages
// and angles of its ends step apart. Currents of every phase follow the closed form
// with the published modes, and what is left of them after the phasor solution is
// taken off has these modes in a frame at rest (in a turning one they lie at s - j w).
func TestStarAtMainsFrequency(t *testing.T) {
	const vm = 100.0
	for _, c := range []struct {
		legs  legs
		modes []float64
	}{
		{threeLegs, []float64{-118.424443881, -410.1469846904}},
		{legs{threeLegs.r, threeLegs.l, true}, []float64{-118.424443881, -410.1469846904}},
		{fourLegs, []float64{-79.1411781003, -159.906262425, -343.5612551269}},
	} {
		n := len(c.legs.r)
		t.Run(fmt.Sprintf("%d legs, inductive grids %v", n, c.legs.inductive), func(t *testing.T) {
			check := newChecker(t)
			const spacing = 1e-3
			r := c.legs.network(t, 50, vm).start(engine.Options{Solver: tight, Sample: spacing, Record: []string{"leg-*.i.?", "leg-*.from.i_?"}})
			volts := []float64{120, 90, 100, 60}[:n]
			angle := []float64{0.3, 0, -0.4, 1.2}[:n]
			v, zero := make([]complex128, n), make([]complex128, n)
			for k := range v {
				v[k] = complex(volts[k], 0) * turn(angle[k])
				name := fmt.Sprintf("grid-%d", k+1)
				r.at(0, engine.Set(name, "voltage", devices.LineVolts(volts[k])))
				r.at(0, engine.Set(name, "phase", angle[k]))
			}
			tr := r.until(0.031)
			rest := make([][]float64, n) // what the phasor solution leaves, phase a
			for row, at := range tr.Time {
				if tr.Before[row] || at > 0.0305 {
					continue
				}
				i := c.legs.currents(c.modes, v, zero, w50, at)
				phasor := c.legs.currents(nil, v, zero, w50, at)
				for k := range n {
					leg := fmt.Sprintf("leg-%d", k+1)
					got := complex(tr.Column(leg + ".i.d")[row], tr.Column(leg + ".i.q")[row]) * turn(w50*at)
					for p, ph := range []string{"a", "b", "c"} {
						x := tr.Column(leg + ".from.i_" + ph)[row]
						check.want(fmt.Sprintf("%s phase %s at %g s", leg, ph, at), x, real(i[k]*turn(-2*math.Pi/3*float64(p))), 1e-6)
					}
					rest[k] = append(rest[k], real(got-phasor[k]))
				}
			}
			fit := modes(t, rest[0], spacing, n-1)
			sort.Slice(fit, func(i, j int) bool { return real(fit[i]) > real(fit[j]) })
			for k, want := range c.modes {
				// Three modes close together from samples good to 1e-8: 1e-5.
				check.wantZ(fmt.Sprintf("mode %d", k+1), fit[k], complex(want, 0), 1e-5*-want)
			}
		})
	}
}

// ---------------------------------------------------------------------------
// Fixed steps

// fixed is the trapezoidal rule at step h, its equations solved to round-off.
func fixed(h float64) engine.Options {
	return engine.Options{Method: solvers.Trapezoidal, Solver: solvers.Options{MaxStep: h, RelTol: 1e-9}, FixedFrame: true, FromRest: true}
}

// An R-L branch on a step (V = 10, R = 1, L = 1 mH, h = 0.1 ms): the trapezoidal rule
// shrinks the distance to the end value by r = (1 - hR/2L)/(1 + hR/2L) = 0.9047619048
// in each step, so that 10 (1 - r^n) is 0.9523809524, 3.937223884, 6.324274576 for n =
// 1, 5, 10 (H. W. Dommel, "Digital computer solution of electromagnetic transients in
// single- and multiphase networks", IEEE Trans. PAS-88(4), 1969; algebra computed). The
// step after a discontinuity is two half steps of backward Euler, 1/(1 + hR/2L) each (J.
// R. Marti, J. Lin, IEEE Trans. Power Systems 4(2), 1989), so the sequence goes on from
// there: 10 - i_n = (10 - i_1) r^{n-1}.
func TestTrapezoidalStep(t *testing.T) {
	check := newChecker(t)
	const h = 1e-4
	n := newNetwork(t, dc, devices.LineVolts(10))
	n.add("source", "a")(devices.NewGrid(devices.GridParams{Voltage: devices.LineVolts(10), Frequency: dc, R: 0.25, L: 0.3e-3, VA: 150}))
	n.add("branch", "a")(devices.NewSeriesLoad(devices.SeriesLoadParams{R: 0.75, L: 0.7e-3, Voltage: devices.LineVolts(10), Frequency: dc}))
	r := n.start(fixed(h))
	current := func(step int) float64 {
		r.until(float64(step) * h)
		return r.value("branch.i.d")
	}
	first := current(1)
	check.want("two half steps of backward Euler", first, 10*(1-1/(1.05*1.05)), 1e-8)
	last := first
	for k := 2; k <= 11; k++ {
		i := current(k)
		check.want(fmt.Sprintf("factor of step %d", k), (10-i)/(10-last), 0.9047619048, 1e-8)
		last = i
		for _, p := range []struct {
			n    int
			want float64
		}{{1, 0.9523809524}, {5, 3.937223884}, {10, 6.324274576}} {
			if k == p.n+1 {
				check.want(fmt.Sprintf("sequence, n = %d", p.n), 10*(1-(10-i)/(10-first)), p.want, 1e-7)
			}
		}
	}
}

// In a sinusoidal steady state the trapezoidal rule shows every reactance as at tan(x)/x
// times its frequency, x = w h/2, and no loss (Dommel 1969; factors computed). A grid of
// 50 Hz or 1 kHz runs from rest in a frame that is held at rest, until the offsets have
// died; in the engine's turning frame the steady state is constant, and the reactance
// exact, whatever the step.
func TestTrapezoidalReactance(t *testing.T) {
	check := newChecker(t)
	for _, c := range []struct{ h, hz, want float64 }{
		{50e-6, 50, 1.000020562}, {50e-6, 1000, 1.008306663},
		{100e-6, 50, 1.000082255}, {100e-6, 1000, 1.034251515},
	} {
		for _, kind := range []string{"inductor", "capacitor"} {
			for _, still := range []bool{true, false} {
				nominal, want, tol := dc, c.want, 2e-9
				if !still {
					nominal, want = c.hz, 1
				}
				const vm, res = 100.0, 5.0
				w := 2 * math.Pi * c.hz
				n := newNetwork(t, nominal, devices.LineVolts(vm))
				g := devices.GridParams{Voltage: devices.LineVolts(vm), Frequency: c.hz, R: res, VA: 1500}
				x, own := 4.0, 0.0
				if kind == "inductor" {
					g.L = x / w
					n.add("source", "a")(devices.NewGrid(g))
					n.add("branch", "a")(devices.NewSeriesLoad(devices.SeriesLoadParams{R: own, L: 0.5 * x / w, Voltage: devices.LineVolts(vm), Frequency: c.hz}))
					x *= 1.5
				} else {
					n.add("source", "a")(devices.NewGrid(g))
					n.add("branch", "a")(devices.NewShuntCapacitor(devices.ShuntCapacitorParams{C: 1 / (w * x), Voltage: devices.LineVolts(vm)}))
				}
				r := n.start(fixed(c.h))
				// Offsets have time constants of 1.2/w: e^-50 is left. The end must fall
				// on a step, or the last one is shorter and shows another reactance.
				r.until(math.Ceil(60/w/c.h) * c.h)
				e := vm * turn(r.value("source.delta"))
				var z complex128
				if kind == "inductor" {
					i := -r.pair("source.i.")
					z = e / i
					check.want(fmt.Sprintf("%s, h = %g, %g Hz, frame at rest %v", kind, c.h, c.hz, still), imag(z)/x, want, tol)
				} else {
					v := r.pair("a.v_")
					z = v / ((e - v) / res)
					z += res
					check.want(fmt.Sprintf("%s, h = %g, %g Hz, frame at rest %v", kind, c.h, c.hz, still), -x/imag(z), want, tol)
				}
				check.want(fmt.Sprintf("%s, h = %g, %g Hz, resistance", kind, c.h, c.hz), real(z)/res, 1, tol)
			}
		}
	}
}

// Halving the step divides the error of the trapezoidal rule by 4 (the order of the
// method; Dommel 1969), here over the energisation of TestEnergisation.
func TestTrapezoidalOrder(t *testing.T) {
	check := newChecker(t)
	var before float64
	for k, h := range []float64{2e-4, 1e-4, 5e-5, 2.5e-5} {
		n := newNetwork(t, 50, devices.LineVolts(325))
		n.add("source", "a")(devices.NewGrid(devices.GridParams{Voltage: devices.LineVolts(325), Frequency: 50, R: 0.03, L: 1e-3, VA: 1e5}))
		n.add("branch", "a")(devices.NewSeriesLoad(devices.SeriesLoadParams{R: 0.07, L: 2e-3, Voltage: devices.LineVolts(325), Frequency: 50}))
		r := n.start(fixed(h))
		r.until(0.005)
		err := math.Abs(r.value("branch.ac.i_a") - 310.3703418)
		if k > 0 {
			// The first step's error is of the same order; at these steps the next
			// order is worth some per cent.
			check.want(fmt.Sprintf("error ratio at h = %g", h), before/err, 4, 0.15)
		}
		before = err
	}
}
