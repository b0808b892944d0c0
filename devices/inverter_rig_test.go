package devices

import (
	"fmt"
	"math"
	"math/cmplx"
	"sort"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/solvers"
	"islet/solvers/facet"
)

// inverter is what the rig needs of either kind.
type inverter interface {
	solvers.Block
	solvers.Differentiable
	facet.Described
	facet.Framed
	facet.Starter
}

// rig is a single bus with inverters, a resistive load (conductance load, S a
// phase) and, if grid > 0, an ideal voltage behind R and L. It finds the steady
// state and the eigenvalues of the whole, with the inverters' own Jacobians.
//
// Without a load and with inductors alone at the bus, its current law holds
// states only; the time derivative of the law then fixes the voltage.
type rig struct {
	inv  []inverter
	load float64

	grid   float64 // E, V peak; 0: an island
	gridR  float64 // ohm
	gridL  float64 // H
	phasor bool    // grid without dynamics

	omega float64 // of the frame; found by steady in an island

	v    []float64
	x    [][]float64
	size int // of all x together
}

func newRig(inv ...inverter) *rig {
	r := &rig{inv: inv, omega: 2 * math.Pi * 50, v: make([]float64, 2)}
	for _, b := range inv {
		_, own := b.Dims()
		r.x = append(r.x, make([]float64, own))
		r.size += own
	}
	return r
}

// scr sets the grid by short-circuit ratio at the rating and X/R.
func (r *rig) scr(voltage, rating, scr, xr float64) *rig {
	res, x := SplitXR(BaseOhms(voltage, rating)/scr, xr)
	r.grid, r.gridR, r.gridL = PeakVolts(voltage), res, x/(2*math.Pi*50)
	return r
}

// local evaluates inverter k: [flow | rate] and the Jacobian.
func (r *rig) local(k int) (f []float64, jac []float64, mass []float64) {
	b := r.inv[k]
	_, own := b.Dims()
	b.SetFrame(r.omega)
	n := 2 + own
	f, jac, mass = make([]float64, n), make([]float64, n*n), make([]float64, own)
	if err := b.Eval(f[:2], f[2:], 0, r.v, r.x[k]); err != nil {
		panic(err)
	}
	b.Jacobian(jac, 0, r.v, r.x[k])
	b.Mass(make([]float64, 2), mass)
	return f, jac, mass
}

// gridZ is the impedance of the grid at the frame's speed.
func (r *rig) gridZ() complex128 { return complex(r.gridR, r.omega*r.gridL) }

// steady solves for the steady state. In an island the angle of the first
// inverter stays and the frame's speed is found in its place.
func (r *rig) steady() error {
	v0 := r.grid
	if v0 == 0 {
		v0 = 326
	}
	r.v[0], r.v[1] = v0, 0
	for k, b := range r.inv {
		b.SetFrame(r.omega)
		b.Guess(r.x[k], 0, r.v)
	}
	// The guess of a weakly connected inverter starts from the grid's voltage;
	// one turn of the bus's own law improves it.
	n := 2 + r.size
	scale := make([]float64, n)
	scale[0], scale[1] = v0, v0
	at := 2
	for _, b := range r.inv {
		for _, u := range b.Describe().Unknowns {
			scale[at] = u.Base
			at++
		}
	}
	residual := func() []float64 {
		f := make([]float64, n)
		var sum complex128
		at := 2
		for k := range r.inv {
			l, _, _ := r.local(k)
			sum += complex(l[0], l[1])
			at += copy(f[at:], l[2:])
		}
		sum += complex(r.load, 0) * pair(r.v, 0)
		if r.grid > 0 { // E - v - Z sum = 0
			sum = (complex(r.grid, 0) - pair(r.v, 0)) - r.gridZ()*sum
		}
		f[0], f[1] = real(sum), imag(sum)
		return f
	}
	for range 60 {
		f := residual()
		jac := mat.NewDense(n, n, nil)
		set := func(i, j int, a float64) { jac.Set(i, j, jac.At(i, j)+a) }
		kcl := func(i, j int, d complex128) { // d(sum of flows)/d(unknown j)
			if r.grid > 0 {
				d *= -r.gridZ()
			}
			set(0, j, real(d))
			set(1, j, imag(d))
		}
		at := 2
		for k := range r.inv {
			l, j, _ := r.local(k)
			m := len(l)
			col := func(c int) int {
				if c < 2 {
					return c
				}
				return at + c - 2
			}
			for c := range m {
				kcl(0, col(c), complex(j[c], j[m+c]))
				for row := 2; row < m; row++ {
					set(at+row-2, col(c), j[row*m+c])
				}
			}
			at += m - 2
		}
		kcl(0, 0, complex(r.load, 0))
		kcl(0, 1, complex(0, r.load))
		if r.grid > 0 {
			set(0, 0, -1)
			set(1, 1, -1)
		} else { // column of the frame's speed in place of the first angle
			const h = 1e-4
			r.omega += h
			g := residual()
			r.omega -= h
			for i := range n {
				jac.Set(i, 2, (g[i]-f[i])/h)
			}
		}
		rhs, step := mat.NewVecDense(n, f), mat.NewVecDense(n, nil)
		if err := step.SolveVec(jac, rhs); err != nil {
			if _, ok := err.(mat.Condition); !ok {
				return err
			}
		}
		worst := 0.0
		for i := range n {
			s := scale[i]
			if i == 2 && r.grid == 0 {
				s = 10
			}
			worst = math.Max(worst, math.Abs(step.AtVec(i))/s)
		}
		damp := math.Min(1, 0.5/worst)
		at = 2
		r.v[0] -= damp * step.AtVec(0)
		r.v[1] -= damp * step.AtVec(1)
		for k, x := range r.x {
			for i := range x {
				if k == 0 && i == 0 && r.grid == 0 {
					r.omega -= damp * step.AtVec(at)
				} else {
					x[i] -= damp * step.AtVec(at)
				}
				at++
			}
		}
		if worst < 1e-11 {
			return nil
		}
	}
	return fmt.Errorf("no steady state in 60 iterations")
}

