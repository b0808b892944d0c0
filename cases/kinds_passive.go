package cases

import (
	"errors"
	"fmt"
	"math"

	"islet/devices"
	"islet/engine"
)

// Bounds of ranges in SI that several kinds share: wide enough for any
// network, narrow enough to catch a wrong unit.
const (
	maxOhm   = 1e9
	maxHenry = 1e4
	maxFarad = 10.0
)

// impedance is a resistance with an inductance given in one of two ways.
type impedance struct {
	r, l, x *float64 // ohm, H, ohm at nominal frequency
}

// henries resolves the inductance.
func (z *impedance) henries(hertz float64) (l float64, given bool, err error) {
	switch {
	case z.l != nil && z.x != nil:
		return 0, true, at("X_ohm", "says the same as L_H; want one of them")
	case z.l != nil:
		return *z.l, true, nil
	case z.x != nil:
		return devices.Henries(*z.x, hertz), true, nil
	}
	return 0, false, nil
}

type notSource struct{}

func (notSource) rating(*site) float64 { return 0 }

// lines

type lineDraft struct {
	notSource
	data devices.LineData
	ohms impedance
	c    *float64
}

func lineKind() *kind {
	type T = lineDraft
	return makeKind("line",
		"A line or cable between buses of one voltage; a series branch if it has no capacitance. Give per-kilometre data and a length, or totals.",
		branch, true, []field[T]{
			above("length_m", "m", "", 0, 1e6, func(d *T, x float64) { d.data.Length = x }, "length").in(1e-3),
			num("resistance_ohm_per_km", "ohm/km", "0", 0, 1e4, func(d *T, x float64) { d.data.Resistance = x }, "resistance"),
			num("inductance_mH_per_km", "mH/km", "0", 0, 1e4, func(d *T, x float64) { d.data.Inductance = x }, "inductance; this or the reactance"),
			num("reactance_ohm_per_km", "ohm/km", "0", 0, 1e4, func(d *T, x float64) { d.data.Reactance = x }, "reactance at the nominal frequency"),
			num("capacitance_nF_per_km", "nF/km", "0", 0, 1e6, func(d *T, x float64) { d.data.Capacitance = x }, "shunt capacitance per phase, half of it at each end"),
			above("rated_current_A", "A rms", "what all sources and transformers that feed this part of the network can give", 0, 1e6, func(d *T, x float64) { d.data.RatedCurrent = x }, "thermal rating; also the base of the current's error norm"),
			num("R_ohm", "ohm", "from the length", 0, maxOhm, func(d *T, x float64) { d.ohms.r = &x }, "R, total"),
			num("L_H", "H", "from the length", 0, maxHenry, func(d *T, x float64) { d.ohms.l = &x }, "L, total"),
			num("X_ohm", "ohm", "", 0, maxOhm, func(d *T, x float64) { d.ohms.x = &x }, "instead of L: omega L at the nominal frequency"),
			num("C_F", "F", "from the length", 0, maxFarad, func(d *T, x float64) { d.c = &x }, "C, total"),
		})
}

func (d *lineDraft) build(s *site) (engine.Device, error) {
	var errs []error
	l, isL, err := d.ohms.henries(s.hertz)
	if err != nil {
		errs = append(errs, err)
	}
	data := d.data
	perKM := false
	for _, k := range []string{"resistance_ohm_per_km", "inductance_mH_per_km", "reactance_ohm_per_km", "capacitance_nF_per_km"} {
		if s.given[k] {
			perKM = true
			if !s.given["length_m"] {
				errs = append(errs, at(k, "needs length_m too"))
			}
		}
	}
	if s.given["inductance_mH_per_km"] && s.given["reactance_ohm_per_km"] {
		errs = append(errs, at("reactance_ohm_per_km", "says the same as inductance_mH_per_km; want one of them"))
	}
	if !perKM && d.ohms.r == nil && !isL {
		errs = append(errs, errors.New("a line needs an impedance; want resistance_ohm_per_km and reactance_ohm_per_km with length_m, or R_ohm and X_ohm or L_H"))
	}
	if len(errs) > 0 {
		return nil, errors.Join(errs...)
	}
	p := devices.LineParams{
		R:            data.Resistance * data.Length,
		L:            data.Inductance * 1e-3 * data.Length,
		C:            data.Capacitance * 1e-9 * data.Length,
		RatedCurrent: s.ratedCurrent(data.RatedCurrent),
	}
	if data.Reactance != 0 {
		p.L = devices.Henries(data.Reactance*data.Length, s.hertz)
	}
	if d.ohms.r != nil {
		p.R = *d.ohms.r
	}
	if isL {
		p.L = l
	}
	if d.c != nil {
		p.C = *d.c
	}
	return device(devices.NewLine(p))
}

