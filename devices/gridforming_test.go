package devices

import (
	"math"
	"testing"

	"islet/devices/devicetest"
	"islet/solvers"
)

// testForming is a 10 kVA inverter whose numbers are odd on purpose, so that no
// term of the equations hides behind another.
func testForming() GridFormingParams {
	return GridFormingParams{
		Rating:  10e3,
		Omega0:  2 * math.Pi * 50,
		V0:      326,
		P:       3e3,
		Q:       1e3,
		Primary: Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40, Psi: math.Pi / 2},
		Kpv:     0.06,
		Kiv:     200,
		F:       0.8,
		Kaw:     12,
		Kpc:     8,
		Kic:     9e3,
		IMax:    math.Inf(1),
		Filter:  LCL{Lf: 1.5e-3, Rf: 0.12, Cf: 30e-6, Lg: 0.5e-3, Rg: 0.04},
	}
}

func TestGridFormingConformance(t *testing.T) {
	cases := []struct {
		name string
		edit func(*GridFormingParams)
	}{
		{"droop", func(*GridFormingParams) {}},
		{"limit", func(p *GridFormingParams) { p.IMax = 25 }},
		{"rotated", func(p *GridFormingParams) { p.Primary = Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40, Psi: 0.6} }},
		{"resistive", func(p *GridFormingParams) { p.Primary = Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40} }},
		{"virtual impedance", func(p *GridFormingParams) { p.Rv, p.Xv = 0.3, 0.4 }},
		{"all", func(p *GridFormingParams) {
			p.Primary = Droop{M: 3e-4, N: 1.5e-3, OmegaC: 40, Psi: 0.9}
			p.Rv, p.Xv, p.IMax, p.OwnSpeed = 0.3, 0.4, 25, true
		}},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			p := testForming()
			c.edit(&p)
			devicetest.Run(t, func() solvers.Block {
				g, err := NewGridForming(p)
				if err != nil {
					t.Fatal(err)
				}
				return g
			}, devicetest.Options{Voltages: []float64{326}})
		})
	}
}
