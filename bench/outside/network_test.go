package outside

import (
	"fmt"
	"math"
	"math/cmplx"
	"testing"

	"islet/devices"
	"islet/engine"
	"islet/solvers"
)

// The CIGRE low-voltage residential feeder with constant impedances
// (testdata/cigre-lv-*.csv): magnitudes and angles of all nodes, and the input, from the
// operating point. The source is ideal but for a microohm at 20 kV; the transformer is
// there with its ratio and its shift of 30 degrees.
func TestResidentialFeeder(t *testing.T) {
	lines, loads, volts := readTable(t, "cigre-lv-lines.csv"), readTable(t, "cigre-lv-loads.csv"), readTable(t, "cigre-lv-voltages.csv")
	for _, c := range []struct {
		group  string
		level  string
		series bool // loads as series R-L instead of parallel
		angle  float64
	}{
		{"Dyn1", devices.Full, true, -30},
		{"Dyn11", devices.QuasiSteady, false, 30},
	} {
		t.Run(c.group+" "+c.level, func(t *testing.T) {
			check := newChecker(t)
			n := newNetwork(t, 50, 20e3)
			n.add("source", "R0")(devices.NewGrid(devices.GridParams{Voltage: 20e3, Frequency: 50, R: 1e-6, VA: 1e7}))
			n.volts = 400
			group, err := devices.ParseVectorGroup(c.group)
			if err != nil {
				t.Fatal(err)
			}
			tp, err := devices.TransformerRating{VA: 500e3, HV: 20e3, LV: 400, Frequency: 50, Group: group, Impedance: math.Hypot(1, 4), XR: 4}.Params()
			if err != nil {
				t.Fatal(err)
			}
			n.addAt(c.level, "transformer", "R0", "R1")(devices.NewTransformer(tp))
			for k := range lines.rows {
				from, to := lines.text(k, "from"), lines.text(k, "to")
				p, err := devices.LineData{
					Resistance: lines.value(k, "r_ohm_per_km"), Reactance: lines.value(k, "x_ohm_per_km"), Frequency: 50,
					Length: lines.value(k, "length_m") / 1e3, RatedCurrent: 300,
				}.Params()
				if err != nil {
					t.Fatal(err)
				}
				n.addAt(c.level, "line-"+from+"-"+to, from, to)(devices.NewLine(p))
			}
			for k := range loads.rows {
				node := loads.text(k, "node")
				w, v := 1e3*loads.value(k, "P_kW"), 1e3*loads.value(k, "Q_kvar")
				if c.series {
					p, err := devices.SeriesLoadRating{Voltage: 400, Frequency: 50, P: w, Q: v}.Params()
					if err != nil {
						t.Fatal(err)
					}
					n.addAt(c.level, "load-"+node, node)(devices.NewSeriesLoad(p))
					continue
				}
				p, err := devices.LoadRating{Voltage: 400, Frequency: 50, P: w, Q: v}.Params()
				if err != nil {
					t.Fatal(err)
				}
				n.addAt(c.level, "load-"+node, node)(devices.NewLoad(p))
			}
			r := n.start(engine.Options{Record: []string{"R1.v"}})
			for k := range volts.rows {
				node := volts.text(k, "node")
				v, unit := volts.number(k, "v_pu")
				deg, unitDeg := volts.number(k, "angle_deg")
				if node == "S" {
					check.want("source", r.value("R0.v")/20e3, v, unit)
					check.want("source, degrees", r.value("R0.angle"), deg, unitDeg)
					continue
				}
				check.want(node, r.value(node+".v")/400, v, unit)
				check.want(node+", degrees", r.value(node+".angle")-c.angle, deg, unitDeg)
			}
			// Ten digits printed, and the microohm takes 0.7 mW off. At the source the
			// current is that of a microohm's 11 uV out of 11.5 kV, good to 1e-7 only.
			check.want("input, W", r.value("transformer.p_from"), 364756.4807, 2e-3)
			check.want("input, var", r.value("transformer.q_from"), 131385.0630, 2e-3)
			check.want("input at the source, W", r.value("source.p"), 364756.4807, 1e-7*364756)
			check.want("input at the source, var", r.value("source.q"), 131385.0630, 1e-7*364756)
		})
	}
}

