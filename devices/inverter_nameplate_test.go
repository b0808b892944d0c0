package devices

import (
	"fmt"
	"math"
	"testing"
)

const (
	plateVA    = 10e3
	plateVolts = 400.0
)

func formingPlate() GridFormingNameplate {
	return GridFormingNameplate{Power: plateVA, Voltage: plateVolts, Frequency: 50}
}

func followingPlate() GridFollowingNameplate {
	return GridFollowingNameplate{Power: plateVA, Voltage: plateVolts, Frequency: 50}
}

func plateForming(t testing.TB, n GridFormingNameplate) *GridForming {
	t.Helper()
	p, err := n.Params()
	if err != nil {
		t.Fatal(err)
	}
	return mustForming(t, p)
}

func plateFollowing(t testing.TB, n GridFollowingNameplate) *GridFollowing {
	t.Helper()
	p, err := n.Params()
	if err != nil {
		t.Fatal(err)
	}
	return mustFollowing(t, p)
}

// stable fails the test unless the rig has a steady state there all
// eigenvalues of which lie left of -margin.
func stable(t *testing.T, r *rig, margin float64, what string) {
	t.Helper()
	if err := r.steady(); err != nil {
		t.Errorf("%s: %v", what, err)
		return
	}
	if e := r.eigenvalues(); !(real(e[0]) < -margin) {
		t.Errorf("%s: rightmost eigenvalue %.3f 1/s", what, e[0])
	}
}

// unstable is the opposite, for what a comment warns of.
func unstable(t *testing.T, r *rig, what string) {
	t.Helper()
	if err := r.steady(); err != nil {
		t.Errorf("%s: %v", what, err)
		return
	}
	if e := r.eigenvalues(); !(real(e[0]) > 0) {
		t.Errorf("%s: rightmost eigenvalue %.3f 1/s: the warning is out of date", what, e[0])
	}
}

// The range stated in the comment of GridFormingNameplate.
func TestGridFormingDefaultsStable(t *testing.T) {
	variants := []struct {
		name string
		edit func(*GridFormingNameplate)
	}{
		{"default", func(*GridFormingNameplate) {}},
		{"2 % frequency droop", func(n *GridFormingNameplate) { n.FrequencyDroop = new(2.0) }},
		{"5 % voltage droop", func(n *GridFormingNameplate) { n.VoltageDroop = new(5.0) }},
		{"virtual machine", func(n *GridFormingNameplate) { n.Control = VirtualMachineControl }},
		{"virtual machine, 2 % frequency droop", func(n *GridFormingNameplate) {
			n.Control, n.FrequencyDroop = VirtualMachineControl, new(2.0)
		}},
		{"virtual machine, 5 % voltage droop", func(n *GridFormingNameplate) {
			n.Control, n.VoltageDroop = VirtualMachineControl, new(5.0)
		}},
		{"light virtual machine", func(n *GridFormingNameplate) { n.Control, n.Inertia = VirtualMachineControl, new(0.2) }},
		{"heavy virtual machine", func(n *GridFormingNameplate) { n.Control, n.Inertia = VirtualMachineControl, new(5.0) }},
		{"virtual machine with power filter", func(n *GridFormingNameplate) { n.Control, n.PowerFilter = VirtualMachineControl, 5 }},
		{"oscillator", func(n *GridFormingNameplate) { n.Control = OscillatorControl }},
		{"oscillator, 2 % frequency droop", func(n *GridFormingNameplate) { n.Control, n.FrequencyDroop = OscillatorControl, new(2.0) }},
		{"oscillator, 5 % voltage range", func(n *GridFormingNameplate) { n.Control, n.VoltageRange = OscillatorControl, new(5.0) }},
	}
	for _, variant := range variants {
		plate := formingPlate()
		variant.edit(&plate)
		for _, xr := range []float64{0.5, 3, 10} {
			for _, scr := range []float64{1, 1.5, 2, 3, 5, 10, 20, 50} {
				for _, p := range []float64{-1, 0, 0.5, 1} {
					switch {
					case p == 1 && scr < 1.5,
						p == -1 && scr < 2,
						p == -1 && xr == 0.5 && scr < 10:
						continue
					}
					plate.P = p * plateVA
					r := newRig(plateForming(t, plate)).scr(plateVolts, plateVA, scr, xr)
					stable(t, r, 0.5, fmt.Sprintf("%s, X/R %g, SCR %g, P* %g", variant.name, xr, scr, p))
				}
			}
		}
		for _, load := range []float64{0.01, 0.3, 1} {
			r := newRig(plateForming(t, plate))
			r.load = load / BaseOhms(plateVolts, plateVA)
			stable(t, r, 5, fmt.Sprintf("%s, island, load %g", variant.name, load))
		}
	}
}

