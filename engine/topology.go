package engine

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"sort"

	"islet/solvers"
	"islet/solvers/facet"
)

// island is a connected part of the network that a source holds.
type island struct {
	buses   []int
	devices []int
	formers []int // devices that can hold voltage and frequency, heaviest first
	frame   frame
	// quasi tells that some element has algebraic unknowns or conductances
	// whose value depends on the frame's speed.
	quasi bool
}

// frame is a rotating network frame: its d axis is at angle
// angle + speed (t - since) from phase a.
type frame struct {
	speed float64 // rad/s
	angle float64 // rad, at time since
	since float64 // s
}

func (f frame) at(t float64) float64 { return f.angle + f.speed*(t-f.since) }

// topology is what a graph search finds.
type topology struct {
	islands []island
	busOf   []int  // bus -> island, -1 if dead
	off     []bool // device -> takes no part
	hidden  []solvers.Combination
}

// union-find over 0..n-1
type unionFind []int

func newUnionFind(n int) unionFind {
	u := make(unionFind, n)
	for i := range u {
		u[i] = i
	}
	return u
}

func (u unionFind) find(i int) int {
	for u[i] != i {
		u[i] = u[u[i]]
		i = u[i]
	}
	return i
}

func (u unionFind) join(a, b int) { u[u.find(a)] = u.find(b) }

// connects reports whether a device ties its buses into one island.
func (m *member) connects() bool {
	return !m.tripped && (m.swtch == nil || m.swtch.Closed())
}

// search finds islands, dead parts and the current laws of index 2 for the
// present switch positions. Descriptions are read anew.
func (s *System) search() (*topology, error) {
	u := newUnionFind(len(s.buses))
	for _, m := range s.devices {
		m.desc = m.dev.Describe()
		if m.connects() {
			for _, b := range m.buses[1:] {
				u.join(m.buses[0], b)
			}
		}
	}
	t := &topology{busOf: make([]int, len(s.buses)), off: make([]bool, len(s.devices))}
	held := make(map[int]int) // root -> island
	for i, m := range s.devices {
		if m.former == nil || m.tripped {
			continue
		}
		r := u.find(m.buses[0])
		k, ok := held[r]
		if !ok {
			k = len(t.islands)
			held[r] = k
			t.islands = append(t.islands, island{})
		}
		t.islands[k].formers = append(t.islands[k].formers, i)
	}
	for b := range s.buses {
		k, ok := held[u.find(b)]
		if !ok {
			k = -1
		} else {
			t.islands[k].buses = append(t.islands[k].buses, b)
		}
		t.busOf[b] = k
	}
	for k := range t.islands {
		f := t.islands[k].formers
		sort.SliceStable(f, func(i, j int) bool {
			return s.devices[f[i]].former.Weight() > s.devices[f[j]].former.Weight()
		})
	}
	for i, m := range s.devices {
		t.off[i] = m.tripped
		for _, b := range m.buses {
			if t.busOf[b] < 0 {
				t.off[i] = true
			}
		}
		if !t.off[i] {
			k := t.busOf[m.buses[0]]
			t.islands[k].devices = append(t.islands[k].devices, i)
		}
	}
	err := s.findIndex(t)
	return t, err
}

