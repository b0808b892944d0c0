package outside

import (
	"fmt"
	"math"
	"math/cmplx"
	"sort"
	"testing"

	"islet/devices"
	"islet/engine"
)

// Gains of a phase-locked loop that settles in 0.1 s with damping 1/sqrt(2), Kp = 9.2/ts
// and Ki = Kp 2.3/(ts zeta^2) (R. Teodorescu, M. Liserre, P. Rodriguez, Grid Converters
// for Photovoltaic and Wind Power Systems, Wiley 2011; from memory).
const pllKp, pllKi = 92, 4232

// lockable is a stiff 400 V grid (a microohm) with a follower, at no load, and a frequency
// meter, both with these gains.
func lockable(t *testing.T, fixedAmplitude bool) *network {
	n := newNetwork(t, 50, 400)
	n.add("grid", "a")(devices.NewGrid(devices.GridParams{Voltage: 400, Frequency: 50, R: 1e-6, VA: 1e6}))
	n.add("inverter", "a")(devices.NewGridFollowing(devices.GridFollowingParams{
		Rating: 10e3, Omega0: w50, V0: devices.PeakVolts(400), Kp: pllKp, Ki: pllKi, FixedAmplitude: fixedAmplitude,
		SpeedLimit: math.Inf(1), OmegaV: 100, VFloor: 30, Kpc: 4, Kic: 200, Kff: 1, IMax: math.Inf(1),
		Filter: devices.LCL{Lf: 2e-3, Rf: 0.1},
	}))
	n.add("meter", "a")(devices.NewFrequencyMeter(devices.FrequencyMeterParams{
		Voltage: 400, Frequency: 50, Bandwidth: math.Sqrt(pllKi) / (2 * math.Pi), Damping: math.Sqrt2 / 2,
	}))
	return n
}

// lag is the grid's angle less that of a loop, not wrapped.
func (r *run) lag(device string) float64 {
	return r.value("grid.delta") - r.value(device+".delta")
}

// Phase jumps and frequency steps of the grid. Small: e/jump = e^{-zeta wn t} (cos wd t -
// zeta/sqrt(1 - zeta^2) sin wd t), and dw e^{-zeta wn t} sin(wd t)/wd. Large: e” = -(Kp
// cos e) e' - Ki sin e, computed independently.
func TestPLLSteps(t *testing.T) {
	times := [4]float64{5e-3, 10e-3, 20e-3, 50e-3}
	for _, c := range []struct {
		name  string
		event engine.Event
		unit  float64 // of want, rad
		want  [4]float64
		// small is the relative error that sin e = e leaves, e^2/6.
		small float64
	}{
		{"small phase jump", engine.Set("grid", "phase", 1e-3), 1e-3,
			[4]float64{0.5924748654, 0.2854061078, -0.0756315268, -0.1415636058}, 2e-7},
		{"120 degrees", engine.Set("grid", "phase", 2*math.Pi/3), 1,
			[4]float64{1.609681718, 1.018915671, 0.0688010168, -0.3455713702}, 0},
		{"5 Hz", engine.Set("grid", "frequency", 55), 1,
			[4]float64{0.1237477826, 0.1917408584, 0.2179118060, 0.0513902419}, 0},
	} {
		for _, fixedAmplitude := range []bool{false, true} {
			t.Run(fmt.Sprintf("%s, amplitude fixed %v", c.name, fixedAmplitude), func(t *testing.T) {
				check := newChecker(t)
				r := lockable(t, fixedAmplitude).start(engine.Options{Solver: tight, Record: []string{"inverter.delta"}})
				check.want("locked at first", r.lag("inverter"), 0, 1e-9)
				r.at(0.01, c.event)
				for k, at := range times {
					r.until(0.01 + at)
					want := c.want[k] * c.unit
					where := fmt.Sprintf("at %g ms", 1e3*at)
					// The microohm turns the measured voltage by 1e-7 while the current
					// swings; the solver's tolerance times 10 is 1e-9 rad.
					check.want("inverter "+where, r.lag("inverter"), want, 1e-9+(c.small+3e-7)*c.unit)
					// The meter's floor of 1 % of rated voltage takes 5e-5 off its gains.
					check.want("meter "+where, r.lag("meter"), want, 1e-9+(c.small+6e-5)*c.unit)
				}
			})
		}
	}
}

