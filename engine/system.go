package engine

import (
	"encoding"
	"errors"
	"fmt"
	"math"
	"strings"

	"islet/solvers"
	"islet/solvers/facet"
)

// System is a network under construction: buses, and devices by name.
type System struct {
	nominal float64 // rad/s
	buses   []bus
	devices []*member
	busAt   map[string]int
	devAt   map[string]int
	faults  []error
	started bool
}

type bus struct {
	name  string
	rated float64 // line-line rms volts
}

// Bus is a handle to a bus of a System.
type Bus struct {
	sys   *System
	index int
}

// Name is the name the bus was made with.
func (b Bus) Name() string { return b.sys.buses[b.index].name }

// Rated is the bus's rated line-line rms voltage, V.
func (b Bus) Rated() float64 { return b.sys.buses[b.index].rated }

// member is a device in a system, with its facets.
type member struct {
	name  string
	dev   Device
	desc  Description
	buses []int
	block int // index in the Network
	lo    int // first own unknown
	own   int
	ports int
	port  int // place of the first port's value in the state, if the others follow; else -1

	framed   facet.Framed
	measure  facet.Measurer
	channels []Channel
	account  facet.Accountable
	adjust   facet.Adjustable
	stepped  facet.Stepped
	swtch    facet.Switchable
	former   facet.Former
	starter  facet.Starter
	ratioed  facet.Ratioed
	sized    facet.Sized
	memory   memory
	kinked   facet.Kinked
	kinks    []string
	acting   []bool // whether the limit behind each kink acts

	tripped bool // taken off by an event, for good
	off     bool // takes no part at present: tripped, or in a dead island
	island  int  // -1 while off
}

type memory interface {
	encoding.BinaryAppender
	encoding.BinaryUnmarshaler
}

// NewSystem makes an empty system of the given nominal frequency, Hz.
func NewSystem(frequency float64) *System {
	s := &System{nominal: 2 * math.Pi * frequency, busAt: make(map[string]int), devAt: make(map[string]int)}
	if !(frequency > 0) || math.IsInf(frequency, 0) {
		s.faults = append(s.faults, fmt.Errorf("engine: nominal frequency is %g Hz, want a positive value", frequency))
	}
	return s
}

// Frequency is the nominal frequency, Hz.
func (s *System) Frequency() float64 { return s.nominal / (2 * math.Pi) }

func checkName(what, name string) error {
	if name == "" {
		return fmt.Errorf("engine: %s has no name", what)
	}
	if strings.ContainsAny(name, ". \t\n,\"") {
		return fmt.Errorf("engine: %s name %q holds a dot, space, comma or quote; want letters, digits, - and _", what, name)
	}
	return nil
}

// Bus adds a bus of the given rated line-line rms voltage, V. A fault (a name
// used twice, a voltage that is not positive) is reported by Start.
func (s *System) Bus(name string, ratedVolts float64) Bus {
	if err := checkName("bus", name); err != nil {
		s.faults = append(s.faults, err)
	}
	if _, dup := s.busAt[name]; dup {
		s.faults = append(s.faults, fmt.Errorf("engine: bus %q is there already", name))
	}
	if !(ratedVolts > 0) || math.IsInf(ratedVolts, 0) {
		s.faults = append(s.faults, fmt.Errorf("engine: bus %q: rated voltage is %g V, want a positive value", name, ratedVolts))
		ratedVolts = 1
	}
	s.busAt[name] = len(s.buses)
	s.buses = append(s.buses, bus{name, ratedVolts})
	return Bus{s, len(s.buses) - 1}
}

// FindBus returns the bus of that name.
func (s *System) FindBus(name string) (Bus, bool) {
	i, ok := s.busAt[name]
	return Bus{s, i}, ok
}

// BusNames lists the buses in order of addition.
func (s *System) BusNames() []string {
	names := make([]string, len(s.buses))
	for i, b := range s.buses {
		names[i] = b.name
	}
	return names
}

// DeviceNames lists the devices in order of addition.
func (s *System) DeviceNames() []string {
	names := make([]string, len(s.devices))
	for i, m := range s.devices {
		names[i] = m.name
	}
	return names
}

// Device returns the device of that name, or nil.
func (s *System) Device(name string) Device {
	if i, ok := s.devAt[name]; ok {
		return s.devices[i].dev
	}
	return nil
}

// Connections returns the names of the buses at the device's terminals, in
// order, or nil if there is no such device.
func (s *System) Connections(device string) []string {
	i, ok := s.devAt[device]
	if !ok {
		return nil
	}
	var names []string
	for _, b := range s.devices[i].buses {
		names = append(names, s.buses[b].name)
	}
	return names
}