// ratedCurrent returns the given current, or the default, A rms.
func (s *site) ratedCurrent(given float64) float64 {
	if given > 0 {
		return given
	}
	return devices.RatedAmperes(s.feeding(), s.volts[0])
}

// device makes an engine.Device of a constructor's result, keeping nil a nil.
func device[D engine.Device](d D, err error) (engine.Device, error) {
	if err != nil {
		return nil, err
	}
	return d, nil
}

// transformers

type transformerDraft struct {
	plate                  devices.TransformerRating
	group                  string
	ohms                   impedance
	core, magneticL, magnR *float64
}

func transformerKind() *kind {
	type T = transformerDraft
	return makeKind("transformer",
		"A two-winding transformer, from the high-voltage bus to the low-voltage bus.",
		branch, false, []field[T]{
			above("power_kVA", "kVA", "required", 0, 1e7, func(d *T, x float64) { d.plate.VA = x }, "rating").in(1e3),
			above("hv_kV", "kV line-line rms", "rated voltage of bus from", 0, 2000, func(d *T, x float64) { d.plate.HV = x }, "rated voltage of the high-voltage winding; for another tap its voltage").in(1e3),
			above("lv_kV", "kV line-line rms", "rated voltage of bus to", 0, 2000, func(d *T, x float64) { d.plate.LV = x }, "rated voltage of the low-voltage winding").in(1e3),
			word("vector_group", "Yy0", func(d *T, s string) { d.group = s }, "like Dyn11: the low-voltage side leads by 30 degrees"),
			above("impedance_percent", "%", "", 0, 50, func(d *T, x float64) { d.plate.Impedance = x }, "short-circuit voltage; needed unless R and L are given"),
			above("x_over_r", "1", "", 0, 1000, func(d *T, x float64) { d.plate.XR = x }, "X/R of the short-circuit impedance; this or resistance_percent").orInf(),
			above("resistance_percent", "%", "", 0, 50, func(d *T, x float64) { d.plate.Resistance = x }, "resistive part of the short-circuit voltage: load loss at rated current"),
			num("no_load_current_percent", "%", "0", 0, 50, func(d *T, x float64) { d.plate.NoLoadCurrent = x }, "no-load current; 0 for no magnetising branch"),
			num("no_load_loss_kW", "kW", "0", 0, 1e5, func(d *T, x float64) { d.plate.NoLoadLoss = x }, "no-load loss").in(1e3),
			above("quality_factor", "1", "20", 0, 1e6, func(d *T, x float64) { d.plate.QualityFactor = x }, "omega L/R of the magnetising inductance").orInf(),
			num("R_ohm", "ohm", "from the nameplate", 0, maxOhm, func(d *T, x float64) { d.ohms.r = &x }, "R, series, on the low-voltage side"),
			above("L_H", "H", "from the nameplate", 0, maxHenry, func(d *T, x float64) { d.ohms.l = &x }, "L, series, on the low-voltage side"),
			above("X_ohm", "ohm", "", 0, maxOhm, func(d *T, x float64) { d.ohms.x = &x }, "instead of L: omega L at the nominal frequency"),
			num("core_R_ohm", "ohm", "from the nameplate", 0, maxOhm, func(d *T, x float64) { d.core = &x }, "R_core at the high-voltage terminals; 0 for none"),
			num("magnetising_L_H", "H", "from the nameplate", 0, 1e6, func(d *T, x float64) { d.magneticL = &x }, "L_m at the high-voltage terminals; 0 for none"),
			num("magnetising_R_ohm", "ohm", "from the nameplate", 0, maxOhm, func(d *T, x float64) { d.magnR = &x }, "R_m in series with L_m"),
		})
}

func (d *transformerDraft) rating(*site) float64 { return d.plate.VA }

