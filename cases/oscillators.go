package cases

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"strings"

	"islet/devices"
	"islet/engine"
	"islet/engine/screen"
	"islet/solvers/facet"
)

// OscillatorNetwork is a case reduced to phase oscillators.
type OscillatorNetwork struct {
	screen.Reduced
	// ResistanceToReactance is the largest R/X among the branches of the case, that of
	// Branch.
	ResistanceToReactance float64
	Branch                string
	// Rated tells that voltages and draws are the rated ones, not those of an
	// operating point.
	Rated bool
	// Notes tell what the reduction leaves out.
	Notes []string
}

// Oscillators reduces a case at the present state of a simulation of it to phase
// oscillators: an inverter of droop, machine or oscillator control becomes one of D =
// 1/m that holds the voltage behind its virtual and grid-side impedance, a grid one
// that holds its speed and its inner voltage. All buses are eliminated (see
// [screen.Circuit.Reduce]); what loads and followers draw or feed, and losses, are
// shares of the sources, exact at that state.
func (c *Case) Oscillators(sim *engine.Simulation) (*OscillatorNetwork, error) {
	o := &oscillating{c: c, sys: sim.System(), sim: sim, t: sim.Time(), out: &OscillatorNetwork{}}
	return o.out, o.build()
}

// RatedOscillators does the same without an operating point, from a system of the case
// at its start: at rated voltages, with the powers that loads draw at them and
// followers are set to, carried to the sources by the network as a divider, without
// losses of second order. It is there where there is no operating point too.
func (c *Case) RatedOscillators(sys *engine.System) (*OscillatorNetwork, error) {
	o := &oscillating{c: c, sys: sys, out: &OscillatorNetwork{Rated: true}}
	return o.out, o.build()
}

// oscillating is a reduction under way.
type oscillating struct {
	c    *Case
	sys  *engine.System
	sim  *engine.Simulation // nil at rated voltages
	t    float64
	out  *OscillatorNetwork
	node []int     // of each bus; -1 for a dead one
	volt []float64 // of each bus, V peak
	// shift is by how much transformers turn each bus, rad.
	shift []float64
	cir   screen.Circuit
	errs  []error
}

// value reads a channel.
func (o *oscillating) value(channel string) float64 {
	v, err := o.sim.Value(channel)
	if err != nil {
		o.errs = append(o.errs, err)
	}
	return v
}

func (o *oscillating) build() error {
	c := o.c
	// Buses that closed breakers join are one node.
	join := newUnion(len(c.buses))
	for i := range c.devices {
		spec := &c.devices[i]
		if b, ok := o.sys.Device(spec.name).(*devices.Breaker); ok && b.Closed() {
			x, y := join.find(spec.at[0]), join.find(spec.at[1])
			join[max(x, y)] = min(x, y)
		}
	}
	o.node, o.volt = make([]int, len(c.buses)), make([]float64, len(c.buses))
	at := make(map[int]int)
	for b, spec := range c.buses {
		o.volt[b] = devices.PeakVolts(spec.volts)
		if o.sim != nil {
			o.volt[b] = devices.PeakVolts(o.value(spec.name + ".v"))
		}
		o.node[b] = -1
		if !(o.volt[b] > 0) {
			continue
		}
		r := join.find(b)
		n, ok := at[r]
		if !ok {
			n = len(o.cir.Buses)
			at[r] = n
			o.cir.Buses = append(o.cir.Buses, screen.CircuitBus{Name: spec.name, V: o.volt[b]})
		}
		o.node[b] = n
	}
	o.shifts()
	for i := range c.devices {
		o.device(&c.devices[i])
	}
	if err := errors.Join(o.errs...); err != nil {
		return err
	}
	if len(o.cir.Sources) == 0 {
		return errors.New("cases: no source sets a frequency: neither a grid nor a grid-forming inverter")
	}
	r, err := o.cir.Reduce()
	if err != nil {
		return err
	}
	o.out.Reduced = *r
	if o.out.Rated && len(r.Loose) > 0 {
		o.note("no source feeds %s; what they draw is left out", strings.Join(r.Loose, ", "))
	}
	if r.Capacitive > 1e-3 {
		o.note("branches of different R/X leave couplings of the wrong sign between some sources, up to %.2g of what couples one; they are left out", r.Capacitive)
	}
	return nil
}

