package cases

import (
	"fmt"
	"math"
	"math/cmplx"

	"islet/devices"
	"islet/engine/perunit"
)

// Signal is a quantity that parameters and gains connect.
type Signal struct {
	Name string
	Of   perunit.Dimension
	// High tells that it stands at the high-voltage side of a transformer, the
	// only device with two base voltages.
	High bool
}

// Signals of devices. Those of controllers have bases of their own, which are free.
var (
	sigVoltage = Signal{"voltage", perunit.Volt, false}
	sigCurrent = Signal{"current", perunit.Ampere, false}
	sigPower   = Signal{"power", perunit.Watt, false}
	sigVars    = Signal{"reactive power", perunit.Var, false}
	sigOhm     = Signal{"impedance", perunit.Volt.Over(perunit.Ampere), false}
	sigAngle   = Signal{"angle", perunit.Radian, false}
	sigOne     = Signal{"", perunit.One, false}

	sigHighVoltage = Signal{"high-side voltage", perunit.Volt, true}
	sigHighCurrent = Signal{"high-side current", perunit.Ampere, true}

	sigSpeed  = Signal{"w", perunit.Speed, false}      // speed that a primary control or PLL orders
	sigVRef   = Signal{"v_ref", perunit.Volt, false}   // order of the primary control to the voltage loop
	sigVErr   = Signal{"v_err", perunit.Volt, false}   // its control error
	sigIRef   = Signal{"i_ref", perunit.Ampere, false} // its order to the current loop
	sigIErr   = Signal{"i_err", perunit.Ampere, false} // that one's control error
	sigVOrder = Signal{"v_i", perunit.Volt, false}     // its order to the bridge
	sigPLL    = Signal{"v_q", perunit.Volt, false}     // what the PLL steers to zero
)

// ControlSignals names the signals whose bases are free.
func ControlSignals() []string {
	var out []string
	for _, s := range controlSignals {
		out = append(out, s.Name)
	}
	return out
}

var controlSignals = []Signal{sigSpeed, sigVRef, sigVErr, sigIRef, sigIErr, sigVOrder, sigPLL}

// PerUnitBases are the base values of a device.
type PerUnitBases struct {
	perunit.Bases
	// HighVoltage is the base voltage (V peak phase-to-neutral) of a transformer's
	// high-voltage side; Voltage is that of its low-voltage side. 0 for other devices.
	HighVoltage float64
	// Signals holds base values, in SI, of control signals that don't follow from
	// their units, by name.
	Signals map[string]float64
}

// Base is the SI value of 1 per unit of the signal: the one chosen for it, or that of
// its dimension.
func (s Signal) Base(b PerUnitBases) float64 {
	if x, ok := b.Signals[s.Name]; ok {
		return x
	}
	side := b.Bases
	if s.High {
		side.Voltage = b.HighVoltage
	}
	return side.Of(s.Of)
}

// Gain is a parameter of a device as what turns one signal into another.
type Gain struct {
	Key     string // of the case file; "" if it has none
	Symbol  string
	Meaning string
	Value   float64 // SI
	From    Signal
	To      Signal
	// Integrations is how often the signal is integrated on the way; negative for
	// derivatives.
	Integrations int
}

// Dimension is derived from the signals.
func (g Gain) Dimension() perunit.Dimension {
	return perunit.Gain(g.To.Of, g.From.Of, g.Integrations)
}

// Base is the SI value of 1 per unit: that of the signal it leads to over that of the
// signal it comes from, and over the base of time for every integration.
func (g Gain) Base(b PerUnitBases) float64 {
	return g.To.Base(b) / g.From.Base(b) / math.Pow(b.Time, float64(g.Integrations))
}

// PerUnitDevice is a device with its parameters as gains.
type PerUnitDevice struct {
	Name, Kind string
	// Rating (VA) and Volts (V peak phase) are its own base values; the rating is 0
	// if it has none. HighVolts is that of a transformer's high-voltage side, Volts
	// of its low-voltage side; 0 for other devices.
	Rating, Volts, HighVolts float64
	// Level and HighLevel are the rated voltages (V line-to-line rms) of the buses
	// at which Volts and HighVolts stand: its voltage levels.
	Level, HighLevel float64
	Gains            []Gain
}

// ControlSignals lists the signals of free base that the device's gains connect.
func (d PerUnitDevice) ControlSignals() []Signal {
	var out []Signal
	for _, s := range controlSignals {
		for _, g := range d.Gains {
			if g.From == s || g.To == s {
				out = append(out, s)
				break
			}
		}
	}
	return out
}