// First zero of the small phase step at 17.07387312 ms; a small frequency step has its
// largest error there, 7.008629173 ms times the step (same closed forms).
func TestPLLExtremes(t *testing.T) {
	check := newChecker(t)
	const dw = 2 * math.Pi * 0.01
	r := lockable(t, true).start(engine.Options{Solver: tight, Sample: 2e-4, Record: []string{"inverter.delta", "grid.delta"}, FixedFrame: true})
	r.at(0, engine.Set("grid", "frequency", 50.01))
	tr := r.until(0.1)
	// The error as a channel of its own, in the place of the inverter's angle.
	e, g := tr.Column("inverter.delta"), tr.Column("grid.delta")
	for k := range e {
		e[k] = g[k] - e[k]
	}
	at, worst := peak(t, tr, "inverter.delta", 1, 0)
	check.want("largest error", worst/dw, 7.008629173e-3, 1e-8)
	check.want("time", at, 17.07387312e-3, 1e-6)
	r = lockable(t, true).start(engine.Options{Solver: tight, Record: []string{"inverter.delta"}})
	r.at(0, engine.Set("grid", "phase", 1e-3))
	r.until(17.07387312e-3)
	check.want("first zero", r.lag("inverter"), 0, 2e-9)
}

// On a ramp of 1 Hz/s the error is 1.484684619e-3 rad = 0.0850661626 degrees and the
// frequency without error.
func TestPLLRamp(t *testing.T) {
	check := newChecker(t)
	r := lockable(t, true).start(engine.Options{Solver: tight, Record: []string{"inverter.delta"}})
	r.at(0, engine.Ramp("grid", "frequency", 51, 1))
	r.until(0.9)
	// sin e = e to 4e-7.
	check.want("error", r.lag("inverter"), 1.484684619e-3, 2e-9)
	check.want("error, degrees", r.lag("inverter")*180/math.Pi, 0.0850661626, 1e-7)
	check.want("meter", r.lag("meter"), 1.484684619e-3, 6e-5*1.5e-3)
	check.want("frequency", r.value("inverter.frequency"), 50.9, 1e-8)
	check.want("meter's frequency", r.value("meter.frequency"), 50.9, 1e-8)
	check.want("meter's rate", r.value("meter.rocof"), 1, 1e-4)
	r.until(2)
	check.want("after the ramp", r.lag("inverter"), 0, 1e-9)
	check.want("frequency after the ramp", r.value("inverter.frequency"), 51, 1e-8)
}

// weakGrid is a follower that feeds Id = 1 pu through X = 0.5 pu into Vg = 1 pu, its
// current loop fast and its current's size held (the filter of v_md is slow against the
// run), and the PLL on the bus between: vq = -Vg sin d + (wg + d') Lg Id.
type weakGrid struct{ kp, ki float64 }

const (
	weakRating = 10e3
	weakLag    = 1e-6 // s, time constant of the current loop
)

func (g weakGrid) network(t *testing.T) (n *network, d0 float64) {
	base := devices.BaseOhms(400, weakRating)
	l := devices.Henries(0.5*base, 50)
	d0 = math.Pi / 6
	n = newNetwork(t, 50, 400)
	n.add("grid", "a")(devices.NewGrid(devices.GridParams{Voltage: 400, Frequency: 50, R: 0, L: l, VA: weakRating}))
	const lf = 1e-3
	n.add("inverter", "a")(devices.NewGridFollowing(devices.GridFollowingParams{
		Rating: weakRating, Omega0: w50, V0: devices.PeakVolts(400),
		P:  weakRating * math.Cos(d0), // Id = P/(1.5 vd), vd = Vg cos d0
		Kp: g.kp, Ki: g.ki, FixedAmplitude: true, SpeedLimit: math.Inf(1),
		OmegaV: 1e-6, VFloor: 30, Kpc: lf / weakLag, Kic: 1, Kff: 1, IMax: math.Inf(1),
		Filter: devices.LCL{Lf: lf},
	}))
	return n, d0
}

// modes are the roots of the published quadratic equation, in per unit of voltage:
//
//	(1 - Kp Lg Id) s^2 + (Kp cos d0 - Ki Lg Id) s + Ki cos d0 = 0,   Lg Id = 0.5/w
func (g weakGrid) modes() (a, b, c float64, s [2]complex128) {
	li, cos := 0.5/w50, math.Cos(math.Pi/6)
	a, b, c = 1-g.kp*li, g.kp*cos-g.ki*li, g.ki*cos
	root := cmplx.Sqrt(complex(b*b-4*a*c, 0))
	s[0], s[1] = (complex(-b, 0)+root)/complex(2*a, 0), (complex(-b, 0)-root)/complex(2*a, 0)
	return a, b, c, s
}

