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
	for _, ohm := range []float64{0.2, 0.32, 0.64} {
		for _, load := range []float64{0.02, 1, 1.8} {
			for _, m := range []float64{1, 2} {
				for _, v := range []float64{2, 5} {
					plate := formingPlate()
					plate.FrequencyDroop, plate.VoltageDroop = &m, &v
					stable(t, pair(plate, ohm, load), 5,
						fmt.Sprintf("%g ohm/km, load %g, droop %g %% and %g %%", ohm, load, m, v))
				}
			}
		}
	}
	// Resistive droop with a virtual resistance in place of the reactance.
	plate := formingPlate()
	plate.Psi = new(0.0)
	stable(t, pair(plate, 0.32, 1), 5, "resistive")

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

func TestNameplateFaults(t *testing.T) {
	_, err := GridFormingNameplate{Power: -1, Voltage: 400, Frequency: math.NaN(), Psi: new(100.0)}.Params()
	wantFaults(t, err, "Power = -1 VA", "Frequency = NaN Hz", "Psi = 100 degrees: want 0 to 90")
	_, err = GridFollowingNameplate{Power: 1e3, Voltage: 0, Frequency: 50, PLLDamping: -2, LFilter: true,
		Filter: FilterNameplate{CfPU: 0.1}}.Params()
	wantFaults(t, err, "Voltage = 0 V", "PLLDamping = -2", "an L filter has neither")
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
	g := mustForming(t, testForming())
	if _, err := g.WithDetail("phase"); err == nil {
		t.Error("unknown detail accepted")
	}
}
