package testproblems

import (
	"fmt"
	"math"

	"islet/solvers"
)

// TransistorAmplifier is a two-stage amplifier (TRANSAMP), 8 node voltages in
// V, from 0 to 0.2 s. With U_b = 6, U_F = 0.026, alpha = 0.99, beta = 1e-6,
// R0 = 1000, R1 to R9 = 9000, C_k = k 1e-6, U_e(t) = 0.1 sin(200 pi t) and
// g(x) = beta (exp(x/U_F) - 1), M y' = f(t, y) where
//
//	M11 = M22 = -C1, M12 = M21 = C1      f1 = (y1 - U_e(t))/R0
//	                                     f2 = y2/R1 + (y2 - U_b)/R2 + (1 - alpha) g(y2 - y3)
//	M33 = -C2                            f3 = y3/R3 - g(y2 - y3)
//	M44 = M55 = -C3, M45 = M54 = C3      f4 = (y4 - U_b)/R4 + alpha g(y2 - y3)
//	                                     f5 = y5/R5 + (y5 - U_b)/R6 + (1 - alpha) g(y5 - y6)
//	M66 = -C4                            f6 = y6/R7 - g(y5 - y6)
//	M77 = M88 = -C5, M78 = M87 = C5      f7 = (y7 - U_b)/R8 + alpha g(y5 - y6)
//	                                     f8 = y8/R9
//	y(0) = (0, 3, 3, 6, 3, 3, 6, 0)
//
// M has rank 5 and no zero row; the algebraic equations are the sums
// f1 + f2 = f4 + f5 = f7 + f8 = 0. An exponent above 300 is answered by
// [solvers.ErrReject]. Source: TS24 II-14; E. Hairer, C. Lubich, M. Roche, The
// numerical solution of differential-algebraic systems by Runge-Kutta methods,
// LNM 1409, Springer 1989; P. Rentrop, M. Roche, G. Steinebach, Numer. Math. 55
// (1989) 545-563.
func TransistorAmplifier() *Case {
	const (
		ub, uf      = 6, 0.026
		alpha, beta = 0.99, 1e-6
		r0, r       = 1000.0, 9000.0 // r is R1 to R9
		w           = 200 * math.Pi
		top         = 300 // largest exponent, as in TS24
	)
	gate := func(x float64) (float64, error) {
		if !(x/uf <= top) {
			return 0, fmt.Errorf("testproblems: base-emitter voltage %g V: %w", x, solvers.ErrReject)
		}
		return beta * math.Exp(x/uf), nil
	}
	var mass []solvers.Element
	diag := func(i int, c float64) { mass = append(mass, solvers.Element{Row: i, Col: i, Value: -c}) }
	pair := func(i int, c float64) {
		diag(i, c)
		diag(i+1, c)
		mass = append(mass, solvers.Element{Row: i, Col: i + 1, Value: c}, solvers.Element{Row: i + 1, Col: i, Value: c})
	}
	pair(0, 1e-6)
	diag(2, 2e-6)
	pair(3, 3e-6)
	diag(5, 4e-6)
	pair(6, 5e-6)
	return &Case{
		Name: "TRANSAMP",
		Problem: &solvers.Problem{
			N:    8,
			Mass: mass,
			F: func(dst []float64, t float64, y []float64) error {
				e1, err := gate(y[1] - y[2])
				if err != nil {
					return err
				}
				e2, err := gate(y[4] - y[5])
				if err != nil {
					return err
				}
				g1, g2 := e1-beta, e2-beta
				dst[0] = (y[0] - 0.1*math.Sin(w*t)) / r0
				dst[1] = y[1]/r + (y[1]-ub)/r + (1-alpha)*g1
				dst[2] = y[2]/r - g1
				dst[3] = (y[3]-ub)/r + alpha*g1
				dst[4] = y[4]/r + (y[4]-ub)/r + (1-alpha)*g2
				dst[5] = y[5]/r - g2
				dst[6] = (y[6]-ub)/r + alpha*g2
				dst[7] = y[7] / r
				return nil
			},
			Pattern: []solvers.Entry{
				{Row: 0, Col: 0},
				{Row: 1, Col: 1}, {Row: 1, Col: 2},
				{Row: 2, Col: 1}, {Row: 2, Col: 2},
				{Row: 3, Col: 1}, {Row: 3, Col: 2}, {Row: 3, Col: 3},
				{Row: 4, Col: 4}, {Row: 4, Col: 5},
				{Row: 5, Col: 4}, {Row: 5, Col: 5},
				{Row: 6, Col: 4}, {Row: 6, Col: 5}, {Row: 6, Col: 6},
				{Row: 7, Col: 7},
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				e1, err := gate(y[1] - y[2])
				if err != nil {
					return err
				}
				e2, err := gate(y[4] - y[5])
				if err != nil {
					return err
				}
				d1, d2 := e1/uf, e2/uf
				dst[0] = 1 / r0
				dst[1], dst[2] = 2/r+(1-alpha)*d1, -(1-alpha)*d1
				dst[3], dst[4] = -d1, 1/r+d1
				dst[5], dst[6], dst[7] = alpha*d1, -alpha*d1, 1/r
				dst[8], dst[9] = 2/r+(1-alpha)*d2, -(1-alpha)*d2
				dst[10], dst[11] = -d2, 1/r+d2
				dst[12], dst[13], dst[14] = alpha*d2, -alpha*d2, 1/r
				dst[15] = 1 / r
				return nil
			},
			TimeDerivative: func(dst []float64, t float64, y []float64) error {
				clear(dst)
				dst[0] = -0.1 * w * math.Cos(w*t) / r0
				return nil
			},
		},
		End:     0.2,
		Initial: []float64{0, 3, 3, 6, 3, 3, 6, 0},
		Points: []Point{{0.2, []float64{
			-5.5621450122622744445e-03, 3.0065224719030426673e+00, 2.8499587886081285074e+00, 2.9264225362062415090e+00,
			2.7046178650105545907e+00, 2.7618377783931440545e+00, 4.7709276316167721558e+00, 1.2369958680915475497e+00,
		}}},
	}
}

// TransistorAmplifierSlope is y'(0) of [TransistorAmplifier], from the
// differentiated algebraic equations in 30 digits. TS24 prints 51.338775,
// -24.9757667 and -10.00564453 instead, right to 5, 4 and 4 digits.
func TransistorAmplifierSlope() []float64 {
	return []float64{
		51.33927651718072, 51.33927651718072, -166.66666666666667, -24.97032851540633,
		-24.97032851540633, -83.33333333333333, -10.00027640245634, -10.00027640245634,
	}
}
