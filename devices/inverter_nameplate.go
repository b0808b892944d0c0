package devices

import (
	"fmt"
	"math"
)

// FilterNameplate gives an inverter's filter per unit of its rating. Zero
// values stand for the defaults, which are common practice, without a source: a
// converter-side inductor of 10 %, a capacitor drawing 5 % of the rating in vars
// and a grid-side inductor of 5 % put the resonance at 24 times the nominal
// frequency, between the current loop and half the switching frequency.
type FilterNameplate struct {
	LfPU float64 // reactance of L_f; 0: 0.10, or 0.15 for an L filter
	CfPU float64 // susceptance of C_f; 0: 0.05
	LgPU float64 // reactance of L_g; 0: 0.05
	XR   float64 // X/R of both inductors; 0: 30; +Inf: no resistance
}

// withDefaults fills in the defaults.
func (f FilterNameplate) withDefaults() FilterNameplate {
	f.LfPU = orDefault(f.LfPU, 0.10)
	f.CfPU = orDefault(f.CfPU, 0.05)
	f.LgPU = orDefault(f.LgPU, 0.05)
	f.XR = orDefault(f.XR, 30)
	return f
}

// check notes the faults of a filter with its defaults filled in.
func (f FilterNameplate) check(to *faults) {
	// The bounds catch values in per cent or in SI units.
	to.within("Filter.LfPU", f.LfPU, 1e-3, 1, "per unit")
	to.within("Filter.CfPU", f.CfPU, 1e-4, 1, "per unit")
	to.within("Filter.LgPU", f.LgPU, 1e-4, 1, "per unit")
	checkLimit(to, "Filter.XR", f.XR, "")
}

// elements converts the filter to SI at base impedance zb, ohm, and nominal
// speed w, rad/s.
func (f FilterNameplate) elements(zb, w float64) LCL {
	return LCL{
		Lf: f.LfPU * zb / w,
		Rf: f.LfPU * zb / f.XR,
		Cf: f.CfPU / (zb * w),
		Lg: f.LgPU * zb / w,
		Rg: f.LgPU * zb / f.XR,
	}
}

// orDefault returns value, or fallback if value is 0.
func orDefault(value, fallback float64) float64 {
	if value == 0 {
		return fallback
	}
	return value
}

// pointed returns *value, or fallback if value is nil.
func pointed(value *float64, fallback float64) float64 {
	if value == nil {
		return fallback
	}
	return *value
}

// ControlKind names a primary control in a nameplate.
type ControlKind string

// Primary controls of a grid-forming inverter.
const (
	DroopControl          ControlKind = "droop"           // [Droop]
	VirtualMachineControl ControlKind = "virtual machine" // [VirtualMachine]
	OscillatorControl     ControlKind = "oscillator"      // [Oscillator]
)

