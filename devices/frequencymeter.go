package devices

import (
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// FrequencyMeterParams are the parameters of a frequency meter.
type FrequencyMeterParams struct {
	// Voltage is the rated voltage, V line-to-line rms, and Frequency the rated
	// frequency, Hz, at which the meter starts. Both > 0.
	Voltage, Frequency float64
	// Bandwidth is the natural frequency of the phase-locked loop, Hz; 0 means
	// 10 Hz (common practice, no source).
	Bandwidth float64
	// Damping is the loop's damping ratio; 0 means 1/sqrt(2).
	Damping float64
	// RocofFilter is the corner of the filter that the rate of change of
	// frequency passes, Hz; 0 means 2 Hz (common practice, no source: about
	// the 0.1 s over which ride-through rules average).
	RocofFilter float64
}

// FrequencyMeter measures the frequency at its terminal, which carries no
// current, by a phase-locked loop in the synchronous reference frame on the
// normalised voltage; delta is the loop's angle, e = Im(e^{-j delta} v)/n:
//
//	n = sqrt(|v|^2 + v_0^2)                 v_0 = 1 % of rated voltage
//	d xi/dt = w_n^2 e                       omega = omega_0 + 2 zeta w_n e + xi
//	d delta/dt = omega - omega_f
//	d nu/dt = w_r (omega - omega_0 - nu)    the filtered deviation of frequency
//
// Frequency is omega, the rate of change of frequency d nu/dt. The floor v_0
// slows the loop when the voltage vanishes, so that it keeps its frequency on a
// dead bus, and lowers its gain by 5e-5 at rated voltage.
//
// Source: the loop and its design, w_n = sqrt(Ki V), zeta = Kp sqrt(V)/(2 sqrt(Ki)),
// e.g. Teodorescu, Liserre, Rodriguez, Grid Converters for Photovoltaic and Wind
// Power Systems, Wiley 2011.
type FrequencyMeter struct {
	timeless
	p      FrequencyMeterParams
	frame  float64
	w0     float64 // omega_0, rad/s
	kp, ki float64 // 2 zeta w_n, 1/s, and w_n^2, 1/s^2
	wr     float64 // corner of the filter, rad/s
	floor  float64 // v_0^2, V^2
}

// NewFrequencyMeter returns a meter. The error joins all faults.
func NewFrequencyMeter(p FrequencyMeterParams) (*FrequencyMeter, error) {
	f := faults{device: "frequency meter"}
	f.positive("Voltage", p.Voltage, "V")
	f.positive("Frequency", p.Frequency, "Hz")
	f.notNegative("Bandwidth", p.Bandwidth, "Hz")
	f.notNegative("Damping", p.Damping, "")
	f.notNegative("RocofFilter", p.RocofFilter, "Hz")
	if err := f.err(); err != nil {
		return nil, err
	}
	if p.Bandwidth == 0 {
		p.Bandwidth = 10
	}
	if p.Damping == 0 {
		p.Damping = math.Sqrt2 / 2
	}
	if p.RocofFilter == 0 {
		p.RocofFilter = 2
	}
	wn := RadPerSecond(p.Bandwidth)
	v0 := 0.01 * PeakVolts(p.Voltage)
	return &FrequencyMeter{
		p: p, w0: RadPerSecond(p.Frequency),
		kp: 2 * p.Damping * wn, ki: wn * wn, wr: RadPerSecond(p.RocofFilter), floor: v0 * v0,
	}, nil
}

// Params returns the parameters, defaults filled in.
func (m *FrequencyMeter) Params() FrequencyMeterParams { return m.p }

// Dims returns two port components and the unknowns delta, xi, nu.
func (m *FrequencyMeter) Dims() (ports, own int) { return 2, 3 }

// Mass writes 0 at the terminal, and 1.
func (m *FrequencyMeter) Mass(port, own []float64) {
	clear(port)
	own[0], own[1], own[2] = 1, 1, 1
}

// SetFrame sets the speed of the network frame, rad/s.
func (m *FrequencyMeter) SetFrame(speed float64) { m.frame = speed }

// phase returns the normalised voltage in the loop's frame (its imaginary part
// is e), and n (V).
func (m *FrequencyMeter) phase(v, x []float64) (u complex128, n float64) {
	volts := pair(v, 0)
	n = math.Sqrt(dot(volts, volts) + m.floor)
	return times(1/n, rotor(-x[0])*volts), n
}

// Eval writes no flow, and the rates of delta (rad/s), xi and nu (rad/s^2).
func (m *FrequencyMeter) Eval(flow, rate []float64, t float64, v, x []float64) error {
	clear(flow)
	u, _ := m.phase(v, x)
	deviation := m.kp*imag(u) + x[1]
	rate[0] = m.w0 + deviation - m.frame
	rate[1] = m.ki * imag(u)
	rate[2] = m.wr * (deviation - x[2])
	return nil
}

// Pattern lists the entries that can be nonzero.
func (m *FrequencyMeter) Pattern() []solvers.Entry {
	var p []solvers.Entry
	for row := 2; row < 5; row++ {
		for col := range 3 {
			p = append(p, entry{Row: row, Col: col})
		}
	}
	return append(p, entry{Row: 2, Col: 3}, entry{Row: 4, Col: 3}, entry{Row: 4, Col: 4})
}

// Jacobian writes the exact Jacobian.
func (m *FrequencyMeter) Jacobian(jac []float64, t float64, v, x []float64) {
	u, n := m.phase(v, x)
	// e = Im(e^{-j delta} v)/n: dn/dv = v/n takes e v/n^2 from its derivative.
	s, c := math.Sincos(x[0])
	e := imag(u)
	de := [3]float64{-s/n - e*v[0]/(n*n), c/n - e*v[1]/(n*n), -real(u)}
	jac = jac[:25]
	for col, d := range de {
		jac[2*5+col] = m.kp * d
		jac[3*5+col] = m.ki * d
		jac[4*5+col] = m.wr * m.kp * d
	}
	jac[2*5+3] = 1
	jac[4*5+3] = m.wr
	jac[4*5+4] = -m.wr
}

// Describe describes the meter. 1 Hz is the base of frequencies.
func (m *FrequencyMeter) Describe() facet.Description {
	return facet.Description{
		Kind:      "frequency meter",
		Terminals: []facet.Terminal{{Name: "ac", Flow: facet.FlowNone}},
		Unknowns: []facet.Unknown{
			{Name: "delta", Unit: "rad", Base: 1, Frame: facet.Angle, Dynamics: "PLL"},
			{Name: "xi", Unit: "rad/s", Base: 2 * math.Pi, Dynamics: "PLL"},
			{Name: "nu", Unit: "rad/s", Base: 2 * math.Pi, Dynamics: "PLL"},
		},
	}
}

// Guess locks the loop to the terminal voltage at the frame's speed.
func (m *FrequencyMeter) Guess(x []float64, t float64, v []float64) {
	x[0] = math.Atan2(v[1], v[0])
	x[1] = m.frame - m.w0
	x[2] = x[1]
}

// Channels lists frequency (Hz), rocof (Hz/s) and v (V line-to-line rms).
func (m *FrequencyMeter) Channels() []facet.Channel {
	return []facet.Channel{
		{Name: "frequency", Unit: "Hz", Doc: "frequency of the phase-locked loop"},
		{Name: "rocof", Unit: "Hz/s", Doc: "rate of change of frequency, low-pass filtered"},
		{Name: "v", Unit: "V rms", Doc: "voltage at the terminal, line to line"},
	}
}

// Measure writes the channels.
func (m *FrequencyMeter) Measure(dst []float64, t float64, v, x []float64) {
	u, _ := m.phase(v, x)
	deviation := m.kp*imag(u) + x[1]
	dst = dst[:3]
	dst[0] = Hertz(m.w0 + deviation)
	dst[1] = Hertz(m.wr * (deviation - x[2]))
	dst[2] = LineVolts(abs(pair(v, 0)))
}

// Energy returns zeros: a meter draws nothing.
func (m *FrequencyMeter) Energy(t float64, v, x []float64) facet.Energy { return facet.Energy{} }
