package testproblems

import (
	"math"

	"islet/solvers"
)

// Data of [Chopper].
const (
	ChopperPeriod = 1e-4 // s
	ChopperDuty   = 0.4
	// ChopperValley and ChopperCrest bound the current of the steady state.
	ChopperValley = 38.804238794448615332
	ChopperCrest  = 41.203758912818786688
)

// Chopper is an inductor fed by pulses of fixed frequency, from 0 to 5 ms:
//
//	L i' = V s(t) - R i, i(0) = 0;  R = 1 ohm, L = 1 mH, V = 100 V
//	s = 1 in the first 40 % of each period of 0.1 ms, else 0
//
// The hundred switching times, the end included, are stops. With
// a = exp(-T R/L), i(nT) = I (1 - a^n),
// I = (V/R)(1 - exp(-0.4 T R/L)) exp(-0.6 T R/L)/(1 - a). Source: own.
func Chopper() *Case {
	const r, l, v, periods = 1.0, 1e-3, 100.0, 50
	on := 1.0
	c := &Case{
		Name: "chopper",
		Problem: &solvers.Problem{
			N:    1,
			Mass: solvers.Diagonal(l),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = v*on - r*y[0]
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = -r
				return nil
			},
			Autonomous: true,
		},
		End:     periods * ChopperPeriod,
		Initial: []float64{0},
		Exact: func(dst []float64, t float64) {
			n := math.Floor(t / ChopperPeriod)
			past := t - n*ChopperPeriod
			i := ChopperValley * (1 - math.Exp(-n*ChopperPeriod*r/l))
			up := math.Min(past, ChopperDuty*ChopperPeriod)
			i = v/r + (i-v/r)*math.Exp(-up*r/l)
			dst[0] = i * math.Exp(-(past-up)*r/l)
		},
	}
	c.Points = []Point{
		{1 * ChopperPeriod, []float64{3.6927115548289136373}},
		{10 * ChopperPeriod, []float64{24.528957111663656034}},
		{(periods - 1 + ChopperDuty) * ChopperPeriod, []float64{40.926130169101118276}},
		{periods * ChopperPeriod, []float64{38.542777890111764421}},
	}
	for n := range periods {
		c.Handlers.Stops = append(c.Handlers.Stops, (float64(n)+ChopperDuty)*ChopperPeriod, float64(n+1)*ChopperPeriod)
	}
	c.Handlers.AtStop = func(t float64, y []float64) (solvers.Action, error) {
		on = 1 - on
		return solvers.Jump, nil
	}
	return c
}
