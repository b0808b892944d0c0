package testproblems

import (
	"math"

	"islet/solvers"
)

// Pleiades is seven bodies of masses m_i = i in a plane (PLEI), not stiff, from
// 0 to 3. With r_ij the squared distance of bodies i and j,
//
//	x_i'' = sum over j != i of m_j (x_j - x_i) / r_ij^(3/2)
//	y_i'' = sum over j != i of m_j (y_j - y_i) / r_ij^(3/2)
//
// The unknowns are x (7), y (7), x' (7), y' (7). Near collisions, the closest
// at a squared distance of 0.0011 between bodies 1 and 7 near t = 1.68,
// amplify errors. Accuracy is measured by the positions, as in TS24. Source:
// TS24 II-6; HNW1.
func Pleiades() *Case {
	const n = 7
	pattern := make([]solvers.Entry, 0, 2*n+4*n*n)
	for i := range 2 * n {
		pattern = append(pattern, solvers.Entry{Row: i, Col: 2*n + i})
	}
	for i := range 2 * n {
		for j := range 2 * n {
			pattern = append(pattern, solvers.Entry{Row: 2*n + i, Col: j})
		}
	}
	positions := make([]int, 2*n)
	for i := range positions {
		positions[i] = i
	}
	return &Case{
		Name: "PLEI",
		Problem: &solvers.Problem{
			N: 4 * n,
			F: func(dst []float64, t float64, u []float64) error {
				copy(dst[:2*n], u[2*n:])
				for i := range n {
					ax, ay := 0.0, 0.0
					for j := range n {
						if j == i {
							continue
						}
						dx, dy := u[j]-u[i], u[n+j]-u[n+i]
						r2 := dx*dx + dy*dy
						k := float64(j+1) / (r2 * math.Sqrt(r2))
						ax += k * dx
						ay += k * dy
					}
					dst[2*n+i], dst[3*n+i] = ax, ay
				}
				return nil
			},
			Pattern: pattern,
			Jacobian: func(dst []float64, t float64, u []float64) error {
				for i := range 2 * n {
					dst[i] = 1
				}
				jac := dst[2*n:] // of the accelerations, 2n x 2n, row-major
				for i := range n {
					rowX, rowY := jac[2*n*i:][:2*n], jac[2*n*(n+i):][:2*n]
					xx, xy, yy := 0.0, 0.0, 0.0
					for j := range n {
						if j == i {
							continue
						}
						dx, dy := u[j]-u[i], u[n+j]-u[n+i]
						r2 := dx*dx + dy*dy
						k := float64(j+1) / (r2 * math.Sqrt(r2))
						jxx, jxy, jyy := k*(1-3*dx*dx/r2), -3*k*dx*dy/r2, k*(1-3*dy*dy/r2)
						rowX[j], rowX[n+j] = jxx, jxy
						rowY[j], rowY[n+j] = jxy, jyy
						xx += jxx
						xy += jxy
						yy += jyy
					}
					rowX[i], rowX[n+i] = -xx, -xy
					rowY[i], rowY[n+i] = -xy, -yy
				}
				return nil
			},
			Autonomous: true,
		},
		End: 3,
		Initial: []float64{
			3, 3, -1, -3, 2, -2, 2,
			3, -3, 2, 0, 0, -4, 4,
			0, 0, 0, 0, 0, 1.75, -1.5,
			0, 0, 0, -1.25, 1, 0, 0,
		},
		Measured: positions,
		Points: []Point{{3, []float64{
			3.7061391439705129009e-01, 3.2372840920572330928e+00, -3.2225590324183233471e+00, 6.5970914557753083594e-01,
			3.4255817071565797904e-01, 1.5621721014006310160e+00, -7.0030929222124953851e-01,
			-3.9434375855173920553e+00, -3.2713809739725499280e+00, 5.2250818434565441924e+00, -2.5906124349774695108e+00,
			1.1982136933922746375e+00, -2.4296823449358234092e-01, 1.0914492404289797479e+00,
			3.4170038063143147523e+00, 1.3545845016255012215e+00, -2.5900655978107754196e+00, 2.0250537347142411065e+00,
			-1.1558151001604490927e+00, -8.0729881702230217257e-01, 5.9523963542087187666e-01,
			-3.7412449612340084712e+00, 3.7734596857506290366e-01, 9.3868588695510788869e-01, 3.6679222272005698667e-01,
			-3.4740463538084943660e-01, 2.3449154481809369231e+00, -1.9470204342632919007e+00,
		}}},
		Invariants: []Invariant{
			{Name: "momentum in x", Linear: true, Func: func(u []float64) float64 {
				p := 0.0
				for i := range n {
					p += float64(i+1) * u[2*n+i]
				}
				return p
			}},
			{Name: "momentum in y", Linear: true, Func: func(u []float64) float64 {
				p := 0.0
				for i := range n {
					p += float64(i+1) * u[3*n+i]
				}
				return p
			}},
			{Name: "angular momentum", Func: func(u []float64) float64 {
				l := 0.0
				for i := range n {
					l += float64(i+1) * (u[i]*u[3*n+i] - u[n+i]*u[2*n+i])
				}
				return l
			}},
			{Name: "energy", Func: func(u []float64) float64 {
				e := 0.0
				for i := range n {
					mi := float64(i + 1)
					e += mi / 2 * (u[2*n+i]*u[2*n+i] + u[3*n+i]*u[3*n+i])
					for j := range i {
						e -= mi * float64(j+1) / math.Hypot(u[i]-u[j], u[n+i]-u[n+j])
					}
				}
				return e
			}},
		},
	}
}
