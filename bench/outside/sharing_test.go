package outside

import (
	"fmt"
	"math"
	"math/cmplx"
	"testing"

	"islet/devices"
	"islet/engine"
)

// Two droop inverters of constant voltage (N = 0) at one bus with a resistor: their
// capacitor voltages are sources V e^{j d_k} behind Z = R_g + j w L_g. A lossless Z would
// leave the network's own mode without damping, and any droop gain would excite it.
const (
	sharingV = 326.0 // V peak
	sharingL = 1e-3  // H
	sharingR = 0.1   // ohm
)

// loadFor returns the resistance with which the sources give these powers at angular
// frequency w. From P_k = (3/2) Re(V e^{j d} conj(i)) and i = (V e^{j d} - Vb)/Z, cos(theta
// + d) = (V^2 cos(theta) - (2/3) P |Z|)/(V Vb); Vb by bisection for a sum of currents in
// phase with it.
func loadFor(powers [2]float64, w float64) (ohms float64) {
	z := complex(sharingR, w*sharingL)
	abs, theta := cmplx.Polar(z)
	sum := func(vb float64) (i complex128) {
		for _, p := range powers {
			d := math.Acos((sharingV*sharingV*math.Cos(theta)-p*abs/1.5)/(sharingV*vb)) - theta
			i += (sharingV*turn(d) - complex(vb, 0)) / z
		}
		return i
	}
	lo, hi := 0.9*sharingV, sharingV
	for range 80 {
		// Vars flow into the bus as long as its voltage is too low.
		if mid := (lo + hi) / 2; imag(sum(mid)) < 0 {
			lo = mid
		} else {
			hi = mid
		}
	}
	return lo / real(sum(lo))
}

// Sharing: dw = -(P_L - sum P*)/sum(1/m_k), P_k = P_k* - dw/m_k (M. C. Chandorkar, D. M.
// Divan, R. Adapa, "Control of parallel connected inverters in standalone AC supply
// systems", IEEE Trans. Industry Applications 29(1), 1993, from memory; algebra computed).
// Two inverters of 1e-4 and 2e-4 rad/s/W and a load of 9 kW: -0.6 rad/s = 49.90450703 Hz,
// 6000 and 3000 W; with P1* raised by 2000 W -0.4666666667 rad/s, 6666.666667 and
// 2333.333333 W. Loads are constant impedances here, so the resistor is chosen with which
// the 9 kW (its own and what R_g loses) flow in each state, from the closed form above.
func TestSharing(t *testing.T) {
	for _, detail := range []string{devices.Full, devices.InnerLoopsGone, devices.PrimaryOnly} {
		t.Run(detail, func(t *testing.T) {
			check := newChecker(t)
			n := newNetwork(t, 50, 400)
			for k, m := range []float64{1e-4, 2e-4} {
				n.addAt(detail, fmt.Sprintf("inv-%d", k+1), "a")(devices.NewGridForming(devices.GridFormingParams{
					Rating: 10e3, Omega0: w50, V0: sharingV,
					Primary: devices.Droop{M: m, N: 0, OmegaC: 31.41, Psi: math.Pi / 2},
					Kpv:     0.05, Kiv: 390, F: 0.75, Kpc: 10.5, Kic: 16e3, IMax: math.Inf(1),
					Filter: devices.LCL{Lf: 1.35e-3, Rf: 0.1, Cf: 50e-6, Lg: sharingL, Rg: sharingR},
				}))
			}
			watts := func(ohms float64) float64 { return 400 * 400 / ohms }
			first := loadFor([2]float64{6000, 3000}, w50-0.6)
			n.add("load", "a")(devices.NewLoad(devices.LoadParams{Voltage: 400, Frequency: 50, R: first}))
			r := n.start(engine.Options{Record: []string{"inv-*.p_control", "a.frequency"}, Sample: 0.01})
			state := func(when string, f, dw, p1, p2, tol float64) {
				check.want(when+", Hz", r.value("a.frequency"), f, tol)
				check.want(when+", rad/s", 2*math.Pi*r.value("a.frequency")-w50, dw, 10*tol)
				check.want(when+", P1", r.value("inv-1.p_control"), p1, 1e5*tol)
				check.want(when+", P2", r.value("inv-2.p_control"), p2, 1e5*tol)
			}
			state("at the start", 49.90450703, -0.6, 6000, 3000, 1e-8)
			// A run settles to the solver's tolerance, 1e-6 of 10 kW, times 10.
			r.at(0.1, engine.Set("inv-1", "p", 2000))
			r.at(0.1, engine.Set("load", "p", watts(loadFor([2]float64{20000.0 / 3, 7000.0 / 3}, w50-7.0/15))))
			r.until(3)
			state("P1* raised", 50-0.4666666667/(2*math.Pi), -0.4666666667, 6666.666667, 2333.333333, 1e-6)
		})
	}
}

