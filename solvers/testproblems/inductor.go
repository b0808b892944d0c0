package testproblems

import (
	"math"

	"islet/solvers"
)

// RLStep is the current of a resistance and an inductance on a constant
// voltage, V = 10 V, R = 1 ohm, L = 1 mH, from 0 to 5 ms:
//
//	L i' = V - R i, i(0) = 0
//
// Solution: i = V/R (1 - exp(-R t/L)). Source: own, with the figures of H.W.
// Dommel, IEEE Trans. PAS-88(4), 1969, 388-399 for the trapezoidal rule.
func RLStep() *Case {
	const v, r, l = 10.0, 1.0, 1e-3
	return &Case{
		Name: "RL-step",
		Problem: &solvers.Problem{
			N:    1,
			Mass: solvers.Diagonal(l),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = v - r*y[0]
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0] = -r
				return nil
			},
			Autonomous: true,
		},
		End:     5e-3,
		Initial: []float64{0},
		Exact:   func(dst []float64, t float64) { dst[0] = v / r * (1 - math.Exp(-r*t/l)) },
	}
}

// OpenedInductorResistance is the resistance that takes over in
// [OpenedInductor], ohm.
const OpenedInductorResistance = 1e9

// OpenedInductor chops the current of an inductance, L = 1 mH, V = 10 V,
// R = 1 ohm; at 1 ms, a stop, R := [OpenedInductorResistance]. Unknowns are the
// current i and the inductor's voltage u, from 0 to 2 ms:
//
//	L i' = u
//	0    = V - R i - u;  i(0) = 0, u(0) = 10
//
// The trapezoidal rule alone would leave u alternating between ±2L i0/h, i0 the
// current that was chopped. Source: J.R. Marti, J. Lin, Suppression of
// numerical oscillations in the EMTP, IEEE Trans. Power Syst. 4(2), 1989,
// 739-747.
func OpenedInductor() *Case {
	const v, l = 10.0, 1e-3
	r := 1.0
	return &Case{
		Name: "opened-inductor",
		Problem: &solvers.Problem{
			N:    2,
			Mass: solvers.Diagonal(l, 0),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = y[1]
				dst[1] = v - r*y[0] - y[1]
				return nil
			},
			Pattern: []solvers.Entry{{Row: 0, Col: 1}, {Row: 1, Col: 0}, {Row: 1, Col: 1}},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1], dst[2] = 1, -r, -1
				return nil
			},
			Autonomous: true,
		},
		End:     2e-3,
		Initial: []float64{0, v},
		Exact: func(dst []float64, t float64) {
			if t < 1e-3 {
				d := math.Exp(-t / l)
				dst[0], dst[1] = v*(1-d), v*d
				return
			}
			const big = OpenedInductorResistance
			d := math.Exp(-(t - 1e-3) * big / l)
			i0 := v * (1 - math.Exp(-1e-3/l))
			dst[0] = v/big + (i0-v/big)*d
			dst[1] = (v - big*i0) * d
		},
		Handlers: solvers.Handlers{
			Stops: []float64{1e-3},
			AtStop: func(t float64, y []float64) (solvers.Action, error) {
				r = OpenedInductorResistance
				return solvers.Jump, nil
			},
		},
	}
}