// Gains lists a case's devices with every parameter and gain in SI. Devices that the
// list has no description of (a user's own) are left out.
func (c *Case) Gains() ([]PerUnitDevice, error) {
	var out []PerUnitDevice
	for i := range c.devices {
		spec := &c.devices[i]
		dev, err := spec.build()
		if err != nil {
			return nil, err
		}
		level := c.buses[spec.at[0]].volts
		volts := devices.PeakVolts(level)
		p := PerUnitDevice{Name: spec.name, Kind: spec.kind.name, Volts: volts, Level: level}
		switch d := dev.(type) {
		case *devices.GridForming:
			q := d.Params()
			p.Rating, p.Gains = q.Rating, formingGains(q)
		case *devices.GridFollowing:
			q := d.Params()
			p.Rating, p.Volts, p.Gains = q.Rating, q.V0, followingGains(q)
		case *devices.Line:
			q := d.Params()
			p.Rating = 1.5 * volts * devices.PeakAmperes(q.RatedCurrent)
			p.Gains = []Gain{
				{"R_ohm", "R", "series resistance", q.R, sigCurrent, sigVoltage, 0},
				{"L_H", "L", "series inductance", q.L, sigCurrent, sigVoltage, -1},
				{"C_F", "C", "shunt capacitance", q.C, sigVoltage, sigCurrent, -1},
			}
		case *devices.Transformer:
			q := d.Params()
			p.Rating = q.VA
			p.Volts, p.HighVolts = devices.PeakVolts(q.LV), devices.PeakVolts(q.HV)
			p.Level, p.HighLevel = c.buses[spec.at[1]].volts, level
			p.Gains = []Gain{
				{"", "ratio", "turns ratio: 1 per unit, that is gone, under matching bases", q.HV / q.LV, sigVoltage, sigHighVoltage, 0},
				{"", "shift", "lag of the low-voltage side by the vector group; bases leave it", math.Remainder(q.Group.Lag(), 2*math.Pi), sigOne, sigAngle, 0},
				{"R_ohm", "R", "series resistance, low-voltage side", q.R, sigCurrent, sigVoltage, 0},
				{"L_H", "L", "series inductance, low-voltage side", q.L, sigCurrent, sigVoltage, -1},
				{"core_R_ohm", "R_core", "core loss, high-voltage side", q.CoreR, sigHighCurrent, sigHighVoltage, 0},
				{"magnetising_L_H", "L_m", "magnetising inductance, high-voltage side", q.MagnetisingL, sigHighCurrent, sigHighVoltage, -1},
				{"magnetising_R_ohm", "R_m", "its series resistance, likewise", q.MagnetisingR, sigHighCurrent, sigHighVoltage, 0},
			}
		case *devices.Grid:
			q := d.Params()
			p.Rating, p.Volts = q.VA, devices.PeakVolts(q.Voltage)
			p.Gains = []Gain{
				{"R_ohm", "R", "resistance", q.R, sigCurrent, sigVoltage, 0},
				{"L_H", "L", "inductance", q.L, sigCurrent, sigVoltage, -1},
				{"", "E", "inner voltage", devices.PeakVolts(q.Voltage), sigOne, sigVoltage, 0},
			}
		case *devices.Load:
			q := d.Params()
			p.Gains = []Gain{
				{"R_ohm", "R", "resistor", q.R, sigCurrent, sigVoltage, 0},
				{"L_H", "L", "inductor", q.L, sigCurrent, sigVoltage, -1},
				{"RL_ohm", "R_L", "its series resistance", q.RL, sigCurrent, sigVoltage, 0},
				{"C_F", "C", "capacitor", q.C, sigVoltage, sigCurrent, -1},
			}
		case *devices.SeriesLoad:
			q := d.Params()
			p.Gains = []Gain{
				{"R_ohm", "R", "resistance", q.R, sigCurrent, sigVoltage, 0},
				{"L_H", "L", "inductance", q.L, sigCurrent, sigVoltage, -1},
			}
		case *devices.ShuntCapacitor:
			q := d.Params()
			p.Volts = devices.PeakVolts(q.Voltage)
			p.Gains = []Gain{
				{"C_F", "C", "capacitance", q.C, sigVoltage, sigCurrent, -1},
				{"R_ohm", "R", "series resistance", q.R, sigCurrent, sigVoltage, 0},
			}
		case *devices.Breaker:
			p.Gains = []Gain{{"R_ohm", "R", "resistance of the closed contacts", d.Params().Resistance, sigCurrent, sigVoltage, 0}}
		case *devices.Fault:
			q := d.Params()
			p.Rating = 1.5 * volts * devices.PeakAmperes(q.RatedCurrent)
			p.Gains = []Gain{
				{"R_ohm", "R", "resistance of the fault's path", q.R, sigCurrent, sigVoltage, 0},
				{"L_H", "L", "inductance in series", q.L, sigCurrent, sigVoltage, -1},
			}
		case *devices.FrequencyMeter:
			q := d.Params()
			wn := devices.RadPerSecond(q.Bandwidth)
			p.Gains = []Gain{
				{"", "2 zeta w_n", "loop, proportional, on v_q over the amplitude", 2 * q.Damping * wn, sigOne, sigSpeed, 0},
				{"", "w_n^2", "loop, integral, on v_q over the amplitude", wn * wn, sigOne, sigSpeed, 1},
				{"", "w_r", "corner of the filter of the rate of change", devices.RadPerSecond(q.RocofFilter), sigSpeed, sigSpeed, 1},
			}
		case *devices.ReducedNetwork:
			q := d.Params()
			if q.Ratio != nil { // the level to which R and L are referred
				p.Volts /= cmplx.Abs(q.Ratio[0])
			}
			p.Rating = 1.5 * p.Volts * devices.PeakAmperes(q.RatedCurrent)
			for k := range q.R {
				p.Gains = append(p.Gains,
					Gain{"", fmt.Sprintf("R_%d", k+1), fmt.Sprintf("resistance of circuit %d", k+1), q.R[k], sigCurrent, sigVoltage, 0},
					Gain{"", fmt.Sprintf("L_%d", k+1), fmt.Sprintf("inductance of circuit %d", k+1), q.L[k], sigCurrent, sigVoltage, -1})
			}
		default:
			continue
		}
		out = append(out, p)
	}
	return out, nil
}

