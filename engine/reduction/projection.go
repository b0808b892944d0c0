package reduction

import (
	"errors"
	"fmt"

	"gonum.org/v1/gonum/mat"
)

// Projection is a network with interior nodes in branch currents i (A). Where
// the current law A i = 0 holds at the interior nodes (A their rows of the
// incidence matrix), the voltages there are no unknowns: they are what keeps it,
//
//	L i' = u + A^T v_int - R i         u = what the kept voltages put across
//	v_int = -(A L^-1 A^T)^-1 A L^-1 (u - R i)
//	i' = Pi L^-1 (u - R i)             Pi = I - L^-1 A^T (A L^-1 A^T)^-1 A
//
// Pi projects onto the currents that obey the law, along what interior voltages
// can do: Pi^2 = Pi, A Pi = 0, Pi L^-1 A^T = 0, and its trace is the number of
// dynamic states, branches less interior nodes. Right after a step the currents
// rise as L alone has it, and settle where R alone has it; no network of RL
// branches between the kept nodes does both unless all have one ratio R/L.
type Projection struct {
	net            Network
	keep, interior []int
	across         *mat.Dense // A_K^T: branches x kept
	a              *mat.Dense // interior x branches, nil without interior nodes
	pi             *mat.Dense // branches x branches
	toInterior     *mat.Dense // -(A L^-1 A^T)^-1 A L^-1, interior x branches
}

// Project returns the projection that eliminates all nodes but those in keep.
// All branches need L > 0. The error joins all faults, or tells that interior
// nodes hang together with no kept node and not with ground.
func Project(n Network, keep []int) (*Projection, error) {
	errs := []error{n.check(keep)}
	for k, b := range n.Branches {
		if b.L == 0 {
			errs = append(errs, fmt.Errorf("reduction: branch %d: L = 0: want L > 0, or Reduce", k))
		}
	}
	if len(n.Branches) == 0 {
		errs = append(errs, errors.New("reduction: no branches"))
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	nb := len(n.Branches)
	p := &Projection{net: n, keep: append([]int(nil), keep...), interior: others(n.Nodes, keep)}
	p.across = mat.DenseCopyOf(n.incidence(keep).T())
	p.a = n.incidence(p.interior)
	p.pi = mat.NewDense(nb, nb, nil)
	for k := range nb {
		p.pi.Set(k, k, 1)
	}
	if p.a == nil {
		return p, nil
	}
	al := mat.DenseCopyOf(p.a) // A L^-1
	for k, b := range n.Branches {
		for r := range p.interior {
			al.Set(r, k, al.At(r, k)/b.L)
		}
	}
	var ala, w, correction mat.Dense
	ala.Mul(al, p.a.T())
	if err := w.Solve(&ala, al); err != nil {
		return nil, fmt.Errorf("reduction: interior nodes aren't tied to any kept node or to ground: %w", err)
	}
	// L^-1 A^T (A L^-1 A^T)^-1 A = (W^T) A with W = (A L^-1 A^T)^-1 A L^-1
	correction.Mul(w.T(), p.a)
	p.pi.Sub(p.pi, &correction)
	p.toInterior = mat.NewDense(len(p.interior), nb, nil)
	p.toInterior.Scale(-1, &w)
	return p, nil
}

// Pi returns a copy of the projection, branches x branches.
func (p *Projection) Pi() *mat.Dense { return mat.DenseCopyOf(p.pi) }

// Interior lists the eliminated nodes, in the order of InteriorVoltages.
func (p *Projection) Interior() []int { return append([]int(nil), p.interior...) }

// push returns u - R i for kept voltages v and branch currents i.
func (p *Projection) push(v, i []float64) *mat.VecDense {
	u := mat.NewVecDense(len(i), nil)
	u.MulVec(p.across, mat.NewVecDense(len(v), v))
	for k, b := range p.net.Branches {
		u.SetVec(k, u.AtVec(k)-b.R*i[k])
	}
	return u
}

// Rates writes di/dt (A/s) into dst (len branches) for the voltages v at the
// kept nodes (V, in their order) and the branch currents i (A). It panics on
// wrong lengths.
func (p *Projection) Rates(dst, v, i []float64) {
	p.lengths(v, i)
	u := p.push(v, i)
	for k, b := range p.net.Branches {
		u.SetVec(k, u.AtVec(k)/b.L)
	}
	mat.NewVecDense(len(dst), dst).MulVec(p.pi, u)
}

// InteriorVoltages writes the voltages at the interior nodes (V) into dst. It
// panics on wrong lengths.
func (p *Projection) InteriorVoltages(dst, v, i []float64) {
	p.lengths(v, i)
	if len(dst) != len(p.interior) {
		panic(fmt.Sprintf("reduction: %d interior voltages asked, there are %d", len(dst), len(p.interior)))
	}
	if len(dst) == 0 {
		return
	}
	mat.NewVecDense(len(dst), dst).MulVec(p.toInterior, p.push(v, i))
}

func (p *Projection) lengths(v, i []float64) {
	if len(v) != len(p.keep) || len(i) != len(p.net.Branches) {
		panic(fmt.Sprintf("reduction: %d voltages and %d currents given, want %d and %d", len(v), len(i), len(p.keep), len(p.net.Branches)))
	}
}