func (d *transformerDraft) build(s *site) (engine.Device, error) {
	var errs []error
	bad := func(format string, a ...any) { errs = append(errs, fmt.Errorf(format, a...)) }
	plate := d.plate
	plate.Frequency = s.hertz
	if plate.HV == 0 {
		plate.HV = s.volts[0]
	}
	if plate.LV == 0 {
		plate.LV = s.volts[1]
	}
	l, isL, err := d.ohms.henries(s.hertz)
	if err != nil {
		errs = append(errs, err)
	}
	explicit := d.ohms.r != nil && isL
	if plate.Impedance == 0 {
		if !explicit {
			bad("a transformer needs impedance_percent with x_over_r or resistance_percent, or R_ohm and X_ohm or L_H")
		}
		plate.Impedance = 1 // replaced below
		plate.XR, plate.Resistance = 1, 0
	} else if explicit && plate.XR == 0 && plate.Resistance == 0 {
		plate.XR = 1 // replaced below
	} else if (plate.XR == 0) == (plate.Resistance == 0) {
		bad("x_over_r and resistance_percent: want one of them beside impedance_percent")
	}
	group := d.group
	if group == "" {
		group = "Yy0"
	}
	plate.Group, err = devices.ParseVectorGroup(group)
	if err != nil {
		errs = append(errs, at("vector_group", "%s", plain(err)))
	}
	for k, v := range []float64{plate.HV, plate.LV} {
		if r := v / s.volts[k]; r < minVoltageRatio || r > maxVoltageRatio {
			errs = append(errs, at([]string{"hv_kV", "lv_kV"}[k], "the bus has %g kV; accepted are %g to %g times that", s.volts[k]/1e3, minVoltageRatio, maxVoltageRatio))
		}
	}
	if s.volts[0] < s.volts[1] {
		bad("bus from has %g kV and bus to %g kV; want the high-voltage bus at from", s.volts[0]/1e3, s.volts[1]/1e3)
	}
	if len(errs) > 0 {
		return nil, errors.Join(errs...)
	}
	p, err := plate.Params()
	if err != nil {
		return nil, err
	}
	if d.ohms.r != nil {
		p.R = *d.ohms.r
	}
	if isL {
		p.L = l
	}
	for _, e := range []struct {
		from *float64
		to   *float64
	}{{d.core, &p.CoreR}, {d.magneticL, &p.MagnetisingL}, {d.magnR, &p.MagnetisingR}} {
		if e.from != nil {
			*e.to = *e.from
		}
	}
	return device(devices.NewTransformer(p))
}

// A device's own rated voltage may differ from its bus's within these ratios;
// more is a mistake (common practice, no source).
const (
	minVoltageRatio = 0.7
	maxVoltageRatio = 1.4
)

// rated returns a device's rated voltage: its own if given, else its bus's.
func (s *site) rated(own float64) (float64, error) {
	if own == 0 {
		return s.volts[0], nil
	}
	if r := own / s.volts[0]; r < minVoltageRatio || r > maxVoltageRatio {
		return 0, at("voltage_kV", "the bus has %g kV; accepted are %g to %g times that", s.volts[0]/1e3, minVoltageRatio, maxVoltageRatio)
	}
	return own, nil
}

// breakers

type breakerDraft struct {
	notSource
	p devices.BreakerParams
}

func breakerKind() *kind {
	type T = breakerDraft
	return makeKind("breaker",
		"A breaker between buses of one voltage, opened and closed by events.",
		branch, true, []field[T]{
			yes("open", func(d *T, b bool) { d.p.Open = b }, "open at the start"),
			above("contact_resistance_mohm", "mohm", "1", 0, 1e6, func(d *T, x float64) { d.p.Resistance = x }, "resistance of the closed contacts; it shows in results").in(1e-3),
			above("R_ohm", "ohm", "from contact_resistance_mohm", 0, 1e3, func(d *T, x float64) { d.p.Resistance = x }, "the same in SI"),
		})
}

func (d *breakerDraft) build(s *site) (engine.Device, error) {
	if s.given["contact_resistance_mohm"] && s.given["R_ohm"] {
		return nil, at("R_ohm", "says the same as contact_resistance_mohm; want one of them")
	}
	p := d.p
	if p.Resistance == 0 {
		p.Resistance = devices.DefaultContactResistance
	}
	return device(devices.NewBreaker(p))
}

// loads

type loadDraft struct {
	notSource
	plate      devices.LoadRating
	r, l, rl   *float64
	capacitors *float64
}