// findIndex finds the groups of buses tied by conductive paths without one to
// ground. The current law of such a group, summed with weights in which the
// ties cancel, holds inductor currents alone: it is handed to the solver as
// hidden. A group whose flows are not all states has no solution.
func (s *System) findIndex(t *topology) error {
	n := len(s.buses)
	parent := make([]int, n)
	ratio := make([]complex128, n) // v_bus = ratio v_parent with no flow
	for i := range parent {
		parent[i], ratio[i] = i, 1
	}
	var find func(i int) (int, complex128)
	find = func(i int) (int, complex128) {
		if parent[i] == i {
			return i, 1
		}
		r, c := find(parent[i])
		parent[i], ratio[i] = r, ratio[i]*c
		return r, ratio[i]
	}
	grounded := make([]bool, n)
	type flow struct{ device, terminal int }
	states := make([][]flow, n)
	injected := make([][]flow, n)
	for i, m := range s.devices {
		if t.off[i] {
			continue
		}
		for k, term := range m.desc.Terminals {
			b := m.buses[k]
			switch term.Flow {
			case facet.FlowHeld:
				grounded[b] = true
			case facet.FlowState:
				states[b] = append(states[b], flow{i, k})
			case facet.FlowInjected:
				injected[b] = append(injected[b], flow{i, k})
			}
		}
		for _, tie := range m.desc.Ties {
			a, b := m.buses[tie.A], m.buses[tie.B]
			ra, ca := find(a)
			rb, cb := find(b)
			// v_a = ca v_ra, v_b = cb v_rb, v_a = Ratio v_b
			if ra != rb {
				parent[ra], ratio[ra] = rb, tie.Ratio*cb/ca
				grounded[rb] = grounded[rb] || grounded[ra]
			} else if cmplx.Abs(ca-tie.Ratio*cb) > 1e-9*cmplx.Abs(ca) {
				// Two ratios that don't agree drive a current around the
				// loop, which fixes the voltage.
				grounded[ra] = true
			}
		}
	}
	groups := make(map[int][]int)
	var order []int
	for b := range n {
		if t.busOf[b] < 0 {
			continue
		}
		r, _ := find(b)
		if groups[r] == nil {
			order = append(order, r)
		}
		groups[r] = append(groups[r], b)
		if grounded[b] {
			grounded[r] = true
		}
	}
	var errs []error
	for _, r := range order {
		if grounded[r] {
			continue
		}
		inGroup := make(map[int]bool)
		nStates := 0
		for _, b := range groups[r] {
			inGroup[b] = true
			nStates += len(states[b])
			for _, f := range injected[b] {
				m := s.devices[f.device]
				errs = append(errs, fmt.Errorf("engine: device %q (%s) feeds a given current into bus %q, where nothing but inductors takes it, so the current has nowhere to go; keep the device's current dynamic (a fuller level of detail), or give the bus a shunt capacitor or a resistive load", m.name, m.desc.Kind, s.buses[b].name))
			}
		}
		if nStates == 0 {
			errs = append(errs, fmt.Errorf("engine: bus %q has no element that fixes its voltage; connect a load, a line or a capacitor", s.buses[groups[r][0]].name))
			continue
		}
		// Devices whose flows cancel in the sum: nothing but ties within.
		var skip []int
		for i, m := range s.devices {
			if t.off[i] || len(m.desc.Ties) == 0 {
				continue
			}
			pure := true
			for k, term := range m.desc.Terminals {
				pure = pure && term.Flow == facet.FlowNone && inGroup[m.buses[k]]
			}
			if pure {
				skip = append(skip, m.block)
			}
		}
		// With v = c v_r in every group member, power-conserving ties cancel
		// in sum conj(c) i.
		var d, q []solvers.Term
		for _, b := range groups[r] {
			_, c := find(b)
			w := cmplx.Conj(c)
			add := func(list []solvers.Term, component int, weight float64) []solvers.Term {
				if weight == 0 {
					return list
				}
				return append(list, solvers.Term{Component: component, Weight: weight, Skip: skip})
			}
			d = add(d, 2*b, real(w))
			d = add(d, 2*b+1, -imag(w))
			q = add(q, 2*b, imag(w))
			q = add(q, 2*b+1, real(w))
		}
		t.hidden = append(t.hidden, solvers.Combination{Row: 2 * r, Terms: d}, solvers.Combination{Row: 2*r + 1, Terms: q})
	}
	return errors.Join(errs...)
}

// settle carries frames over from the old topology to the new one: an island
// keeps the frame of its heaviest source; what joins from another frame is
// turned, which is an exact change of coordinates.
func (m *Simulation) settle(old, next *topology) {
	for k := range next.islands {
		is := &next.islands[k]
		is.frame = frame{speed: m.sys.nominal, since: m.t}
		if old == nil {
			continue
		}
		lead := is.formers[0]
		if o := m.sys.devices[lead].island; o >= 0 {
			is.frame = old.islands[o].frame
		}
		here := is.frame.at(m.t)
		for _, b := range is.buses {
			if o := old.busOf[b]; o >= 0 {
				turn := old.islands[o].frame.at(m.t) - here
				turnPair(m.y, m.net.NodeUnknown(2*b), turn)
			}
		}
		for _, i := range is.devices {
			d := m.sys.devices[i]
			if o := d.island; o >= 0 {
				d.turn(m.y, old.islands[o].frame.at(m.t)-here)
			}
		}
	}
}

// turn expresses a device's unknowns in a frame that lies behind by angle.
func (d *member) turn(y []float64, angle float64) {
	if angle == 0 {
		return
	}
	for i, u := range d.desc.Unknowns {
		switch u.Frame {
		case PairD:
			turnPair(y, d.lo+i, angle)
		case Angle:
			y[d.lo+i] = wrap(y[d.lo+i] + angle)
		}
	}
}

func turnPair(y []float64, i int, angle float64) {
	if angle == 0 {
		return
	}
	s, c := math.Sincos(angle)
	y[i], y[i+1] = c*y[i]-s*y[i+1], s*y[i]+c*y[i+1]
}

// wrap brings an angle into (-pi, pi].
func wrap(a float64) float64 {
	if a > -math.Pi && a <= math.Pi {
		return a
	}
	a = math.Remainder(a, 2*math.Pi)
	if a == -math.Pi {
		a = math.Pi
	}
	return a
}
