package testproblems

import "islet/solvers"

// Oregonator is a relaxation oscillation of the Belousov-Zhabotinskii reaction
// (OREGO), s = 77.27, w = 0.161, q = 8.375e-6, from 0 to 360:
//
//	y1' = s (y2 - y1 y2 + y1 - q y1²)
//	y2' = (-y2 - y1 y2 + y3) / s
//	y3' = w (y1 - y3)
//	y(0) = (1, 2, 3)
//
// Source: TS24 II-9 (whose printed y2 and y3 are good to 13 and 12 digits);
// HW2; R.J. Field, E. Körös, R.M. Noyes, J. Am. Chem. Soc. 94 (1972) 8649.
func Oregonator() *Case {
	const s, w, q = 77.27, 0.161, 8.375e-6
	return &Case{
		Name: "OREGO",
		Problem: &solvers.Problem{
			N: 3,
			F: func(dst []float64, t float64, y []float64) error {
				dst[0] = s * (y[1] - y[0]*y[1] + y[0] - q*y[0]*y[0])
				dst[1] = (-y[1] - y[0]*y[1] + y[2]) / s
				dst[2] = w * (y[0] - y[2])
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				dst[0], dst[1], dst[2] = s*(1-y[1]-2*q*y[0]), s*(1-y[0]), 0
				dst[3], dst[4], dst[5] = -y[1]/s, (-1-y[0])/s, 1/s
				dst[6], dst[7], dst[8] = w, 0, -w
				return nil
			},
			Autonomous: true,
		},
		End:     360,
		Initial: []float64{1, 2, 3},
		Points: []Point{{360, []float64{
			1.0008148703185227163e+00, 1.2281785215498879837e+03, 1.3205549428465082877e+02,
		}}},
	}
}
