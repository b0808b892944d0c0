package testproblems

import "islet/solvers"

// HIRES describes the response of a plant to light, from 0 to 321.8122:
//
//	y1' = -1.71 y1 + 0.43 y2 + 8.32 y3 + 0.0007
//	y2' =  1.71 y1 - 8.75 y2
//	y3' = -10.03 y3 + 0.43 y4 + 0.035 y5
//	y4' =  8.32 y2 + 1.71 y3 - 1.12 y4
//	y5' = -1.745 y5 + 0.43 y6 + 0.43 y7
//	y6' = -280 y6 y8 + 0.69 y4 + 1.71 y5 - 0.43 y6 + 0.69 y7
//	y7' =  280 y6 y8 - 1.81 y7
//	y8' = -280 y6 y8 + 1.81 y7
//	y(0) = (1, 0, 0, 0, 0, 0, 0, 0.0057), y7 + y8 = 0.0057
//
// Source: TS24 II-1; HW2; E. Schäfer, J. Math. Biology 2 (1975) 41-56.
func HIRES() *Case {
	return &Case{
		Name: "HIRES",
		Problem: &solvers.Problem{
			N: 8,
			F: func(dst []float64, t float64, y []float64) error {
				bind := 280 * y[5] * y[7]
				dst[0] = -1.71*y[0] + 0.43*y[1] + 8.32*y[2] + 0.0007
				dst[1] = 1.71*y[0] - 8.75*y[1]
				dst[2] = -10.03*y[2] + 0.43*y[3] + 0.035*y[4]
				dst[3] = 8.32*y[1] + 1.71*y[2] - 1.12*y[3]
				dst[4] = -1.745*y[4] + 0.43*y[5] + 0.43*y[6]
				dst[5] = -bind + 0.69*y[3] + 1.71*y[4] - 0.43*y[5] + 0.69*y[6]
				dst[6] = bind - 1.81*y[6]
				dst[7] = -bind + 1.81*y[6]
				return nil
			},
			Pattern: []solvers.Entry{
				{Row: 0, Col: 0}, {Row: 0, Col: 1}, {Row: 0, Col: 2},
				{Row: 1, Col: 0}, {Row: 1, Col: 1},
				{Row: 2, Col: 2}, {Row: 2, Col: 3}, {Row: 2, Col: 4},
				{Row: 3, Col: 1}, {Row: 3, Col: 2}, {Row: 3, Col: 3},
				{Row: 4, Col: 4}, {Row: 4, Col: 5}, {Row: 4, Col: 6},
				{Row: 5, Col: 3}, {Row: 5, Col: 4}, {Row: 5, Col: 5}, {Row: 5, Col: 6}, {Row: 5, Col: 7},
				{Row: 6, Col: 5}, {Row: 6, Col: 6}, {Row: 6, Col: 7},
				{Row: 7, Col: 5}, {Row: 7, Col: 6}, {Row: 7, Col: 7},
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				b5, b7 := 280*y[7], 280*y[5] // derivatives of bind by y6 and y8
				copy(dst, []float64{
					-1.71, 0.43, 8.32,
					1.71, -8.75,
					-10.03, 0.43, 0.035,
					8.32, 1.71, -1.12,
					-1.745, 0.43, 0.43,
					0.69, 1.71, -b5 - 0.43, 0.69, -b7,
					b5, -1.81, b7,
					-b5, 1.81, -b7,
				})
				return nil
			},
			Autonomous: true,
		},
		End:     321.8122,
		Initial: []float64{1, 0, 0, 0, 0, 0, 0, 0.0057},
		Points: []Point{{321.8122, []float64{
			7.3713125733256678073e-04,
			1.4424857263161846582e-04,
			5.8887297409675750075e-05,
			1.1756513432831491455e-03,
			2.3863561988313304688e-03,
			6.2389682527427957866e-03,
			2.8499983951857686579e-03,
			2.8500016048142313421e-03,
		}}},
		Invariants: []Invariant{{
			Name:   "y7 + y8",
			Func:   func(y []float64) float64 { return y[6] + y[7] },
			Linear: true,
		}},
	}
}
