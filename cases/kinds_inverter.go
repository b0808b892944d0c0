package cases

import (
	"errors"
	"fmt"
	"math"
	"strings"

	"islet/devices"
	"islet/engine"
)

// filterPlate reads the filter common to both inverters. at finds its place in
// a T.
func filterPlate[T any](at func(*T) *devices.FilterNameplate, lfDefault string) []field[T] {
	return []field[T]{
		num("Lf_percent", "%", lfDefault, 0.1, 100, func(d *T, x float64) { at(d).LfPU = x }, "reactance of L_f, of the rated impedance").in(1e-2),
		num("Cf_percent", "%", "5", 0.01, 100, func(d *T, x float64) { at(d).CfPU = x }, "susceptance of C_f, of the rated admittance").in(1e-2),
		num("Lg_percent", "%", "5", 0.01, 100, func(d *T, x float64) { at(d).LgPU = x }, "reactance of L_g, of the rated impedance").in(1e-2),
		above("x_over_r", "1", "30", 0, 1e4, func(d *T, x float64) { at(d).XR = x }, "X/R of both inductors").orInf(),
	}
}

// explicit lists the SI keys that replace a symbol of P in a draft T, which
// keeps the replacements for later.
type explicit[P any] struct{ set []func(*P) }

func symbol[T, P any](later func(*T) *explicit[P], name, unit, def string, min, max float64, open bool, at func(*P) *float64, doc string) field[T] {
	f := num(name, unit, def, min, max, func(d *T, x float64) {
		e := later(d)
		e.set = append(e.set, func(p *P) { *at(p) = x })
	}, doc)
	f.open = open
	return f
}

const fromPlate = "from the nameplate"

// grid-forming inverters

type formingDraft struct {
	plate    devices.GridFormingNameplate
	volts    float64 // of the setpoint, per unit of rated; 0: 1
	hertz    float64 // of the setpoint
	explicit explicit[formingSymbols]
	ownSpeed bool
}

// formingSymbols are the parameters with those of the primary control within
// reach.
type formingSymbols struct {
	devices.GridFormingParams
	m, n, omegaC, psi, h, d, tv, eta, alpha float64
}

// unpack takes the primary control apart.
func (s *formingSymbols) unpack() {
	switch c := s.Primary.(type) {
	case devices.Droop:
		s.m, s.n, s.omegaC, s.psi = c.M, c.N, c.OmegaC, c.Psi
	case devices.VirtualMachine:
		s.h, s.d, s.n, s.tv, s.omegaC, s.psi = c.H, c.D, c.N, c.Tv, c.OmegaC, c.Psi
	case devices.Oscillator:
		s.eta, s.alpha, s.psi = c.Eta, c.Alpha, c.Psi
	}
}

// pack puts it together again.
func (s *formingSymbols) pack() devices.GridFormingParams {
	p := s.GridFormingParams
	switch p.Primary.(type) {
	case devices.Droop:
		p.Primary = devices.Droop{M: s.m, N: s.n, OmegaC: s.omegaC, Psi: s.psi}
	case devices.VirtualMachine:
		p.Primary = devices.VirtualMachine{H: s.h, D: s.d, N: s.n, Tv: s.tv, OmegaC: s.omegaC, Psi: s.psi}
	case devices.Oscillator:
		p.Primary = devices.Oscillator{Eta: s.eta, Alpha: s.alpha, Psi: s.psi}
	}
	return p
}

