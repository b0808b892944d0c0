package firstorder

import (
	"math"
	"math/cmplx"
	"sort"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/engine"
	"islet/solvers"
	"islet/solvers/facet"
)

// droopLine is a droop source behind a line R-L, as in power-checks J1 and J2:
//
//	delta' = -mp P (in a frame at nominal speed), P' = wc (p - P), Q' = wc (q - Q)
//	U = V - nq Q, L i' = U e^{j delta} - v - (R + j w L) i, p + j q = U e^{j delta} i*
//
// Power-invariant as the source is, so P = Re(v i*). i flows out.
type droopLine struct{ r, l, v, mp, nq, wc, w float64 }

func (d *droopLine) Describe() engine.Description {
	return engine.Description{
		Kind:      "droop source behind a line",
		Terminals: []engine.Terminal{{Name: "ac", Flow: engine.FlowState}},
		Unknowns: []engine.Unknown{
			{Name: "delta", Unit: "rad", Base: 1, Frame: engine.Angle, Dynamics: "primary control"},
			{Name: "P", Unit: "W", Base: 1e4, Dynamics: "power filter"},
			{Name: "Q", Unit: "var", Base: 1e4, Dynamics: "power filter"},
			{Name: "i.d", Unit: "A", Base: 30, Frame: engine.PairD, Dynamics: "network"},
			{Name: "i.q", Unit: "A", Base: 30, Frame: engine.PairQ, Dynamics: "network"},
		},
	}
}
func (d *droopLine) Dims() (int, int) { return 2, 5 }
func (d *droopLine) Mass(port, own []float64) {
	clear(port)
	copy(own, []float64{1, 1, 1, d.l, d.l})
}
func (d *droopLine) Eval(flow, rate []float64, t float64, v, x []float64) error {
	s, c := math.Sincos(x[0])
	u := d.v - d.nq*x[2]
	ud, uq := u*c, u*s
	rate[0] = -d.mp * x[1]
	rate[1] = d.wc * (ud*x[3] + uq*x[4] - x[1])
	rate[2] = d.wc * (uq*x[3] - ud*x[4] - x[2])
	rate[3] = ud - v[0] - d.r*x[3] + d.w*d.l*x[4]
	rate[4] = uq - v[1] - d.r*x[4] - d.w*d.l*x[3]
	flow[0], flow[1] = -x[3], -x[4]
	return nil
}
func (d *droopLine) Pattern() []solvers.Entry {
	var all []solvers.Entry
	for i := range 7 {
		for j := range 7 {
			all = append(all, solvers.Entry{Row: i, Col: j})
		}
	}
	return all
}
func (d *droopLine) Jacobian(jac []float64, t float64, v, x []float64) {
	clear(jac)
	s, c := math.Sincos(x[0])
	u := d.v - d.nq*x[2]
	set := func(row, col int, a float64) { jac[row*7+col] = a }
	// Columns: v.d v.q delta P Q i.d i.q; rows: flow.d flow.q and the rates.
	set(0, 5, -1)
	set(1, 6, -1)
	set(2, 3, -d.mp)
	set(3, 2, d.wc*u*(-s*x[3]+c*x[4]))
	set(3, 3, -d.wc)
	set(3, 4, -d.wc*d.nq*(c*x[3]+s*x[4]))
	set(3, 5, d.wc*u*c)
	set(3, 6, d.wc*u*s)
	set(4, 2, d.wc*u*(c*x[3]+s*x[4]))
	set(4, 4, -d.wc-d.wc*d.nq*(s*x[3]-c*x[4]))
	set(4, 5, d.wc*u*s)
	set(4, 6, -d.wc*u*c)
	set(5, 0, -1)
	set(5, 2, -u*s)
	set(5, 4, -d.nq*c)
	set(5, 5, -d.r)
	set(5, 6, d.w*d.l)
	set(6, 1, -1)
	set(6, 2, u*c)
	set(6, 4, -d.nq*s)
	set(6, 5, -d.w*d.l)
	set(6, 6, -d.r)
}

// wall holds its terminals at given values by a very large conductance.
type wall struct{ v []float64 }

const conductance = 1e9

func (w *wall) Dims() (int, int)         { return len(w.v), 0 }
func (w *wall) Mass(port, own []float64) { clear(port) }
func (w *wall) Eval(flow, rate []float64, t float64, v, x []float64) error {
	for i := range flow {
		flow[i] = conductance * (v[i] - w.v[i])
	}
	return nil
}