// Two inverters on a load, the second over 20 m of cable.
func TestParallelFormingStable(t *testing.T) {
	pair := func(plate GridFormingNameplate, ohmPerKM, load float64) *rig {
		near, far := plateForming(t, plate), plateForming(t, plate)
		p := far.Params() // the cable is in series with L_g
		p.Filter.Rg += ohmPerKM * 0.02
		p.Filter.Lg += 0.08 / RadPerSecond(50) * 0.02 // 0.08 ohm/km
		far = mustForming(t, p)
		r := newRig(near, far)
		r.load = load / BaseOhms(plateVolts, plateVA)
		return r
	}
	for _, control := range []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl} {
		for _, ohm := range []float64{0.2, 0.32, 0.64} {
			for _, load := range []float64{0.02, 1, 1.8} {
				for _, m := range []float64{1, 2} {
					for _, v := range []float64{2, 5} {
						plate := formingPlate()
						plate.Control, plate.FrequencyDroop, plate.VoltageDroop = control, &m, &v
						stable(t, pair(plate, ohm, load), 5,
							fmt.Sprintf("%s, %g ohm/km, load %g, droop %g %% and %g %%", control, ohm, load, m, v))
					}
				}
			}
		}
	}
	// Resistive droop with a virtual resistance in place of the reactance.
	plate := formingPlate()
	plate.Psi = new(0.0)
	for _, control := range []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl} {
		plate.Control = control
		stable(t, pair(plate, 0.32, 1), 3, fmt.Sprintf("resistive %s", control))
	}

	// What the comment of GridFormingNameplate warns of.
	plate = formingPlate()
	plate.CurrentBandwidth, plate.VoltageBandwidth = 500, 125
	unstable(t, pair(plate, 0.32, 1), "voltage bandwidth of 125 Hz")
	plate = formingPlate()
	plate.FeedForward = new(1.0)
	unstable(t, newRig(plateForming(t, plate)).scr(plateVolts, plateVA, 50, 10), "F = 1")
	plate.FeedForward = new(0.0)
	unstable(t, pair(plate, 0.32, 1), "F = 0")
}

// The range stated in the comment of GridFollowingNameplate.
func TestGridFollowingDefaultsStable(t *testing.T) {
	for _, l := range []bool{false, true} {
		plate := followingPlate()
		plate.LFilter = l
		for _, xr := range []float64{0.5, 3, 10} {
			for _, scr := range []float64{1.5, 2, 3, 5, 10, 20, 50} {
				for _, p := range []float64{-1, 0, 0.5, 1} {
					plate.P = p * plateVA
					r := newRig(plateFollowing(t, plate)).scr(plateVolts, plateVA, scr, xr)
					stable(t, r, 5, fmt.Sprintf("L filter %v, X/R %g, SCR %g, P* %g", l, xr, scr, p))
				}
			}
		}
	}
	// What the comment of GridFollowingNameplate warns of.
	plate := followingPlate()
	plate.P = plateVA
	plate.PLLBandwidth = 20
	unstable(t, newRig(plateFollowing(t, plate)).scr(plateVolts, plateVA, 1.5, 10), "PLL of 20 Hz")
	plate = followingPlate()
	plate.P = plateVA
	plate.FeedForward = 1
	unstable(t, newRig(plateFollowing(t, plate)).scr(plateVolts, plateVA, 20, 10), "feed-forward of v_c")
}

