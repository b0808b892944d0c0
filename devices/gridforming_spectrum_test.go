package devices

import (
	"math"
	"math/cmplx"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// publishedMatrix is the state matrix of the network of publishedForming with
// resistive loads at the equilibrium printed in publishedEquilibria: three
// inverters, loads of 25 ohm (bus 1) and 20 ohm (bus 3), 1000 ohm at each bus,
// lines 0.23 ohm + 0.318310 mH (1-2) and 0.35 ohm + 1.846197 mH (2-3). The frame
// is that of inverter 1 in the publication; here it turns at the common speed,
// which moves no eigenvalue but the zero one's vector.
func publishedMatrix() (*mat.Dense, error) {
	const own, n = 13, 3*13 + 2*2
	eq := publishedEquilibria[0]
	c := complex(math.Sqrt(2.0/3), 0)
	load := []float64{1.0/25 + 1e-3, 1e-3, 1.0/20 + 1e-3}
	lines := []struct {
		from, to int
		r, l     float64
	}{{0, 1, 0.23, 0.318310e-3}, {1, 2, 0.35, 1.846197e-3}}

	// Every bus has a resistance: v = volts * states.
	volts := mat.NewDense(6, n, nil)
	for b := range 3 {
		for q := range 2 {
			volts.Set(2*b+q, own*b+11+q, 1/load[b])
		}
	}
	for k, l := range lines {
		for q := range 2 {
			volts.Set(2*l.from+q, 3*own+2*k+q, -1/load[l.from])
			volts.Set(2*l.to+q, 3*own+2*k+q, 1/load[l.to])
		}
	}
	a := mat.NewDense(n, n, nil)
	byVolts := mat.NewDense(n, 6, nil)
	for k, s := range eq.inv {
		g, err := NewGridForming(publishedForming())
		if err != nil {
			return nil, err
		}
		g.SetFrame(eq.omega)
		x, v := make([]float64, own), make([]float64, 2)
		x[0], x[1], x[2] = s.delta, s.p, s.q
		setPair(x, 3, c*s.phi)
		setPair(x, 5, c*s.gamma)
		setPair(x, 7, c*s.il)
		setPair(x, 9, c*s.vo)
		setPair(x, 11, c*s.io*cmplx.Rect(1, s.delta))
		setPair(v, 0, c*s.busFrame1)
		mass := make([]float64, own)
		g.Mass(make([]float64, 2), mass)
		jac := make([]float64, 15*15)
		g.Jacobian(jac, 0, v, x)
		for i := range own {
			for j := range 15 {
				d := jac[(2+i)*15+j] / mass[i]
				if j < 2 {
					byVolts.Set(own*k+i, 2*k+j, d)
				} else {
					a.Set(own*k+i, own*k+j-2, d)
				}
			}
		}
	}
	for k, l := range lines {
		row := 3*own + 2*k
		for q := range 2 {
			a.Set(row+q, row+q, -l.r/l.l)
			byVolts.Set(row+q, 2*l.from+q, 1/l.l)
			byVolts.Set(row+q, 2*l.to+q, -1/l.l)
		}
		a.Set(row, row+1, eq.omega)
		a.Set(row+1, row, -eq.omega)
	}
	var coupled mat.Dense
	coupled.Mul(byVolts, volts)
	a.Add(a, &coupled)
	return a, nil
}

// The spectrum of the published three-inverter microgrid, computed independently
// (Jacobian by complex step) to six decimals. The pairs beyond 1e4 1/s belong to
// the bus resistors and are left out: they depend on all digits of the lines.
func TestGridFormingPublishedSpectrum(t *testing.T) {
	a, err := publishedMatrix()
	if err != nil {
		t.Fatal(err)
	}
	var e mat.Eigen
	if !e.Factorize(a, mat.EigenNone) {
		t.Fatal("eigenvalues did not converge")
	}
	got := e.Values(nil)
	for _, want := range []complex128{
		0,
		complex(-8.386858, 47.644835),
		complex(-13.740357, 22.311342),
		-31.396806,
		-31.428865,
		-59.250180,
		complex(-74.158963, 137.600760),
		-126.319171,
		complex(-129.285582, 206.013089),
		complex(-1112.962271, 1503.650059),
		complex(-1143.117893, 1549.479168),
		complex(-1195.286140, 2104.440964),
		complex(-1224.326223, 1670.547806),
		complex(-1285.070563, 2355.619696),
		complex(-1300.069048, 1739.690068),
		complex(-2719.811650, 2038.722667),
		complex(-2802.897905, 4248.175789),
		complex(-2815.665135, 6844.804802),
		complex(-2966.541028, 7381.196116),
		complex(-3129.043533, 4720.714517),
		complex(-3352.478561, 2603.416091),
	} {
		best := math.Inf(1)
		for _, z := range got {
			best = math.Min(best, cmplx.Abs(z-want))
		}
		// Printed to 5e-7; the equilibrium to nine digits and the lines' seven
		// leave 1e-6 of the larger ones.
		if tol := 2e-5 + 1e-6*cmplx.Abs(want); !(best < tol) {
			t.Errorf("no eigenvalue within %.1g of %.6f: nearest is off by %.3g", tol, want, best)
		}
	}
}
