package bench

import (
	"errors"
	"math"

	"islet/devices"
	"islet/engine"
)

// FeederStudy is 4 s of a small feeder, invented for this benchmark, with
// all that makes a run awkward for an integrator: a junction of cables without
// any shunt (a hidden equation), a breaker that opens at 0.3 s and islands the
// feeder, a load step at 0.8 s, and from 1.2 s on a wait until the breaker may
// close in synchronism (an event at a root, and a change of structure).
//
//	grid - breaker - head - junction - mid (grid-forming, load)
//	                            \---- end (grid-following, load)
func FeederStudy() Study {
	return Study{Name: "feeder", Until: 4, Start: startFeeder, Signal: "end.v"}
}

func startFeeder(o *engine.Options) (*engine.Simulation, error) {
	const volts, hertz = 400, 50
	s := engine.NewSystem(hertz)
	source, head, junction := s.Bus("source", volts), s.Bus("head", volts), s.Bus("junction", volts)
	mid, end := s.Bus("mid", volts), s.Bus("end", volts)
	var errs []error
	add := func(name string, d engine.Device, err error, at ...engine.Bus) {
		if err == nil {
			err = s.Add(name, d, at...)
		}
		errs = append(errs, err)
	}
	gp, err := devices.GridRating{Voltage: volts, Frequency: hertz, ShortCircuit: 2e6, XR: 3}.Params()
	errs = append(errs, err)
	grid, err := devices.NewGrid(gp)
	add("grid", grid, err, source)
	breaker, err := devices.NewBreaker(devices.BreakerParams{Resistance: devices.DefaultContactResistance})
	add("breaker", breaker, err, source, head)
	cable := func(name string, km float64, a, b engine.Bus) {
		p, err := devices.LineData{Resistance: 0.32, Inductance: 0.26, Length: km, RatedCurrent: 150}.Params()
		errs = append(errs, err)
		d, err := devices.NewLine(p)
		add(name, d, err, a, b)
	}
	cable("cable-head", 0.15, head, junction)
	cable("cable-mid", 0.1, junction, mid)
	cable("cable-end", 0.2, junction, end)
	droop := 2.0 // %: the island slips by about 0.3 Hz and comes round within the run
	fp, err := devices.GridFormingNameplate{Power: 50e3, Voltage: volts, Frequency: hertz, P: 15e3, FrequencyDroop: &droop}.Params()
	errs = append(errs, err)
	former, err := devices.NewGridForming(fp)
	add("former", former, err, mid)
	wp, err := devices.GridFollowingNameplate{Power: 30e3, Voltage: volts, Frequency: hertz, P: 12e3}.Params()
	errs = append(errs, err)
	follower, err := devices.NewGridFollowing(wp)
	add("follower", follower, err, end)
	load := func(name string, p, q float64, at engine.Bus) {
		lp, err := devices.LoadRating{Voltage: volts, Frequency: hertz, P: p, Q: q}.Params()
		errs = append(errs, err)
		d, err := devices.NewLoad(lp)
		add(name, d, err, at)
	}
	load("load-mid", 25e3, 6e3, mid)
	load("load-end", 15e3, 4e3, end)
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	m, err := engine.Start(s, o)
	if err != nil {
		return nil, err
	}
	return m, errors.Join(
		m.At(0.3, engine.Open("breaker")),
		m.At(0.8, engine.Set("load-mid", "p", 32e3)),
		m.At(1.2, engine.CloseInSync("breaker", engine.SyncCheck{Voltage: 0.1, Frequency: 0.5, Angle: 10 * math.Pi / 180})),
	)
}
