package devices

import (
	"math"
	"testing"

	"islet/devices/devicetest"
	"islet/solvers"
)

// testFollowing is a 10 kVA inverter whose numbers are odd on purpose, so that
// no term of the equations hides behind another.
func testFollowing() GridFollowingParams {
	return GridFollowingParams{
		Rating:     10e3,
		Omega0:     2 * math.Pi * 50,
		V0:         326,
		P:          6e3,
		Q:          -2e3,
		Kp:         92,
		Ki:         4232,
		SpeedLimit: math.Inf(1),
		OmegaV:     300,
		VFloor:     60,
		Kpc:        8,
		Kic:        4e3,
		IMax:       math.Inf(1),
		Filter:     LCL{Lf: 1.5e-3, Rf: 0.12, Cf: 30e-6, Lg: 0.5e-3, Rg: 0.04},
	}
}

func TestGridFollowingConformance(t *testing.T) {
	cases := []struct {
		name string
		edit func(*GridFollowingParams)
	}{
		{"plain", func(*GridFollowingParams) {}},
		{"limits", func(p *GridFollowingParams) { p.IMax, p.SpeedLimit = 15, 40 }},
		{"limit d first", func(p *GridFollowingParams) { p.IMax, p.Priority = 17, DFirst }},
		{"limit q first", func(p *GridFollowingParams) { p.IMax, p.Priority = 15, QFirst }},
		{"proportional PLL", func(p *GridFollowingParams) { p.Ki = 0 }},
		{"proportional current loop", func(p *GridFollowingParams) { p.Kic = 0 }},
		{"fixed amplitude", func(p *GridFollowingParams) { p.FixedAmplitude = true }},
		{"no capacitor current", func(p *GridFollowingParams) { p.OmitCapacitor = true }},
		{"feed-forward", func(p *GridFollowingParams) { p.Kff = 0.7 }},
	}
	for _, c := range cases {
		for _, filter := range []string{"LCL", "L"} {
			t.Run(c.name+" "+filter, func(t *testing.T) {
				p := testFollowing()
				c.edit(&p)
				if filter == "L" {
					p.Filter = LCL{Lf: 2e-3, Rf: 0.15}
				}
				devicetest.Run(t, func() solvers.Block {
					g, err := NewGridFollowing(p)
					if err != nil {
						t.Fatal(err)
					}
					return g
				}, devicetest.Options{Voltages: []float64{326}})
			})
		}
	}
}
