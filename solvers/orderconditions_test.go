package solvers

import (
	"fmt"
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// butcherTree is a rooted tree by its sons.
type butcherTree []butcherTree

func (t butcherTree) order() int {
	n := 1
	for _, s := range t {
		n += s.order()
	}
	return n
}

// density is the product of the orders of all subtrees, gamma(t).
func (t butcherTree) density() float64 {
	d := float64(t.order())
	for _, s := range t {
		d *= s.density()
	}
	return d
}

func (t butcherTree) String() string {
	s := "["
	for _, x := range t {
		s += x.String()
	}
	return s + "]"
}

// treesOf lists the rooted trees of a given order, each once: sons in
// descending order of their place in the list of all smaller trees.
func treesOf(order int) []butcherTree {
	if order == 1 {
		return []butcherTree{{}}
	}
	var smaller []butcherTree
	for o := 1; o < order; o++ {
		smaller = append(smaller, treesOf(o)...)
	}
	var out []butcherTree
	var grow func(left, most int, sons butcherTree)
	grow = func(left, most int, sons butcherTree) {
		if left == 0 {
			out = append(out, append(butcherTree(nil), sons...))
			return
		}
		for i := most; i >= 0; i-- {
			if o := smaller[i].order(); o <= left {
				grow(left-o, i, append(sons, smaller[i]))
			}
		}
	}
	grow(order-1, len(smaller)-1, nil)
	return out
}

// rowForm is a Rosenbrock method in the form with stages k_i,
//
//	k_i = h f(y + sum alpha_ij k_j) + h J sum gamma_ij k_j,  y1 = y + sum b_i k_i,
//
// recovered from the transformed coefficients: u = Gamma k gives Gamma^-1 =
// I/gamma - C, alpha = a Gamma, b = m Gamma (E. Hairer, G. Wanner, Solving
// Ordinary Differential Equations II, 2nd ed., section IV.7, eqs. 7.20 to 7.25,
// numbers from memory).
type rowForm struct {
	s           int
	alpha, beta *mat.Dense // beta = alpha + Gamma, diagonal included
	gamma       *mat.Dense
	b, embedded []float64
}

func rowFormOf(t *testing.T, tab *rosenbrockTable) *rowForm {
	s := len(tab.c)
	inv := mat.NewDense(s, s, nil)
	a := mat.NewDense(s, s, nil)
	for i := range s {
		inv.Set(i, i, 1/tab.gamma)
		for j, v := range tab.cc[i] {
			inv.Set(i, j, -v)
		}
		for j, v := range tab.a[i] {
			a.Set(i, j, v)
		}
	}
	r := &rowForm{s: s, alpha: new(mat.Dense), beta: new(mat.Dense), gamma: new(mat.Dense)}
	if err := r.gamma.Inverse(inv); err != nil {
		t.Fatal(err)
	}
	r.alpha.Mul(a, r.gamma)
	r.beta.Add(r.alpha, r.gamma)
	m := append(append([]float64(nil), tab.a[s-1]...), 1)
	r.b = r.row(m)
	m[s-1] = 0
	r.embedded = r.row(m)
	return r
}

// row is m Gamma.
func (r *rowForm) row(m []float64) []float64 {
	var out mat.Dense
	out.Mul(mat.NewDense(1, r.s, m), r.gamma)
	return mat.Row(nil, 0, &out)
}

// weights is Phi(t) of each stage: a vertex with one son carries beta, one with
// several carries alpha for each (op. cit., theorem 7.6, number from memory).
func (r *rowForm) weights(t butcherTree) []float64 {
	phi := make([]float64, r.s)
	for i := range phi {
		phi[i] = 1
	}
	m := r.alpha
	if len(t) == 1 {
		m = r.beta
	}
	for _, son := range t {
		w := r.weights(son)
		for i := range phi {
			sum := 0.0
			for j := range w {
				sum += m.At(i, j) * w[j]
			}
			phi[i] *= sum
		}
	}
	return phi
}

func dotted(a, b []float64) float64 {
	s := 0.0
	for i, x := range a {
		s += x * b[i]
	}
	return s
}

// The printed coefficients have 16 digits and reach 150 in magnitude, with
// cancellation of some three digits in the sums.
const coefficientTolerance = 2e-11

func TestOrderConditions(t *testing.T) {
	if n := [...]int{len(treesOf(1)), len(treesOf(2)), len(treesOf(3)), len(treesOf(4)), len(treesOf(5))}; n != [...]int{1, 1, 2, 4, 9} {
		t.Fatalf("numbers of trees %v, want 1 1 2 4 9", n)
	}
	for _, tab := range []*rosenbrockTable{rodas5P, rodas4P} {
		r := rowFormOf(t, tab)
		check := func(what string, got, want float64) {
			t.Helper()
			if !(math.Abs(got-want) < coefficientTolerance) {
				t.Errorf("%s, %s: %.15g, want %.15g", tab.name, what, got, want)
			}
		}
		// Row sums: stage times, and the weights of df/dt.
		for i := range r.s {
			sa, sg := 0.0, 0.0
			for j := range r.s {
				sa += r.alpha.At(i, j)
				sg += r.gamma.At(i, j)
			}
			check(fmt.Sprintf("c[%d]", i), sa, tab.c[i])
			check(fmt.Sprintf("d[%d]", i), sg, tab.d[i])
			check(fmt.Sprintf("gamma[%d]", i), r.gamma.At(i, i), tab.gamma)
		}
		for order := 1; order <= tab.order; order++ {
			for _, tree := range treesOf(order) {
				phi := r.weights(tree)
				check("order condition "+tree.String(), dotted(r.b, phi), 1/tree.density())
				if order < tab.order {
					check("embedded order condition "+tree.String(), dotted(r.embedded, phi), 1/tree.density())
				}
				if order == tab.order {
					continue
				}
				for _, th := range []float64{0.2, 0.5, 0.9} {
					m := append(append([]float64(nil), tab.a[r.s-1]...), 1)
					for i := range m {
						k := 0.0
						for j := len(tab.dense) - 1; j >= 0; j-- {
							k = k*th + tab.dense[j][i]
						}
						m[i] = th*m[i] + th*(1-th)*k
					}
					check(fmt.Sprintf("dense output at %g, %s", th, tree), dotted(r.row(m), phi), math.Pow(th, float64(order))/tree.density())
				}
			}
		}
		// The embedded method is of lower order, or the estimate would vanish.
		lower := 0.0
		for _, tree := range treesOf(tab.order) {
			lower = math.Max(lower, math.Abs(dotted(r.embedded, r.weights(tree))-1/tree.density()))
		}
		if lower < 1e-4 {
			t.Errorf("%s: the embedded method has the order of the method", tab.name)
		}
		// Stiffly accurate: b is the last row of beta, so that the last stage
		// satisfies algebraic equations, and R(inf) = 1 - b beta^-1 1 = 0.
		for j := range r.s {
			check("stiff accuracy", r.b[j], r.beta.At(r.s-1, j))
		}
		var w, one mat.Dense
		if err := w.Inverse(r.beta); err != nil {
			t.Fatal(err)
		}
		one.Mul(&w, mat.NewDense(r.s, 1, ones(r.s)))
		check("R(inf)", 1-dotted(r.b, mat.Col(nil, 0, &one)), 0)
		// Index 1: an algebraic unknown that follows t^2, as an argument of f,
		// sum b_i alpha_i alpha_ij omega_jk alpha_k^2 = 1/4 with omega =
		// beta^-1 (op. cit., section VI.4; the value is that of exact
		// integration), and for an algebraic unknown itself sum b_i omega_ij
		// alpha_j^2 = 1.
		sq := make([]float64, r.s)
		for i := range sq {
			sq[i] = tab.c[i] * tab.c[i]
		}
		var rate mat.Dense
		rate.Mul(&w, mat.NewDense(r.s, 1, sq))
		rates := mat.Col(nil, 0, &rate)
		check("index 1, z = t^2", dotted(r.b, rates), 1)
		var back mat.Dense
		back.Mul(r.alpha, &rate)
		sum := 0.0
		for i := range r.s {
			sum += r.b[i] * tab.c[i] * back.At(i, 0)
		}
		check("index 1, y' = t z", sum, 0.25)
	}
}

func ones(n int) []float64 {
	v := make([]float64, n)
	for i := range v {
		v[i] = 1
	}
	return v
}