// A source of constant P and Q on an island is a droop of infinite slope turned to psi =
// 0: omega rises until Q, and V falls until P, is met, the limit of (Q - Q*) = (omega -
// omega_0)/m and (P - P*) = (V_0 - V)/n. With slopes that leave 1e-3 W and var it finds
// the state in which an island holds on to the test load of IEEE Std 1547.1 (quality
// factor 1, 100 kW at 400 V, 60 Hz): V = sqrt(P R) and the frequency of Q = V^2 (1/(w L) -
// w C), values of these closed forms.
func TestAntiIslandingLoad(t *testing.T) {
	for _, c := range []struct{ kw, kvar, volts, hz float64 }{
		{100, 0, 400, 60},
		{90, 0, 379.4733192, 60},
		{90, 5, 379.4733192, 58.35647702},
		{110, -5, 419.5235393, 61.37913023},
	} {
		check := newChecker(t)
		n := newNetwork(t, 60, 400)
		n.add("source", "a")(devices.NewGridForming(devices.GridFormingParams{
			Rating: 150e3, Omega0: 2 * math.Pi * 60, V0: devices.PeakVolts(400), P: c.kw * 1e3, Q: c.kvar * 1e3,
			Primary: devices.Droop{M: 1e4, N: 1e5, OmegaC: 31.4, Psi: 0},
			Kpv:     0.05, Kiv: 390, F: 0.75, Kpc: 10.5, Kic: 16e3, IMax: math.Inf(1),
			// Next to nothing between the capacitor, where P and Q are met, and the bus.
			Filter: devices.LCL{Lf: 1e-3, Rf: 0.05, Cf: 20e-6, Lg: 1e-9},
		}))
		n.add("load", "a")(devices.NewLoad(devices.LoadParams{Voltage: 400, Frequency: 60, R: 1.6, L: 4.244131816e-3, C: 1657.863991e-6}))
		r := n.start(engine.Options{Record: []string{"a.v"}})
		name := fmt.Sprintf("%g kW, %g kvar", c.kw, c.kvar)
		check.want(name+", V", r.value("a.v"), c.volts, 1e-4)
		check.want(name+", Hz", r.value("a.frequency"), c.hz, 1e-5)
		check.want(name+", load W", r.value("load.p"), c.kw*1e3, 0.1)
		check.want(name+", load var", r.value("load.q"), c.kvar*1e3, 0.1)
	}
}

// The same load driven by a grid at these voltages and frequencies draws these powers:
// the load's own law, away from its rated frequency.
func TestAntiIslandingLoadOffNominal(t *testing.T) {
	check := newChecker(t)
	for _, c := range []struct{ kw, kvar, volts, hz float64 }{
		{90, 5, 379.4733192, 58.35647702},
		{110, -5, 419.5235393, 61.37913023},
	} {
		for _, level := range []string{devices.Full, devices.QuasiSteady} {
			n := newNetwork(t, 60, 400)
			n.add("grid", "a")(devices.NewGrid(devices.GridParams{Voltage: c.volts, Frequency: c.hz, R: 1e-9, VA: 1e6}))
			n.addAt(level, "load", "a")(devices.NewLoad(devices.LoadParams{Voltage: 400, Frequency: 60, R: 1.6, L: 4.244131816e-3, C: 1657.863991e-6}))
			r := n.start(engine.Options{Record: []string{"a.v"}})
			// Ten digits of f give 1e-9 of 94 kvar in either element.
			check.want(fmt.Sprintf("%g Hz, %s, W", c.hz, level), r.value("load.p"), c.kw*1e3, 1e-3)
			check.want(fmt.Sprintf("%g Hz, %s, var", c.hz, level), r.value("load.q"), c.kvar*1e3, 1e-3)
		}
	}
}