// The weak-grid criterion of a PLL: stable if and only if Kp Lg Id < 1 and Ki/Kp < Vg
// cos d0/(Lg Id) (several papers on the large-signal stability of PLLs, 2019 to 2021,
// from memory; derived and computed). Modes are read off small oscillations of the run;
// its current loop of a microsecond leaves 1e-4 of them.
func TestPLLWeakGrid(t *testing.T) {
	check := newChecker(t)
	a, b, c, s := weakGrid{pllKp, pllKi}.modes()
	check.agree("coefficient of s^2", a, 0.8535774524, 1e-10)
	check.agree("coefficient of s", b, 72.93889996, 1e-8)
	check.agree("constant", c, 3665.019509, 1e-6)
	check.agree("root, real part", real(s[0]), -42.72541394, 1e-7)
	check.agree("root, imaginary part", imag(s[0]), 49.68153991, 1e-7)
	ring := func(g weakGrid, spacing, jump float64) complex128 {
		n, d0 := g.network(t)
		r := n.start(engine.Options{Solver: tight, Sample: spacing, FixedFrame: true, Record: []string{"inverter.delta"}})
		check.want("equilibrium, rad", r.value("inverter.delta")-r.value("grid.delta"), d0, 1e-7)
		check.want("current, A peak", cmplx.Abs(r.pair("inverter.i_g.")), weakRating/(1.5*devices.PeakVolts(400)), 1e-5)
		r.at(0, engine.Set("grid", "phase", jump))
		tr := r.until(20.5 * spacing)
		return pairOf(t, column(t, tr, "inverter.delta", 2.5*spacing)[:18], spacing)
	}
	got := ring(weakGrid{pllKp, pllKi}, 5e-3, 1e-5)
	check.wantZ("mode", got, s[0], 2e-4*cmplx.Abs(s[0]))
	// Both sides of Ki = 50060.86245 at Kp = 92, and the limit between them.
	const kiLimit = 50060.86245
	low := ring(weakGrid{pllKp, 0.98 * kiLimit}, 3e-3, 1e-5)
	high := ring(weakGrid{pllKp, 1.02 * kiLimit}, 3e-3, 1e-5)
	if !(real(low) < 0 && real(high) > 0) {
		t.Errorf("rates %g and %g either side of the limit of Ki", real(low), real(high))
	}
	f := -real(low) / (real(high) - real(low))
	// The microsecond adds a damping of order (Kp Lg Id) w^2 tau against b/a's slope.
	check.want("limit of Ki", kiLimit*(0.98+0.04*f), kiLimit, 2e-3*kiLimit)
	for _, x := range []struct {
		g   weakGrid
		got complex128
	}{{weakGrid{pllKp, 0.98 * kiLimit}, low}, {weakGrid{pllKp, 1.02 * kiLimit}, high}} {
		_, _, _, s := x.g.modes()
		check.want(fmt.Sprintf("frequency at Ki = %g", x.g.ki), imag(x.got), imag(s[0]), 1e-3*imag(s[0]))
	}
	// Kp = 628.3185307: below it the angle comes back. Beyond, the fastest part of the loop
	// is closed with the wrong sign, and the angle runs away within a fraction of a
	// millisecond, at a rate that the current loop's lag tau decides: d_i' = (d - d_i)/tau
	// makes it s^2 (1 + s tau) + (Kp s + Ki) (cos d0 (1 + s tau) - Lg Id s) = 0, which is the
	// quadratic equation for tau = 0 and has two positive roots.
	const kpLimit = 628.3185307
	check.agree("limit of Kp", 2*w50, kpLimit, 1e-7)
	for _, kp := range []float64{0.95 * kpLimit, 1.05 * kpLimit} {
		g := weakGrid{kp, pllKi}
		n, d0 := g.network(t)
		const spacing = 4e-6
		r := n.start(engine.Options{Solver: tight, Sample: spacing, FixedFrame: true, Record: []string{"inverter.delta"}})
		r.at(0, engine.Set("grid", "phase", 1e-5))
		tr := r.until(30.5 * spacing)
		if kp < kpLimit {
			r.until(2)
			check.want("angle at Kp below the limit", r.value("inverter.delta")-r.value("grid.delta"), d0, 1e-8)
			continue
		}
		li, cos := 0.5/w50, math.Cos(d0)
		cubic := roots(t, []float64{
			-pllKi * cos / weakLag,
			-(kp*cos + pllKi*(cos*weakLag-li)) / weakLag,
			-(1 + kp*(cos*weakLag-li)) / weakLag,
		})
		var want, got []float64
		for _, s := range cubic {
			if real(s) > 0 && imag(s) == 0 {
				want = append(want, real(s))
			}
		}
		for _, s := range modes(t, column(t, tr, "inverter.delta", 1.5*spacing)[:28], spacing, 2) {
			got = append(got, real(s))
		}
		sort.Float64s(got)
		sort.Float64s(want)
		if len(want) != 2 {
			t.Fatalf("roots %g", cubic)
		}
		// Two exponentials from 28 samples good to 1e-10 of 1e-5 rad.
		check.want("slower growth beyond the limit of Kp", got[0], want[0], 5e-3*want[0])
		check.want("faster growth beyond the limit of Kp", got[1], want[1], 5e-3*want[1])
	}
}