// GridFormingNameplate describes a grid-forming inverter in trade units. Only
// Power, Voltage and Frequency are required; zero (nil for values that may well
// be zero) means the default. [GridFormingNameplate.Params] gives every symbol,
// each of which can be changed before the inverter is built:
//
//	p, err := GridFormingNameplate{Power: 10e3, Voltage: 400, Frequency: 50}.Params()
//	p.Kiv = 500
//
// Loops: K_pc = w_i L_f and K_ic = K_pc w_i/10 with w_i the current bandwidth;
// K_pv = w_v C_f and K_iv = K_pv w_v/4 with w_v the voltage bandwidth, each the
// gain that puts the loop's crossover there when the faster loops are ideal;
// K_aw = 1/K_pv. The voltage loop leaves 1 - F of the output current to its
// integrator; this makes an output impedance that must stay small beside the
// coupling, or inverters swing against each other, and F near 1 in turn
// destabilises the voltage loop on a stiff network. The defaults are a
// compromise found by eigenvalues.
//
// Range of the defaults (TestGridFormingDefaultsStable, one inverter of 10 kVA at
// 400 V with the droops below or twice the frequency droop, or 5 % voltage
// droop; ideal voltage behind R-L, X/R = 0.5, 3 and 10): stable for short-circuit
// ratios from 1 to 50 at P* = 0 and half the rating, from 1.5 to 50 at the rating,
// and from 2 (X/R = 0.5: 10) when it takes in the rating; below, the current
// limit or the network's capacity ends the operating range. Stable as well on its
// own with a resistive load of 1 % to 100 % of the rating, and two in parallel on a
// load over 20 m of cable of 0.2 to 0.64 ohm/km (TestParallelFormingStable). No
// computing delay is modelled. Bandwidths of the voltage loop under about 150 Hz are too slow
// for two inverters on short lines (same test). Mixed with others see
// TestMixedIslandsStable.
//
// While the current limit acts, power rises less with the angle, or falls, and
// droop has less or nothing to hold the angle by: with the source at half voltage
// the steady state is slow at a short-circuit ratio of 20 (X/R = 3) and unstable
// at 2 (TestLimitAngle); how long such a dip lasts then decides whether the
// inverter is in step afterwards.
//
// Recovery (TestRecovery): after 150 ms at a fifth of rated voltage, P* at half the
// rating, short-circuit ratios of 5 and 20 and X/R = 3, every control with every way
// of limiting (an impedance from 1.1 times the rated current) is back at its old
// angle within 0.01 rad and voltage within 3 % after 0.45 s; on the way |v_c| stays
// below 1.2 and the bridge's current below 1.65 per unit. At the rating this holds
// with the angle kept for the oscillator, and with d first, |v_c| up to 1.4 per unit,
// for droop and the virtual machine; with the angle kept droop slips a pole at a
// ratio of 20, and with q first at both. A limiting impedance of X/R = 5, which is found in the literature,
// makes these loops swing on against I_max after the dip (same test), and one with
// its threshold at the operating current comes back slowly.
//
// Control: droop, a virtual machine of D = 1/m without power filter and an oscillator
// by [OscillatorOfDroop] (or [OscillatorOfRange] with VoltageRange) are tuned alike
// by the same FrequencyDroop and VoltageDroop. The range of the defaults above was
// tested with all three, for the virtual machine with H from 0.2 to 5 s.
type GridFormingNameplate struct {
	Power     float64 // VA
	Voltage   float64 // V, line-line rms
	Frequency float64 // Hz

	P, Q float64 // setpoints P*, Q*, W and var generated

	Control        ControlKind // primary control; "": droop
	FrequencyDroop *float64    // %, of nominal frequency at rated power; nil: 1
	VoltageDroop   *float64    // %, of rated voltage at rated power; nil: 2
	Psi            *float64    // angle by which the power pair is turned, degrees, 90 inductive, 0 resistive; nil: 90
	PowerFilter    float64     // corner of the power filter, Hz; 0: 5, and none (+Inf) with a virtual machine, which alone takes +Inf; an oscillator has none

	// Of a virtual machine alone: inertia constant H, s, nil: 2; damping D in rated
	// power by nominal frequency, nil: that of FrequencyDroop, 100/FrequencyDroop;
	// time constant T_v of the voltage, s, nil: 0.05.
	Inertia, Damping, VoltageDelay *float64

	// VoltageRange, of an oscillator alone, is by how many % the voltage falls at
	// rated vars exactly; nil: VoltageDroop, the slope at rated voltage.
	VoltageRange *float64

	// VirtualImpedance is |Z_v| per unit, at the angle Psi; nil: 0.10. It is the
	// coupling that short low-voltage lines lack.
	VirtualImpedance *float64

	CurrentLimit float64       // I_max per unit of rated current; 0: 1.5; +Inf: none
	Priority     LimitPriority // of the current limit; "": angle kept

	// LimitThreshold is the current, per unit of the rated one, from which a limiting
	// impedance acts, sized to draw CurrentLimit at a short circuit of the filter
	// capacitor; nil: no limiting impedance. LimitXR is its X/R; nil: 2.
	LimitThreshold, LimitXR *float64

	SwitchingFrequency float64  // Hz; 0: 10,000; used for the current bandwidth alone
	CurrentBandwidth   float64  // Hz; 0: a tenth of SwitchingFrequency
	VoltageBandwidth   float64  // Hz; 0: 250, but no more than half of CurrentBandwidth
	FeedForward        *float64 // F; nil: 0.9

	Filter FilterNameplate
}

