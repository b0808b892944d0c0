package reduction

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"
)

// Circuit is an RL circuit between combinations of the kept nodes, with one
// current w (A):
//
//	L dw/dt = sum_j Drive_j v_j - R w        flow into the circuit at node j: Drive_j w
//
// The largest entry of Drive is 1, so that w, R (ohm) and L (H) are of the size of
// a branch's. A branch from node a to node b is the circuit with Drive 1 at a and
// -1 at b.
type Circuit struct {
	R, L  float64
	Drive []float64 // len kept nodes
}

// Rate is R/L, the rate at which the circuit's current decays with the kept
// voltages at zero (1/s).
func (c Circuit) Rate() float64 { return c.R / c.L }

// Reduced is a network seen from its kept nodes: RL circuits side by side, and
// resistive branches where the network has paths without inductance.
type Reduced struct {
	// Kept is the number of kept nodes.
	Kept int
	// Circuits have L > 0, ordered by Rate.
	Circuits []Circuit
	// Resistive are branches with L = 0 between kept nodes, or to ground: what
	// is left at infinite frequency.
	Resistive []Branch
	// Loops is the number of independent currents of the network. Those of
	// Loops - len(Circuits) that are no longer there are resistive, can't be
	// seen from the kept nodes (a current that circles inside, which nothing
	// starts), or share their rate with others.
	Loops int
}

// Circuits whose rates differ by less than sameRate of them are one group, seen
// through as few circuits as the group needs; what is negligible of the largest
// weight is rounding.
const (
	sameRate   = 1e-9
	negligible = 1e-13
)

// Reduce eliminates all nodes but those in keep, for any R and L. With N the
// independent loops of the network (currents i = N z obey the current law at the
// eliminated nodes), A_K the incidence of the kept nodes and v their voltages,
//
//	N^T L N z' = N^T A_K^T v - N^T R N z
//
// and both matrices are symmetric, not negative, and positive in sum, so a
// generalised eigenvalue decomposition makes both diagonal: z = U w gives circuits
// that are decoupled, L_k w_k' = b_k^T v - R_k w_k with b_k = A_K N U e_k, and the
// currents into the network are sum b_k w_k. Stored energy and losses are sums
// over the circuits, as they are over the branches.
//
// What is kept is no approximation: circuits that can't be seen from the kept
// nodes are left out, and circuits of one rate are put together, which changes
// nothing at the kept nodes for a network that starts without currents in them
// (as every steady state does). If all branches have one ratio R/L, one group is
// left, with the Laplacian of [Uniform] as sum b b^T/L.
//
// The error joins all faults of network and list. Nodes without a path to a kept
// node or to ground are no fault: no current flows there.
//
// Source: G. H. Golub, C. F. Van Loan, Matrix Computations, 3rd ed., 1996, section
// 8.7 (symmetric-definite pencils; section number from memory).
func Reduce(n Network, keep []int) (*Reduced, error) {
	if err := n.check(keep); err != nil {
		return nil, err
	}
	sigma := n.typicalRatio()
	basis, count, resistive := n.loops(keep, sigma)
	out := &Reduced{Kept: len(keep), Loops: count}
	if count == 0 {
		return out, nil
	}
	rates, drive, err := n.diagonalise(keep, sigma, basis, count)
	if err != nil {
		return nil, err
	}
	// rates are mu in [0, 1]: L_k = mu, R_k = sigma (1 - mu); the first ones are
	// those without inductance.
	out.Resistive = resistiveBranches(drive[:resistive], rates[:resistive], sigma, len(keep))
	out.Circuits = gather(drive[resistive:], rates[resistive:], sigma, len(keep))
	return out, nil
}