// eigenvalues linearises at the present point. The algebraic unknowns (bus
// voltage, own unknowns of mass zero) are eliminated. In an island one
// eigenvalue is zero, that of turning everything.
func (r *rig) eigenvalues() []complex128 {
	states := r.grid > 0 && r.load == 0 && !r.phasor
	extra := 0
	if r.grid > 0 && !states && !r.phasor {
		extra = 2 // grid current is a state of its own
	}
	n := 2 + r.size + extra
	j := mat.NewDense(n, n, nil)
	m := make([]float64, n) // 0: algebraic
	add := func(i, k int, a float64) { j.Set(i, k, j.At(i, k)+a) }
	// kcl adds the complex coefficient d of unknown column c to the law
	kcl := func(c int, d complex128) { add(0, c, real(d)); add(1, c, imag(d)) }
	gridY := 1 / r.gridZ()
	at := 2
	for k := range r.inv {
		l, jac, mass := r.local(k)
		own := len(mass)
		w := 2 + own
		col := func(c int) int {
			if c < 2 {
				return c
			}
			return at + c - 2
		}
		for c := range w {
			for row := range own {
				s := 1.0
				if mass[row] != 0 {
					s = 1 / mass[row]
				}
				add(at+row, col(c), s*jac[(2+row)*w+c])
			}
			if states {
				// derivative of the flow: -(i_g)', the last pair of unknowns
				s := -1 / mass[own-1]
				kcl(col(c), complex(s*jac[own*w+c], s*jac[(own+1)*w+c]))
				// minus that of the grid current, (E - v - Z sum)/L
				kcl(col(c), r.gridZ()/complex(r.gridL, 0)*complex(jac[c], jac[w+c]))
			} else {
				kcl(col(c), complex(jac[c], jac[w+c]))
			}
		}
		copy(m[at:], mass)
		at += own
		_ = l
	}
	switch {
	case states:
		kcl(0, complex(1/r.gridL, 0))
		kcl(1, complex(0, 1/r.gridL))
	default:
		kcl(0, complex(r.load, 0))
		kcl(1, complex(0, r.load))
	}
	if r.phasor {
		kcl(0, gridY)
		kcl(1, 1i*gridY)
	}
	if extra > 0 { // L i' = E - v - Z i
		for q := range 2 {
			u := unit(q)
			kcl(at+q, -u)
			z := r.gridZ() * u / complex(r.gridL, 0)
			add(at, at+q, -real(z))
			add(at+1, at+q, -imag(z))
			add(at+q, q, -1/r.gridL)
			m[at+q] = 1
		}
	}
	var alg, dyn []int
	for i := range n {
		if m[i] == 0 {
			alg = append(alg, i)
		} else {
			dyn = append(dyn, i)
		}
	}
	part := func(rows, cols []int) *mat.Dense {
		p := mat.NewDense(len(rows), len(cols), nil)
		for i, a := range rows {
			for k, b := range cols {
				p.Set(i, k, j.At(a, b))
			}
		}
		return p
	}
	var sol, red mat.Dense
	if err := sol.Solve(part(alg, alg), part(alg, dyn)); err != nil {
		if _, ok := err.(mat.Condition); !ok {
			panic(err)
		}
	}
	red.Mul(part(dyn, alg), &sol)
	a := part(dyn, dyn)
	a.Sub(a, &red)
	var e mat.Eigen
	if !e.Factorize(a, mat.EigenNone) {
		panic("eigenvalues did not converge")
	}
	list := e.Values(nil)
	if r.grid == 0 { // drop the zero one
		k := 0
		for i, z := range list {
			if cmplx.Abs(z) < cmplx.Abs(list[k]) {
				k = i
			}
		}
		list = append(list[:k], list[k+1:]...)
	}
	sort.Slice(list, func(a, b int) bool { return real(list[a]) > real(list[b]) })
	return list
}

// mustForming and mustFollowing construct or fail the test.
func mustForming(t testing.TB, p GridFormingParams) *GridForming {
	t.Helper()
	g, err := NewGridForming(p)
	if err != nil {
		t.Fatal(err)
	}
	return g
}

func mustFollowing(t testing.TB, p GridFollowingParams) *GridFollowing {
	t.Helper()
	g, err := NewGridFollowing(p)
	if err != nil {
		t.Fatal(err)
	}
	return g
}
