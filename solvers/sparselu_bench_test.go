package solvers

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// luMesh returns a matrix with the pattern of a meshed two-axis network: n/2
// nodes on a square grid, each tied to the node beside it and two of five to
// the one below (2.8 branches a node at both ends together, as in
// transmission networks; common practice, no source), with a 2 x 2 block for
// each node and each end of a branch. Values are those of admittances.
func luMesh(n int, seed uint64) *CSC {
	rnd := rand.New(rand.NewPCG(seed, 1))
	m := n / 2
	var at []Entry
	var val []float64
	branch := func(i, j int) {
		g, b := 1+rnd.Float64(), 5*rnd.Float64()
		for _, e := range [][3]int{{i, i, 1}, {j, j, 1}, {i, j, -1}, {j, i, -1}} {
			r, c, s := 2*e[0], 2*e[1], float64(e[2])
			at = append(at, Entry{r, c}, Entry{r, c + 1}, Entry{r + 1, c}, Entry{r + 1, c + 1})
			val = append(val, s*g, s*b, -s*b, s*g)
		}
	}
	w := max(1, int(math.Sqrt(float64(m))))
	for i := range m {
		if i%w != 0 {
			branch(i-1, i)
		}
		if i >= w && (i%w == 0 || rnd.Float64() < 0.4) {
			branch(i-w, i)
		}
		at = append(at, Entry{2 * i, 2 * i}, Entry{2*i + 1, 2*i + 1})
		val = append(val, 0.5, 0.5)
	}
	a, slot := NewCSC(2*m, 2*m, at)
	for k, s := range slot {
		a.X[s] += val[k]
	}
	return a
}

func BenchmarkSparseLU(b *testing.B) {
	for _, n := range []int{100, 1000, 10000} {
		a := luMesh(n, 1)
		f, err := NewSparseLU(a, LUOptions{})
		if err != nil {
			b.Fatal(err)
		}
		if err := f.Factor(); err != nil {
			b.Fatal(err)
		}
		b.Run(fmt.Sprintf("analyse/n=%d", n), func(b *testing.B) {
			for b.Loop() {
				if _, err := NewSparseLU(a, LUOptions{}); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run(fmt.Sprintf("factor/n=%d", n), func(b *testing.B) {
			for b.Loop() {
				f.Reset()
				if err := f.Factor(); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run(fmt.Sprintf("refactor/n=%d", n), func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				if err := f.Factor(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(f.Stats().Flops)*float64(b.N)/b.Elapsed().Seconds()/1e6, "Mflop/s")
			b.ReportMetric(float64(f.Stats().Nonzeros), "nnz")
		})
		b.Run(fmt.Sprintf("solve/n=%d", n), func(b *testing.B) {
			b.ReportAllocs()
			x := make([]float64, a.Cols)
			for i := range x {
				x[i] = 1
			}
			for b.Loop() {
				f.Solve(x)
				x[0] = 1
			}
		})
	}
}
