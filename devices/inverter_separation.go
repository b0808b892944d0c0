package devices

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"strings"

	"gonum.org/v1/gonum/mat"

	"islet/solvers"
	"islet/solvers/facet"
)

// Separation compares the dynamics that a reduction drops with those it keeps, at
// a steady state with a stiff terminal voltage. Eigenvalues are in 1/s.
type Separation struct {
	// Level is what the reduction is called.
	Level string
	// Dropped are the eigenvalues of the dropped group while all else is frozen,
	// slowest first.
	Dropped []complex128
	// Kept are those of what stays, the dropped group at its quasi-steady state,
	// slowest first.
	Kept []complex128
	// Ratio is the slowest of Dropped by the fastest of Kept; +Inf where one of the
	// two is empty. Zero-order singular perturbation takes it to be large.
	Ratio float64
	// Shift is the largest distance of an eigenvalue of Kept from the nearest one of
	// the unreduced model, relative to its own size, and Moved that eigenvalue.
	Shift float64
	Moved complex128
}

// Limits of a good separation (common practice, no source): a ratio of five leaves
// an error of some twenty per cent in the fastest mode kept, less in slower ones.
const (
	leastRatio = 5
	largeShift = 0.2
)

// Poor tells whether the reduction is on weak ground: modes are dropped that are no
// faster than five times the fastest mode kept, or unstable by themselves.
func (s Separation) Poor() bool { return s.Ratio < leastRatio || s.unstable() }

// unstable tells whether the dropped group doesn't settle by itself.
func (s Separation) unstable() bool {
	for _, e := range s.Dropped {
		if !(real(e) < 0) {
			return true
		}
	}
	return false
}

// String says in a sentence or two what is dropped, and whether to trust it.
func (s Separation) String() string {
	if len(s.Dropped) == 0 || len(s.Kept) == 0 {
		return fmt.Sprintf("%s: nothing to compare: %d modes dropped, %d kept", s.Level, len(s.Dropped), len(s.Kept))
	}
	var b strings.Builder
	slow, fast := s.Dropped[0], s.Kept[len(s.Kept)-1]
	fmt.Fprintf(&b, "%s: the slowest mode dropped (%.4g 1/s) is %.2g times as fast as the fastest one kept (%.4g 1/s): ",
		s.Level, cmplx.Abs(slow), s.Ratio, cmplx.Abs(fast))
	if s.Ratio >= leastRatio {
		b.WriteString("well separated.")
	} else {
		overlap := 0
		for _, e := range s.Kept {
			if cmplx.Abs(slow) < leastRatio*cmplx.Abs(e) {
				overlap++
			}
		}
		fmt.Fprintf(&b, "poorly separated, %d of %d kept modes are faster than a fifth of what is dropped.", overlap, len(s.Kept))
	}
	if s.unstable() {
		b.WriteString(" The dropped dynamics don't settle by themselves.")
	}
	if s.Shift > largeShift {
		fmt.Fprintf(&b, " The kept mode at %.4g 1/s is off by %.0f %%.", s.Moved, 100*s.Shift)
	}
	return b.String()
}

