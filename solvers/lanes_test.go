package solvers

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

func randoms(rng *rand.Rand, n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = rng.NormFloat64()
	}
	return x
}

func sameBits(t *testing.T, what string, a, b []float64) {
	t.Helper()
	for i := range a {
		if math.Float64bits(a[i]) != math.Float64bits(b[i]) {
			t.Fatalf("%s: value %d is %v in assembly, %v in Go", what, i, a[i], b[i])
		}
	}
}

// A program on a random pattern, and values for four blocks.
func randomLanes(t *testing.T, rng *rand.Rand) (e *elimination, v []float64) {
	t.Helper()
	ports, own := rng.IntN(5), 1+rng.IntN(14)
	n := ports + own
	var pattern []Entry
	var values []float64
	for i := range n {
		for j := range n {
			if i == j || rng.Float64() < 0.3 {
				pattern = append(pattern, Entry{i, j})
				x := rng.NormFloat64()
				if i == j {
					x += 4
				}
				values = append(values, x)
			}
		}
	}
	e, err := newElimination(ports, own, pattern, values)
	if err != nil {
		t.Fatal(err)
	}
	v = make([]float64, lanes*e.slots)
	for i, s := range e.at {
		for l := range lanes {
			v[lanes*int(s)+l] = values[i] * (1 + 0.1*rng.NormFloat64())
		}
	}
	return e, v
}

// The kernels in assembly give the bits of those in Go, and either the numbers
// of one block at a time.
func TestLanes(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 5))
	for range 200 {
		e, v := randomLanes(t, rng)
		n := lanes * (e.own + e.ports)
		b := randoms(rng, n)
		x := randoms(rng, n)
		lv, lb, lx := slices.Clone(v), slices.Clone(b), slices.Clone(x)
		if !e.factorLanesGo(lv) {
			t.Fatal("a well-conditioned block is refused")
		}
		e.forwardLanesGo(lv, lb)
		e.backwardLanesGo(lv, lb, lx)
		if useAVX {
			av, ab, ax := slices.Clone(v), slices.Clone(b), slices.Clone(x)
			if !e.factorLanes(av) {
				t.Fatal("the assembly refuses a well-conditioned block")
			}
			e.forwardLanes(av, ab)
			e.backwardLanes(av, ab, ax)
			sameBits(t, "factors", av, lv)
			sameBits(t, "forward", ab, lb)
			sameBits(t, "backward", ax, lx)
		}
		for l := range lanes {
			one, ob, ox := make([]float64, e.slots), make([]float64, e.own+e.ports), make([]float64, e.own+e.ports)
			for i := range one {
				one[i] = v[lanes*i+l]
			}
			for i := range ob {
				ob[i], ox[i] = b[lanes*i+l], x[lanes*i+l]
			}
			if e.factor(one) >= 0 {
				t.Fatal("a block alone is refused")
			}
			e.forward(one, ob)
			e.backward(one, ob, ox)
			for i := range e.own {
				if got := lx[lanes*i+l]; math.Abs(got-ox[i]) > 1e-9*(1+math.Abs(ox[i])) {
					t.Fatalf("unknown %d of lane %d is %v, alone %v", i, l, got, ox[i])
				}
			}
		}
	}
}

// A pivot that is zero, too small beside its column, or not a number is
// reported in whichever lane it is.
func TestLanesRefusePivots(t *testing.T) {
	e, err := newElimination(0, 2, []Entry{{0, 0}, {0, 1}, {1, 0}, {1, 1}}, []float64{1, 2, 3, 5})
	if err != nil {
		t.Fatal(err)
	}
	first := int(e.steps[0].pivot)
	for l := range lanes {
		for _, p := range []float64{0, 1e-12, math.NaN(), math.Inf(1)} {
			v := make([]float64, lanes*e.slots)
			for i := range e.slots {
				for k := range lanes {
					v[lanes*i+k] = float64(1 + i*i*i)
				}
			}
			v[lanes*first+l] = p
			// An infinite pivot has the reciprocal zero, and leaves the
			// rest as it is.
			want := math.IsInf(p, 1)
			if got := e.factorLanesGo(slices.Clone(v)); got != want {
				t.Errorf("pivot %v in lane %d: accepted %v in Go", p, l, got)
			}
			if got := e.factorLanes(v); got != want {
				t.Errorf("pivot %v in lane %d: accepted %v", p, l, got)
			}
		}
	}
}

func TestInterleave(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for n := range 20 {
		var a, back [lanes][]float64
		for l := range a {
			a[l], back[l] = randoms(rng, n), make([]float64, n)
		}
		dst := make([]float64, lanes*n)
		interleave(dst, n, a[0], a[1], a[2], a[3])
		for j := range n {
			for l := range lanes {
				if dst[lanes*j+l] != a[l][j] {
					t.Fatalf("n = %d: place %d of lane %d", n, j, l)
				}
			}
		}
		separate(back[0], back[1], back[2], back[3], n, dst)
		for l := range a {
			sameBits(t, "separate", back[l], a[l])
		}
	}
}

func TestCombineTwo(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 2))
	for n := range 40 {
		if n == 0 {
			continue
		}
		vec := func() []float64 {
			v := make([]float64, n, (n+3)&^3)
			copy(v, randoms(rng, n))
			return v
		}
		k := 1 + rng.IntN(8)
		var u [][]float64
		for range k {
			u = append(u, vec())
		}
		ac := randoms(rng, 2*k)
		y, scale := vec(), vec()
		dst, acc, dst2, acc2 := vec(), vec(), vec(), vec()
		combineTwo(dst, acc, y, scale, ac, u)
		combineTwoGo(dst2, acc2, y, scale, ac, u)
		sameBits(t, "first sum", dst, dst2)
		sameBits(t, "second sum", acc, acc2)
		for i := range dst {
			s, r := y[i], 0.0
			for j := range u {
				s += ac[2*j] * u[j][i]
				r += ac[2*j+1] * u[j][i]
			}
			if math.Abs(s-dst[i]) > 1e-13*10 || math.Abs(r*scale[i]-acc[i]) > 1e-13*10 {
				t.Fatalf("component %d: %v and %v, want %v and %v", i, dst[i], acc[i], s, r*scale[i])
			}
		}
		// In place, as the last stages do it.
		in := slices.Clone(y)
		in = slices.Grow(in, 3)
		combineTwo(in, acc, in, scale, ac, u)
		sameBits(t, "in place", in, dst)
	}
}
