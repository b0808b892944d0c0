package devices

import (
	"errors"
	"fmt"
	"math"
)

// Inverters of one kind whose parameters are the same per unit of their ratings
// (proportional inverters) carry proportional currents when they stand in parallel
// at one bus and start alike: with a rating k times as large, powers, currents,
// capacitances and gains from voltage to current are k times as large, impedances
// and gains from power or current to speed or voltage 1/k times, and speeds,
// voltages, times and ratios the same. Each equation of [GridForming] and
// [GridFollowing] then holds for the sum: the sum is an inverter of the summed
// rating, at every level of detail.

// proportional is a parameter that grows with the rating to some power while the
// inverter stays the same per unit.
type proportional[P any] struct {
	name  string
	power int
	at    func(*P) *float64
}

// filterPowers lists the parameters of a filter.
func filterPowers[P any](filter func(*P) *LCL) []proportional[P] {
	return []proportional[P]{
		{"Filter.Lf", -1, func(p *P) *float64 { return &filter(p).Lf }},
		{"Filter.Rf", -1, func(p *P) *float64 { return &filter(p).Rf }},
		{"Filter.Cf", 1, func(p *P) *float64 { return &filter(p).Cf }},
		{"Filter.Lg", -1, func(p *P) *float64 { return &filter(p).Lg }},
		{"Filter.Rg", -1, func(p *P) *float64 { return &filter(p).Rg }},
	}
}

// formingParts is a grid-forming inverter's parameters with those of its primary
// control within reach.
type formingParts struct {
	GridFormingParams
	droop      Droop
	machine    VirtualMachine
	oscillator Oscillator
}

// apart takes the primary control apart; nil stays nil.
func (p GridFormingParams) apart() *formingParts {
	f := &formingParts{GridFormingParams: p}
	switch c := p.Primary.(type) {
	case Droop:
		f.droop = c
	case VirtualMachine:
		f.machine = c
	case Oscillator:
		f.oscillator = c
	}
	return f
}

// together is the inverse of apart.
func (f *formingParts) together() GridFormingParams {
	p := f.GridFormingParams
	switch p.Primary.(type) {
	case Droop:
		p.Primary = f.droop
	case VirtualMachine:
		p.Primary = f.machine
	case Oscillator:
		p.Primary = f.oscillator
	}
	return p
}

// formingPowers lists the parameters of a grid-forming inverter.
func formingPowers() []proportional[formingParts] {
	type P = formingParts
	return append([]proportional[P]{
		{"Rating", 1, func(p *P) *float64 { return &p.Rating }},
		{"Omega0", 0, func(p *P) *float64 { return &p.Omega0 }},
		{"V0", 0, func(p *P) *float64 { return &p.V0 }},
		{"P", 1, func(p *P) *float64 { return &p.P }},
		{"Q", 1, func(p *P) *float64 { return &p.Q }},
		{"Rv", -1, func(p *P) *float64 { return &p.Rv }},
		{"Xv", -1, func(p *P) *float64 { return &p.Xv }},
		{"LimitImpedance.Threshold", 1, func(p *P) *float64 { return &p.LimitImpedance.Threshold }},
		{"LimitImpedance.Gain", -2, func(p *P) *float64 { return &p.LimitImpedance.Gain }},
		{"LimitImpedance.XR", 0, func(p *P) *float64 { return &p.LimitImpedance.XR }},
		{"Kpv", 1, func(p *P) *float64 { return &p.Kpv }},
		{"Kiv", 1, func(p *P) *float64 { return &p.Kiv }},
		{"F", 0, func(p *P) *float64 { return &p.F }},
		{"Kaw", -1, func(p *P) *float64 { return &p.Kaw }},
		{"Kpc", -1, func(p *P) *float64 { return &p.Kpc }},
		{"Kic", -1, func(p *P) *float64 { return &p.Kic }},
		{"IMax", 1, func(p *P) *float64 { return &p.IMax }},
		{"Droop.M", -1, func(p *P) *float64 { return &p.droop.M }},
		{"Droop.N", -1, func(p *P) *float64 { return &p.droop.N }},
		{"Droop.OmegaC", 0, func(p *P) *float64 { return &p.droop.OmegaC }},
		{"Droop.Psi", 0, func(p *P) *float64 { return &p.droop.Psi }},
		{"VirtualMachine.H", 0, func(p *P) *float64 { return &p.machine.H }},
		{"VirtualMachine.D", 1, func(p *P) *float64 { return &p.machine.D }},
		{"VirtualMachine.N", -1, func(p *P) *float64 { return &p.machine.N }},
		{"VirtualMachine.Tv", 0, func(p *P) *float64 { return &p.machine.Tv }},
		{"VirtualMachine.OmegaC", 0, func(p *P) *float64 { return &p.machine.OmegaC }},
		{"VirtualMachine.Psi", 0, func(p *P) *float64 { return &p.machine.Psi }},
		{"Oscillator.Eta", -1, func(p *P) *float64 { return &p.oscillator.Eta }},
		{"Oscillator.Alpha", 1, func(p *P) *float64 { return &p.oscillator.Alpha }},
		{"Oscillator.Psi", 0, func(p *P) *float64 { return &p.oscillator.Psi }},
	}, filterPowers(func(p *P) *LCL { return &p.Filter })...)
}