// controlKeys are the keys that belong to some primary controls alone.
var controlKeys = []struct {
	key      string
	controls []devices.ControlKind
}{
	{"power_filter_Hz", []devices.ControlKind{devices.DroopControl, devices.VirtualMachineControl}},
	{"inertia_s", []devices.ControlKind{devices.VirtualMachineControl}},
	{"damping", []devices.ControlKind{devices.VirtualMachineControl}},
	{"voltage_delay_ms", []devices.ControlKind{devices.VirtualMachineControl}},
	{"voltage_range_percent", []devices.ControlKind{devices.OscillatorControl}},
	{"m", []devices.ControlKind{devices.DroopControl}},
	{"n", []devices.ControlKind{devices.DroopControl, devices.VirtualMachineControl}},
	{"w_c", []devices.ControlKind{devices.DroopControl, devices.VirtualMachineControl}},
	{"H", []devices.ControlKind{devices.VirtualMachineControl}},
	{"D", []devices.ControlKind{devices.VirtualMachineControl}},
	{"T_v", []devices.ControlKind{devices.VirtualMachineControl}},
	{"eta", []devices.ControlKind{devices.OscillatorControl}},
	{"alpha", []devices.ControlKind{devices.OscillatorControl}},
}

// checkControl finds keys of another primary control.
func checkControl(s *site, control devices.ControlKind) error {
	if control == "" {
		control = devices.DroopControl
	}
	var errs []error
	for _, k := range controlKeys {
		if !s.given[k.key] {
			continue
		}
		fits := false
		var names []string
		for _, c := range k.controls {
			fits = fits || c == control
			names = append(names, fmt.Sprintf("%q", c))
		}
		if !fits {
			errs = append(errs, at(k.key, "goes with control = %s only", strings.Join(names, " or ")))
		}
	}
	return errors.Join(errs...)
}

// priority is the key of the current limit's priority.
func priority[T any](set func(*T, devices.LimitPriority)) field[T] {
	f := word("limit_priority", string(devices.AngleKept), func(d *T, s string) {
		if p := devices.LimitPriority(s); p != devices.AngleKept { // "" stands for it
			set(d, p)
		}
	}, "which part of the current gives way to the limit")
	f.choices = []string{string(devices.AngleKept), string(devices.DFirst), string(devices.QFirst)}
	return f
}