func loadKind() *kind {
	type T = loadDraft
	return makeKind("load",
		"A constant-impedance load of R, L (with series resistance) and C in parallel. Give the power at rated voltage and frequency, or elements.",
		shunt, false, []field[T]{
			num("power_kW", "kW", "0", 0, 1e7, func(d *T, x float64) { d.plate.P = x }, "active power at rated voltage and frequency").in(1e3),
			num("reactive_kvar", "kvar", "0", -1e7, 1e7, func(d *T, x float64) { d.plate.Q = x }, "reactive power, positive if inductive").in(1e3),
			num("capacitive_kvar", "kvar", "0", 0, 1e7, func(d *T, x float64) { d.plate.QCapacitive = x }, "what a capacitor in parallel delivers; the inductor draws reactive_kvar plus this").in(1e3),
			above("quality_factor", "1", "20", 0, 1e6, func(d *T, x float64) { d.plate.QualityFactor = x }, "omega L/R of the inductor").orInf(),
			above("voltage_kV", "kV line-line rms", "that of the bus", 0, 2000, func(d *T, x float64) { d.plate.Voltage = x }, "rated voltage").in(1e3),
			above("frequency_Hz", "Hz", "that of the study", 0, 1000, func(d *T, x float64) { d.plate.Frequency = x }, "rated frequency"),
			num("R_ohm", "ohm", "from the power", 0, maxOhm, func(d *T, x float64) { d.r = &x }, "R, per phase of a star; 0 for none"),
			num("L_H", "H", "from the power", 0, maxHenry, func(d *T, x float64) { d.l = &x }, "L; 0 for none"),
			num("RL_ohm", "ohm", "from the power", 0, maxOhm, func(d *T, x float64) { d.rl = &x }, "R_L in series with L"),
			num("C_F", "F", "from the power", 0, maxFarad, func(d *T, x float64) { d.capacitors = &x }, "C; 0 for none"),
		})
}

func (d *loadDraft) build(s *site) (engine.Device, error) {
	plate := d.plate
	v, err := s.rated(plate.Voltage)
	if err != nil {
		return nil, err
	}
	plate.Voltage = v
	if plate.Frequency == 0 {
		plate.Frequency = s.hertz
	}
	p := devices.LoadParams{Voltage: plate.Voltage, Frequency: plate.Frequency}
	explicit := d.r != nil || d.l != nil || d.capacitors != nil
	if !explicit || plate.P != 0 || plate.Q != 0 || plate.QCapacitive != 0 {
		if plate.P == 0 && plate.Q == 0 && plate.QCapacitive == 0 {
			return nil, errors.New("a load needs power_kW, reactive_kvar or capacitive_kvar, or R_ohm, L_H or C_F")
		}
		if p, err = plate.Params(); err != nil {
			return nil, err
		}
	}
	for _, e := range []struct {
		from *float64
		to   *float64
	}{{d.r, &p.R}, {d.l, &p.L}, {d.rl, &p.RL}, {d.capacitors, &p.C}} {
		if e.from != nil {
			*e.to = *e.from
		}
	}
	return device(devices.NewLoad(p))
}

type seriesDraft struct {
	notSource
	plate devices.SeriesLoadRating
	ohms  impedance
}

func seriesLoadKind() *kind {
	type T = seriesDraft
	return makeKind("series load",
		"A constant-impedance load of R and L in series.",
		shunt, false, []field[T]{
			above("power_kW", "kW", "", 0, 1e7, func(d *T, x float64) { d.plate.P = x }, "active power at rated voltage and frequency; needed unless R and L are given").in(1e3),
			num("reactive_kvar", "kvar", "0", 0, 1e7, func(d *T, x float64) { d.plate.Q = x }, "reactive power").in(1e3),
			above("voltage_kV", "kV line-line rms", "that of the bus", 0, 2000, func(d *T, x float64) { d.plate.Voltage = x }, "rated voltage").in(1e3),
			above("frequency_Hz", "Hz", "that of the study", 0, 1000, func(d *T, x float64) { d.plate.Frequency = x }, "rated frequency"),
			num("R_ohm", "ohm", "from the power", 0, maxOhm, func(d *T, x float64) { d.ohms.r = &x }, "R, per phase of a star"),
			num("L_H", "H", "from the power", 0, maxHenry, func(d *T, x float64) { d.ohms.l = &x }, "L"),
			num("X_ohm", "ohm", "", 0, maxOhm, func(d *T, x float64) { d.ohms.x = &x }, "instead of L: omega L at the rated frequency"),
		})
}