// followingPowers lists the parameters of a grid-following inverter.
func followingPowers() []proportional[GridFollowingParams] {
	type P = GridFollowingParams
	return append([]proportional[P]{
		{"Rating", 1, func(p *P) *float64 { return &p.Rating }},
		{"Omega0", 0, func(p *P) *float64 { return &p.Omega0 }},
		{"V0", 0, func(p *P) *float64 { return &p.V0 }},
		{"P", 1, func(p *P) *float64 { return &p.P }},
		{"Q", 1, func(p *P) *float64 { return &p.Q }},
		{"Kp", 0, func(p *P) *float64 { return &p.Kp }},
		{"Ki", 0, func(p *P) *float64 { return &p.Ki }},
		{"SpeedLimit", 0, func(p *P) *float64 { return &p.SpeedLimit }},
		{"OmegaV", 0, func(p *P) *float64 { return &p.OmegaV }},
		{"VFloor", 0, func(p *P) *float64 { return &p.VFloor }},
		{"Kpc", -1, func(p *P) *float64 { return &p.Kpc }},
		{"Kic", -1, func(p *P) *float64 { return &p.Kic }},
		{"Kff", 0, func(p *P) *float64 { return &p.Kff }},
		{"IMax", 1, func(p *P) *float64 { return &p.IMax }},
	}, filterPowers(func(p *P) *LCL { return &p.Filter })...)
}

// scale multiplies every parameter by its power of k.
func scale[P any](p *P, list []proportional[P], k float64) {
	for _, q := range list {
		*q.at(p) *= math.Pow(k, float64(q.power))
	}
}

// Scaled returns the inverter of k times the rating, the same per unit. k must be
// positive.
func (p GridFormingParams) Scaled(k float64) GridFormingParams {
	f := p.apart()
	scale(f, formingPowers(), k)
	return f.together()
}

// Scaled returns the inverter of k times the rating, the same per unit. k must be
// positive.
func (p GridFollowingParams) Scaled(k float64) GridFollowingParams {
	scale(&p, followingPowers(), k)
	return p
}

// Spread tells by how much inverters miss being proportional.
type Spread struct {
	// Largest is the largest relative deviation of a parameter, per unit of the
	// rating, from the mean; setpoints of power count relative to the rating.
	Largest float64
	// Parameter is the one that deviates most.
	Parameter string
}