// Params returns the explicit parameters, or all faults joined.
func (n GridFormingNameplate) Params() (GridFormingParams, error) {
	f := &faults{device: "grid-forming inverter nameplate"}
	rated := f.positive("Power", n.Power, "VA")
	f.positive("Voltage", n.Voltage, "V")
	f.positive("Frequency", n.Frequency, "Hz")
	if rated {
		f.within("P", n.P, -setpointReach*n.Power, setpointReach*n.Power, "W")
		f.within("Q", n.Q, -setpointReach*n.Power, setpointReach*n.Power, "var")
	}
	primary := n.control(f)
	psi := pointed(n.Psi, 90)
	f.within("Psi", psi, 0, 90, "degrees")
	zv := pointed(n.VirtualImpedance, 0.10)
	f.within("VirtualImpedance", zv, 0, 1, "per unit")
	limit := orDefault(n.CurrentLimit, 1.5)
	checkLimit(f, "CurrentLimit", limit, "per unit")
	n.Priority.check(f)
	n.checkLimitImpedance(f, limit)
	fs := orDefault(n.SwitchingFrequency, 10e3)
	f.positive("SwitchingFrequency", fs, "Hz")
	fi := orDefault(n.CurrentBandwidth, fs/10)
	f.positive("CurrentBandwidth", fi, "Hz")
	fv := orDefault(n.VoltageBandwidth, min(250, fi/2))
	f.positive("VoltageBandwidth", fv, "Hz")
	ff := pointed(n.FeedForward, 0.9)
	f.within("FeedForward", ff, 0, 1, "")
	filter := n.Filter.withDefaults()
	filter.check(f)
	if err := f.err(); err != nil {
		return GridFormingParams{}, err
	}

	var (
		zb     = BaseOhms(n.Voltage, n.Power)
		w      = RadPerSecond(n.Frequency)
		lcl    = filter.elements(zb, w)
		wi, wv = RadPerSecond(fi), RadPerSecond(fv)
		kpc    = wi * lcl.Lf
		kpv    = wv * lcl.Cf
		angle  = psi * math.Pi / 180
		p      = GridFormingParams{
			Rating:   n.Power,
			Omega0:   w,
			V0:       PeakVolts(n.Voltage),
			P:        n.P,
			Q:        n.Q,
			Primary:  primary(angle),
			Kpv:      kpv,
			Kiv:      kpv * wv / 4,
			F:        ff,
			Kaw:      1 / kpv,
			Kpc:      kpc,
			Kic:      kpc * wi / 10,
			IMax:     limit * PeakAmperes(RatedAmperes(n.Power, n.Voltage)),
			Priority: n.Priority,
			Filter:   lcl,
		}
	)
	s, c := math.Sincos(angle)
	if psi == 90 {
		c = 0
	}
	p.Rv, p.Xv = zv*zb*c, zv*zb*s
	if n.LimitThreshold != nil {
		p.LimitImpedance = limitImpedance(complex(p.Rv, p.Xv), p.V0,
			*n.LimitThreshold*PeakAmperes(RatedAmperes(n.Power, n.Voltage)), p.IMax, pointed(n.LimitXR, limitXR))
	}
	return p, nil
}

// control checks the fields of the primary control and returns what makes it of a
// checked nameplate with psi in rad.
func (n *GridFormingNameplate) control(f *faults) func(psi float64) PrimaryControl {
	var (
		m, v = pointed(n.FrequencyDroop, 1), pointed(n.VoltageDroop, 2)
		fp   = n.PowerFilter
		kind = n.Control
		wr   = RadPerSecond(n.Frequency) / n.Power // rad/s per W, nominal by rated
		vr   = PeakVolts(n.Voltage) / n.Power      // V per var, rated by rated
	)
	f.within("FrequencyDroop", m, 0, 20, "%")
	f.within("VoltageDroop", v, 0, 50, "%")
	only := func(name string, value *float64, owner ControlKind) {
		if value != nil && kind != owner {
			f.add("%s = %v: want nil, only a control of kind %q has it", name, *value, owner)
		}
	}
	only("Inertia", n.Inertia, VirtualMachineControl)
	only("Damping", n.Damping, VirtualMachineControl)
	only("VoltageDelay", n.VoltageDelay, VirtualMachineControl)
	only("VoltageRange", n.VoltageRange, OscillatorControl)
	switch kind {
	case "", DroopControl:
		fp = orDefault(fp, 5)
		f.positive("PowerFilter", fp, "Hz")
		return func(psi float64) PrimaryControl {
			return Droop{M: m / 100 * wr, N: v / 100 * vr, OmegaC: RadPerSecond(fp), Psi: psi}
		}
	case VirtualMachineControl:
		fp = orDefault(fp, math.Inf(1))
		checkLimit(f, "PowerFilter", fp, "Hz")
		h, tv := pointed(n.Inertia, 2), pointed(n.VoltageDelay, 0.05)
		f.within("Inertia", h, 1e-3, 100, "s")
		f.within("VoltageDelay", tv, 0, 100, "s")
		if tv == 0 && math.IsInf(fp, 1) {
			f.add("VoltageDelay = 0 s without a PowerFilter: want one of them")
		}
		d := 100 / m
		switch {
		case n.Damping != nil:
			d = *n.Damping
			f.within("Damping", d, 0, 1e6, "per unit")
		case m == 0:
			f.add("FrequencyDroop = 0 %%: want a value > 0, or Damping given")
		}
		return func(psi float64) PrimaryControl {
			return VirtualMachine{H: h, D: d / wr, N: v / 100 * vr, Tv: tv, OmegaC: RadPerSecond(fp), Psi: psi}
		}
	case OscillatorControl:
		f.check(m > 0, "FrequencyDroop", m, "%", "a value > 0 of an oscillator")
		f.check(fp == 0, "PowerFilter", fp, "Hz", "0, an oscillator has none")
		if n.VoltageRange != nil {
			f.within("VoltageRange", *n.VoltageRange, 0.01, 29, "%")
			return func(psi float64) PrimaryControl {
				return OscillatorOfRange(n.Power, m/100*RadPerSecond(n.Frequency), *n.VoltageRange/100, PeakVolts(n.Voltage), psi)
			}
		}
		f.check(v > 0, "VoltageDroop", v, "%", "a value > 0 of an oscillator")
		return func(psi float64) PrimaryControl {
			return OscillatorOfDroop(m/100*wr, v/100*vr, PeakVolts(n.Voltage), psi)
		}
	}
	f.add("Control = %q: want %q, %q or %q", string(kind), DroopControl, VirtualMachineControl, OscillatorControl)
	return nil
}

