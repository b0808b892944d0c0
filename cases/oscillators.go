package cases

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"islet/devices"
	"islet/engine"
	"islet/engine/screen"
	"islet/solvers/facet"
)

// OscillatorNetwork is a case reduced to phase oscillators.
type OscillatorNetwork struct {
	screen.Network
	// ResistanceToReactance is the largest R/X among its branches, that of Branch:
	// the reduction neglects resistance but for its losses.
	ResistanceToReactance float64
	Branch                string
	// Notes tell what the reduction leaves out.
	Notes []string
}

// Oscillators reduces a case at the present state of a simulation of it to phase
// oscillators: a source of droop, machine or oscillator control becomes a node of D =
// 1/m behind its virtual and grid-side impedance, a grid a node that holds its speed;
// buses are nodes; lines, transformers and reduced networks branches of (3/2) V_i V_j
// / |Z|, with the voltages of that state; closed breakers join buses. What loads and
// followers draw or feed, and losses, are constant powers at their present values.
func (c *Case) Oscillators(sim *engine.Simulation) (*OscillatorNetwork, error) {
	o := &oscillating{c: c, sim: sim, out: &OscillatorNetwork{}}
	return o.out, o.build()
}

// oscillating is a reduction under way.
type oscillating struct {
	c    *Case
	sim  *engine.Simulation
	out  *OscillatorNetwork
	node []int     // of each bus; -1 for a dead one
	volt []float64 // of each bus, V peak
	errs []error
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
		if b, ok := o.sim.System().Device(spec.name).(*devices.Breaker); ok && b.Closed() {
			x, y := join.find(spec.at[0]), join.find(spec.at[1])
			join[max(x, y)] = min(x, y)
		}
	}
	o.node, o.volt = make([]int, len(c.buses)), make([]float64, len(c.buses))
	at := make(map[int]int)
	for b, spec := range c.buses {
		o.volt[b] = devices.PeakVolts(o.value(spec.name + ".v"))
		o.node[b] = -1
		if !(o.volt[b] > 0) {
			continue
		}
		r := join.find(b)
		n, ok := at[r]
		if !ok {
			n = len(o.out.Nodes)
			at[r] = n
			o.out.Nodes = append(o.out.Nodes, screen.Node{Name: spec.name})
		}
		o.node[b] = n
	}
	for i := range c.devices {
		o.device(&c.devices[i])
	}
	return errors.Join(o.errs...)
}

// draw takes power out of a bus.
func (o *oscillating) draw(bus int, watts float64) {
	o.out.Nodes[o.node[bus]].P -= watts
}

// branch adds a branch of impedance z between nodes with the voltages at its ends.
func (o *oscillating) branch(name string, from, to int, vFrom, vTo float64, z complex128) {
	if from == to {
		return
	}
	o.out.Edges = append(o.out.Edges, screen.Edge{Name: name, From: from, To: to, A: 1.5 * vFrom * vTo / cmplx.Abs(z)})
	if rx := math.Abs(real(z) / imag(z)); !(rx <= o.out.ResistanceToReactance) {
		o.out.ResistanceToReactance, o.out.Branch = rx, name
	}
}

func (o *oscillating) note(format string, a ...any) {
	o.out.Notes = append(o.out.Notes, fmt.Sprintf(format, a...))
}

