package testproblems

import "islet/solvers"

// VanDerPol is the stiff van der Pol oscillator (VDPOL) in its scaled form,
// eps = 1e-6, from 0 to 2:
//
//	y1' = y2
//	y2' = ((1 - y1²) y2 - y1) / eps
//	y(0) = (2, 0)
//
// Its root is y1, which crosses zero twice with a slope of 6.7e5, within a
// transition of some 1e-6. Source: TS24 II-8; HW2. Root times by Newton's
// method on a 113-bit solution; by the symmetry of the limit cycle the speeds
// there agree, and they do to 22 digits.
func VanDerPol() *Case {
	c := &Case{
		Name:    "VDPOL",
		Problem: vanDerPol(1e6, 1e6),
		End:     2,
		Initial: []float64{2, 0},
		Points:  []Point{{2, []float64{1.7061677321704650085e+00, -8.9280970102481654778e-01}}},
		Events: []Event{
			{Time: 0.80708474081587786759, Root: 0, Direction: solvers.Falling},
			{Time: 1.6142853037200448591, Root: 0, Direction: solvers.Rising},
		},
	}
	c.Handlers.Roots = &solvers.Roots{
		N:     1,
		Func:  func(dst []float64, t float64, y []float64) { dst[0] = y[0] },
		Needs: []int{0},
	}
	return c
}

// VanDerPolCrossingSpeed is the magnitude of y2 at both roots of [VanDerPol].
const VanDerPolCrossingSpeed = 6.6689631563718833e+05

// VanDerPolUnscaled is the same oscillator in its own time, mu = 1000, from 0
// to 2000:
//
//	y1' = y2
//	y2' = mu (1 - y1²) y2 - y1
//	y(0) = (2, 0)
//
// With t and 1/y2 a thousand times those of [VanDerPol] the solutions agree.
// Source: TS24 II-8; HW2.
func VanDerPolUnscaled() *Case {
	return &Case{
		Name:    "VDPOL-mu",
		Problem: vanDerPol(1000, 1),
		End:     2000,
		Initial: []float64{2, 0},
		Points:  []Point{{2000, []float64{1.7061677321704650085e+00, -8.9280970102481654778e-04}}},
	}
}

// vanDerPol is y1' = y2, y2' = a (1 - y1²) y2 - b y1.
func vanDerPol(a, b float64) *solvers.Problem {
	return &solvers.Problem{
		N: 2,
		F: func(dst []float64, t float64, y []float64) error {
			dst[0] = y[1]
			dst[1] = a*(1-y[0]*y[0])*y[1] - b*y[0]
			return nil
		},
		Pattern: []solvers.Entry{{Row: 0, Col: 1}, {Row: 1, Col: 0}, {Row: 1, Col: 1}},
		Jacobian: func(dst []float64, t float64, y []float64) error {
			dst[0] = 1
			dst[1] = -2*a*y[0]*y[1] - b
			dst[2] = a * (1 - y[0]*y[0])
			return nil
		},
		Autonomous: true,
	}
}