// shifts finds by how much transformers turn each bus against the others.
func (o *oscillating) shifts() {
	type turn struct {
		to int
		by float64
	}
	next := make([][]turn, len(o.c.buses))
	tie := func(from, to int, by float64) {
		next[from] = append(next[from], turn{to, by})
		next[to] = append(next[to], turn{from, -by})
	}
	for i := range o.c.devices {
		spec := &o.c.devices[i]
		switch d := o.sys.Device(spec.name).(type) {
		case *devices.Breaker:
			if d.Closed() {
				tie(spec.at[0], spec.at[1], 0)
			}
		case *devices.Line:
			tie(spec.at[0], spec.at[1], 0)
		case *devices.Transformer:
			tie(spec.at[0], spec.at[1], -d.Params().Group.Lag())
		case *devices.ReducedNetwork:
			r := d.Params().Ratio
			for k := 1; k < len(spec.at); k++ {
				by := 0.0
				if r != nil {
					by = cmplx.Phase(r[k]) - cmplx.Phase(r[0])
				}
				tie(spec.at[0], spec.at[k], by)
			}
		}
	}
	o.shift = make([]float64, len(o.c.buses))
	seen := make([]bool, len(o.c.buses))
	for b := range seen {
		if seen[b] {
			continue
		}
		seen[b] = true
		for todo := []int{b}; len(todo) > 0; {
			from := todo[len(todo)-1]
			todo = todo[:len(todo)-1]
			for _, t := range next[from] {
				if !seen[t.to] {
					seen[t.to] = true
					o.shift[t.to] = o.shift[from] + t.by
					todo = append(todo, t.to)
				}
			}
		}
	}
}

// speed is what reactances are taken at.
func (o *oscillating) speed(bus int) float64 {
	if o.sim != nil {
		return o.sim.FrameSpeed(o.c.buses[bus].name)
	}
	return devices.RadPerSecond(o.c.Frequency)
}

// draw takes power out of a bus. It is of account at rated voltages alone.
func (o *oscillating) draw(bus int, s complex128) { o.cir.Buses[o.node[bus]].Draw += s }

// branch adds a branch of admittance y.
func (o *oscillating) branch(name string, from, to int, y complex128, kFrom, kTo float64) {
	if o.node[from] == o.node[to] {
		return
	}
	o.cir.Branches = append(o.cir.Branches, screen.CircuitBranch{Name: name, From: o.node[from], To: o.node[to], Y: y, KFrom: kFrom, KTo: kTo})
	o.ratio(name, y)
}

// ratio keeps the largest R/X.
func (o *oscillating) ratio(name string, y complex128) {
	if rx := math.Abs(real(y) / imag(y)); !(rx <= o.out.ResistanceToReactance) {
		o.out.ResistanceToReactance, o.out.Branch = rx, name
	}
}

// source adds a source of inner voltage of magnitude volts, with its terminal's
// powers p and q at the operating point, and gives as what its control measures.
func (o *oscillating) source(v screen.Node, bus int, volts float64, z complex128, gives string) {
	s := screen.CircuitSource{Node: v, E: complex(volts, 0), Z: z, Bus: o.node[bus], Gives: math.NaN()}
	if o.sim != nil {
		w := cmplx.Rect(o.volt[bus], o.value(o.c.buses[bus].name+".angle")*math.Pi/180-o.shift[bus])
		power := complex(o.value(v.Name+".p"), o.value(v.Name+".q"))
		s.E = w + z*cmplx.Conj(power/(1.5*w))
		s.Gives = o.value(v.Name + "." + gives)
	}
	o.cir.Sources = append(o.cir.Sources, s)
	o.ratio(v.Name, 1/z)
}

func (o *oscillating) note(format string, a ...any) {
	o.out.Notes = append(o.out.Notes, fmt.Sprintf(format, a...))
}

// setpoint returns a setpoint's present value, or another one where there is none.
func (o *oscillating) setpoint(d facet.Adjustable, name string, other float64) float64 {
	for _, s := range d.Setpoints(o.t) {
		if s.Name == name {
			return s.Value
		}
	}
	return other
}