// ParallelForming returns the inverter that stands for several in parallel at one
// bus: of the summed rating, with every parameter the mean per unit of those given,
// weighted by rating. It is exact where the spread is zero (to rounding), and an
// approximation else. Inverters of different control, limit priority or decoupling,
// or of which some only have a current limit, have no equivalent: the error names
// what differs.
func ParallelForming(list []GridFormingParams) (GridFormingParams, Spread, error) {
	if len(list) == 0 {
		return GridFormingParams{}, Spread{}, errors.New("devices: no inverters to put in parallel")
	}
	var errs []error
	parts := make([]formingParts, len(list))
	for i, p := range list {
		if err := p.Validate(); err != nil {
			errs = append(errs, err)
			continue
		}
		first := list[0]
		if a, b := controlOf(first.Primary), controlOf(p.Primary); a != b {
			errs = append(errs, fmt.Errorf("devices: inverters 1 and %d in parallel have primary controls %s and %s", i+1, a, b))
		}
		if a, b := first.Priority.named(), p.Priority.named(); a != b {
			errs = append(errs, fmt.Errorf("devices: inverters 1 and %d in parallel have limit priorities %q and %q", i+1, a, b))
		}
		if first.OwnSpeed != p.OwnSpeed {
			errs = append(errs, fmt.Errorf("devices: inverters 1 and %d in parallel decouple at own and at nominal speed", i+1))
		}
		parts[i] = *p.apart()
	}
	if err := errors.Join(errs...); err != nil {
		return GridFormingParams{}, Spread{}, err
	}
	sum, spread, err := parallel(parts, formingPowers())
	return sum.together(), spread, err
}

// controlOf names a primary control.
func controlOf(c PrimaryControl) ControlKind {
	switch c.(type) {
	case VirtualMachine:
		return VirtualMachineControl
	case Oscillator:
		return OscillatorControl
	}
	return DroopControl
}

// ParallelFollowing is [ParallelForming] for grid-following inverters.
func ParallelFollowing(list []GridFollowingParams) (GridFollowingParams, Spread, error) {
	if len(list) == 0 {
		return GridFollowingParams{}, Spread{}, errors.New("devices: no inverters to put in parallel")
	}
	var errs []error
	for i, p := range list {
		if err := p.Validate(); err != nil {
			errs = append(errs, err)
			continue
		}
		first := list[0]
		if a, b := first.Priority.named(), p.Priority.named(); a != b {
			errs = append(errs, fmt.Errorf("devices: inverters 1 and %d in parallel have limit priorities %q and %q", i+1, a, b))
		}
		if first.FixedAmplitude != p.FixedAmplitude || first.OmitCapacitor != p.OmitCapacitor {
			errs = append(errs, fmt.Errorf("devices: inverters 1 and %d in parallel differ in FixedAmplitude or OmitCapacitor", i+1))
		}
		if first.Filter.isL() != p.Filter.isL() {
			errs = append(errs, fmt.Errorf("devices: inverters 1 and %d in parallel have an L and an LCL filter", i+1))
		}
	}
	if err := errors.Join(errs...); err != nil {
		return GridFollowingParams{}, Spread{}, err
	}
	sum, spread, err := parallel(list, followingPowers())
	return *sum, spread, err
}

// named is the priority's name, the zero value's too.
func (l LimitPriority) named() LimitPriority {
	if l == "" {
		return AngleKept
	}
	return l
}

// parallel returns the mean per unit at the summed rating. The first parameter of
// the list is the rating.
func parallel[P any](list []P, params []proportional[P]) (*P, Spread, error) {
	rating := params[0].at
	total := 0.0
	for i := range list {
		total += *rating(&list[i])
	}
	out := list[0]
	var spread Spread
	var errs []error
	for _, q := range params {
		perUnit := func(i int) float64 {
			return *q.at(&list[i]) * math.Pow(*rating(&list[i]), -float64(q.power))
		}
		mean, finite := 0.0, 0
		for i := range list {
			x := perUnit(i)
			if !math.IsInf(x, 0) {
				finite++
			}
			mean += x * (*rating(&list[i]) / total)
		}
		if finite != 0 && finite != len(list) {
			errs = append(errs, fmt.Errorf("devices: inverters in parallel have %s finite and infinite", q.name))
			continue
		}
		*q.at(&out) = mean * math.Pow(total, float64(q.power))
		if finite == 0 {
			continue
		}
		size := math.Abs(mean)
		if q.name == "P" || q.name == "Q" {
			size = 1 // per unit of rating
		}
		for i := range list {
			d := math.Abs(perUnit(i) - mean)
			if d > 0 {
				d /= size
			}
			if d > spread.Largest {
				spread = Spread{Largest: d, Parameter: q.name}
			}
		}
	}
	// Rounding isn't a deviation.
	if spread.Largest < 1e-12 {
		spread = Spread{}
	}
	return &out, spread, errors.Join(errs...)
}