// A fault behind a feeder of 0.40 + j0.70 ohm from a bus whose source has 0.05 + j0.40:
// V = Zl/(Zs + Zl) = 0.6783634654 of the voltage before, with a phase jump of
// -7.495857640 degrees (M. H. J. Bollen, Understanding Power Quality Problems, IEEE Press
// 2000, from memory; values of the formula).
func TestSagAndPhaseJump(t *testing.T) {
	check := newChecker(t)
	n := newNetwork(t, 50, 11e3)
	n.add("source", "pcc")(devices.NewGrid(devices.GridParams{Voltage: 11e3, Frequency: 50, R: 0.05, L: 0.40 / w50}))
	n.add("feeder", "pcc", "end")(devices.NewLine(devices.LineParams{R: 0.30, L: 0.70 / w50, RatedCurrent: 400}))
	n.add("fault", "end")(devices.NewFault(devices.FaultParams{R: 0.10, RatedCurrent: 400}))
	n.add("cable", "pcc", "house")(devices.NewLine(devices.LineParams{R: 0.1, L: 1e-4, RatedCurrent: 400}))
	r := n.start(engine.Options{Record: []string{"pcc.v"}})
	v, a := r.value("pcc.v"), r.value("pcc.angle")
	check.want("before", v, 11e3, 1e-6)
	r.at(0.1, engine.Close("fault"))
	r.at(0.5, engine.Open("fault"))
	r.until(0.5 - 1e-9)
	// Offsets have a time constant of 7.8 ms: e^-50 is left. Solver 1e-6.
	check.want("sag", r.value("pcc.v")/v, 0.6783634654, 1e-6)
	check.want("phase jump", r.value("pcc.angle")-a, -7.495857640, 6e-5)
	check.want("at an unloaded bus of the network", r.value("house.v")/v, 0.6783634654, 1e-6)
	r.until(1)
	check.want("after", r.value("pcc.v")/v, 1, 1e-6)
}

// A grid's own sag, phase jump and frequency reach an unloaded bus as they are set.
func TestGridEvents(t *testing.T) {
	check := newChecker(t)
	n := newNetwork(t, 50, 400)
	n.add("source", "a")(devices.NewGrid(devices.GridParams{Voltage: 400, Frequency: 50, R: 0.05, L: 0.4e-3}))
	n.add("cable", "a", "b")(devices.NewLine(devices.LineParams{R: 0.1, L: 1e-4, RatedCurrent: 100}))
	n.add("meter", "b")(devices.NewFrequencyMeter(devices.FrequencyMeterParams{Voltage: 400, Frequency: 50}))
	r := n.start(engine.Options{Record: []string{"b.v"}, FixedFrame: true})
	r.at(0.1, engine.Set("source", "voltage", 0.6783634654*400))
	r.at(0.1, engine.Set("source", "phase", -7.495857640*math.Pi/180))
	r.at(0.2, engine.Set("source", "frequency", 50.25))
	r.until(0.1)
	check.want("sag", r.value("b.v")/400, 0.6783634654, 1e-9)
	check.want("phase jump", r.value("b.angle"), -7.495857640, 1e-7)
	r.until(0.7)
	check.want("angle after half a second of 0.25 Hz", r.value("b.angle"), -7.495857640+45, 1e-4)
	check.want("frequency", r.value("b.frequency"), 50.25, 1e-9)
	check.want("meter", r.value("meter.frequency"), 50.25, 1e-6)
}

// Clock numbers: the low-voltage side's positive sequence lags by 30 degrees an hour (IEC
// 60076-1), Dyn1 by 30, Dyn11 by -30; and a transformer in each direction in a row comes
// out where it went in.
func TestVectorGroups(t *testing.T) {
	check := newChecker(t)
	for _, c := range []struct {
		group string
		angle float64
	}{{"Yy0", 0}, {"Dyn1", -30}, {"Dyn5", -150}, {"Yy6", 180}, {"YNd7", 150}, {"Dyn11", 30}, {"Dz10", 60}} {
		n := newNetwork(t, 50, 11e3)
		n.add("source", "hv")(devices.NewGrid(devices.GridParams{Voltage: 11e3, Frequency: 50, R: 0.05, L: 1e-3}))
		n.volts = 400
		group, err := devices.ParseVectorGroup(c.group)
		if err != nil {
			t.Fatal(err)
		}
		p, err := devices.TransformerRating{VA: 500e3, HV: 11e3, LV: 400, Frequency: 50, Group: group, Impedance: 4, XR: 4}.Params()
		if err != nil {
			t.Fatal(err)
		}
		n.add("down", "hv", "lv")(devices.NewTransformer(p))
		n.volts = 11e3
		n.add("up", "back", "lv")(devices.NewTransformer(p))
		r := n.start(engine.Options{Record: []string{"lv.v"}})
		check.want(c.group+", V", r.value("lv.v"), 400, 1e-6)
		check.want(c.group, math.Mod(r.value("lv.angle")-c.angle+540, 360)-180, 0, 1e-9)
		check.want(c.group+" and back", r.value("back.angle"), 0, 1e-9)
		check.want(c.group+" and back, V", r.value("back.v"), 11e3, 1e-5)
	}
}