// limitXR is the default X/R of a limiting impedance.
const limitXR = 2

// checkLimitImpedance notes the faults of the limiting impedance, limit being the
// current limit per unit.
func (n *GridFormingNameplate) checkLimitImpedance(f *faults, limit float64) {
	if n.LimitThreshold == nil {
		if n.LimitXR != nil {
			f.add("LimitXR = %v: want nil without LimitThreshold", *n.LimitXR)
		}
		return
	}
	f.check(*n.LimitThreshold >= 0 && *n.LimitThreshold < limit, "LimitThreshold", *n.LimitThreshold, "per unit",
		fmt.Sprintf("a value >= 0 and < CurrentLimit, %v", limit))
	f.within("LimitXR", pointed(n.LimitXR, limitXR), 0, 100, "")
	f.check(!math.IsInf(limit, 1), "CurrentLimit", limit, "per unit", "a finite value with LimitThreshold")
}

// limitImpedance returns the limiting impedance that together with the virtual
// impedance zv takes up the voltage v at current limit; none if zv does so alone.
func limitImpedance(zv complex128, v, threshold, limit, xr float64) LimitImpedance {
	// |zv + r (1 + j X/R)| = v/limit
	c := complex(1, xr)
	a, b, d := dot(c, c), dot(zv, c), dot(zv, zv)-v*v/(limit*limit)
	r := (math.Sqrt(max(b*b-a*d, 0)) - b) / a
	return LimitImpedance{Threshold: threshold, Gain: max(r, 0) / (limit - threshold), XR: xr}
}

// GridFollowingNameplate describes a grid-following inverter in trade units.
// Only Power, Voltage and Frequency are required; zero (nil for values that may
// well be zero) means the default. [GridFollowingNameplate.Params] gives every
// symbol, each of which can be changed before the inverter is built.
//
// PLL: K_p = 2 zeta w_n, K_i = w_n^2 with w_n = 2 pi PLLBandwidth. A phase jump is
// tracked to 1 % in about 4.6/(zeta w_n) (R. Teodorescu, M. Liserre, P. Rodriguez,
// Grid Converters for Photovoltaic and Wind Power Systems, Wiley 2011, from
// memory), 0.1 s at 10 Hz and 0.707. A wider PLL follows faster, and lets more of
// the voltage its own current causes into its angle: on a weak connection the
// loop gain K_p L_g I_d, with L_g all inductance up to the stiff voltage, must stay
// well below |v|. A narrower one sees a phase jump as power for longer.
//
// Range of the defaults (TestGridFollowingDefaultsStable, 10 kVA at 400 V, ideal
// voltage behind R-L, X/R = 0.5, 3 and 10, LCL and L filter): stable for
// short-circuit ratios from 1.5 to 50 at any of P* = -1, 0, 0.5 and 1 times the
// rating, in part with the current limit acting because the voltage is low. With
// an LCL filter a PLL bandwidth of 20 Hz is unstable at a ratio of 1.5, X/R = 10
// and rated P* (same test). Feed-forward of v_c (K_ff = 1, unfiltered) destabilises
// the LCL filter's resonance; the default is none.
type GridFollowingNameplate struct {
	Power     float64 // VA
	Voltage   float64 // V, line-line rms
	Frequency float64 // Hz

	P, Q float64 // setpoints P*, Q*, W and var generated

	PLLBandwidth   float64 // natural frequency w_n/(2 pi) of the PLL, Hz; 0: 10
	PLLDamping     float64 // zeta of the PLL; 0: 1/sqrt(2)
	FixedAmplitude bool    // see [GridFollowingParams]
	SpeedLimit     float64 // largest deviation of the PLL's frequency, Hz; 0: 5; +Inf: none

	VoltageFilter float64 // corner of the filter of v_md, Hz; 0: 50
	VoltageFloor  float64 // least voltage in a denominator, per unit; 0: 0.2

	CurrentLimit float64       // per unit of rated current; 0: 1.2; +Inf: none
	Priority     LimitPriority // of the current limit, d being active; "": angle kept

	SwitchingFrequency float64 // Hz; 0: 10,000; used for the current bandwidth alone
	CurrentBandwidth   float64 // Hz; 0: a tenth of SwitchingFrequency
	FeedForward        float64 // K_ff; 0: none

	OmitCapacitor bool // see [GridFollowingParams]
	LFilter       bool // L_f alone, no capacitor and grid side
	Filter        FilterNameplate
}

