package bench

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"

	"islet/devices"
	"islet/engine"
)

// Microgrid builds an islanded 400 V microgrid of any number of inverters (at
// least 4), invented for this benchmark: four inverters of 20 to 50 kVA a bus,
// 70 % of them grid-forming (droop, virtual machine and oscillator in turn) and
// 30 % followers at half their rating, buses in a square mesh of short cables,
// and at every bus a parallel R-L load of about 60 % of what the bus can give.
// Every device at full detail. The same number gives the same network.
func Microgrid(inverters int) (*engine.System, error) { return microgrid(inverters, shipped) }

// formers says which grid-forming inverters a microgrid has.
type formers int

const (
	shipped   formers = iota // those of package devices
	droopOnly                // of them, droop alone, and no current limit
	plain                    // the same as a user writes them, see plainDroop
)

func microgrid(inverters int, which formers) (*engine.System, error) {
	if inverters < 4 {
		return nil, fmt.Errorf("bench: a microgrid of %d inverters, want at least 4", inverters)
	}
	const volts, hertz, aBus = 400, 50, 4
	rng := rand.New(rand.NewPCG(7, uint64(inverters)))
	s := engine.NewSystem(hertz)
	var errs []error
	add := func(name string, d engine.Device, err error, at ...engine.Bus) {
		if err == nil {
			err = s.Add(name, d, at...)
		}
		errs = append(errs, err)
	}
	buses := make([]engine.Bus, (inverters+aBus-1)/aBus)
	capacity := make([]float64, len(buses))
	controls := []devices.ControlKind{devices.DroopControl, devices.VirtualMachineControl, devices.OscillatorControl}
	for b := range buses {
		buses[b] = s.Bus(fmt.Sprintf("bus-%d", b), volts)
	}
	for k := range inverters {
		b := k % len(buses)
		va := 20e3 + 30e3*rng.Float64()
		if k%10 < 7 {
			control := controls[(k/10*7+k%10)%len(controls)]
			if which != shipped {
				control = devices.DroopControl
			}
			p, err := devices.GridFormingNameplate{Power: va, Voltage: volts, Frequency: hertz, P: va / 2, Control: control}.Params()
			if which != shipped {
				p.IMax = math.Inf(1)
			}
			var d engine.Device
			switch {
			case err != nil:
			case which == plain:
				d = newPlainDroop(p)
			default:
				d, err = devices.NewGridForming(p)
			}
			capacity[b] += va
			add(fmt.Sprintf("former-%d", k), d, err, buses[b])
			continue
		}
		p, err := devices.GridFollowingNameplate{Power: va, Voltage: volts, Frequency: hertz, P: va / 2}.Params()
		var d *devices.GridFollowing
		if err == nil {
			d, err = devices.NewGridFollowing(p)
		}
		capacity[b] += va / 2
		add(fmt.Sprintf("follower-%d", k), d, err, buses[b])
	}
	cable := func(a, b int) {
		km := 0.1 + 0.2*rng.Float64()
		p, err := devices.LineData{Resistance: 0.2, Inductance: 0.25, Length: km, RatedCurrent: 250}.Params()
		var d *devices.Line
		if err == nil {
			d, err = devices.NewLine(p)
		}
		add(fmt.Sprintf("cable-%d-%d", a, b), d, err, buses[a], buses[b])
	}
	width := int(math.Ceil(math.Sqrt(float64(len(buses)))))
	for b := range buses {
		if b+1 < len(buses) && (b+1)%width != 0 {
			cable(b, b+1)
		}
		if b+width < len(buses) {
			cable(b, b+width)
		}
		p := 0.6 * capacity[b]
		lp, err := devices.LoadRating{Voltage: volts, Frequency: hertz, P: p, Q: 0.25 * p}.Params()
		var d *devices.Load
		if err == nil {
			d, err = devices.NewLoad(lp)
		}
		add(fmt.Sprintf("load-%d", b), d, err, buses[b])
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	return s, nil
}

// microgridSteps schedules eight load steps, one every 1.8 s from 0.5 s on: a
// load in turn gains, or gives back, 40 % of what it drew at the start.
func microgridSteps(m *engine.Simulation) error {
	var errs []error
	n := len(m.System().BusNames())
	for k := range 8 {
		name := fmt.Sprintf("load-%d", (k/2*7)%n)
		d, ok := m.System().Device(name).(*devices.Load)
		if !ok {
			return fmt.Errorf("bench: %s is no load", name)
		}
		p := d.Setpoints(0)[0].Value
		if k%2 == 0 {
			p *= 1.4
		}
		errs = append(errs, m.At(0.5+1.8*float64(k), engine.Set(name, "p", p)))
	}
	return errors.Join(errs...)
}
