package testproblems

import (
	"math"

	"islet/solvers"
)

// Triangle integrates a triangle wave of period 1 through an index-1 system,
// from 0 to 2 pi:
//
//	x' = z
//	0  = z - tri(t),  tri(t) = 4 |1/2 - frac(t - 1/4)| - 1
//	x(0) = 10, z(0) = 0
//
// f has kinks at odd quarters; an error estimate that misses them accepts far
// too large steps. TriangleKinks lists them for runs that stop there, which a
// method of order 2 then solves to rounding. Source: SciML OrdinaryDiffEq.jl,
// issue 2132; solution own.
func Triangle() *Case {
	// frac is in [0, 1); at a kink the slope is the one on its right.
	frac := func(t float64) float64 { return t - 0.25 - math.Floor(t-0.25) }
	return &Case{
		Name: "triangle",
		Problem: &solvers.Problem{
			N:    2,
			Mass: solvers.Diagonal(1, 0),
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = y[1]
				dst[1] = y[1] - (4*math.Abs(0.5-frac(t)) - 1)
				return nil
			},
			Pattern: []solvers.Entry{{Row: 0, Col: 1}, {Row: 1, Col: 1}},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = 1, 1
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1] = 0, 4
				if frac(t) >= 0.5 {
					dst[1] = -4
				}
				return nil
			},
		},
		End:     2 * math.Pi,
		Initial: []float64{10, 0},
		Exact: func(dst []float64, t float64) {
			f := frac(t)
			dst[1] = 4*math.Abs(0.5-f) - 1
			if f < 0.5 { // falling from the crest at f = 0, where x = 10.125
				dst[0] = 10.125 + f - 2*f*f
			} else { // rising from the trough at f = 1/2, where x = 10.125
				f -= 0.5
				dst[0] = 10.125 - f + 2*f*f
			}
		},
		Points: []Point{
			{0.5, []float64{10.25, 0}},
			{1, []float64{10, 0}},
			{2 * math.Pi, []float64{10.155982777954379449, 0.86725877128165409230}},
			{6.6, []float64{10.23, -0.4}},
		},
	}
}

// TriangleKinks lists the kinks of [Triangle] up to its end.
func TriangleKinks() []float64 {
	var kinks []float64
	for k := 1; float64(k)/4 <= 2*math.Pi; k += 2 {
		kinks = append(kinks, float64(k)/4)
	}
	return kinks
}