func formingKind() *kind {
	type T = formingDraft
	type P = formingSymbols
	si := func(name, unit string, min, max float64, open bool, at func(*P) *float64, doc string) field[T] {
		return symbol(func(d *T) *explicit[P] { return &d.explicit }, name, unit, fromPlate, min, max, open, at, doc)
	}
	control := word("control", string(devices.DroopControl), func(d *T, s string) { d.plate.Control = devices.ControlKind(s) }, "primary control")
	control.choices = []string{string(devices.DroopControl), string(devices.VirtualMachineControl), string(devices.OscillatorControl)}
	fields := []field[T]{
		above("power_kVA", "kVA", "required", 0, 1e7, func(d *T, x float64) { d.plate.Power = x }, "rating").in(1e3),
		above("voltage_kV", "kV line-line rms", "that of the bus", 0, 2000, func(d *T, x float64) { d.plate.Voltage = x }, "rated voltage").in(1e3),
		control,
		num("p_kW", "kW generated", "0", -2e7, 2e7, func(d *T, x float64) { d.plate.P = x }, "P*, first value of setpoint p").in(1e3),
		num("q_kvar", "kvar generated", "0", -2e7, 2e7, func(d *T, x float64) { d.plate.Q = x }, "Q*, first value of setpoint q").in(1e3),
		num("voltage_setpoint_percent", "%", "100", 10, 140, func(d *T, x float64) { d.volts = x }, "V_0 of rated voltage, first value of setpoint voltage").in(1e-2),
		num("frequency_setpoint_Hz", "Hz", "that of the study", 1, 1200, func(d *T, x float64) { d.hertz = x }, "omega_0 of the droop as a frequency, first value of setpoint frequency"),
		num("frequency_droop_percent", "%", "1", 0, 20, func(d *T, x float64) { d.plate.FrequencyDroop = &x }, "change of frequency from no load to rated power"),
		num("voltage_droop_percent", "%", "2", 0, 50, func(d *T, x float64) { d.plate.VoltageDroop = &x }, "change of voltage from no load to rated reactive power"),
		num("psi_deg", "degrees", "90", 0, 90, func(d *T, x float64) { d.plate.Psi = &x }, "angle by which the power pair is turned: 90 inductive, 0 resistive networks"),
		above("power_filter_Hz", "Hz", "5; none with a virtual machine", 0, 1e4, func(d *T, x float64) { d.plate.PowerFilter = x }, "droop, virtual machine: corner of the power filter").orInf(),
		num("inertia_s", "s", "2", 1e-3, 100, func(d *T, x float64) { d.plate.Inertia = &x }, "virtual machine: inertia constant H"),
		num("damping", "per unit", "that of the frequency droop", 0, 1e6, func(d *T, x float64) { d.plate.Damping = &x }, "virtual machine: damping D, rated power by nominal frequency"),
		num("voltage_delay_ms", "ms", "50", 0, 1e5, func(d *T, x float64) { d.plate.VoltageDelay = &x }, "virtual machine: time constant T_v of the voltage").in(1e-3),
		num("voltage_range_percent", "%", "", 0.01, 29, func(d *T, x float64) { d.plate.VoltageRange = &x }, "oscillator: exact fall of voltage at rated vars, instead of voltage_droop_percent, the slope at rated voltage"),
		num("virtual_impedance_percent", "%", "10", 0, 100, func(d *T, x float64) { x /= 100; d.plate.VirtualImpedance = &x }, "|Z_v| of the rated impedance, at the angle psi"),
		above("current_limit_percent", "%", "150", 0, 1e4, func(d *T, x float64) { d.plate.CurrentLimit = x }, "largest current of the bridge, of rated").in(1e-2).orInf(),
		priority(func(d *T, p devices.LimitPriority) { d.plate.Priority = p }),
		num("limit_threshold_percent", "%", "none", 0, 1e4, func(d *T, x float64) { x /= 100; d.plate.LimitThreshold = &x }, "current, of rated, from which a limiting virtual impedance acts"),
		num("limit_x_over_r", "1", "2", 0, 100, func(d *T, x float64) { d.plate.LimitXR = &x }, "X/R of the limiting impedance"),
		above("switching_frequency_Hz", "Hz", "10000", 0, 1e7, func(d *T, x float64) { d.plate.SwitchingFrequency = x }, "used for the current bandwidth alone"),
		above("current_bandwidth_Hz", "Hz", "a tenth of the switching frequency", 0, 1e6, func(d *T, x float64) { d.plate.CurrentBandwidth = x }, "of the current loop"),
		above("voltage_bandwidth_Hz", "Hz", "250, but no more than half the current bandwidth", 0, 1e6, func(d *T, x float64) { d.plate.VoltageBandwidth = x }, "of the voltage loop"),
	}
	fields = append(fields, filterPlate(func(d *T) *devices.FilterNameplate { return &d.plate.Filter }, "10")...)
	fields = append(fields,
		num("F", "1", "0.9", 0, 1, func(d *T, x float64) { d.plate.FeedForward = &x }, "F, feed-forward of i_g to the current reference"),
		si("V_0", "V peak phase", 0, 2e6, true, func(p *P) *float64 { return &p.V0 }, "V_0"),
		si("w_0", "rad/s", 0, 1e4, true, func(p *P) *float64 { return &p.Omega0 }, "omega_0, of the droop and of the decoupling terms"),
		si("m", "rad/s/W", 0, 1e3, false, func(p *P) *float64 { return &p.m }, "m of the droop"),
		si("n", "V peak phase/var", 0, 1e3, false, func(p *P) *float64 { return &p.n }, "n of droop or virtual machine"),
		si("w_c", "rad/s", 0, 1e5, true, func(p *P) *float64 { return &p.omegaC }, "omega_c, corner of the power filter").orInf(),
		si("psi", "rad", 0, math.Pi/2, false, func(p *P) *float64 { return &p.psi }, "psi of the primary control"),
		si("H", "s", 0, 1e3, true, func(p *P) *float64 { return &p.h }, "H of the virtual machine"),
		si("D", "W s/rad", 0, 1e12, false, func(p *P) *float64 { return &p.d }, "D of the virtual machine"),
		si("T_v", "s", 0, 1e3, false, func(p *P) *float64 { return &p.tv }, "T_v of the virtual machine"),
		si("eta", "ohm rad/s", 0, 1e12, true, func(p *P) *float64 { return &p.eta }, "eta of the oscillator"),
		si("alpha", "S", 0, 1e12, true, func(p *P) *float64 { return &p.alpha }, "alpha of the oscillator"),
		si("Rv_ohm", "ohm", 0, maxOhm, false, func(p *P) *float64 { return &p.Rv }, "R_v of the virtual impedance"),
		si("Xv_ohm", "ohm", -maxOhm, maxOhm, false, func(p *P) *float64 { return &p.Xv }, "X_v of the virtual impedance"),
		si("Kpv", "A/V", 0, 1e9, false, func(p *P) *float64 { return &p.Kpv }, "K_pv of the voltage loop"),
		si("Kiv", "A/(V s)", 0, 1e12, false, func(p *P) *float64 { return &p.Kiv }, "K_iv of the voltage loop"),
		si("Kpc", "V/A", 0, 1e9, true, func(p *P) *float64 { return &p.Kpc }, "K_pc of the current loop"),
		si("Kic", "V/(A s)", 0, 1e12, false, func(p *P) *float64 { return &p.Kic }, "K_ic of the current loop"),
		si("Kaw", "V/A", 0, 1e9, false, func(p *P) *float64 { return &p.Kaw }, "K_aw, anti-windup of the voltage loop; 1/K_pv if not given"),
		si("I_max_A", "A peak", 0, 1e7, true, func(p *P) *float64 { return &p.IMax }, "I_max, largest current reference").orInf(),
		si("limit_I_t_A", "A peak", 0, 1e7, false, func(p *P) *float64 { return &p.LimitImpedance.Threshold }, "I_t of the limiting impedance"),
		si("limit_k", "ohm/A", 0, 1e6, false, func(p *P) *float64 { return &p.LimitImpedance.Gain }, "k of the limiting impedance; 0 for none"),
		si("limit_XR", "1", 0, 1e4, false, func(p *P) *float64 { return &p.LimitImpedance.XR }, "X/R of the limiting impedance"),
		si("Lf_H", "H", 0, maxHenry, true, func(p *P) *float64 { return &p.Filter.Lf }, "L_f; gains not given follow it"),
		si("Rf_ohm", "ohm", 0, maxOhm, false, func(p *P) *float64 { return &p.Filter.Rf }, "R_f"),
		si("Cf_F", "F", 0, maxFarad, true, func(p *P) *float64 { return &p.Filter.Cf }, "C_f; gains not given follow it"),
		si("Lg_H", "H", 0, maxHenry, true, func(p *P) *float64 { return &p.Filter.Lg }, "L_g"),
		si("Rg_ohm", "ohm", 0, maxOhm, false, func(p *P) *float64 { return &p.Filter.Rg }, "R_g"),
		yes("own_speed", func(d *T, b bool) { d.ownSpeed = b }, "the own speed instead of omega_0 in the decoupling terms"),
	)
	return makeKind("grid-forming inverter",
		"An inverter with LCL filter that holds voltage and frequency, by droop, as a virtual machine or as an oscillator. A nameplate is enough; symbols in SI replace what follows from it. Setpoints: p, q, voltage, frequency.",
		shunt, false, fields)
}