func (o *oscillating) device(spec *deviceSpec) {
	for _, b := range spec.at {
		if o.node[b] < 0 {
			return // at a dead bus: it takes no part
		}
	}
	bus := spec.at[0]
	w := o.speed(bus)
	switch d := o.sys.Device(spec.name).(type) {
	case *devices.Breaker:
	case *devices.GridForming:
		o.former(spec, d, w)
	case *devices.Grid:
		g := d.Params()
		speed := devices.RadPerSecond(o.setpoint(d, "frequency", g.Frequency))
		volts := devices.PeakVolts(o.setpoint(d, "voltage", g.Voltage))
		o.source(screen.Node{Name: spec.name, D: math.Inf(1), Speed: speed, Rating: g.VA}, bus, volts, complex(g.R, w*g.L), "p")
	case *devices.GridFollowing:
		p := d.Params()
		o.draw(bus, -complex(o.setpoint(d, "p", p.P), o.setpoint(d, "q", p.Q)))
	case *devices.Line:
		l := d.Params()
		o.branch(spec.name, bus, spec.at[1], 1/complex(l.R, w*l.L), 1, 1)
		for _, b := range spec.at {
			o.draw(b, complex(0, -0.75*w*l.C*o.volt[b]*o.volt[b])) // C/2 at each end
		}
	case *devices.Transformer:
		t := d.Params()
		// R and L are referred to the low-voltage side, the second terminal.
		o.branch(spec.name, bus, spec.at[1], 1/complex(t.R, w*t.L), t.HV/t.LV, 1)
		y := complex(0, 0)
		if t.CoreR > 0 {
			y += complex(1/t.CoreR, 0)
		}
		if t.MagnetisingL > 0 {
			y += 1 / complex(t.MagnetisingR, w*t.MagnetisingL)
		}
		o.draw(bus, complex(1.5*o.volt[bus]*o.volt[bus], 0)*cmplx.Conj(y))
	case *devices.ReducedNetwork:
		o.reduced(spec, d, w)
	default:
		o.passive(spec, d, w)
	}
}

// passive adds what a device at one bus draws: at rated voltage what its quasi-steady
// equations give.
func (o *oscillating) passive(spec *deviceSpec, d engine.Device, w float64) {
	draws := false
	if f, ok := d.(facet.Measurer); ok {
		for _, ch := range f.Channels() {
			draws = draws || ch.Name == "p" || ch.Name == "p_from"
		}
	}
	if !draws || o.sim != nil {
		return // a meter; or all is in what sources give
	}
	leave := func() {
		o.note("%s, a %s, has no power at rated voltage and is left out", spec.name, spec.kind.name)
	}
	f, ok := d.(facet.Detailed)
	if !ok || len(spec.at) != 1 {
		leave()
		return
	}
	b, err := f.WithDetail(devices.QuasiSteady)
	if err != nil {
		leave()
		return
	}
	if ports, own := b.Dims(); ports != 2 || own != 0 {
		leave()
		return
	}
	if t, ok := b.(facet.Framed); ok {
		t.SetFrame(w)
	}
	flow := make([]float64, 2)
	v := o.volt[spec.at[0]]
	if err := b.Eval(flow, nil, o.t, []float64{v, 0}, nil); err != nil {
		leave()
		return
	}
	o.draw(spec.at[0], complex(1.5*v, 0)*complex(flow[0], -flow[1]))
}

// former adds a grid-forming inverter.
func (o *oscillating) former(spec *deviceSpec, d *devices.GridForming, w float64) {
	q := d.Params()
	volts := devices.PeakVolts(o.setpoint(d, "voltage", devices.LineVolts(q.V0)))
	v := screen.Node{
		Name:   spec.name,
		Speed:  devices.RadPerSecond(o.setpoint(d, "frequency", q.Omega0/(2*math.Pi))),
		P:      o.setpoint(d, "p", q.P),
		Rating: q.Rating,
	}
	psi := 0.0
	switch k := q.Primary.(type) {
	case devices.Droop:
		v.D, psi = 1/k.M, k.Psi
	case devices.VirtualMachine:
		v.D, psi = k.D, k.Psi
		if k.D == 0 {
			o.errs = append(o.errs, fmt.Errorf("cases: %s is a virtual machine without damping: no phase oscillator stands for it", spec.name))
			return
		}
	case devices.Oscillator:
		v.D, psi = 1.5*volts*volts/k.Eta, k.Psi
	}
	if math.Abs(psi-math.Pi/2) > 1e-9 {
		o.note("%s sets its frequency by a mixture of P and Q (psi = %.4g degrees); the screen takes P alone", spec.name, psi*180/math.Pi)
	}
	o.source(v, spec.at[0], volts, complex(q.Rv+q.Filter.Rg, q.Xv+w*q.Filter.Lg), "p_control")
}

// reduced adds the branches between the terminals of a reduced network.
func (o *oscillating) reduced(spec *deviceSpec, d *devices.ReducedNetwork, w float64) {
	p := d.Params()
	turns := func(j int) float64 {
		if p.Ratio == nil {
			return 1
		}
		return cmplx.Abs(p.Ratio[j])
	}
	for a := range spec.at {
		for b := a + 1; b < len(spec.at); b++ {
			var y complex128
			for k := range p.R {
				y -= complex(p.Drive[k][a]*p.Drive[k][b], 0) / complex(p.R[k], w*p.L[k])
			}
			if cmplx.Abs(y) > 0 {
				o.branch(fmt.Sprintf("%s, %s to %s", spec.name, o.c.buses[spec.at[a]].name, o.c.buses[spec.at[b]].name),
					spec.at[a], spec.at[b], y, turns(a), turns(b))
			}
		}
	}
}