// diagonalise returns mu of each circuit in ascending order and its drive, with
// L_k = mu and R_k = sigma (1 - mu).
func (n Network) diagonalise(keep []int, sigma float64, basis []float64, count int) (mu []float64, drive [][]float64, err error) {
	nb := len(n.Branches)
	loops := mat.NewDense(nb, count, basis)
	// Loops scaled so that the diagonal of N^T (L + R/sigma) N is 1.
	scale := make([]float64, count)
	for k, b := range n.Branches {
		for c := range count {
			scale[c] += (b.L + b.R/sigma) * basis[k*count+c] * basis[k*count+c]
		}
	}
	for c, s := range scale {
		scale[c] = 1 / math.Sqrt(s)
	}
	form := func(weight func(Branch) float64) *mat.SymDense {
		f := mat.NewSymDense(count, nil)
		for k, b := range n.Branches {
			w := weight(b)
			row := basis[k*count : (k+1)*count]
			for i, x := range row {
				if x == 0 || w == 0 {
					continue
				}
				for j := i; j < count; j++ {
					if row[j] != 0 {
						f.SetSym(i, j, f.At(i, j)+w*x*row[j]*scale[i]*scale[j])
					}
				}
			}
		}
		return f
	}
	ln := form(func(b Branch) float64 { return b.L })
	sum := form(func(b Branch) float64 { return b.L + b.R/sigma })
	var chol mat.Cholesky
	if !chol.Factorize(sum) {
		return nil, nil, fmt.Errorf("reduction: impedances of the network lie too far apart for a decomposition (R + %.3g/s L from loop to loop)", sigma)
	}
	var lower mat.TriDense
	chol.LTo(&lower)
	var half, m mat.Dense
	if err := half.Solve(&lower, ln); err != nil { // C^-1 L
		return nil, nil, fmt.Errorf("reduction: impedances of the network lie too far apart: %w", err)
	}
	if err := m.Solve(&lower, half.T()); err != nil { // C^-1 (C^-1 L)^T
		return nil, nil, fmt.Errorf("reduction: impedances of the network lie too far apart: %w", err)
	}
	sym := mat.NewSymDense(count, nil)
	for i := range count {
		for j := i; j < count; j++ {
			sym.SetSym(i, j, (m.At(i, j)+m.At(j, i))/2)
		}
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(sym, true) {
		return nil, nil, fmt.Errorf("reduction: no eigenvalue decomposition of the %d loops", count)
	}
	var q, u mat.Dense
	eigen.VectorsTo(&q)
	if err := u.Solve(lower.T(), &q); err != nil { // C^-T Q
		return nil, nil, fmt.Errorf("reduction: impedances of the network lie too far apart: %w", err)
	}
	for i := range count {
		for k := range count {
			u.Set(i, k, u.At(i, k)*scale[i])
		}
	}
	var currents, d mat.Dense
	currents.Mul(loops, &u)
	d.Mul(n.incidence(keep), &currents) // kept x circuits
	drive = make([][]float64, count)
	for k := range drive {
		drive[k] = mat.Col(nil, k, &d)
	}
	// Rayleigh quotients of the branches: small R and small L keep their digits.
	mu = eigen.Values(nil)
	for k := range mu {
		l, r := 0.0, 0.0
		for i, b := range n.Branches {
			x := currents.At(i, k)
			l += b.L * x * x
			r += b.R / sigma * x * x
		}
		mu[k] = l / (l + r)
	}
	return mu, drive, nil
}

// gather puts circuits of one rate together. A group has the admittance
// W/(s + rate) with W = sum b b^T/L, and a pivoted Cholesky factor of W, of as
// many columns as its rank, is the shortest list of circuits for it.
func gather(drive [][]float64, mu []float64, sigma float64, kept int) []Circuit {
	if len(mu) == 0 {
		return nil
	}
	rate := func(k int) float64 { return sigma * (1 - mu[k]) / mu[k] }
	order := upTo(len(mu))
	slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(rate(a), rate(b)) })
	weight := func(k int) float64 { // trace of b b^T/L
		s := 0.0
		for _, x := range drive[k] {
			s += x * x
		}
		return s / mu[k]
	}
	total, slow := 0.0, 0.0 // weights at infinite frequency, and at sigma and below
	for k := range mu {
		total += weight(k)
		slow += weight(k) / (rate(k) + sigma)
	}
	var out []Circuit
	for lo := 0; lo < len(order); {
		hi := lo + 1
		for hi < len(order) && rate(order[hi])-rate(order[lo]) <= sameRate*rate(order[hi]) {
			hi++
		}
		w := make([]float64, kept*kept)
		mean, sum := 0.0, 0.0
		for _, k := range order[lo:hi] {
			for i, x := range drive[k] {
				for j, y := range drive[k] {
					w[i*kept+j] += x * y / mu[k]
				}
			}
			mean += rate(k) * weight(k)
			sum += weight(k)
		}
		lo = hi
		if sum == 0 {
			continue
		}
		mean /= sum
		floor := negligible * min(total, slow*(mean+sigma))
		for _, b := range pivotedCholesky(w, kept, floor) {
			out = append(out, normal(b, mean))
		}
	}
	return out
}