// Add adds a device with its terminals at the given buses, in the order of
// its description. The error joins all faults found; the device is then not
// added.
func (s *System) Add(name string, d Device, at ...Bus) error {
	var errs []error
	bad := func(format string, a ...any) {
		errs = append(errs, fmt.Errorf("engine: device %q: "+format, append([]any{name}, a...)...))
	}
	if s.started {
		bad("the system has been started already")
	}
	if err := checkName("device", name); err != nil {
		errs = append(errs, err)
	}
	if _, dup := s.devAt[name]; dup {
		bad("there is one of that name already")
	}
	if _, dup := s.busAt[name]; dup {
		bad("a bus has that name, and channels could not be told apart")
	}
	if d == nil {
		bad("no device given")
		return errors.Join(errs...)
	}
	for _, m := range s.devices {
		if m.dev == d {
			bad("the same value is in the system already as %q", m.name)
		}
	}
	desc := d.Describe()
	ports, own := d.Dims()
	if len(desc.Terminals) != len(at) {
		bad("it has %d terminals, %d buses given", len(desc.Terminals), len(at))
	}
	if ports != 2*len(desc.Terminals) {
		bad("it has %d port components for %d terminals, want 2 each", ports, len(desc.Terminals))
	}
	if own != len(desc.Unknowns) {
		bad("it has %d own unknowns and describes %d", own, len(desc.Unknowns))
	}
	for i, t := range desc.Terminals {
		if t.Flow == facet.FlowUndeclared {
			bad("terminal %d (%s): the kind of its flow is not declared", i, t.Name)
		}
	}
	for i, u := range desc.Unknowns {
		if !(u.Base > 0) || math.IsInf(u.Base, 0) {
			bad("unknown %s: base is %g, want a positive value", u.Name, u.Base)
		}
		if u.Frame == PairD && (i+1 >= len(desc.Unknowns) || desc.Unknowns[i+1].Frame != PairQ) {
			bad("unknown %s is the d part of a pair and no q part follows", u.Name)
		}
	}
	for _, b := range at {
		if b.sys != s {
			bad("a bus of another system is given")
		}
	}
	if err := errors.Join(errs...); err != nil {
		return err
	}
	m := &member{name: name, dev: d, desc: desc, ports: ports, own: own}
	for _, b := range at {
		m.buses = append(m.buses, b.index)
	}
	m.framed, _ = d.(facet.Framed)
	if m.measure, _ = d.(facet.Measurer); m.measure != nil {
		m.channels = m.measure.Channels()
	}
	m.account, _ = d.(facet.Accountable)
	m.adjust, _ = d.(facet.Adjustable)
	m.stepped, _ = d.(facet.Stepped)
	m.swtch, _ = d.(facet.Switchable)
	m.former, _ = d.(facet.Former)
	m.starter, _ = d.(facet.Starter)
	m.ratioed, _ = d.(facet.Ratioed)
	m.sized, _ = d.(facet.Sized)
	m.memory, _ = d.(memory)
	if m.kinked, _ = d.(facet.Kinked); m.kinked != nil {
		m.kinks = m.kinked.Kinks()
		m.acting = make([]bool, len(m.kinks))
	}
	s.devAt[name] = len(s.devices)
	s.devices = append(s.devices, m)
	return nil
}

// network builds the solvers.Network of the system.
func (s *System) network() (*solvers.Network, error) {
	n := solvers.NewNetwork(len(s.buses), 2)
	for i, b := range s.buses {
		n.SetNodeScale(i, peakPhase(b.rated))
	}
	var at []int
	for _, m := range s.devices {
		at = at[:0]
		for _, b := range m.buses {
			at = append(at, 2*b, 2*b+1)
		}
		scale := make([]float64, m.own)
		absolute := make([]bool, m.own)
		for i, u := range m.desc.Unknowns {
			scale[i] = u.Base
			absolute[i] = u.Frame == Angle
		}
		k, err := n.Add(m.dev, at, scale, absolute)
		if err != nil {
			return nil, fmt.Errorf("engine: device %q: %w", m.name, err)
		}
		m.block = k
		m.lo, _ = n.Own(k)
	}
	for _, m := range s.devices {
		m.port = n.PortUnknown(m.block)
	}
	return n, nil
}

// peakPhase converts a line-line rms voltage to peak phase-to-neutral.
func peakPhase(lineLineRMS float64) float64 { return lineLineRMS * math.Sqrt2 / math.Sqrt(3) }

// lineLine converts a peak phase-to-neutral voltage to line-line rms.
func lineLine(peak float64) float64 { return peak * math.Sqrt(3) / math.Sqrt2 }