// Islands of unlike inverters: forming ones of 2 kVA to 200 kVA beside one of
// 10 kVA share in proportion to the rating; a follower feeds a forming one.
func TestMixedIslandsStable(t *testing.T) {
	for _, va := range []float64{2e3, 50e3, 200e3} {
		plate := formingPlate()
		plate.Power = va
		p := plateForming(t, plate).Params()
		p.Filter.Rg += 0.32 * 0.02 // 20 m of cable
		p.Filter.Lg += 0.08 / RadPerSecond(50) * 0.02
		r := newRig(plateForming(t, formingPlate()), mustForming(t, p))
		r.load = 0.5 / BaseOhms(plateVolts, plateVA)
		stable(t, r, 5, fmt.Sprintf("%g VA beside %g VA", va, plateVA))
		if got, want := r.x[1][1]/r.x[0][1], va/plateVA; math.Abs(got/want-1) > 1e-9 {
			t.Errorf("%g VA beside %g VA: powers in the ratio %.9g, want %.9g", va, plateVA, got, want)
		}
	}
	for _, p := range []float64{0.2, 1} {
		for _, load := range []float64{0.1, 0.5, 1} {
			for _, l := range []bool{false, true} {
				plate := followingPlate()
				plate.P, plate.LFilter = p*plateVA, l
				r := newRig(plateForming(t, formingPlate()), plateFollowing(t, plate))
				r.load = load / BaseOhms(plateVolts, plateVA)
				stable(t, r, 5, fmt.Sprintf("follower at %g, L filter %v, load %g", p, l, load))
			}
		}
	}
}

// The three controls side by side, and each with a follower.
func TestMixedControlsStable(t *testing.T) {
	kinds := []ControlKind{DroopControl, VirtualMachineControl, OscillatorControl}
	for _, load := range []float64{0.05, 1, 2.5} {
		var all []inverter
		for k, kind := range kinds {
			plate := formingPlate()
			plate.Control = kind
			p := plateForming(t, plate).Params()
			p.Filter.Rg += 0.32 * 0.02 * float64(k) // cables of 0, 20 and 40 m
			p.Filter.Lg += 0.08 / RadPerSecond(50) * 0.02 * float64(k)
			all = append(all, mustForming(t, p))
		}
		r := newRig(all...)
		r.load = load / BaseOhms(plateVolts, plateVA)
		stable(t, r, 3, fmt.Sprintf("all three, load %g", load))
	}
	for _, kind := range kinds[1:] {
		plate, follower := formingPlate(), followingPlate()
		plate.Control, follower.P = kind, 0.5*plateVA
		r := newRig(plateForming(t, plate), plateFollowing(t, follower))
		r.load = 0.7 / BaseOhms(plateVolts, plateVA)
		stable(t, r, 3, fmt.Sprintf("%s with a follower", kind))
	}
}

// The fields of the nameplate reach the controls in the units of their formulas.
func TestNameplateControls(t *testing.T) {
	n := GridFormingNameplate{Power: 10e3, Voltage: 400, Frequency: 50, Control: VirtualMachineControl,
		FrequencyDroop: new(2.0), VoltageDroop: new(5.0), Inertia: new(3.0), VoltageDelay: new(0.1), PowerFilter: 20, Psi: new(45.0)}
	p, err := n.Params()
	if err != nil {
		t.Fatal(err)
	}
	// 2 %: 6.283 rad/s at 10 kW; 5 % of 326.6 V at 10 kvar
	want := VirtualMachine{H: 3, D: 1591.5494309, N: 1.6329931619e-3, Tv: 0.1, OmegaC: 125.66370614, Psi: math.Pi / 4}
	got := p.Primary.(VirtualMachine)
	for _, c := range [][2]float64{{got.H, want.H}, {got.D, want.D}, {got.N, want.N}, {got.Tv, want.Tv},
		{got.OmegaC, want.OmegaC}, {got.Psi, want.Psi}} {
		if math.Abs(c[0]/c[1]-1) > 1e-10 {
			t.Errorf("virtual machine %+v, want %+v", got, want)
		}
	}
	n.Damping = new(20.0) // rated power by nominal frequency
	if p, err = n.Params(); err != nil {
		t.Fatal(err)
	}
	if d := p.Primary.(VirtualMachine).D; math.Abs(d-20*10e3/(100*math.Pi)) > 1e-9 {
		t.Errorf("D = %g W s/rad", d)
	}

	// The limiting impedance and Z_v take up the rated voltage at the limit.
	n = formingPlate()
	n.LimitThreshold, n.LimitXR = new(1.1), new(3.0)
	if p, err = n.Params(); err != nil {
		t.Fatal(err)
	}
	z, _ := p.LimitImpedance.at(p.IMax)
	if drop := abs(z+complex(p.Rv, p.Xv)) * p.IMax; math.Abs(drop/p.V0-1) > 1e-12 {
		t.Errorf("limiting impedance drops %.12g per unit at the limit", drop/p.V0)
	}

	_, err = GridFormingNameplate{Power: 10e3, Voltage: 400, Frequency: 50, Control: "machine", Priority: "r first"}.Params()
	wantFaults(t, err, "Control = \"machine\"", "Priority = \"r first\"")
	_, err = GridFormingNameplate{Power: 10e3, Voltage: 400, Frequency: 50, Inertia: new(2.0), VoltageRange: new(5.0),
		LimitThreshold: new(2.0), PowerFilter: math.Inf(1)}.Params()
	wantFaults(t, err, "Inertia = 2: want nil", "VoltageRange = 5: want nil", "LimitThreshold = 2 per unit", "PowerFilter = +Inf")
	_, err = GridFormingNameplate{Power: 10e3, Voltage: 400, Frequency: 50, Control: OscillatorControl,
		PowerFilter: 5, FrequencyDroop: new(0.0)}.Params()
	wantFaults(t, err, "PowerFilter = 5 Hz: want 0", "FrequencyDroop = 0 %: want a value > 0")
	_, err = GridFormingNameplate{Power: 10e3, Voltage: 400, Frequency: 50, Control: VirtualMachineControl,
		FrequencyDroop: new(0.0), VoltageDelay: new(0.0)}.Params()
	wantFaults(t, err, "FrequencyDroop = 0 %", "VoltageDelay = 0 s without a PowerFilter")
}