// filterGains lists a filter.
func filterGains(f devices.LCL) []Gain {
	out := []Gain{
		{"Lf_H", "L_f", "converter-side inductance", f.Lf, sigCurrent, sigVoltage, -1},
		{"Rf_ohm", "R_f", "its resistance", f.Rf, sigCurrent, sigVoltage, 0},
	}
	if f.Cf > 0 {
		out = append(out,
			Gain{"Cf_F", "C_f", "filter capacitance", f.Cf, sigVoltage, sigCurrent, -1},
			Gain{"Lg_H", "L_g", "grid-side inductance", f.Lg, sigCurrent, sigVoltage, -1},
			Gain{"Rg_ohm", "R_g", "its resistance", f.Rg, sigCurrent, sigVoltage, 0})
	}
	return out
}

func formingGains(q devices.GridFormingParams) []Gain {
	out := []Gain{
		{"", "S_r", "rating", q.Rating, sigOne, sigPower, 0},
		{"", "P*", "set active power", q.P, sigOne, sigPower, 0},
		{"", "Q*", "set reactive power", q.Q, sigOne, sigVars, 0},
		{"V_0", "V_0", "voltage at no load", q.V0, sigOne, sigVRef, 0},
		{"w_0", "w_0", "speed at no load", q.Omega0, sigOne, sigSpeed, 0},
	}
	psi := 0.0
	switch c := q.Primary.(type) {
	case devices.Droop:
		psi = c.Psi
		out = append(out,
			Gain{"m", "m", "frequency droop", c.M, sigPower, sigSpeed, 0},
			Gain{"n", "n", "voltage droop", c.N, sigVars, sigVRef, 0},
			Gain{"w_c", "w_c", "corner of the power filter", c.OmegaC, sigPower, sigPower, 1})
	case devices.VirtualMachine:
		psi = c.Psi
		out = append(out,
			Gain{"H", "H", "inertia constant, on its own rating", c.H, sigPower, sigPower, -1},
			Gain{"", "2 H S_r/w_0", "inertia, from rate of change of speed to power", 2 * c.H * q.Rating / q.Omega0, sigSpeed, sigPower, -1},
			Gain{"D", "D", "damping", c.D, sigSpeed, sigPower, 0},
			Gain{"n", "n", "voltage droop", c.N, sigVars, sigVRef, 0},
			Gain{"T_v", "T_v", "time constant of the voltage", c.Tv, sigVRef, sigVRef, -1})
		if !math.IsInf(c.OmegaC, 1) {
			out = append(out, Gain{"w_c", "w_c", "corner of the power filter", c.OmegaC, sigPower, sigPower, 1})
		}
	case devices.Oscillator:
		psi = c.Psi
		out = append(out,
			Gain{"eta", "eta", "speed of synchronisation", c.Eta, sigCurrent, sigVRef, 1},
			Gain{"alpha", "alpha", "stiffness of the voltage", c.Alpha, sigVRef, sigCurrent, 0})
	}
	out = append(out,
		Gain{"psi", "psi", "turn of the power pair", psi, sigOne, sigAngle, 0},
		Gain{"Rv_ohm", "R_v", "virtual resistance", q.Rv, sigCurrent, sigVRef, 0},
		Gain{"Xv_ohm", "X_v", "virtual reactance", q.Xv, sigCurrent, sigVRef, 0},
		Gain{"Kpv", "K_pv", "voltage loop, proportional", q.Kpv, sigVErr, sigIRef, 0},
		Gain{"Kiv", "K_iv", "voltage loop, integral", q.Kiv, sigVErr, sigIRef, 1},
		Gain{"F", "F", "feed-forward of the grid-side current", q.F, sigCurrent, sigIRef, 0},
		Gain{"Kaw", "K_aw", "anti-windup", q.Kaw, sigIRef, sigVErr, 0},
		Gain{"Kpc", "K_pc", "current loop, proportional", q.Kpc, sigIErr, sigVOrder, 0},
		Gain{"Kic", "K_ic", "current loop, integral", q.Kic, sigIErr, sigVOrder, 1},
		Gain{"I_max_A", "I_max", "largest current reference", q.IMax, sigOne, sigIRef, 0},
	)
	if l := q.LimitImpedance; l.Gain > 0 {
		out = append(out,
			Gain{"limit_I_t_A", "I_t", "current from which the limiting impedance acts", l.Threshold, sigOne, sigCurrent, 0},
			Gain{"limit_k", "k", "rise of the limiting impedance with current", l.Gain, sigCurrent, sigOhm, 0},
			Gain{"limit_XR", "X/R", "of the limiting impedance", l.XR, sigOne, sigOne, 0})
	}
	return append(out, filterGains(q.Filter)...)
}