func (d *seriesDraft) build(s *site) (engine.Device, error) {
	plate := d.plate
	v, err := s.rated(plate.Voltage)
	if err != nil {
		return nil, err
	}
	plate.Voltage = v
	if plate.Frequency == 0 {
		plate.Frequency = s.hertz
	}
	l, isL, err := d.ohms.henries(plate.Frequency)
	if err != nil {
		return nil, err
	}
	p := devices.SeriesLoadParams{Voltage: plate.Voltage, Frequency: plate.Frequency}
	switch {
	case plate.P > 0:
		if p, err = plate.Params(); err != nil {
			return nil, err
		}
	case d.ohms.r == nil && !isL:
		return nil, errors.New("a series load needs power_kW, or R_ohm and X_ohm or L_H")
	}
	if d.ohms.r != nil {
		p.R = *d.ohms.r
	}
	if isL {
		p.L = l
	}
	return device(devices.NewSeriesLoad(p))
}

type capacitorDraft struct {
	notSource
	plate devices.ShuntCapacitorRating
	c     *float64
}

func capacitorKind() *kind {
	type T = capacitorDraft
	return makeKind("shunt capacitor",
		"A capacitor bank to neutral.",
		shunt, false, []field[T]{
			above("reactive_kvar", "kvar", "", 0, 1e7, func(d *T, x float64) { d.plate.Vars = x }, "what it delivers at rated voltage and frequency; needed unless C is given").in(1e3),
			above("voltage_kV", "kV line-line rms", "that of the bus", 0, 2000, func(d *T, x float64) { d.plate.Voltage = x }, "rated voltage").in(1e3),
			above("frequency_Hz", "Hz", "that of the study", 0, 1000, func(d *T, x float64) { d.plate.Frequency = x }, "rated frequency"),
			above("C_F", "F", "from the power", 0, maxFarad, func(d *T, x float64) { d.c = &x }, "C, per phase of a star"),
			num("R_ohm", "ohm", "0", 0, maxOhm, func(d *T, x float64) { d.plate.R = x }, "R in series with C"),
		})
}

func (d *capacitorDraft) build(s *site) (engine.Device, error) {
	plate := d.plate
	v, err := s.rated(plate.Voltage)
	if err != nil {
		return nil, err
	}
	plate.Voltage = v
	if plate.Frequency == 0 {
		plate.Frequency = s.hertz
	}
	p := devices.ShuntCapacitorParams{R: plate.R, Voltage: plate.Voltage}
	switch {
	case plate.Vars > 0:
		if p, err = plate.Params(); err != nil {
			return nil, err
		}
	case d.c == nil:
		return nil, errors.New("a shunt capacitor needs reactive_kvar or C_F")
	}
	if d.c != nil {
		p.C = *d.c
	}
	return device(devices.NewShuntCapacitor(p))
}

// faults

type faultDraft struct {
	notSource
	p    devices.FaultParams
	ohms impedance
}

func faultKind() *kind {
	type T = faultDraft
	return makeKind("fault",
		"A balanced three-phase fault to ground, applied (closed) and cleared (opened) by events.",
		shunt, false, []field[T]{
			yes("closed", func(d *T, b bool) { d.p.Closed = b }, "there at the start"),
			above("R_ohm", "ohm", "0.001", 0, maxOhm, func(d *T, x float64) { d.ohms.r = &x }, "R of the fault's path"),
			num("L_H", "H", "0", 0, maxHenry, func(d *T, x float64) { d.ohms.l = &x }, "L in series"),
			num("X_ohm", "ohm", "", 0, maxOhm, func(d *T, x float64) { d.ohms.x = &x }, "instead of L: omega L at the nominal frequency"),
			above("rated_current_A", "A rms", "as for a line", 0, 1e6, func(d *T, x float64) { d.p.RatedCurrent = x }, "of the network around it: the base of the current's error norm"),
		})
}

func (d *faultDraft) build(s *site) (engine.Device, error) {
	l, _, err := d.ohms.henries(s.hertz)
	if err != nil {
		return nil, err
	}
	p := d.p
	p.R, p.L = devices.DefaultContactResistance, l
	if d.ohms.r != nil {
		p.R = *d.ohms.r
	}
	p.RatedCurrent = s.ratedCurrent(p.RatedCurrent)
	return device(devices.NewFault(p))
}

// frequency meters

type meterDraft struct {
	notSource
	p devices.FrequencyMeterParams
}