// pivotedCholesky returns columns c with sum c c^T = w, of which the diagonal
// left over is at most floor. It overwrites w.
func pivotedCholesky(w []float64, n int, floor float64) [][]float64 {
	var columns [][]float64
	largest := 0.0
	for i := range n {
		largest = max(largest, w[i*n+i])
	}
	floor = max(floor, negligible*largest)
	done := make([]bool, n)
	for range n {
		p := -1
		for i := range n {
			if !done[i] && (p < 0 || w[i*n+i] > w[p*n+p]) {
				p = i
			}
		}
		if w[p*n+p] <= floor {
			break
		}
		done[p] = true
		root := math.Sqrt(w[p*n+p])
		c := make([]float64, n)
		for i := range n {
			if !done[i] || i == p {
				c[i] = w[i*n+p] / root
			}
		}
		for i := range n {
			for j := range n {
				w[i*n+j] -= c[i] * c[j]
			}
		}
		columns = append(columns, c)
	}
	return columns
}

// normal scales a circuit with L = 1 so that its largest drive is 1, and clears
// what is rounding.
func normal(drive []float64, rate float64) Circuit {
	at := 0
	for j, x := range drive {
		if math.Abs(x) > math.Abs(drive[at])*(1+1e-12) {
			at = j
		}
	}
	beta := drive[at]
	c := Circuit{L: 1 / (beta * beta), Drive: make([]float64, len(drive))}
	c.R = rate * c.L
	for j, x := range drive {
		if x /= beta; math.Abs(x) > 1e-14 {
			c.Drive[j] = x
		}
	}
	return c
}

// resistiveBranches turns circuits without inductance into branches: their
// conductances sum b b^T/R are the Laplacian of a resistive network.
func resistiveBranches(drive [][]float64, mu []float64, sigma float64, kept int) []Branch {
	if len(mu) == 0 {
		return nil
	}
	g := mat.NewSymDense(kept, nil)
	for k, d := range drive {
		r := sigma * (1 - mu[k])
		for i := range kept {
			for j := i; j < kept; j++ {
				g.SetSym(i, j, g.At(i, j)+d[i]*d[j]/r)
			}
		}
	}
	return branchesOf(g, func(x float64) (r, l float64) { return 1 / x, 0 }).Branches
}

// Admittance returns the currents into the network per volt at the kept nodes,
// Kept x Kept, S, at the complex frequency s (1/s). Where the impedance of a
// circuit is zero (a lossless one at s = 0), entries are infinite or NaN.
func (r *Reduced) Admittance(s complex128) *mat.CDense {
	y := mat.NewCDense(r.Kept, r.Kept, nil)
	add := func(i, j int, x complex128) {
		if i != Ground && j != Ground {
			y.Set(i, j, y.At(i, j)+x)
		}
	}
	for _, c := range r.Circuits {
		g := 1 / (complex(c.R, 0) + s*complex(c.L, 0))
		for i, x := range c.Drive {
			for j, z := range c.Drive {
				add(i, j, complex(x*z, 0)*g)
			}
		}
	}
	for _, b := range r.Resistive {
		g := complex(1/b.R, 0)
		add(b.From, b.From, g)
		add(b.To, b.To, g)
		add(b.From, b.To, -g)
		add(b.To, b.From, -g)
	}
	return y
}

// Grounded reports whether currents can leave the network other than through the
// kept nodes: whether some circuit or branch leads to ground.
func (r *Reduced) Grounded() bool {
	for _, c := range r.Circuits {
		sum := 0.0
		for _, x := range c.Drive {
			sum += x
		}
		if math.Abs(sum) > 1e-9 {
			return true
		}
	}
	for _, b := range r.Resistive {
		if b.From == Ground || b.To == Ground {
			return true
		}
	}
	return false
}