func followingGains(q devices.GridFollowingParams) []Gain {
	out := []Gain{
		{"", "S_r", "rating", q.Rating, sigOne, sigPower, 0},
		{"", "P*", "set active power", q.P, sigOne, sigPower, 0},
		{"", "Q*", "set reactive power", q.Q, sigOne, sigVars, 0},
		{"V_0", "V_n", "rated voltage", q.V0, sigOne, sigVoltage, 0},
		{"w_0", "w_0", "nominal speed", q.Omega0, sigOne, sigSpeed, 0},
		{"", "K_p/V_n", "PLL, proportional, on v_q in volts", q.Kp / q.V0, sigPLL, sigSpeed, 0},
		{"", "K_i/V_n", "PLL, integral, on v_q in volts", q.Ki / q.V0, sigPLL, sigSpeed, 1},
		{"Kp", "K_p", "PLL, proportional, on v_q over the amplitude", q.Kp, sigOne, sigSpeed, 0},
		{"Ki", "K_i", "PLL, integral, on v_q over the amplitude", q.Ki, sigOne, sigSpeed, 1},
		{"w_v", "w_v", "corner of the filter of v_d", q.OmegaV, sigVoltage, sigVoltage, 1},
		{"v_floor", "v_floor", "least voltage in a denominator", q.VFloor, sigOne, sigVoltage, 0},
		{"Kpc", "K_pc", "current loop, proportional", q.Kpc, sigIErr, sigVOrder, 0},
		{"Kic", "K_ic", "current loop, integral", q.Kic, sigIErr, sigVOrder, 1},
		{"Kff", "K_ff", "feed-forward of the voltage", q.Kff, sigVoltage, sigVOrder, 0},
		{"I_max_A", "I_max", "largest current reference", q.IMax, sigOne, sigIRef, 0},
	}
	if !math.IsInf(q.SpeedLimit, 1) {
		out = append(out, Gain{"w_limit", "w_limit", "largest deviation of speed", q.SpeedLimit, sigOne, sigSpeed, 0})
	}
	return append(out, filterGains(q.Filter)...)
}