// Params returns the explicit parameters, or all faults joined.
func (n GridFollowingNameplate) Params() (GridFollowingParams, error) {
	f := &faults{device: "grid-following inverter nameplate"}
	rated := f.positive("Power", n.Power, "VA")
	f.positive("Voltage", n.Voltage, "V")
	f.positive("Frequency", n.Frequency, "Hz")
	if rated {
		f.within("P", n.P, -setpointReach*n.Power, setpointReach*n.Power, "W")
		f.within("Q", n.Q, -setpointReach*n.Power, setpointReach*n.Power, "var")
	}
	fn := orDefault(n.PLLBandwidth, 10)
	f.positive("PLLBandwidth", fn, "Hz")
	zeta := orDefault(n.PLLDamping, math.Sqrt2/2)
	f.positive("PLLDamping", zeta, "")
	swing := orDefault(n.SpeedLimit, 5)
	checkLimit(f, "SpeedLimit", swing, "Hz")
	fv := orDefault(n.VoltageFilter, 50)
	f.positive("VoltageFilter", fv, "Hz")
	floor := orDefault(n.VoltageFloor, 0.2)
	f.check(floor > 0 && floor < 1, "VoltageFloor", floor, "per unit", "a value > 0 and < 1")
	limit := orDefault(n.CurrentLimit, 1.2)
	checkLimit(f, "CurrentLimit", limit, "per unit")
	n.Priority.check(f)
	fs := orDefault(n.SwitchingFrequency, 10e3)
	f.positive("SwitchingFrequency", fs, "Hz")
	fi := orDefault(n.CurrentBandwidth, fs/10)
	f.positive("CurrentBandwidth", fi, "Hz")
	f.within("FeedForward", n.FeedForward, 0, 1, "")
	plate := n.Filter
	if n.LFilter {
		if plate.CfPU != 0 || plate.LgPU != 0 {
			f.add("Filter.CfPU = %v and Filter.LgPU = %v: want 0, an L filter has neither", plate.CfPU, plate.LgPU)
		}
		plate.LfPU = orDefault(plate.LfPU, 0.15)
	}
	plate = plate.withDefaults()
	plate.check(f)
	if err := f.err(); err != nil {
		return GridFollowingParams{}, err
	}

	zb := BaseOhms(n.Voltage, n.Power)
	w := RadPerSecond(n.Frequency)
	filter := plate.elements(zb, w)
	if n.LFilter {
		filter.Cf, filter.Lg, filter.Rg = 0, 0, 0
	}
	wn, wi := RadPerSecond(fn), RadPerSecond(fi)
	kpc := wi * filter.Lf
	return GridFollowingParams{
		Rating:         n.Power,
		Omega0:         w,
		V0:             PeakVolts(n.Voltage),
		P:              n.P,
		Q:              n.Q,
		Kp:             2 * zeta * wn,
		Ki:             wn * wn,
		FixedAmplitude: n.FixedAmplitude,
		SpeedLimit:     RadPerSecond(swing),
		OmegaV:         RadPerSecond(fv),
		VFloor:         floor * PeakVolts(n.Voltage),
		OmitCapacitor:  n.OmitCapacitor,
		Kpc:            kpc,
		Kic:            kpc * wi / 10,
		Kff:            n.FeedForward,
		IMax:           limit * PeakAmperes(RatedAmperes(n.Power, n.Voltage)),
		Priority:       n.Priority,
		Filter:         filter,
	}, nil
}