// CompareDynamics compares the groups of dynamics ([facet.Unknown]) of a block with
// the rest of it, at the steady state that goes with terminal voltages v (V, network
// frame, a pair a terminal) at the block's frame speed. The steady state is found
// from the block's Guess if it has one, else from zero. The block is left as it was.
// Unknowns without mass follow from their equations on both sides.
func CompareDynamics(b solvers.Block, level string, groups []string, v []float64) (Separation, error) {
	fail := func(err error) (Separation, error) {
		return Separation{}, fmt.Errorf("devices: separation at detail %q: %w", level, err)
	}
	described, ok := b.(facet.Described)
	if !ok {
		return fail(errors.New("the block doesn't describe its unknowns"))
	}
	d := described.Describe()
	in, err := dynamicsMask(d.Unknowns, groups)
	if err != nil {
		return fail(err)
	}
	x := make([]float64, len(d.Unknowns))
	if s, ok := b.(facet.Starter); ok {
		s.Guess(x, 0, v)
	}
	if err := settle(b, d, v, x); err != nil {
		return fail(err)
	}
	jac, err := localJacobian(b, d, 0, v, x)
	if err != nil {
		return fail(err)
	}
	ports, own := b.Dims()
	n := ports + own
	a := mat.NewDense(n, n, jac)
	mass := make([]float64, own)
	b.Mass(make([]float64, ports), mass)
	var algebraic, fast, slow []int
	for k, m := range mass {
		row := ports + k
		switch {
		case m == 0:
			algebraic = append(algebraic, row)
			continue
		case in[k]:
			fast = append(fast, row)
		default:
			slow = append(slow, row)
		}
		for c := range n {
			a.Set(row, c, a.At(row, c)/m)
		}
	}
	s := Separation{Level: level, Ratio: math.Inf(1)}
	modes := func(rows, gone []int) (list []complex128) {
		if len(rows) == 0 || err != nil {
			return nil
		}
		var m *mat.Dense
		if m, err = eliminated(a, rows, rows, gone); err == nil {
			list, err = eigenvaluesOf(m)
		}
		return list
	}
	s.Dropped = modes(fast, algebraic)
	s.Kept = modes(slow, append(append([]int(nil), algebraic...), fast...))
	all := modes(append(append([]int(nil), slow...), fast...), algebraic)
	if err != nil {
		return fail(err)
	}
	if len(s.Dropped) > 0 && len(s.Kept) > 0 {
		s.Ratio = cmplx.Abs(s.Dropped[0]) / cmplx.Abs(s.Kept[len(s.Kept)-1])
	}
	for _, e := range s.Kept {
		nearest := math.Inf(1)
		for _, f := range all {
			nearest = math.Min(nearest, cmplx.Abs(e-f))
		}
		if r := ratio(nearest, cmplx.Abs(e), 0); r > s.Shift {
			s.Shift, s.Moved = r, e
		}
	}
	return s, nil
}

// settle solves the right-hand sides of all own unknowns for zero by a damped Newton
// iteration from x.
func settle(b solvers.Block, d facet.Description, v, x []float64) error {
	ports, own := b.Dims()
	if own == 0 {
		return nil
	}
	flow, rate := make([]float64, ports), make([]float64, own)
	rows := make([]int, own)
	for k := range rows {
		rows[k] = ports + k
	}
	for range 100 {
		if err := b.Eval(flow, rate, 0, v, x); err != nil {
			return err
		}
		jac, err := localJacobian(b, d, 0, v, x)
		if err != nil {
			return err
		}
		a := part(mat.NewDense(ports+own, ports+own, jac), rows, rows)
		var step mat.VecDense
		if err := step.SolveVec(a, mat.NewVecDense(own, rate)); err != nil {
			if c, ok := err.(mat.Condition); !ok || math.IsInf(float64(c), 1) {
				return fmt.Errorf("no steady state: %w", err)
			}
		}
		worst := 0.0
		for k, u := range d.Unknowns {
			worst = math.Max(worst, math.Abs(step.AtVec(k))/u.Base)
		}
		if math.IsNaN(worst) {
			return errors.New("no steady state: the equations give NaN")
		}
		damp := math.Min(1, 0.5/worst)
		for k := range x {
			x[k] -= damp * step.AtVec(k)
		}
		if worst < 1e-10 {
			return nil
		}
	}
	return errors.New("no steady state found at this terminal voltage and speed")
}

// Separation compares what a level of detail drops of the full equations with what
// it keeps, at the steady state that goes with terminal voltage v (V peak, network
// frame) at the frame's speed, or the nominal one if none has been set. A slow
// current loop, for example, makes "current loop gone" drop a slow mode. On a stiff
// terminal the network's own part in the modes is left out.
func (g *GridForming) Separation(level string, v complex128) (Separation, error) {
	if _, err := g.WithDetail(level); err != nil {
		return Separation{}, err
	}
	full := *g
	full.frame = orDefault(g.frame, g.par.Omega0)
	full.setDetail(Full)
	return CompareDynamics(&full, level, g.DroppedDynamics(level), []float64{real(v), imag(v)})
}

// Separation is that of [GridForming.Separation].
func (g *GridFollowing) Separation(level string, v complex128) (Separation, error) {
	if _, err := g.WithDetail(level); err != nil {
		return Separation{}, err
	}
	full := *g
	full.frame = orDefault(g.frame, g.par.Omega0)
	full.setDetail(Full)
	return CompareDynamics(&full, level, g.DroppedDynamics(level), []float64{real(v), imag(v)})
}
