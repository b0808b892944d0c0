package devices

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"islet/solvers/facet"
)

// kinked is what these tests need of either inverter.
type kinked interface {
	reducible
	facet.Kinked
	facet.Measurer
	NKinks() int
}

// The kinks change sign where the limiter's channel starts from 0, at every level at
// which a limiter acts, and are declared only there.
func TestKinks(t *testing.T) {
	limited := testForming()
	limited.IMax = 15
	all := limited
	all.Priority, all.LimitImpedance = QFirst, LimitImpedance{12, 0.4, 3}
	follower := testFollowing()
	follower.IMax, follower.SpeedLimit = 12, 20
	first := follower
	first.Priority = DFirst
	const current, speed, impedance = "current limit", "speed limit", "limiting impedance"
	for _, c := range []struct {
		name  string
		inv   kinked
		above []string // at "full" and "current loop gone"
		below []string
	}{
		{"no limit", mustForming(t, testForming()), nil, nil},
		{"forming", mustForming(t, limited), []string{current}, nil},
		{"forming, all", mustForming(t, all), []string{current, "current limit taken up by q", impedance}, []string{impedance}},
		{"following", mustFollowing(t, follower), []string{current, speed}, []string{current, speed}},
		{"following, d first", mustFollowing(t, first), []string{current, "current limit taken up by d", speed},
			[]string{current, "current limit taken up by d", speed}},
	} {
		for _, level := range c.inv.Details() {
			b, err := c.inv.WithDetail(level)
			if err != nil {
				t.Fatal(err)
			}
			g := b.(kinked)
			want := c.below
			switch level {
			case Full, CurrentLoopGone:
				want = c.above
			case InjectionOnly: // the PLL is in lock
				want = want[:len(want)-1]
			}
			if got := g.Kinks(); !slices.Equal(got, want) || g.NKinks() != len(want) {
				t.Errorf("%s, %s: kinks %q, want %q", c.name, level, got, want)
				continue
			}
			g.SetFrame(314)
			_, own := g.Dims()
			units, channels := g.Describe().Unknowns, g.Channels()
			limiting := slices.IndexFunc(channels, func(c facet.Channel) bool { return c.Name == "limiting" })
			zLimit := slices.IndexFunc(channels, func(c facet.Channel) bool { return c.Name == "z_limit" })
			frequency := slices.IndexFunc(channels, func(c facet.Channel) bool { return c.Name == "frequency" })
			rnd := rand.New(rand.NewPCG(5, 5))
			acts, rests := make([]int, len(want)), make([]int, len(want))
			for range 200 {
				v, x := []float64{300 + 50*rnd.Float64(), 50 * rnd.Float64()}, make([]float64, own)
				g.Guess(x, 0, v)
				for k, u := range units {
					x[k] += 0.6 * (rnd.Float64() - 0.5) * u.Base
				}
				ch, kinks := make([]float64, len(channels)), make([]float64, len(want))
				if g.Eval(make([]float64, 2), make([]float64, own), 0, v, x) != nil {
					continue // "phase only" outside its domain
				}
				g.Measure(ch, 0, v, x)
				g.EvalKinks(kinks, 0, v, x)
				for k, name := range want {
					on := kinks[k] > 0
					if on {
						acts[k]++
					} else {
						rests[k]++
					}
					var told bool
					switch name {
					case current:
						told = ch[limiting] > 0
					case impedance:
						told = ch[zLimit] > 0
					case speed:
						told = math.Abs(math.Abs(RadPerSecond(ch[frequency])-follower.Omega0)-follower.SpeedLimit) < 1e-9
					default:
						continue
					}
					if on != told {
						t.Errorf("%s, %s: %s is %g, but the channels say %v", c.name, level, name, kinks[k], told)
					}
				}
			}
			for k, name := range want {
				if acts[k] == 0 || rests[k] == 0 {
					t.Errorf("%s, %s: %s acts at %d points and rests at %d: proves nothing", c.name, level, name, acts[k], rests[k])
				}
			}
		}
	}
}