func TestNameplateFaults(t *testing.T) {
	_, err := GridFormingNameplate{Power: -1, Voltage: 400, Frequency: math.NaN(), Psi: new(100.0)}.Params()
	wantFaults(t, err, "Power = -1 VA", "Frequency = NaN Hz", "Psi = 100 degrees: want 0 to 90")
	_, err = GridFollowingNameplate{Power: 1e3, Voltage: 0, Frequency: 50, PLLDamping: -2, LFilter: true, Priority: "none",
		Filter: FilterNameplate{CfPU: 0.1}}.Params()
	wantFaults(t, err, "Voltage = 0 V", "PLLDamping = -2", "Priority = \"none\"", "an L filter has neither")
}

func TestParamFaults(t *testing.T) {
	p := testForming()
	p.Kpc, p.IMax, p.Primary, p.Filter.Cf = 0, -3, Droop{M: 1e-4, OmegaC: 0}, math.Inf(1)
	_, err := NewGridForming(p)
	wantFaults(t, err, "Kpc = 0 V/A", "IMax = -3 A", "Droop.OmegaC = 0 rad/s", "Filter.Cf = +Inf F")
	p.Primary = nil
	_, err = NewGridForming(p)
	wantFaults(t, err, "Primary is missing")

	for _, w := range []float64{0, math.Inf(1)} {
		q := testFollowing()
		q.OmegaV, q.Kp = w, 0
		_, err = NewGridFollowing(q)
		wantFaults(t, err, "OmegaV", "two solutions or none", "Kp = 0")
	}
	p = testForming()
	p.Primary, p.Priority = VirtualMachine{H: 0, D: -1, OmegaC: math.Inf(1)}, "both"
	p.LimitImpedance = LimitImpedance{-1, math.NaN(), 0}
	_, err = NewGridForming(p)
	wantFaults(t, err, "VirtualMachine.H = 0 s", "VirtualMachine.D = -1 W s/rad", "at once", "Priority = \"both\"",
		"LimitImpedance.Threshold = -1 A", "LimitImpedance.Gain = NaN")
	p = testForming()
	p.Primary = Oscillator{Eta: 0, Alpha: math.Inf(1), Psi: 2}
	_, err = NewGridForming(p)
	wantFaults(t, err, "Oscillator.Eta = 0", "Oscillator.Alpha = +Inf", "Oscillator.Psi = 2 rad")
	p.Primary = OscillatorOfRange(10e3, 3, 0.4, 326, math.Pi/2) // sags below the knee
	_, err = NewGridForming(p)
	wantFaults(t, err, "Oscillator.Alpha = NaN")

	g := mustForming(t, testForming())
	if _, err := g.WithDetail("phase"); err == nil {
		t.Error("unknown detail accepted")
	}
	p = testForming()
	p.Kic = 0
	if _, err := mustForming(t, p).WithDetail(CurrentLoopGone); err == nil {
		t.Error("detail without the integrator that it takes accepted")
	}
	p.Primary = oscillatorOf(1)
	if err := mustForming(t, p).Set("voltage", 0, 10, 0); err == nil {
		t.Error("oscillator takes a voltage of 10 V")
	}
}