func (d *formingDraft) rating(*site) float64 { return d.plate.Power }

func (d *formingDraft) build(s *site) (engine.Device, error) {
	plate := d.plate
	v, err := s.rated(plate.Voltage)
	if err != nil {
		return nil, err
	}
	if err := checkControl(s, plate.Control); err != nil {
		return nil, err
	}
	plate.Voltage, plate.Frequency = v, s.hertz
	p, err := plate.Params()
	if err != nil {
		return nil, err
	}
	if d.volts > 0 {
		p.V0 *= d.volts
	}
	if d.hertz > 0 {
		p.Omega0 = devices.RadPerSecond(d.hertz)
	}
	sym := formingSymbols{GridFormingParams: p}
	sym.unpack()
	plain := p.Filter
	for _, set := range d.explicit.set {
		set(&sym)
	}
	// Gains that aren't given follow the filter that is: K_pc and K_ic go
	// with L_f, K_pv and K_iv with C_f (see devices.GridFormingNameplate).
	follow(s, "Kpc", &sym.Kpc, sym.Filter.Lf/plain.Lf)
	follow(s, "Kic", &sym.Kic, sym.Filter.Lf/plain.Lf)
	follow(s, "Kpv", &sym.Kpv, sym.Filter.Cf/plain.Cf)
	follow(s, "Kiv", &sym.Kiv, sym.Filter.Cf/plain.Cf)
	if !s.given["Kaw"] && sym.Kpv > 0 {
		sym.Kaw = 1 / sym.Kpv
	}
	p = sym.pack()
	p.OwnSpeed = d.ownSpeed
	return device(devices.NewGridForming(p))
}

