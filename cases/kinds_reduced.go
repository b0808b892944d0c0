package cases

import (
	"errors"
	"fmt"
	"math"

	"islet/devices"
	"islet/engine"
)

// reduced networks

type reducedDraft struct {
	p           devices.ReducedNetworkParams
	ratio, turn []float64 // turn in rad
	va          float64
}

func reducedKind() *kind {
	type T = reducedDraft
	// A circuit that is hardly seen from the buses has a large R and L.
	const most = 1e15
	r := series("R_ohm", "ohm", "required", 0, most, func(d *T, x []float64) { d.p.R = x }, "R of each circuit")
	l := series("L_H", "H", "required", 0, most, func(d *T, x []float64) { d.p.L = x }, "L of each circuit")
	l.open = true
	ratio := series("ratio", "1", "1 throughout", 0, 1e6, func(d *T, x []float64) { d.ratio = x }, "voltage of each bus over that of the level referred to; needed for buses of different voltage")
	ratio.open = true
	return makeKind("reduced network",
		"RL circuits that stand for a network of lines and transformers, seen from some of its buses; islet shrink writes them. A circuit's current w flows in at bus j as drive_j w, and L dw/dt = sum of drive_j v_j - R w, all referred to one voltage level.",
		multi, false, []field[T]{
			r, l,
			matrix("drive", "1", "required", -1e3, 1e3, func(d *T, x [][]float64) { d.p.Drive = x }, "for each circuit one number for each bus; a line has 1 and -1"),
			ratio, series("shift_deg", "degrees", "0 throughout", -360, 360, func(d *T, x []float64) { d.turn = x }, "angle by which the voltage of each bus leads that of the level referred to, by the transformers between them"),
			num("power_kVA", "kVA", "0", 0, 1e7, func(d *T, x float64) { d.va = x }, "rating of the transformers within").in(1e3),
			above("rated_current_A", "A rms", "as for a line", 0, 1e6, func(d *T, x float64) { d.p.RatedCurrent = x }, "the base of the currents' error norm"),
		})
}

func (d *reducedDraft) rating(*site) float64 { return d.va }

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
	ratio := d.ratio
	switch {
	case ratio == nil:
		ratio = make([]float64, len(s.volts))
		for j := range ratio {
			ratio[j] = 1
		}
	case len(ratio) != len(s.volts):
		errs = append(errs, at("ratio", "%d numbers, and buses has %d", len(ratio), len(s.volts)))
	}
	if d.turn != nil && len(d.turn) != len(s.volts) {
		errs = append(errs, at("shift_deg", "%d numbers, and buses has %d", len(d.turn), len(s.volts)))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	p.Ratio = make([]complex128, len(ratio))
	for j, r := range ratio {
		p.Ratio[j] = complex(r, 0)
		if d.turn != nil {
			sin, cos := math.Sincos(d.turn[j] * math.Pi / 180)
			p.Ratio[j] = complex(r*cos, r*sin)
		}
		if x := (s.volts[j] / r) / (s.volts[0] / ratio[0]); x < minVoltageRatio || x > maxVoltageRatio {
			errs = append(errs, fmt.Errorf("bus %d has %g kV and bus 1 has %g kV, which doesn't go with a ratio of %.4g to %.4g; accepted are %g to %g times that",
				j+1, s.volts[j]/1e3, s.volts[0]/1e3, r, ratio[0], minVoltageRatio, maxVoltageRatio))
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