func (o *oscillating) device(spec *deviceSpec) {
	for _, b := range spec.at {
		if o.node[b] < 0 {
			return // at a dead bus: it takes no part
		}
	}
	bus := spec.at[0]
	w := o.sim.FrameSpeed(o.c.buses[bus].name) // for reactances
	dev := o.sim.System().Device(spec.name)
	p := func(channel string) float64 { return o.value(spec.name + "." + channel) }
	switch d := dev.(type) {
	case *devices.Breaker:
	case *devices.GridForming:
		o.former(spec, d, w)
	case *devices.Grid:
		g := d.Params()
		z := complex(g.R, w*g.L)
		n := len(o.out.Nodes)
		speed := devices.RadPerSecond(g.Frequency)
		for _, s := range d.Setpoints(o.sim.Time()) {
			if s.Name == "frequency" {
				speed = devices.RadPerSecond(s.Value)
			}
		}
		given := p("p")
		o.out.Nodes = append(o.out.Nodes, screen.Node{Name: spec.name, D: math.Inf(1), Speed: speed, P: given, Rating: g.VA})
		o.branch(spec.name, n, o.node[bus], devices.PeakVolts(g.Voltage), o.volt[bus], z)
	case *devices.Line:
		l := d.Params()
		o.branch(spec.name, o.node[spec.at[0]], o.node[spec.at[1]], o.volt[spec.at[0]], o.volt[spec.at[1]], complex(l.R, w*l.L))
		o.losses(spec, p("p_from")+p("p_to"))
	case *devices.Transformer:
		t := d.Params()
		// Referred to the low-voltage side, the second terminal.
		o.branch(spec.name, o.node[spec.at[0]], o.node[spec.at[1]], o.volt[spec.at[0]]*t.LV/t.HV, o.volt[spec.at[1]], complex(t.R, w*t.L))
		o.losses(spec, p("p_from")+p("p_to"))
	case *devices.ReducedNetwork:
		o.reduced(spec, d, w)
	default:
		f, ok := dev.(facet.Measurer)
		if !ok || len(spec.at) != 1 {
			o.note("%s, a %s, has no place in a network of phase oscillators and is left out", spec.name, spec.kind.name)
			return
		}
		for _, ch := range f.Channels() {
			if ch.Name != "p" {
				continue
			}
			if ch.Unit == "W generated" {
				o.draw(bus, -p("p"))
			} else {
				o.draw(bus, p("p"))
			}
		}
	}
}

// losses takes what a branch loses out of its ends, half each.
func (o *oscillating) losses(spec *deviceSpec, watts float64) {
	o.draw(spec.at[0], watts/2)
	o.draw(spec.at[1], watts/2)
}

// former adds a grid-forming inverter.
func (o *oscillating) former(spec *deviceSpec, d *devices.GridForming, w float64) {
	q := d.Params()
	v := screen.Node{Name: spec.name, Speed: q.Omega0, Rating: q.Rating}
	volts := q.V0
	for _, s := range d.Setpoints(o.sim.Time()) {
		switch s.Name {
		case "p":
			v.P = s.Value
		case "frequency":
			v.Speed = devices.RadPerSecond(s.Value)
		case "voltage":
			volts = devices.PeakVolts(s.Value)
		}
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
	z := complex(q.Rv+q.Filter.Rg, q.Xv+w*q.Filter.Lg)
	bus := spec.at[0]
	s := complex(o.value(spec.name+".p"), o.value(spec.name+".q"))
	i := cmplx.Conj(s / complex(1.5*o.volt[bus], 0))
	inner := cmplx.Abs(complex(o.volt[bus], 0) + z*i)
	n := len(o.out.Nodes)
	o.out.Nodes = append(o.out.Nodes, v)
	o.branch(spec.name, n, o.node[bus], inner, o.volt[bus], z)
	o.draw(bus, o.value(spec.name+".p_control")-real(s))
}

// reduced adds the branches between the terminals of a reduced network.
func (o *oscillating) reduced(spec *deviceSpec, d *devices.ReducedNetwork, w float64) {
	p := d.Params()
	if p.Ratio != nil {
		for _, r := range p.Ratio {
			if cmplx.Abs(r-complex(cmplx.Abs(r), 0)) > 1e-9 {
				o.note("%s shifts phases; the screen takes its branches without", spec.name)
				break
			}
		}
	}
	side := func(j int) float64 {
		v := o.volt[spec.at[j]]
		if p.Ratio != nil {
			v /= cmplx.Abs(p.Ratio[j])
		}
		return v
	}
	for a := range spec.at {
		for b := a + 1; b < len(spec.at); b++ {
			var y complex128
			for k := range p.R {
				y -= complex(p.Drive[k][a]*p.Drive[k][b], 0) / complex(p.R[k], w*p.L[k])
			}
			if cmplx.Abs(y) > 0 {
				o.branch(fmt.Sprintf("%s, %s to %s", spec.name, o.c.buses[spec.at[a]].name, o.c.buses[spec.at[b]].name),
					o.node[spec.at[a]], o.node[spec.at[b]], side(a), side(b), 1/y)
			}
		}
	}
}
