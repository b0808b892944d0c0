package cases

import (
	"errors"

	"islet/devices"
	"islet/engine"
)

// reduced networks

type reducedDraft struct {
	notSource
	p devices.ReducedNetworkParams
}

func reducedKind() *kind {
	type T = reducedDraft
	r := series("R_ohm", "ohm", "required", 0, maxOhm, func(d *T, x []float64) { d.p.R = x }, "R of each circuit")
	l := series("L_H", "H", "required", 0, maxHenry, func(d *T, x []float64) { d.p.L = x }, "L of each circuit")
	l.open = true
	return makeKind("reduced network",
		"RL circuits that stand for a network of lines, seen from some of its buses; islet shrink writes them. A circuit's current w flows in at bus j as drive_j w, and L dw/dt = sum of drive_j v_j - R w.",
		multi, true, []field[T]{
			r, l,
			matrix("drive", "1", "required", -1e3, 1e3, func(d *T, x [][]float64) { d.p.Drive = x }, "for each circuit one number for each bus; a line has 1 and -1"),
			above("rated_current_A", "A rms", "as for a line", 0, 1e6, func(d *T, x float64) { d.p.RatedCurrent = x }, "the base of the currents' error norm"),
		})
}

func (d *reducedDraft) build(s *site) (engine.Device, error) {
	p := d.p
	p.RatedCurrent = s.ratedCurrent(p.RatedCurrent)
	var errs []error
	if len(p.L) != len(p.R) {
		errs = append(errs, at("L_H", "%d circuits, and R_ohm has %d", len(p.L), len(p.R)))
	}
	if len(p.Drive) != len(p.R) {
		errs = append(errs, at("drive", "%d circuits, and R_ohm has %d", len(p.Drive), len(p.R)))
	}
	for k, row := range p.Drive {
		if len(row) != len(s.volts) {
			errs = append(errs, at("drive", "%d numbers for circuit %d, and buses has %d", len(row), k+1, len(s.volts)))
		}
	}
	if len(p.R) == 0 {
		errs = append(errs, errors.New("a reduced network needs at least one circuit"))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	return device(devices.NewReducedNetwork(p))
}
