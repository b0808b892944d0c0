package devices

import (
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// TransformerParams are the elements of a two-winding transformer, one phase of
// the equivalent star.
type TransformerParams struct {
	// HV and LV are the rated voltages (V line-to-line rms), > 0. Their
	// quotient is the turns ratio; for another tap position give its voltage.
	HV, LV float64
	// Group gives the phase shift.
	Group VectorGroup
	// R and L are the series resistance (ohm, >= 0) and inductance (H, > 0),
	// referred to the low-voltage side.
	R, L float64
	// CoreR is the resistor of the core loss, ohm at the high-voltage
	// terminals; 0 for none.
	CoreR float64
	// MagnetisingL is the magnetising inductance, H at the high-voltage
	// terminals, 0 for none, and MagnetisingR a resistance in series with it,
	// ohm, which lets a DC offset of the flux decay (see
	// TransformerRating.QualityFactor).
	MagnetisingL, MagnetisingR float64
	// VA is the three-phase rating, > 0: it gives the rated currents, which
	// are the bases of the error norm.
	VA float64
}

// TransformerRating is a transformer's nameplate.
type TransformerRating struct {
	// VA is the three-phase rating; HV and LV the rated voltages, V
	// line-to-line rms; Frequency in Hz.
	VA, HV, LV, Frequency float64
	// Group is the vector group.
	Group VectorGroup
	// Impedance is the short-circuit voltage, %.
	Impedance float64
	// XR is the ratio X/R of the short-circuit impedance, +Inf for R = 0. Give
	// this or Resistance.
	XR float64
	// Resistance is the resistive part of the short-circuit voltage, %: the
	// load loss at rated current as a percentage of VA.
	Resistance float64
	// NoLoadCurrent (% of rated current) and NoLoadLoss (W) describe the
	// magnetising branch; both 0 for none.
	NoLoadCurrent, NoLoadLoss float64
	// QualityFactor is omega L / R of the magnetising inductance at rated
	// frequency: a lossless one would keep the DC offset of its flux for tens
	// of seconds. 0 means DefaultQualityFactor, +Inf a lossless one. What its
	// resistance draws is part of NoLoadLoss; where that is less, the quality
	// factor is raised to suit.
	QualityFactor float64
}

// Params returns the elements that show exactly these figures in the open- and
// short-circuit tests at rated frequency, the open-circuit test made from the
// high-voltage side. The error joins all faults.
func (r TransformerRating) Params() (TransformerParams, error) {
	f := faults{device: "transformer"}
	f.positive("VA", r.VA, "VA")
	f.positive("HV", r.HV, "V")
	f.positive("LV", r.LV, "V")
	f.positive("Frequency", r.Frequency, "Hz")
	checkGroup(&f, r.Group)
	f.positive("Impedance", r.Impedance, "%")
	resistance := r.Resistance
	switch {
	case (r.XR == 0) == (r.Resistance == 0):
		f.add("XR = %v and Resistance = %v %%: want one of them, XR = +Inf for no resistance", r.XR, r.Resistance)
	case r.XR != 0:
		if math.IsInf(r.XR, 1) || f.positive("XR", r.XR, "") {
			resistance, _ = SplitXR(r.Impedance, r.XR)
		}
	default:
		f.check(r.Resistance > 0 && r.Resistance < r.Impedance, "Resistance", r.Resistance, "%", "a value > 0 and less than Impedance")
	}
	f.notNegative("NoLoadCurrent", r.NoLoadCurrent, "%")
	f.notNegative("NoLoadLoss", r.NoLoadLoss, "W")
	apparent := r.NoLoadCurrent / 100 * r.VA
	if r.NoLoadLoss > apparent*(1+1e-9) {
		f.add("NoLoadLoss = %v W: want at most the no-load current's %v VA", r.NoLoadLoss, apparent)
	}
	quality := checkQuality(&f, r.QualityFactor)
	if err := f.err(); err != nil {
		return TransformerParams{}, err
	}
	base := BaseOhms(r.LV, r.VA)
	reactance := math.Sqrt(r.Impedance*r.Impedance - resistance*resistance)
	p := TransformerParams{
		HV: r.HV, LV: r.LV, Group: r.Group, VA: r.VA,
		R: resistance / 100 * base,
		L: Henries(reactance/100*base, r.Frequency),
	}
	vars := math.Sqrt(max(0, apparent*apparent-r.NoLoadLoss*r.NoLoadLoss))
	if vars > 0 {
		// Not less than vars/loss: the inductor alone draws all of the loss.
		quality = max(quality, vars/r.NoLoadLoss)
		p.MagnetisingL, p.MagnetisingR = shuntInductor(vars, r.HV, r.Frequency, quality)
	}
	if rest := r.NoLoadLoss - vars/quality; rest > 1e-12*r.NoLoadLoss {
		p.CoreR = BaseOhms(r.HV, rest)
	}
	return p, nil
}

// checkGroup wants a vector group that ParseVectorGroup could have returned.
func checkGroup(f *faults, g VectorGroup) {
	if _, err := ParseVectorGroup(g.String()); err != nil {
		f.add("Group = %q: want one like Yy0, Dyn11, YNd1", g.String())
	}
}

func (p TransformerParams) check(f *faults) {
	f.positive("HV", p.HV, "V")
	f.positive("LV", p.LV, "V")
	checkGroup(f, p.Group)
	f.notNegative("R", p.R, "ohm")
	f.positive("L", p.L, "H")
	f.notNegative("CoreR", p.CoreR, "ohm")
	f.notNegative("MagnetisingL", p.MagnetisingL, "H")
	f.notNegative("MagnetisingR", p.MagnetisingR, "ohm")
	if p.MagnetisingL == 0 && p.MagnetisingR != 0 {
		f.add("MagnetisingR = %v ohm without MagnetisingL: want MagnetisingL > 0, or the resistance as CoreR", p.MagnetisingR)
	}
	f.positive("VA", p.VA, "VA")
}

// Transformer is a two-winding transformer from "from", the high-voltage
// terminal, to "to", the low-voltage one, in balanced operation: an ideal
// transformer of complex ratio rho = (LV/HV) e^{-j lag} that conserves P and Q,
// its series impedance on the low-voltage side, and the magnetising branch at
// the high-voltage terminal (a Gamma circuit). In the network frame:
//
//	L di/dt = rho v_from - v_to - (R + j omega_f L) i
//	L_m di_m/dt = v_from - (R_m + j omega_f L_m) i_m
//	flow_from = rho* i + i_m + v_from / R_core
//	flow_to   = -i
//
// i (A peak) is the low-voltage side's series current towards "to". The
// quasi-steady level has no unknowns: both currents are those of the phasor
// model.
//
// Source: the per-phase equivalent circuit with the phase shift of a Y-delta
// bank as a complex ratio, e.g. Grainger and Stevenson, Power System Analysis,
// chapters 2 and 9 (chapter numbers from memory).
type Transformer struct {
	timeless
	levels
	p     TransformerParams
	rho   complex128 // v_to / v_from of the ideal transformer
	g     float64    // 1/R_core, S
	frame float64
	ys    complex128 // 1/(R + j omega_f L)
	ym    complex128 // 1/(R_m + j omega_f L_m), 0 without
}

// NewTransformer returns a transformer at level [Full]. The error joins all
// faults.
func NewTransformer(p TransformerParams) (*Transformer, error) {
	f := faults{device: "transformer"}
	p.check(&f)
	if err := f.err(); err != nil {
		return nil, err
	}
	w := &Transformer{p: p, rho: times(p.LV/p.HV, rotor(-p.Group.Lag()))}
	if p.CoreR > 0 {
		w.g = 1 / p.CoreR
	}
	w.SetFrame(0)
	return w, nil
}

// Params returns the parameters.
func (w *Transformer) Params() TransformerParams { return w.p }

// magnetised tells whether there is a magnetising inductance.
func (w *Transformer) magnetised() bool { return w.p.MagnetisingL > 0 }

// Dims returns four port components and the unknowns i.d, i.q and, with a
// magnetising inductance, i_m.d, i_m.q; none at the quasi-steady level.
func (w *Transformer) Dims() (ports, own int) {
	switch {
	case w.quasi:
		return 4, 0
	case w.magnetised():
		return 4, 4
	}
	return 4, 2
}

// Mass writes 0 at the terminals, L and L_m.
func (w *Transformer) Mass(port, own []float64) {
	clear(port)
	for k := range own {
		own[k] = w.p.L
		if k >= 2 {
			own[k] = w.p.MagnetisingL
		}
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (w *Transformer) SetFrame(speed float64) {
	w.frame = speed
	w.ys = inverse(complex(w.p.R, speed*w.p.L))
	w.ym = 0
	if w.magnetised() {
		w.ym = inverse(complex(w.p.MagnetisingR, speed*w.p.MagnetisingL))
	}
}

// currents returns the series current (low-voltage side) and the current of
// the magnetising inductance.
func (w *Transformer) currents(v, x []float64) (i, im complex128) {
	if w.quasi {
		v1, v2 := pair(v, 0), pair(v, 2)
		return w.ys * (w.rho*v1 - v2), w.ym * v1
	}
	i = pair(x, 0)
	if len(x) > 2 {
		im = pair(x, 2)
	}
	return i, im
}

// flows returns the currents into the terminals.
func (w *Transformer) flows(v, x []float64) (from, to complex128) {
	i, im := w.currents(v, x)
	return conj(w.rho)*i + im + times(w.g, pair(v, 0)), -i
}

// Eval writes the flows (A), L di/dt and L_m di_m/dt (V).
func (w *Transformer) Eval(flow, rate []float64, t float64, v, x []float64) error {
	from, to := w.flows(v, x)
	setPair(flow, 0, from)
	setPair(flow, 2, to)
	if w.quasi {
		if w.ys == 0 || w.magnetised() && w.ym == 0 {
			return errNoImpedance
		}
		return nil
	}
	v1, v2 := pair(v, 0), pair(v, 2)
	setPair(rate, 0, w.rho*v1-v2-complex(w.p.R, w.frame*w.p.L)*pair(x, 0))
	if len(x) > 2 {
		setPair(rate, 2, v1-complex(w.p.MagnetisingR, w.frame*w.p.MagnetisingL)*pair(x, 2))
	}
	return nil
}

// Pattern lists the entries that can be nonzero.
func (w *Transformer) Pattern() []solvers.Entry {
	if w.quasi {
		return entryBlocks([2]int{0, 0}, [2]int{0, 2}, [2]int{2, 0}, [2]int{2, 2})
	}
	p := entryBlocks([2]int{0, 4}, [2]int{4, 0}, [2]int{4, 4})
	p = append(p, entryDiagonals([2]int{2, 4}, [2]int{4, 2})...)
	if w.g > 0 {
		p = append(p, entryDiagonals([2]int{0, 0})...)
	}
	if w.magnetised() {
		p = append(p, entryDiagonals([2]int{0, 6}, [2]int{6, 0})...)
		p = append(p, entryBlocks([2]int{6, 6})...)
	}
	return p
}

// Jacobian writes the exact Jacobian.
func (w *Transformer) Jacobian(jac []float64, t float64, v, x []float64) {
	rho := w.rho
	if w.quasi {
		block(jac, 4, 0, 0, conj(rho)*w.ys*rho+w.ym+complex(w.g, 0))
		block(jac, 4, 0, 2, -conj(rho)*w.ys)
		block(jac, 4, 2, 0, -w.ys*rho)
		block(jac, 4, 2, 2, w.ys)
		return
	}
	n := 4 + len(x)
	block(jac, n, 0, 4, conj(rho))
	diagonal(jac, n, 2, 4, -1)
	block(jac, n, 4, 0, rho)
	diagonal(jac, n, 4, 2, -1)
	block(jac, n, 4, 4, complex(-w.p.R, -w.frame*w.p.L))
	if w.g > 0 {
		diagonal(jac, n, 0, 0, w.g)
	}
	if len(x) > 2 {
		diagonal(jac, n, 0, 6, 1)
		diagonal(jac, n, 6, 0, 1)
		block(jac, n, 6, 6, complex(-w.p.MagnetisingR, -w.frame*w.p.MagnetisingL))
	}
}

// Describe describes the transformer. The high-voltage terminal is held if a
// resistance takes part in its flow; the quasi-steady series impedance is a tie.
func (w *Transformer) Describe() facet.Description {
	from, to := facet.FlowState, facet.FlowState
	d := facet.Description{Kind: "transformer"}
	if w.quasi {
		from, to = facet.FlowNone, facet.FlowNone
		d.Ties = []facet.Tie{{A: 0, B: 1, Ratio: 1 / w.rho}}
	}
	if w.g > 0 || w.quasi && w.magnetised() {
		from = facet.FlowHeld
	}
	d.Terminals = []facet.Terminal{{Name: "from", Flow: from}, {Name: "to", Flow: to}}
	if w.quasi {
		return d
	}
	i := statePair("i", "A", PeakAmperes(RatedAmperes(w.p.VA, w.p.LV)), true, "network")
	d.Unknowns = i[:]
	if w.magnetised() {
		im := statePair("i_m", "A", PeakAmperes(RatedAmperes(w.p.VA, w.p.HV)), true, "network")
		d.Unknowns = append(d.Unknowns, im[:]...)
	}
	return d
}

// Guess writes the currents of the phasor model.
func (w *Transformer) Guess(x []float64, t float64, v []float64) {
	v1, v2 := pair(v, 0), pair(v, 2)
	if len(x) >= 2 {
		setPair(x, 0, w.ys*(w.rho*v1-v2))
	}
	if len(x) > 2 {
		setPair(x, 2, w.ym*v1)
	}
}

// OpenRatio returns the voltage of terminal to over that of terminal from with
// nothing connected to to, at the frame's speed: the ratio of the windings, less
// what the magnetising current drops in the series impedance when the
// transformer is fed from its low-voltage side.
func (w *Transformer) OpenRatio(from, to int) complex128 {
	if from == 0 && to == 1 {
		return w.rho
	}
	// v_from (|rho|^2 y_s + y_shunt) = rho* y_s v_to
	shunt := w.ym + complex(w.g, 0)
	return conj(w.rho) / (complex(dot(w.rho, w.rho), 0) + shunt*complex(w.p.R, w.frame*w.p.L))
}

// Channels lists p_from, q_from, p_to, q_to (W, var in), i_from and i_to (A rms).
func (w *Transformer) Channels() []facet.Channel { return branchChannels(false) }

// Measure writes the channels.
func (w *Transformer) Measure(dst []float64, t float64, v, x []float64) {
	from, to := w.flows(v, x)
	measureBranch(dst, pair(v, 0), from, pair(v, 2), to)
}

// CurrentLimit returns the low-voltage side's rated current (A peak) and the
// channel i_to.
func (w *Transformer) CurrentLimit() (limit float64, channel int) {
	return PeakAmperes(RatedAmperes(w.p.VA, w.p.LV)), 5
}

// Energy returns (3/2) (L |i|^2 + L_m |i_m|^2) / 2 as stored, nothing if
// quasi-steady, and (3/2) (R |i|^2 + R_m |i_m|^2 + |v_from|^2 / R_core) as
// dissipated.
func (w *Transformer) Energy(t float64, v, x []float64) facet.Energy {
	i, im := w.currents(v, x)
	v1 := pair(v, 0)
	e := facet.Energy{
		Dissipated: 1.5 * (w.p.R*dot(i, i) + w.p.MagnetisingR*dot(im, im) + w.g*dot(v1, v1)),
	}
	if !w.quasi {
		e.Stored = 0.75 * (w.p.L*dot(i, i) + w.p.MagnetisingL*dot(im, im))
	}
	return e
}

// WithDetail returns the transformer at another level.
func (w *Transformer) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("transformer", level)
	if err != nil {
		return nil, err
	}
	c := *w
	c.levels = at
	return &c, nil
}