func meterKind() *kind {
	type T = meterDraft
	return makeKind("frequency meter",
		"A phase-locked loop that measures frequency and its rate of change, without drawing a current.",
		shunt, false, []field[T]{
			above("bandwidth_Hz", "Hz", "10", 0, 1e4, func(d *T, x float64) { d.p.Bandwidth = x }, "natural frequency of the loop"),
			above("damping", "1", "0.7071067811865476", 0, 10, func(d *T, x float64) { d.p.Damping = x }, "zeta of the loop"),
			above("rocof_filter_Hz", "Hz", "2", 0, 1e4, func(d *T, x float64) { d.p.RocofFilter = x }, "corner of the filter of the rate of change"),
		})
}

func (d *meterDraft) build(s *site) (engine.Device, error) {
	p := d.p
	p.Voltage, p.Frequency = s.volts[0], s.hertz
	return device(devices.NewFrequencyMeter(p))
}

// grids

type gridDraft struct {
	plate   devices.GridRating
	voltage *float64 // per unit of the bus's
	hertz   float64
	ohms    impedance
}

func gridKind() *kind {
	type T = gridDraft
	return makeKind("grid",
		"A voltage behind an impedance; it holds voltage and frequency. Setpoints: voltage, frequency, phase.",
		shunt, false, []field[T]{
			above("short_circuit_MVA", "MVA", "", 0, 1e6, func(d *T, x float64) { d.plate.ShortCircuit = x }, "short-circuit power at rated voltage; needed unless R and L are given").in(1e6),
			above("x_over_r", "1", "10", 0, 1000, func(d *T, x float64) { d.plate.XR = x }, "X/R of the short-circuit impedance").orInf(),
			num("voltage_percent", "%", "100", 1, 150, func(d *T, x float64) { d.voltage = &x }, "inner voltage, of the bus's rated voltage; first value of setpoint voltage").in(1e-2),
			above("frequency_Hz", "Hz", "that of the study", 0, 1000, func(d *T, x float64) { d.hertz = x }, "first value of setpoint frequency"),
			above("power_MVA", "MVA", "a twentieth of the short-circuit power", 0, 1e6, func(d *T, x float64) { d.plate.VA = x }, "what its current is measured by in the error norm").in(1e6),
			num("R_ohm", "ohm", "from the short-circuit power", 0, maxOhm, func(d *T, x float64) { d.ohms.r = &x }, "R of the source impedance"),
			num("L_H", "H", "from the short-circuit power", 0, maxHenry, func(d *T, x float64) { d.ohms.l = &x }, "L of the source impedance"),
			num("X_ohm", "ohm", "", 0, maxOhm, func(d *T, x float64) { d.ohms.x = &x }, "instead of L: omega L at the nominal frequency"),
		})
}

func (d *gridDraft) rating(s *site) float64 {
	switch {
	case d.plate.VA > 0:
		return d.plate.VA
	case d.plate.ShortCircuit > 0:
		return d.plate.ShortCircuit / 20
	}
	r, x := 0.0, 0.0
	if d.ohms.r != nil {
		r = *d.ohms.r
	}
	if l, ok, err := d.ohms.henries(s.hertz); ok && err == nil {
		x = l * devices.RadPerSecond(s.hertz)
	}
	if z := math.Hypot(r, x); z > 0 {
		return devices.BaseOhms(s.volts[0], z) / 20
	}
	return 0
}

func (d *gridDraft) build(s *site) (engine.Device, error) {
	l, isL, err := d.ohms.henries(s.hertz)
	if err != nil {
		return nil, err
	}
	plate := d.plate
	plate.Voltage, plate.Frequency = s.volts[0], s.hertz
	if plate.XR == 0 {
		plate.XR = 10
	}
	p := devices.GridParams{VA: plate.VA}
	switch {
	case plate.ShortCircuit > 0:
		if p, err = plate.Params(); err != nil {
			return nil, err
		}
	case d.ohms.r == nil && !isL:
		return nil, errors.New("a grid needs short_circuit_MVA, or R_ohm and X_ohm or L_H")
	}
	if d.ohms.r != nil {
		p.R = *d.ohms.r
	}
	if isL {
		p.L = l
	}
	p.Voltage, p.Frequency = s.volts[0], s.hertz
	if d.voltage != nil {
		p.Voltage *= *d.voltage
	}
	if d.hertz > 0 {
		p.Frequency = d.hertz
	}
	if p.R == 0 && p.L == 0 {
		return nil, errors.New("the source impedance is 0; want R_ohm, X_ohm or L_H above 0")
	}
	return device(devices.NewGrid(p))
}
