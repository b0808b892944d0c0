package devices

import (
	"islet/solvers"
	"islet/solvers/facet"
)

// LineParams are the totals of a line, one phase.
type LineParams struct {
	// R and L are the series resistance (ohm) and inductance (H), both >= 0
	// and not both 0.
	R, L float64
	// C is the shunt capacitance (F), half of it at each end; 0 for none.
	C float64
	// RatedCurrent is the thermal rating (A rms), > 0: what currents are
	// compared with, and the base of their error norm.
	RatedCurrent float64
}

// LineData are the figures of a data sheet.
type LineData struct {
	// Resistance is in ohm/km.
	Resistance float64
	// Inductance is in mH/km. Give this or Reactance.
	Inductance float64
	// Reactance is in ohm/km at Frequency (Hz).
	Reactance, Frequency float64
	// Capacitance is in nF/km, 0 for none.
	Capacitance float64
	// Length is in km.
	Length float64
	// RatedCurrent is in A rms.
	RatedCurrent float64
}

// Params converts to SI totals. The error joins all faults.
func (d LineData) Params() (LineParams, error) {
	f := faults{device: "line"}
	f.positive("Length", d.Length, "km")
	f.notNegative("Resistance", d.Resistance, "ohm/km")
	f.notNegative("Inductance", d.Inductance, "mH/km")
	f.notNegative("Reactance", d.Reactance, "ohm/km")
	f.notNegative("Capacitance", d.Capacitance, "nF/km")
	l := d.Inductance * 1e-3
	if d.Reactance != 0 {
		if d.Inductance != 0 {
			f.add("Inductance = %v mH/km and Reactance = %v ohm/km: want one of them", d.Inductance, d.Reactance)
		}
		if f.positive("Frequency", d.Frequency, "Hz") {
			l = Henries(d.Reactance, d.Frequency)
		}
	}
	p := LineParams{
		R:            d.Resistance * d.Length,
		L:            l * d.Length,
		C:            d.Capacitance * 1e-9 * d.Length,
		RatedCurrent: d.RatedCurrent,
	}
	if len(f.errs) == 0 { // else the totals would repeat the faults
		p.check(&f)
	}
	if err := f.err(); err != nil {
		return LineParams{}, err
	}
	return p, nil
}

func (p LineParams) check(f *faults) {
	f.notNegative("R", p.R, "ohm")
	f.notNegative("L", p.L, "H")
	if p.R == 0 && p.L == 0 {
		f.add("R = 0 and L = 0: want one of them > 0")
	}
	f.notNegative("C", p.C, "F")
	f.positive("RatedCurrent", p.RatedCurrent, "A rms")
}

// Line is a line or a series branch between two terminals, "from" and "to",
// a pi section in the network frame:
//
//	L di/dt = v_from - v_to - (R + j omega_f L) i
//	flow_from =  i + j omega_f (C/2) v_from      and a mass of C/2
//	flow_to   = -i + j omega_f (C/2) v_to        and a mass of C/2
//
// with i (A peak) from "from" to "to". The quasi-steady level has no unknowns:
// i = (v_from - v_to) / (R + j omega_f L), and no mass. With L = 0 the line is a
// resistor (with its capacitors) at either level.
//
// Source: the nominal pi circuit of a short line, e.g. Grainger and Stevenson,
// Power System Analysis, chapter 6 (chapter number from memory).
type Line struct {
	timeless
	levels
	p     LineParams
	frame float64
	y     complex128 // 1/(R + j omega_f L)
}

// NewLine returns a line at level [Full]. The error joins all faults.
func NewLine(p LineParams) (*Line, error) {
	f := faults{device: "line"}
	p.check(&f)
	if err := f.err(); err != nil {
		return nil, err
	}
	l := &Line{p: p}
	l.SetFrame(0)
	return l, nil
}

// Params returns the parameters.
func (l *Line) Params() LineParams { return l.p }

// algebraic tells whether the current is no unknown.
func (l *Line) algebraic() bool { return l.quasi || l.p.L == 0 }

// Dims returns four port components and the unknowns i.d, i.q, or none.
func (l *Line) Dims() (ports, own int) {
	if l.algebraic() {
		return 4, 0
	}
	return 4, 2
}