// spectrum returns the finite eigenvalues of a block on a wall at voltage
// vWall (with shadows at zero) at the state x, by increasing real part.
func spectrum(t *testing.T, b solvers.Block, vWall float64, x []float64) []complex128 {
	t.Helper()
	ports, own := b.Dims()
	n := solvers.NewNetwork(ports/2, 2)
	at := make([]int, ports)
	for i := range at {
		at[i] = i
	}
	var scale []float64
	for _, u := range b.(facet.Described).Describe().Unknowns {
		scale = append(scale, u.Base)
	}
	if _, err := n.Add(b, at, scale, nil); err != nil {
		t.Fatal(err)
	}
	w := &wall{make([]float64, ports)}
	w.v[0] = vWall
	if _, err := n.Add(w, at, nil, nil); err != nil {
		t.Fatal(err)
	}
	for i := range ports / 2 {
		n.SetNodeScale(i, 380)
	}
	if err := n.Configure(solvers.Configuration{}); err != nil {
		t.Fatal(err)
	}
	y := make([]float64, n.Dim())
	copy(y, x)
	y[n.NodeUnknown(0)] = vWall
	f := make([]float64, n.Dim())
	if err := n.Eval(f, 0, y); err != nil {
		t.Fatal(err)
	}
	for i, r := range f {
		if math.Abs(r) > 1e-6 {
			t.Fatalf("no equilibrium: equation %d has %g", i, r)
		}
	}
	if err := n.Linearise(0, y); err != nil {
		t.Fatal(err)
	}
	// M x' = J x with J = -(matrix at alpha 0); masses from the difference.
	asm := n.Assembly()
	dense := func(alpha float64) *mat.Dense {
		asm.Fill(alpha)
		a := asm.A
		d := mat.NewDense(n.Dim(), n.Dim(), nil)
		for j := range n.Dim() {
			for k := a.P[j]; k < a.P[j+1]; k++ {
				d.Set(a.I[k], j, a.X[k])
			}
		}
		return d
	}
	j0, j1 := dense(0), dense(1)
	var diff, alg []int
	mass := make(map[int]float64)
	for i := range n.Dim() {
		if m := j1.At(i, i) - j0.At(i, i); math.Abs(m) > 1e-12*(1+math.Abs(j0.At(i, i))) {
			diff = append(diff, i)
			mass[i] = m
		} else {
			alg = append(alg, i)
		}
	}
	_ = own
	part := func(r, c []int) *mat.Dense {
		d := mat.NewDense(len(r), len(c), nil)
		for a, i := range r {
			for b, k := range c {
				d.Set(a, b, -j0.At(i, k))
			}
		}
		return d
	}
	a := part(diff, diff)
	if len(alg) > 0 {
		var s, m mat.Dense
		if err := s.Solve(part(alg, alg), part(alg, diff)); err != nil {
			if c, ok := err.(mat.Condition); !ok || float64(c) > 1e30 {
				t.Fatal(err)
			}
		}
		m.Mul(part(diff, alg), &s)
		a.Sub(a, &m)
	}
	for r, i := range diff {
		for c := range diff {
			a.Set(r, c, a.At(r, c)/mass[i])
		}
	}
	var e mat.Eigen
	if !e.Factorize(a, mat.EigenNone) {
		t.Fatal("no eigenvalues")
	}
	ev := e.Values(nil)
	sort.Slice(ev, func(i, j int) bool { return real(ev[i]) > real(ev[j]) })
	return ev
}

func reduced(t *testing.T, d *droopLine) solvers.Block {
	t.Helper()
	b, err := newBlock(d, map[string]bool{"network": true})
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func pairNear(ev []complex128, want complex128) float64 {
	best := math.Inf(1)
	for _, x := range ev {
		best = math.Min(best, cmplx.Abs(x-want))
	}
	return best
}

// Source: power-checks J1 (closed form derived and computed there): roots at mp
// = 9.4e-5, line 0.35 + j0.58 ohm at 50 Hz, V = 380 V, wc = 31.41.
func TestRootsOfOneDroopSource(t *testing.T) {
	w := 100 * math.Pi
	d := &droopLine{r: 0.35, l: 0.58 / w, v: 380, mp: 9.4e-5, wc: 31.41, w: w}
	full := spectrum(t, d, 380, make([]float64, 5))
	for _, want := range []complex128{complex(-14.94396617, 17.76409945), complex(-190.33990086, 313.68716884)} {
		if e := pairNear(full, want); e > 1e-6 {
			t.Errorf("full: no root near %v (nearest %g off): %v", want, e, full)
		}
	}
	first := spectrum(t, reduced(t, d), 380, make([]float64, 7))
	if e := pairNear(first, complex(-14.94624594, 17.76136187)); e > 1e-6 {
		t.Errorf("first order: no root near the closed form (%g off): %v", e, first)
	}
}

// Critical droop gains. Source: power-checks J1 (mp alone) and J2 (with nq =
// 1.3e-3), the full model and the first-order one.
func TestCriticalGains(t *testing.T) {
	w := 100 * math.Pi
	for _, c := range []struct{ r, l, nq, full, first float64 }{
		{0.23, 0.10 / w, 0, 1.926370441e-3, 1.871225550e-3},
		{0.35, 0.58 / w, 0, 1.818275770e-3, 1.945650221e-3},
		{0.26, 0.21 / w, 0, 1.204827910e-3, 1.183714841e-3},
		{0.195, 0.61e-3, 1.3e-3, 3.636036932e-4, 3.866989866e-4},
		{0.26, 0.6684507610e-3, 1.3e-3, 4.008656448e-4, 4.154965959e-4},
		{0.60, 0.50e-3, 1.3e-3, 5.721020388e-4, 5.717980159e-4},
	} {
		for _, model := range []struct {
			name string
			make func(d *droopLine) (solvers.Block, []float64)
			want float64
		}{
			{"full", func(d *droopLine) (solvers.Block, []float64) { return d, make([]float64, 5) }, c.full},
			{"first order", func(d *droopLine) (solvers.Block, []float64) { return reduced(t, d), make([]float64, 7) }, c.first},
		} {
			lo, hi := 0.5*model.want, 2*model.want
			for hi-lo > 1e-9*model.want {
				mp := 0.5 * (lo + hi)
				b, x := model.make(&droopLine{r: c.r, l: c.l, v: 380, mp: mp, nq: c.nq, wc: 31.41, w: w})
				if real(spectrum(t, b, 380, x)[0]) < 0 {
					lo = mp
				} else {
					hi = mp
				}
			}
			// The reduced block's Jacobian is differenced, which leaves some
			// 1e-7 in the gain.
			if e := math.Abs(lo/model.want - 1); e > 1e-6 {
				t.Errorf("R = %g, nq = %g, %s: critical mp %.10g, want %.10g", c.r, c.nq, model.name, lo, model.want)
			}
		}
	}
}
