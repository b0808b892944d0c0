package devices

import "testing"

// The cost of one evaluation and of one Jacobian of a shipped inverter at its
// defaults, at each level of detail.
func BenchmarkInverter(b *testing.B) {
	p, err := formingPlate().Params()
	if err != nil {
		b.Fatal(err)
	}
	q, err := followingPlate().Params()
	if err != nil {
		b.Fatal(err)
	}
	for _, c := range []struct {
		name string
		inv  reducible
	}{{"forming", mustForming(b, p)}, {"following", mustFollowing(b, q)}} {
		for _, level := range c.inv.Details() {
			block, err := c.inv.WithDetail(level)
			if err != nil {
				b.Fatal(err)
			}
			inv := block.(inverter)
			_, own := inv.Dims()
			v, x := []float64{320, 10}, make([]float64, own)
			inv.SetFrame(314)
			inv.Guess(x, 0, v)
			flow, rate := make([]float64, 2), make([]float64, own)
			jac := make([]float64, (2+own)*(2+own))
			b.Run(c.name+"/"+level+"/eval", func(b *testing.B) {
				for b.Loop() {
					if err := inv.Eval(flow, rate, 0, v, x); err != nil {
						b.Fatal(err)
					}
				}
			})
			b.Run(c.name+"/"+level+"/jacobian", func(b *testing.B) {
				for b.Loop() {
					inv.Jacobian(jac, 0, v, x)
				}
			})
		}
	}
}