// Mass writes C/2 at the terminals (0 at the quasi-steady level) and L.
func (l *Line) Mass(port, own []float64) {
	c := l.p.C / 2
	if l.quasi {
		c = 0
	}
	for k := range port {
		port[k] = c
	}
	for k := range own {
		own[k] = l.p.L
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (l *Line) SetFrame(speed float64) {
	l.frame = speed
	l.y = inverse(complex(l.p.R, speed*l.p.L))
}

// currents returns the series current and the flows.
func (l *Line) currents(v, x []float64) (i, from, to complex128) {
	v1, v2 := pair(v, 0), pair(v, 2)
	if l.algebraic() {
		i = l.y * (v1 - v2)
	} else {
		i = pair(x, 0)
	}
	b := l.frame * l.p.C / 2
	return i, i + jtimes(b, v1), jtimes(b, v2) - i
}

// Eval writes the flows (A) and L di/dt (V).
func (l *Line) Eval(flow, rate []float64, t float64, v, x []float64) error {
	i, from, to := l.currents(v, x)
	setPair(flow, 0, from)
	setPair(flow, 2, to)
	if l.algebraic() {
		if l.y == 0 {
			return errNoImpedance
		}
		return nil
	}
	setPair(rate, 0, pair(v, 0)-pair(v, 2)-complex(l.p.R, l.frame*l.p.L)*i)
	return nil
}

// Pattern lists the entries that can be nonzero.
func (l *Line) Pattern() []solvers.Entry {
	if l.algebraic() {
		return entryBlocks([2]int{0, 0}, [2]int{0, 2}, [2]int{2, 0}, [2]int{2, 2})
	}
	p := entryDiagonals([2]int{0, 4}, [2]int{2, 4}, [2]int{4, 0}, [2]int{4, 2})
	p = append(p, entryBlocks([2]int{4, 4})...)
	if l.p.C > 0 {
		p = append(p, entry{Row: 0, Col: 1}, entry{Row: 1, Col: 0}, entry{Row: 2, Col: 3}, entry{Row: 3, Col: 2})
	}
	return p
}

// Jacobian writes the exact Jacobian.
func (l *Line) Jacobian(jac []float64, t float64, v, x []float64) {
	b := l.frame * l.p.C / 2
	if l.algebraic() {
		block(jac, 4, 0, 0, l.y+complex(0, b))
		block(jac, 4, 0, 2, -l.y)
		block(jac, 4, 2, 0, -l.y)
		block(jac, 4, 2, 2, l.y+complex(0, b))
		return
	}
	diagonal(jac, 6, 0, 4, 1)
	diagonal(jac, 6, 2, 4, -1)
	diagonal(jac, 6, 4, 0, 1)
	diagonal(jac, 6, 4, 2, -1)
	block(jac, 6, 4, 4, complex(-l.p.R, -l.frame*l.p.L))
	if l.p.C > 0 {
		jac[0*6+1], jac[1*6+0] = -b, b
		jac[2*6+3], jac[3*6+2] = -b, b
	}
}

// Describe describes the line. Its terminals are held by the capacitors, if it
// has any; else the current is a state or the line is a tie.
func (l *Line) Describe() facet.Description {
	d := facet.Description{Kind: "line"}
	flow := facet.FlowState
	switch {
	case l.p.C > 0:
		flow = facet.FlowHeld
	case l.algebraic():
		flow = facet.FlowNone
		d.Ties = []facet.Tie{{A: 0, B: 1, Ratio: 1}}
	}
	d.Terminals = []facet.Terminal{{Name: "from", Flow: flow}, {Name: "to", Flow: flow}}
	if !l.algebraic() {
		i := statePair("i", "A", PeakAmperes(l.p.RatedCurrent), true, "network")
		d.Unknowns = i[:]
	}
	return d
}

// Guess writes the current of the phasor model.
func (l *Line) Guess(x []float64, t float64, v []float64) {
	if !l.algebraic() {
		setPair(x, 0, l.y*(pair(v, 0)-pair(v, 2)))
	}
}

// Channels lists p_from, q_from, p_to, q_to (W, var in) and the current i (A
// rms), or i_from and i_to if there is shunt capacitance.
func (l *Line) Channels() []facet.Channel { return branchChannels(l.p.C == 0) }

// Measure writes the channels.
func (l *Line) Measure(dst []float64, t float64, v, x []float64) {
	_, from, to := l.currents(v, x)
	measureBranch(dst, pair(v, 0), from, pair(v, 2), to)
}

// CurrentLimit returns the rated current (A peak) and the channel of the
// current at the first terminal.
func (l *Line) CurrentLimit() (limit float64, channel int) { return PeakAmperes(l.p.RatedCurrent), 4 }

// Energy returns (3/2) (L |i|^2 + (C/2) (|v_from|^2 + |v_to|^2)) / 2 as stored,
// nothing if quasi-steady, and (3/2) R |i|^2 as dissipated.
func (l *Line) Energy(t float64, v, x []float64) facet.Energy {
	i, _, _ := l.currents(v, x)
	e := facet.Energy{Dissipated: 1.5 * l.p.R * dot(i, i)}
	if !l.quasi {
		v1, v2 := pair(v, 0), pair(v, 2)
		e.Stored = 0.75 * (l.p.L*dot(i, i) + l.p.C/2*(dot(v1, v1)+dot(v2, v2)))
	}
	return e
}

// WithDetail returns the line at another level.
func (l *Line) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("line", level)
	if err != nil {
		return nil, err
	}
	c := *l
	c.levels = at
	return &c, nil
}