// A balanced fault: E = 1, Z1 = 0.02 + j0.20, Zf = 0.01 pu on 20 MVA, 11 kV: 4.944681764
// pu at -81.46923439 degrees = 5190.569723 A, 0.0494468176 pu at the fault. A second source
// of the textbook's (J. J. Grainger, W. D. Stevenson, Power System Analysis, 1994, chapter
// 12) kind: E = 1 behind X = 0.25 pu on 20 MVA, 13.8 kV, base current 836.7395 A.
func TestBalancedFault(t *testing.T) {
	check := newChecker(t)
	base := devices.BaseOhms(11e3, 20e6)
	n := newNetwork(t, 50, 11e3)
	n.add("source", "a")(devices.NewGrid(devices.GridParams{Voltage: 11e3, Frequency: 50, R: 0.02 * base, L: devices.Henries(0.20*base, 50)}))
	n.add("fault", "a")(devices.NewFault(devices.FaultParams{R: 0.01 * base, RatedCurrent: 1000}))
	r := n.start(engine.Options{Record: []string{"a.v"}})
	r.at(0.1, engine.Close("fault"))
	r.until(0.1)
	check.want("current at once", r.value("fault.i"), 0, 1e-6)
	check.want("voltage at once", r.value("a.v"), 0, 1e-3)
	r.until(0.6)
	check.want("current, A", r.value("fault.i"), 5190.569723, 1e-6*5190)
	check.want("current, pu", r.value("fault.i")/devices.RatedAmperes(20e6, 11e3), 4.944681764, 5e-6)
	check.want("angle", cmplx.Phase(r.pair("fault.ac.i_"))*180/math.Pi, -81.46923439, 6e-5)
	check.want("voltage, pu", r.value("a.v")/11e3, 0.0494468176, 5e-8)
	check.want("base current", devices.RatedAmperes(20e6, 13.8e3), 836.7395, 1e-4)
}

// One droop inverter of constant voltage on a stiff bus through R + jX (X at 50 Hz), no
// load, mp behind wc = 31.41 rad/s, V = 380 V line to line: s (s + wc) [(R + sL)^2 + X^2] +
// mp wc V^2 X = 0 with the line's dynamics, s (s + wc) + mp wc V^2 X/Z^2 = 0 without. Roots
// of these at 9.4e-5, and the gains at which the first is critical (Routh), computed; that
// shorter lines have smaller limits is in P. Vorobev, P.-H. Huang, M. Al Hosani, J. L.
// Kirtley, K. Turitsyn, "High-fidelity model order reduction for microgrids stability
// assessment", IEEE Trans. Power Systems 33(1), 2018.
func TestDroopOnStiffBus(t *testing.T) {
	check := newChecker(t)
	ring := func(detail string, r, x, m, settle, spacing float64) complex128 {
		n := newNetwork(t, 50, 380)
		n.add("grid", "a")(devices.NewGrid(devices.GridParams{Voltage: 380, Frequency: 50, R: 1e-9, VA: 1e5}))
		n.addAt(detail, "inv", "a")(devices.NewGridForming(devices.GridFormingParams{
			Rating: 10e3, Omega0: w50, V0: devices.PeakVolts(380),
			Primary: devices.Droop{M: m, N: 0, OmegaC: 31.41, Psi: math.Pi / 2},
			Kpv:     0.05, Kiv: 390, F: 0.75, Kpc: 10.5, Kic: 16e3, IMax: math.Inf(1),
			Filter: devices.LCL{Lf: 1.35e-3, Rf: 0.1, Cf: 50e-6, Lg: x / w50, Rg: r},
		}))
		s := n.start(engine.Options{Solver: solvers.Options{RelTol: 1e-12}, Sample: spacing, FixedFrame: true, Record: []string{"inv.P"}})
		s.at(0, engine.Set("inv", "p", 1)) // an angle of some 1e-6 rad
		tr := s.until(settle + 30.5*spacing)
		return pairOf(t, column(t, tr, "inv.P", settle+spacing/2)[:29], spacing)
	}
	got := ring(devices.InnerLoopsGone, 0.35, 0.58, 9.4e-5, 0.1, 8e-3)
	check.wantZ("with line dynamics", got, complex(-14.94396617, 17.76409945), 1e-4*23)
	got = ring(devices.PrimaryOnly, 0.35, 0.58, 9.4e-5, 0, 8e-3)
	check.wantZ("zero order", got, complex(-15.705, 17.09412818), 1e-5*23)
	for _, c := range []struct{ r, x, m, w float64 }{
		{0.23, 0.10, 1.926370441e-3, 114.9175001},
		{0.35, 0.58, 1.818275770e-3, 101.4898167},
		{0.26, 0.21, 1.204827910e-3, 98.49831504},
	} {
		low := ring(devices.InnerLoopsGone, c.r, c.x, 0.997*c.m, 0.2, 5e-3)
		high := ring(devices.InnerLoopsGone, c.r, c.x, 1.003*c.m, 0.2, 5e-3)
		name := fmt.Sprintf("%g + j%g ohm", c.r, c.x)
		if !(real(low) < 0 && real(high) > 0) {
			t.Errorf("%s: rates %g below and %g above the critical gain", name, real(low), real(high))
		}
		f := -real(low) / (real(high) - real(low))
		// A chord of 0.6 % is straight to 1e-5.
		check.want(name+", critical", c.m*(0.997+0.006*f), c.m, 1e-4*c.m)
		check.want(name+", frequency", imag(low)+f*(imag(high)-imag(low)), c.w, 1e-3*c.w)
		if z := ring(devices.PrimaryOnly, c.r, c.x, 3*c.m, 0, 4e-3); !(real(z) < 0) {
			t.Errorf("%s: zero order has %g at three times the critical gain, and is stable for every gain", name, z)
		}
	}
}