// follow scales a gain unless it was given.
func follow(s *site, name string, gain *float64, by float64) {
	if !s.given[name] && by != 1 {
		*gain *= by
	}
}

// grid-following inverters

type followingDraft struct {
	plate    devices.GridFollowingNameplate
	explicit explicit[devices.GridFollowingParams]
}

func followingKind() *kind {
	type T = followingDraft
	type P = devices.GridFollowingParams
	si := func(name, unit string, min, max float64, open bool, at func(*P) *float64, doc string) field[T] {
		return symbol(func(d *T) *explicit[P] { return &d.explicit }, name, unit, fromPlate, min, max, open, at, doc)
	}
	fields := []field[T]{
		above("power_kVA", "kVA", "required", 0, 1e7, func(d *T, x float64) { d.plate.Power = x }, "rating").in(1e3),
		above("voltage_kV", "kV line-line rms", "that of the bus", 0, 2000, func(d *T, x float64) { d.plate.Voltage = x }, "rated voltage").in(1e3),
		num("p_kW", "kW generated", "0", -2e7, 2e7, func(d *T, x float64) { d.plate.P = x }, "P*, first value of setpoint p; a charger's is negative").in(1e3),
		num("q_kvar", "kvar generated", "0", -2e7, 2e7, func(d *T, x float64) { d.plate.Q = x }, "Q*, first value of setpoint q").in(1e3),
		above("pll_bandwidth_Hz", "Hz", "10", 0, 1e4, func(d *T, x float64) { d.plate.PLLBandwidth = x }, "natural frequency of the PLL"),
		above("pll_damping", "1", "0.7071067811865476", 0, 10, func(d *T, x float64) { d.plate.PLLDamping = x }, "zeta of the PLL"),
		above("speed_limit_Hz", "Hz", "5", 0, 1e3, func(d *T, x float64) { d.plate.SpeedLimit = x }, "largest deviation of the PLL's frequency").orInf(),
		yes("fixed_amplitude", func(d *T, b bool) { d.plate.FixedAmplitude = b }, "the PLL's input relative to rated voltage instead of to the measured one"),
		above("voltage_filter_Hz", "Hz", "50", 0, 1e5, func(d *T, x float64) { d.plate.VoltageFilter = x }, "corner of the filter of v_md"),
		num("voltage_floor_percent", "%", "20", 0.1, 99, func(d *T, x float64) { d.plate.VoltageFloor = x }, "least voltage in a denominator, of rated").in(1e-2),
		above("current_limit_percent", "%", "120", 0, 1e4, func(d *T, x float64) { d.plate.CurrentLimit = x }, "largest current of the bridge, of rated").in(1e-2).orInf(),
		priority(func(d *T, p devices.LimitPriority) { d.plate.Priority = p }),
		above("switching_frequency_Hz", "Hz", "10000", 0, 1e7, func(d *T, x float64) { d.plate.SwitchingFrequency = x }, "used for the current bandwidth alone"),
		above("current_bandwidth_Hz", "Hz", "a tenth of the switching frequency", 0, 1e6, func(d *T, x float64) { d.plate.CurrentBandwidth = x }, "of the current loop"),
		yes("omit_capacitor", func(d *T, b bool) { d.plate.OmitCapacitor = b }, "leave the capacitor's current out of the reference; its vars then add to q"),
		yes("l_filter", func(d *T, b bool) { d.plate.LFilter = b }, "L_f alone, no capacitor and grid side"),
	}
	fields = append(fields, filterPlate(func(d *T) *devices.FilterNameplate { return &d.plate.Filter }, "10, or 15 with l_filter")...)
	fields = append(fields,
		si("V_0", "V peak phase", 0, 2e6, true, func(p *P) *float64 { return &p.V0 }, "V_n, rated voltage"),
		si("w_0", "rad/s", 0, 1e4, true, func(p *P) *float64 { return &p.Omega0 }, "omega_0"),
		si("Kp", "1/s", 0, 1e9, true, func(p *P) *float64 { return &p.Kp }, "K_p of the PLL, on v_mq relative to the amplitude"),
		si("Ki", "1/s^2", 0, 1e12, false, func(p *P) *float64 { return &p.Ki }, "K_i of the PLL"),
		si("w_limit", "rad/s", 0, 1e5, true, func(p *P) *float64 { return &p.SpeedLimit }, "largest |omega - omega_0|").orInf(),
		si("w_v", "rad/s", 0, 1e6, true, func(p *P) *float64 { return &p.OmegaV }, "omega_v, corner of the filter of v_md"),
		si("v_floor", "V peak phase", 0, 2e6, true, func(p *P) *float64 { return &p.VFloor }, "least voltage in a denominator"),
		si("Kpc", "V/A", 0, 1e9, true, func(p *P) *float64 { return &p.Kpc }, "K_pc of the current loop"),
		si("Kic", "V/(A s)", 0, 1e12, false, func(p *P) *float64 { return &p.Kic }, "K_ic of the current loop"),
		num("Kff", "1", "0", 0, 1, func(d *T, x float64) { d.plate.FeedForward = x }, "K_ff, feed-forward of v_m to the bridge's voltage"),
		si("I_max_A", "A peak", 0, 1e7, true, func(p *P) *float64 { return &p.IMax }, "I_max, largest current reference").orInf(),
		si("Lf_H", "H", 0, maxHenry, true, func(p *P) *float64 { return &p.Filter.Lf }, "L_f; gains not given follow it"),
		si("Rf_ohm", "ohm", 0, maxOhm, false, func(p *P) *float64 { return &p.Filter.Rf }, "R_f"),
		si("Cf_F", "F", 0, maxFarad, true, func(p *P) *float64 { return &p.Filter.Cf }, "C_f"),
		si("Lg_H", "H", 0, maxHenry, true, func(p *P) *float64 { return &p.Filter.Lg }, "L_g"),
		si("Rg_ohm", "ohm", 0, maxOhm, false, func(p *P) *float64 { return &p.Filter.Rg }, "R_g"),
	)
	return makeKind("grid-following inverter",
		"An inverter that follows the voltage by a PLL and feeds a given power; it holds no voltage. A nameplate is enough; symbols in SI replace what follows from it. Setpoints: p, q.",
		shunt, false, fields)
}

func (d *followingDraft) rating(*site) float64 { return d.plate.Power }

func (d *followingDraft) build(s *site) (engine.Device, error) {
	plate := d.plate
	v, err := s.rated(plate.Voltage)
	if err != nil {
		return nil, err
	}
	plate.Voltage, plate.Frequency = v, s.hertz
	p, err := plate.Params()
	if err != nil {
		return nil, err
	}
	lf := p.Filter.Lf
	for _, set := range d.explicit.set {
		set(&p)
	}
	// K_pc and K_ic go with L_f (see devices.GridFollowingNameplate).
	follow(s, "Kpc", &p.Kpc, p.Filter.Lf/lf)
	follow(s, "Kic", &p.Kic, p.Filter.Lf/lf)
	return device(devices.NewGridFollowing(p))
}
