package devices

import (
	"fmt"
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// ReducedNetworkParams are RL circuits between the terminals of a reduced network,
// one phase, referred to one voltage level.
type ReducedNetworkParams struct {
	// R and L are the resistance (ohm, >= 0) and inductance (H, > 0) of each
	// circuit.
	R, L []float64
	// Drive has a row for each circuit and a column for each terminal: the
	// circuit's current w flows in at terminal j as Drive[k][j] w, and sum_j
	// Drive[k][j] v_j drives it. A branch from terminal a to terminal b has 1 at a
	// and -1 at b. The circuits must tie all terminals together: with one
	// voltage at all of them, and no other way, no circuit may be driven, unless
	// paths to ground hold every terminal.
	Drive [][]float64
	// Ratio is the voltage of each terminal with no current flowing, over that of
	// the side to which R and L are referred: ratios and phase shifts of
	// transformers within. Nil means 1 throughout.
	Ratio []complex128
	// RatedCurrent is the base of the currents' error norm, A rms, > 0.
	RatedCurrent float64
}

// terminals is the number of terminals, from the first row.
func (p ReducedNetworkParams) terminals() int {
	if len(p.Drive) == 0 {
		return 0
	}
	return len(p.Drive[0])
}

func (p ReducedNetworkParams) check(f *faults) {
	n := len(p.R)
	if n == 0 {
		f.add("no circuits: want at least one")
	}
	if len(p.L) != n || len(p.Drive) != n {
		f.add("R for %d circuits, L for %d and Drive for %d: want as many of each", n, len(p.L), len(p.Drive))
	}
	for k, r := range p.R {
		f.notNegative(fmt.Sprintf("R[%d]", k), r, "ohm")
	}
	for k, l := range p.L {
		f.positive(fmt.Sprintf("L[%d]", k), l, "H")
	}
	m := p.terminals()
	if m == 0 && len(p.Drive) > 0 {
		f.add("Drive has no columns: want one for each terminal")
	}
	for k, row := range p.Drive {
		if len(row) != m {
			f.add("Drive[%d] has %d entries and Drive[0] has %d: want one for each terminal", k, len(row), m)
		}
		for j, x := range row {
			f.finite(fmt.Sprintf("Drive[%d][%d]", k, j), x, "")
		}
	}
	if p.Ratio != nil && len(p.Ratio) != m {
		f.add("Ratio for %d terminals and Drive for %d: want as many", len(p.Ratio), m)
	}
	for j, r := range p.Ratio {
		f.positive(fmt.Sprintf("|Ratio[%d]|", j), abs(r), "")
	}
	f.positive("RatedCurrent", p.RatedCurrent, "A rms")
	if len(f.errs) == 0 {
		if free := p.free(); free != nil && !free.even {
			f.add("Drive leaves terminal %d free of the others: want circuits that tie all terminals together", free.terminal)
		}
	}
}

// freedom is a combination of terminal voltages that drives no circuit.
type freedom struct {
	even     bool // all terminals alike, and the only one
	terminal int  // one that isn't tied to the others, if not even
}

// free finds what combinations of terminal voltages drive no circuit, by Gaussian
// elimination with full pivoting of Drive, rows scaled to 1; nil if none does.
func (p ReducedNetworkParams) free() *freedom {
	const rounding = 1e-9
	m := p.terminals()
	rows := make([][]float64, 0, len(p.Drive))
	for _, row := range p.Drive {
		largest := 0.0
		for _, x := range row {
			largest = max(largest, math.Abs(x))
		}
		if largest == 0 {
			continue
		}
		scaled := make([]float64, m)
		for j, x := range row {
			scaled[j] = x / largest
		}
		rows = append(rows, scaled)
	}
	rank := 0
	done := make([]bool, m)
	for rank < len(rows) {
		best, at, col := rounding, -1, 0
		for k := rank; k < len(rows); k++ {
			for j, x := range rows[k] {
				if !done[j] && math.Abs(x) > best {
					best, at, col = math.Abs(x), k, j
				}
			}
		}
		if at < 0 {
			break
		}
		rows[rank], rows[at] = rows[at], rows[rank]
		pivot := rows[rank]
		for k, row := range rows {
			if k == rank || row[col] == 0 {
				continue
			}
			factor := row[col] / pivot[col]
			for j := range row {
				row[j] -= factor * pivot[j]
			}
			row[col] = 0
		}
		done[col] = true
		rank++
	}
	if rank == m {
		return nil
	}
	// A free column j makes pivot columns follow: v_col = -row[j]/row[col] v_j.
	free := &freedom{even: rank == m-1}
	for j := range m {
		if !done[j] {
			free.terminal = j
		}
	}
	for k := range rank {
		for col := range m {
			if done[col] && rows[k][col] != 0 && math.Abs(rows[k][free.terminal]/rows[k][col]+1) > 1e-6 {
				free.even = false
			}
		}
	}
	return free
}

// ReducedNetwork stands for a network of RL branches seen from some of its buses:
// pseudo-flows w, independent combinations of branch currents in which the network
// is decoupled RL circuits, each driven by a combination of the terminal voltages,
// in the network frame:
//
//	L_k dw_k/dt = sum_j b_kj v_j/rho_j - (R_k + j omega_f L_k) w_k
//	flow_j = sum_k b_kj w_k/rho_j*
//
// with w (A peak, on the side referred to), b = Drive and rho = Ratio. A circuit is no branch: its drive may take in all
// terminals. The quasi-steady level has no unknowns: w_k = b_k v / (R_k + j
// omega_f L_k), which is the phasor Kron reduction at the frame's speed. See
// islet/engine/reduction for how a network is brought into this form, and what it
// keeps: currents and voltages at the terminals, stored energy and losses.
//
// Source: the symmetric-definite pencil of loop inductance and resistance, made
// diagonal; G. H. Golub, C. F. Van Loan, Matrix Computations, 3rd ed., 1996, section
// 8.7 (section number from memory).
type ReducedNetwork struct {
	timeless
	levels
	p         ReducedNetworkParams
	terminals int
	drive     []float64    // circuits x terminals, row-major
	turned    []complex128 // b_kj/rho_j, circuits x terminals; nil if all rho are 1
	grounded  bool         // paths to ground hold the terminals
	base      float64      // A peak
	frame     float64
	y         []complex128 // circuits: 1/(R + j omega_f L)
	nodal     []complex128 // terminals x terminals, at the quasi-steady level: sum b b^T y
	shorted   bool         // some circuit has no impedance at the frame's speed
	open      []complex128 // terminal voltages with all terminals but openAt open
	openAt    int
}

// NewReducedNetwork returns a reduced network at level [Full]. The error joins all
// faults.
func NewReducedNetwork(p ReducedNetworkParams) (*ReducedNetwork, error) {
	f := faults{device: "reduced network"}
	p.check(&f)
	if err := f.err(); err != nil {
		return nil, err
	}
	n := &ReducedNetwork{terminals: p.terminals(), base: PeakAmperes(p.RatedCurrent), grounded: p.free() == nil}
	n.p = ReducedNetworkParams{R: append([]float64(nil), p.R...), L: append([]float64(nil), p.L...), RatedCurrent: p.RatedCurrent}
	for _, row := range p.Drive {
		n.drive = append(n.drive, row...)
	}
	m := n.terminals
	for k := range p.R {
		n.p.Drive = append(n.p.Drive, n.drive[k*m:(k+1)*m:(k+1)*m])
	}
	for j, r := range p.Ratio {
		if r == 1 {
			continue
		}
		if n.turned == nil {
			n.p.Ratio = append([]complex128(nil), p.Ratio...)
			n.turned = make([]complex128, len(n.drive))
			for k, b := range n.drive {
				n.turned[k] = complex(b, 0)
			}
		}
		for k := range p.R {
			n.turned[k*m+j] /= r
		}
	}
	n.y = make([]complex128, len(p.R))
	n.nodal = make([]complex128, m*m)
	n.SetFrame(0)
	return n, nil
}

// weight returns b_kj/rho_j.
func (n *ReducedNetwork) weight(k, j int) complex128 {
	if n.turned != nil {
		return n.turned[k*n.terminals+j]
	}
	return complex(n.drive[k*n.terminals+j], 0)
}

// ratio returns rho_j.
func (n *ReducedNetwork) ratio(j int) complex128 {
	if n.p.Ratio == nil {
		return 1
	}
	return n.p.Ratio[j]
}

// Params returns the parameters, with Ratio nil if all are 1. The slices are the
// device's own: don't change them.
func (n *ReducedNetwork) Params() ReducedNetworkParams { return n.p }

// Dims returns two port components for each terminal and the unknowns w_1.d, w_1.q
// and so on, or none.
func (n *ReducedNetwork) Dims() (ports, own int) {
	if n.quasi {
		return 2 * n.terminals, 0
	}
	return 2 * n.terminals, 2 * len(n.p.R)
}

// Mass writes 0 at the terminals, and L of each circuit.
func (n *ReducedNetwork) Mass(port, own []float64) {
	clear(port)
	for k := range own {
		own[k] = n.p.L[k/2]
	}
}

// SetFrame sets the speed of the network frame, rad/s.
func (n *ReducedNetwork) SetFrame(speed float64) {
	n.frame = speed
	n.shorted, n.openAt = false, -1
	m := n.terminals
	clear(n.nodal)
	for k, r := range n.p.R {
		y := inverse(complex(r, speed*n.p.L[k]))
		n.y[k] = y
		n.shorted = n.shorted || y == 0
		if !n.quasi {
			continue
		}
		for i := range m {
			for j := range m {
				n.nodal[i*m+j] += conj(n.weight(k, i)) * y * n.weight(k, j)
			}
		}
	}
}

// Eval writes the flows (A) and L dw/dt (V).
func (n *ReducedNetwork) Eval(flow, rate []float64, t float64, v, x []float64) error {
	m := n.terminals
	clear(flow)
	if n.quasi {
		if n.shorted {
			return errNoImpedance
		}
		for i := range m {
			var sum complex128
			for j, y := range n.nodal[i*m : (i+1)*m] {
				sum += y * pair(v, 2*j)
			}
			setPair(flow, 2*i, sum)
		}
		return nil
	}
	frame := n.frame
	ind := n.p.L[:len(n.p.R)]
	flow, v = flow[:2*m], v[:2*m]
	if n.turned != nil {
		for k, r := range n.p.R {
			w := pair(x, 2*k)
			u := jtimes(-frame*ind[k], w) - times(r, w)
			for j, b := range n.turned[k*m:][:m] {
				u += b * pair(v, 2*j)
				i := conj(b) * w
				flow[2*j] += real(i)
				flow[2*j+1] += imag(i)
			}
			setPair(rate, 2*k, u)
		}
		return nil
	}
	drive := n.drive
	for k, r := range n.p.R {
		row := drive[k*m:][:m]
		d, q := x[2*k], x[2*k+1]
		ud, uq := 0.0, 0.0
		for j, b := range row {
			ud += b * v[2*j]
			uq += b * v[2*j+1]
			flow[2*j] += b * d
			flow[2*j+1] += b * q
		}
		reactance := frame * ind[k]
		rate[2*k] = ud - r*d + reactance*q
		rate[2*k+1] = uq - r*q - reactance*d
	}
	return nil
}

// Pattern lists the entries that can be nonzero.
func (n *ReducedNetwork) Pattern() []solvers.Entry {
	m := n.terminals
	var list []solvers.Entry
	if n.quasi {
		for i := range m {
			for j := range m {
				list = append(list, entryBlocks([2]int{2 * i, 2 * j})...)
			}
		}
		return list
	}
	for k := range n.p.R {
		own := 2 * (m + k)
		list = append(list, entryBlocks([2]int{own, own})...)
		for j, b := range n.p.Drive[k] {
			switch {
			case b == 0:
			case n.turned != nil:
				list = append(list, entryBlocks([2]int{2 * j, own}, [2]int{own, 2 * j})...)
			default:
				list = append(list, entryDiagonals([2]int{2 * j, own}, [2]int{own, 2 * j})...)
			}
		}
	}
	return list
}

// Jacobian writes the exact Jacobian.
func (n *ReducedNetwork) Jacobian(jac []float64, t float64, v, x []float64) {
	m := n.terminals
	if n.quasi {
		for i := range m {
			for j := range m {
				block(jac, 2*m, 2*i, 2*j, n.nodal[i*m+j])
			}
		}
		return
	}
	order := 2 * (m + len(n.p.R))
	for k, r := range n.p.R {
		own := 2 * (m + k)
		for j, b := range n.p.Drive[k] {
			switch {
			case b == 0:
			case n.turned != nil:
				block(jac, order, 2*j, own, conj(n.weight(k, j)))
				block(jac, order, own, 2*j, n.weight(k, j))
			default:
				diagonal(jac, order, 2*j, own, b)
				diagonal(jac, order, own, 2*j, b)
			}
		}
		block(jac, order, own, own, complex(-r, -n.frame*n.p.L[k]))
	}
}

// Describe describes the network. Its currents are states; at the quasi-steady
// level paths to ground hold its terminals, or they are tied to one another.
func (n *ReducedNetwork) Describe() facet.Description {
	d := facet.Description{Kind: "reduced network"}
	flow := facet.FlowState
	switch {
	case n.quasi && n.grounded:
		flow = facet.FlowHeld
	case n.quasi:
		flow = facet.FlowNone
		for j := 1; j < n.terminals; j++ {
			d.Ties = append(d.Ties, facet.Tie{A: 0, B: j, Ratio: n.ratio(0) / n.ratio(j)})
		}
	}
	for j := range n.terminals {
		d.Terminals = append(d.Terminals, facet.Terminal{Name: fmt.Sprint(j + 1), Flow: flow})
	}
	if !n.quasi {
		for k := range n.p.R {
			w := statePair(fmt.Sprintf("w_%d", k+1), "A", n.base, true, "network")
			d.Unknowns = append(d.Unknowns, w[0], w[1])
		}
	}
	return d
}

// driving returns the voltage that drives circuit k.
func (n *ReducedNetwork) driving(k int, v []float64) complex128 {
	var sum complex128
	for j := range n.terminals {
		sum += n.weight(k, j) * pair(v, 2*j)
	}
	return sum
}

// current returns the current of circuit k.
func (n *ReducedNetwork) current(k int, v, x []float64) complex128 {
	if n.quasi {
		return n.y[k] * n.driving(k, v)
	}
	return pair(x, 2*k)
}

// Guess writes the currents of the phasor model.
func (n *ReducedNetwork) Guess(x []float64, t float64, v []float64) {
	if n.quasi {
		return
	}
	for k := range n.p.R {
		setPair(x, 2*k, n.y[k]*n.driving(k, v))
	}
}

// Channels lists loss (W), what the resistances turn into heat in lines and loads
// alike, and p_1, q_1 (W, var in), i_1 (A rms) and so on at each terminal.
func (n *ReducedNetwork) Channels() []facet.Channel {
	c := []facet.Channel{{Name: "loss", Unit: "W", Doc: "active power turned into heat in the network, loads within it included"}}
	for j := range n.terminals {
		c = append(c,
			facet.Channel{Name: fmt.Sprintf("p_%d", j+1), Unit: "W in", Doc: "active power into the network at this terminal"},
			facet.Channel{Name: fmt.Sprintf("q_%d", j+1), Unit: "var in", Doc: "reactive power into the network at this terminal"},
			facet.Channel{Name: fmt.Sprintf("i_%d", j+1), Unit: "A rms", Doc: "current at this terminal"})
	}
	return c
}

// Measure writes the channels.
func (n *ReducedNetwork) Measure(dst []float64, t float64, v, x []float64) {
	loss := 0.0
	for k, r := range n.p.R {
		w := n.current(k, v, x)
		loss += 1.5 * r * dot(w, w)
	}
	dst[0] = loss
	for j := range n.terminals {
		var i complex128
		for k := range n.p.R {
			if n.p.Drive[k][j] != 0 {
				i += conj(n.weight(k, j)) * n.current(k, v, x)
			}
		}
		s := power(pair(v, 2*j), i)
		dst[1+3*j], dst[2+3*j], dst[3+3*j] = real(s), imag(s), RMSAmperes(abs(i))
	}
}

// Energy returns (3/2) sum L |w|^2 / 2 as stored, nothing if quasi-steady, and
// (3/2) sum R |w|^2 as dissipated: what the branches of the network would.
func (n *ReducedNetwork) Energy(t float64, v, x []float64) facet.Energy {
	var e facet.Energy
	for k, r := range n.p.R {
		w := n.current(k, v, x)
		square := dot(w, w)
		e.Dissipated += 1.5 * r * square
		if !n.quasi {
			e.Stored += 0.75 * n.p.L[k] * square
		}
	}
	return e
}

// OpenRatio returns the voltage of terminal to over that of terminal from with
// nothing connected to any but from, at the frame's speed: the ratio of the
// transformers between them, less what loads within draw.
func (n *ReducedNetwork) OpenRatio(from, to int) complex128 {
	if !n.grounded || n.shorted {
		return n.ratio(to) / n.ratio(from)
	}
	if n.openAt != from {
		n.openFrom(from)
	}
	return n.open[to]
}

// openFrom solves for the terminal voltages with 1 V at terminal from and no
// current at the others, by Gaussian elimination in place.
func (n *ReducedNetwork) openFrom(from int) {
	m := n.terminals
	a := make([]complex128, m*m)
	for k, y := range n.y {
		for i := range m {
			for j := range m {
				a[i*m+j] += conj(n.weight(k, i)) * y * n.weight(k, j)
			}
		}
	}
	v := make([]complex128, m)
	for j := range m {
		a[from*m+j] = 0
	}
	a[from*m+from], v[from] = 1, 1
	// Diagonal pivots do for an admittance matrix.
	for k := range m {
		for i := k + 1; i < m; i++ {
			f := a[i*m+k] / a[k*m+k]
			for j := k; j < m; j++ {
				a[i*m+j] -= f * a[k*m+j]
			}
			v[i] -= f * v[k]
		}
	}
	for k := m - 1; k >= 0; k-- {
		for j := k + 1; j < m; j++ {
			v[k] -= a[k*m+j] * v[j]
		}
		v[k] /= a[k*m+k]
	}
	n.open, n.openAt = v, from
}

// WithDetail returns the network at another level.
func (n *ReducedNetwork) WithDetail(level string) (solvers.Block, error) {
	at, err := parseLevels("reduced network", level)
	if err != nil {
		return nil, err
	}
	c := *n
	c.levels = at
	c.y = make([]complex128, len(n.y))
	c.nodal = make([]complex128, len(n.nodal))
	c.SetFrame(n.frame)
	return &c, nil
}
