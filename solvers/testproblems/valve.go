package testproblems

import (
	"math"

	"islet/solvers"
)

// Data of [OneWayValve] and what follows from them; each cycle starts from
// i = 0, so all cycles are alike.
const (
	valveR, valveL, valveV = 1.0, 0.01, 100.0
	valveW                 = 100 * math.Pi
	valveImpedance         = 3.2969083094756151588 // sqrt(R² + (wL)²)
	valvePhase             = 1.2626272556789116834 // atan(wL/R)

	ValvePeriod  = 0.02
	ValveBlocks  = 0.014720690852511982559 // the time at which it blocks
	ValveCharge  = 0.34620497176026811731  // integral of i over a cycle
	ValvePeak    = 42.299561645660640422   // largest i
	ValvePeaksAt = 0.0086097856518729933927
)

// OneWayValve is a flow through an inertia L and a resistance R behind a valve
// that opens forwards only, from 0 to 0.1:
//
//	L i' = V sin(w t) - R i - u
//	  q' = i
//	  0  = u                     conducting
//	  0  = V sin(w t) - R i - u  blocked (i' = 0)
//	R = 1, L = 0.01, V = 100, w = 100 pi; start conducting with i = q = 0
//	when i falls to 0: block, i := 0; when V sin(w t) rises to 0: conduct
//
// Both roots are zero at the start. u jumps when the valve blocks. With
// Z = sqrt(R² + (wL)²) and phi = atan(wL/R), a cycle is
// i = (V/Z)(sin(wt - phi) + sin(phi) exp(-R t/L)) up to [ValveBlocks], then 0.
// [OneWayValveConducting] and [OneWayValveBlocked] state the same with a mass
// matrix that changes its rank. Source: own.
func OneWayValve() *Case {
	blocked := 0.0
	c := &Case{
		Name: "valve",
		Problem: &solvers.Problem{
			N:    3,
			Mass: solvers.Diagonal(valveL, 1, 0),
			F: func(dst []float64, t float64, y []float64) error {
				drive := valveV*math.Sin(valveW*t) - valveR*y[0]
				dst[0] = drive - y[2]
				dst[1] = y[0]
				dst[2] = blocked*drive - y[2]
				return nil
			},
			Pattern: []solvers.Entry{
				{Row: 0, Col: 0}, {Row: 0, Col: 2}, {Row: 1, Col: 0}, {Row: 2, Col: 0}, {Row: 2, Col: 2},
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1], dst[2], dst[3], dst[4] = -valveR, -1, 1, -valveR*blocked, -1
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				d := valveV * valveW * math.Cos(valveW*t)
				dst[0], dst[1], dst[2] = d, 0, blocked*d
				return nil
			},
		},
		End:     0.1,
		Initial: []float64{0, 0, 0},
		Exact: func(dst []float64, t float64) {
			cycle := math.Floor(t / ValvePeriod)
			past := t - cycle*ValvePeriod
			dst[0], dst[1], dst[2] = 0, (cycle+1)*ValveCharge, valveV*math.Sin(valveW*past)
			if past < ValveBlocks {
				dst[0] = ValveCurrent(past)
				// L i + R q = integral of V sin(w t) while it conducts
				dst[1] = cycle*ValveCharge + (valveV*(1-math.Cos(valveW*past))/valveW-valveL*dst[0])/valveR
				dst[2] = 0
			}
		},
		Handlers: solvers.Handlers{
			Roots: valveRoots(),
			AtRoot: func(t float64, hits []solvers.Hit, y []float64) (solvers.Action, error) {
				for _, h := range hits {
					if h.Root == 0 {
						blocked, y[0] = 1, 0
					} else {
						blocked = 0
					}
				}
				return solvers.Jump, nil
			},
		},
		Events: valveEvents(),
	}
	return c
}

// ValveCurrent is i at the time t of a cycle, 0 <= t <= ValveBlocks.
func ValveCurrent(t float64) float64 {
	return valveV / valveImpedance * (math.Sin(valveW*t-valvePhase) + math.Sin(valvePhase)*math.Exp(-valveR*t/valveL))
}

// OneWayValveConducting is the flow i of [OneWayValve] while it conducts,
// L i' = V sin(w t) - R i, with the roots of [OneWayValve] and no handlers.
func OneWayValveConducting() *Case {
	return &Case{
		Name: "valve-conducting",
		Problem: &solvers.Problem{
			N:    1,
			Mass: solvers.Diagonal(valveL),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = valveV*math.Sin(valveW*t) - valveR*y[0]
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = -valveR
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				dst[0] = valveV * valveW * math.Cos(valveW*t)
				return nil
			},
		},
		End:      0.1,
		Initial:  []float64{0},
		Handlers: solvers.Handlers{Roots: valveRoots()},
		Events:   valveEvents(),
	}
}

// OneWayValveBlocked is the flow i of [OneWayValve] while it is blocked, 0 = i,
// which has no mass at all.
func OneWayValveBlocked() *Case {
	return &Case{
		Name: "valve-blocked",
		Problem: &solvers.Problem{
			N:    1,
			Mass: solvers.Diagonal(0),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = y[0]
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = 1
				return nil
			},
			Autonomous: true,
		},
		End:      0.1,
		Initial:  []float64{0},
		Exact:    func(dst []float64, t float64) { dst[0] = 0 },
		Handlers: solvers.Handlers{Roots: valveRoots()},
	}
}

func valveRoots() *solvers.Roots {
	return &solvers.Roots{
		N: 2,
		Func: func(dst []float64, t float64, y []float64) {
			dst[0], dst[1] = y[0], valveV*math.Sin(valveW*t)
		},
		Direction: []solvers.Direction{solvers.Falling, solvers.Rising},
		Needs:     []int{0},
	}
}

// valveEvents are those before 0.1, where the sixth cycle starts.
func valveEvents() []Event {
	var events []Event
	for n := range 5 {
		if n > 0 {
			events = append(events, Event{Time: float64(n) * ValvePeriod, Root: 1, Direction: solvers.Rising})
		}
		events = append(events, Event{Time: float64(n)*ValvePeriod + ValveBlocks, Root: 0, Direction: solvers.Falling})
	}
	return events
}
