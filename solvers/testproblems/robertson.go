package testproblems

import "islet/solvers"

// Robertson is the chemical kinetics of Robertson (ROBER), from 0 to 1e11:
//
//	y1' = -0.04 y1 + 1e4 y2 y3
//	y2' =  0.04 y1 - 1e4 y2 y3 - 3e7 y2²
//	y3' =  3e7 y2²
//	y(0) = (1, 0, 0), y1 + y2 + y3 = 1
//
// If y2 turns slightly negative at large t the solution runs off to minus
// infinity, so the scale is 1e-4, as in TS24 (atol = 1e-4 rtol). Source: TS24
// II-10; HW2.
func Robertson() *Case {
	return &Case{
		Name: "ROBER",
		Problem: &solvers.Problem{
			N: 3,
			F: func(dst []float64, t float64, y []float64) error {
				forward, back, cross := 0.04*y[0], 1e4*y[1]*y[2], 3e7*y[1]*y[1]
				dst[0] = -forward + back
				dst[1] = forward - back - cross
				dst[2] = cross
				return nil
			},
			Pattern: []solvers.Entry{
				{Row: 0, Col: 0}, {Row: 0, Col: 1}, {Row: 0, Col: 2},
				{Row: 1, Col: 0}, {Row: 1, Col: 1}, {Row: 1, Col: 2},
				{Row: 2, Col: 1},
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				a, b, c := 1e4*y[2], 1e4*y[1], 6e7*y[1]
				dst[0], dst[1], dst[2] = -0.04, a, b
				dst[3], dst[4], dst[5] = 0.04, -a-c, -b
				dst[6] = c
				return nil
			},
			Autonomous: true,
			Scale:      fill(3, 1e-4),
		},
		End:        1e11,
		Initial:    []float64{1, 0, 0},
		Points:     robertsonPoints(),
		Invariants: []Invariant{sumOfThree()},
	}
}

// RobertsonDAE is [Robertson] with the conservation law as third equation,
// M = diag(1, 1, 0):
//
//	y1' = -0.04 y1 + 1e4 y2 y3
//	y2' =  0.04 y1 - 1e4 y2 y3 - 3e7 y2²
//	0   = y1 + y2 + y3 - 1
//
// Its roots are y1 - 1e-4 and y3 - 0.01. Source: HW2; example idaRoberts_dns
// of SUNDIALS, which prints the same times to five digits from a run at rtol
// 1e-4 (its late rows differ from the truth in the second or third digit).
// Root times by Newton's method on a 113-bit solution; SUNDIALS prints
// 2.6402e-01 and 2.0788e+07.
func RobertsonDAE() *Case {
	return &Case{
		Name: "ROBER-DAE",
		Problem: &solvers.Problem{
			N:    3,
			Mass: solvers.Diagonal(1, 1, 0),
			F: func(dst []float64, t float64, y []float64) error {
				forward, back, cross := 0.04*y[0], 1e4*y[1]*y[2], 3e7*y[1]*y[1]
				dst[0] = -forward + back
				dst[1] = forward - back - cross
				dst[2] = y[0] + y[1] + y[2] - 1
				return nil
			},
			Jacobian: func(dst []float64, t float64, y []float64) error {
				a, b, c := 1e4*y[2], 1e4*y[1], 6e7*y[1]
				dst[0], dst[1], dst[2] = -0.04, a, b
				dst[3], dst[4], dst[5] = 0.04, -a-c, -b
				dst[6], dst[7], dst[8] = 1, 1, 1
				return nil
			},
			Autonomous: true,
			Scale:      fill(3, 1e-4),
		},
		End:        1e11,
		Initial:    []float64{1, 0, 0},
		Points:     robertsonPoints(),
		Invariants: []Invariant{sumOfThree()},
		Handlers: solvers.Handlers{Roots: &solvers.Roots{
			N: 2,
			Func: func(dst []float64, t float64, y []float64) {
				dst[0] = y[0] - 1e-4
				dst[1] = y[2] - 0.01
			},
			Needs: []int{0, 2},
		}},
		Events: []Event{
			{Time: 0.26401907818763256315, Root: 1, Direction: solvers.Rising},
			{Time: 2.0795496883026623256e+07, Root: 0, Direction: solvers.Falling},
		},
	}
}

func sumOfThree() Invariant {
	return Invariant{
		Name:   "y1 + y2 + y3",
		Func:   func(y []float64) float64 { return y[0] + y[1] + y[2] },
		Linear: true,
	}
}

func robertsonPoints() []Point {
	return []Point{
		{0.4, []float64{9.8517211386098986e-01, 3.3863953789749041e-05, 1.4794022185220388e-02}},
		{4, []float64{9.0551867858425391e-01, 2.2404756875602009e-05, 9.4458916658870486e-02}},
		{40, []float64{7.1582706871940509e-01, 9.1855347645577639e-06, 2.8416374574583035e-01}},
		{400, []float64{4.5051866847110242e-01, 3.2229014416746113e-06, 5.4947810862745590e-01}},
		{4e3, []float64{1.8320225777670931e-01, 8.9423712527759093e-07, 8.1679684798616541e-01}},
		{4e4, []float64{3.8983377085482852e-02, 1.6217683159096824e-07, 9.6101646073768566e-01}},
		{4e5, []float64{4.9382745209798156e-03, 1.9849940879543754e-08, 9.9506170562907930e-01}},
		{4e6, []float64{5.1680960149243842e-04, 2.0682944912244536e-09, 9.9948318833021307e-01}},
		{4e7, []float64{5.2030718441205474e-05, 2.0813357318925327e-10, 9.9994796907342522e-01}},
		{4e8, []float64{5.2077021035731725e-06, 2.0830915594153650e-11, 9.9999479227706551e-01}},
		{4e9, []float64{5.2082766114359351e-07, 2.0833117166045720e-12, 9.9999947917025554e-01}},
		{4e10, []float64{5.2083451767992392e-08, 2.0833381779254890e-13, 9.9999994791633990e-01}},
		{1e11, []float64{2.0833401497012942306e-08, 8.3333607703347834006e-14, 9.9999997916651516938e-01}},
	}
}
