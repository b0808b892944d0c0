package modes

import (
	"fmt"
	"math"
	"math/cmplx"
	"sort"
)

// MatchOptions steer Match. The zero value gives the stated defaults.
type MatchOptions struct {
	// Damping is the difference of damping ratios from which a shared mode
	// earns a warning; 0 means 0.05 (common practice, no source).
	Damping float64
	// Cost is what a pair may cost at most to count as the same mode: the
	// distance of the eigenvalues relative to the larger plus one minus the
	// correlation of the vectors; 0 means 0.75 (tried on droop networks
	// between full and phasor detail; no source).
	Cost float64
}

// Pair is a mode that two reports share. Numbers are those in the reports.
type Pair struct {
	A, B int
	// Distance is |difference of eigenvalues| over the larger magnitude, and
	// Correlation |v_a* v_b|/(|v_a||v_b|) over the states that both have, in
	// per unit.
	Distance, Correlation float64
	// Warning tells of a damping that differs; "" if it doesn't.
	Warning string
}

// Comparison is the result of Match.
type Comparison struct {
	NameA, NameB string
	A, B         *Report
	Pairs        []Pair // by number in A
	OnlyA, OnlyB []int  // modes without a partner
	// Warnings are what must not be overlooked: another verdict on stability
	// first, then the shared modes whose damping differs.
	Warnings []string
}

// Match finds the modes that two settings of detail of one system share, by
// the nearness of eigenvalues and by the correlation of the right eigenvectors
// over the states that both have under one name. Rotational and neutral modes
// are left out.
func Match(nameA string, a *Report, nameB string, b *Report, o MatchOptions) *Comparison {
	if o.Damping == 0 {
		o.Damping = 0.05
	}
	if o.Cost == 0 {
		o.Cost = 0.75
	}
	c := &Comparison{NameA: nameA, NameB: nameB, A: a, B: b}
	at := make(map[string]int)
	for i, u := range b.States {
		at[u.Name] = i
	}
	var shared [][2]int
	var base []float64
	for i, u := range a.States {
		if j, ok := at[u.Name]; ok && b.States[j].Unit == u.Unit {
			shared = append(shared, [2]int{i, j})
			base = append(base, u.Base)
		}
	}
	correlation := func(v, w []complex128) float64 {
		dot, vv, ww := complex(0, 0), 0.0, 0.0
		for k, s := range shared {
			x, y := v[s[0]]/complex(base[k], 0), w[s[1]]/complex(base[k], 0)
			dot += cmplx.Conj(x) * y
			vv += real(x)*real(x) + imag(x)*imag(x)
			ww += real(y)*real(y) + imag(y)*imag(y)
		}
		if vv == 0 || ww == 0 {
			return 0
		}
		return cmplx.Abs(dot) / math.Sqrt(vv*ww)
	}
	type candidate struct {
		a, b int
		cost float64
		pair Pair
	}
	var list []candidate
	for i := range a.Modes {
		p := &a.Modes[i]
		if p.Zero || p.Neutral {
			continue
		}
		for j := range b.Modes {
			q := &b.Modes[j]
			if q.Zero || q.Neutral {
				continue
			}
			d := cmplx.Abs(p.Value-q.Value) / math.Max(cmplx.Abs(p.Value), cmplx.Abs(q.Value))
			if d > o.Cost {
				continue
			}
			r := correlation(p.Right, q.Right)
			if cost := d + 1 - r; cost <= o.Cost {
				list = append(list, candidate{i, j, cost, Pair{A: p.Number, B: q.Number, Distance: d, Correlation: r}})
			}
		}
	}
	sort.SliceStable(list, func(i, j int) bool { return list[i].cost < list[j].cost })
	doneA, doneB := make([]bool, len(a.Modes)), make([]bool, len(b.Modes))
	for _, k := range list {
		if doneA[k.a] || doneB[k.b] {
			continue
		}
		doneA[k.a], doneB[k.b] = true, true
		c.Pairs = append(c.Pairs, k.pair)
	}
	sort.Slice(c.Pairs, func(i, j int) bool { return c.Pairs[i].A < c.Pairs[j].A })
	for i := range a.Modes {
		if m := &a.Modes[i]; !doneA[i] && !m.Zero && !m.Neutral {
			c.OnlyA = append(c.OnlyA, m.Number)
		}
	}
	for i := range b.Modes {
		if m := &b.Modes[i]; !doneB[i] && !m.Zero && !m.Neutral {
			c.OnlyB = append(c.OnlyB, m.Number)
		}
	}
	c.warn(o)
	return c
}

func (c *Comparison) warn(o MatchOptions) {
	verdict := func(name string, r *Report) string {
		if m := r.Rightmost(); !r.Stable {
			return fmt.Sprintf("%s is UNSTABLE (%s)", name, m)
		} else if m != nil {
			return fmt.Sprintf("%s is stable (%s)", name, m)
		}
		return name + " is stable"
	}
	if c.A.Stable != c.B.Stable {
		c.Warnings = append(c.Warnings, fmt.Sprintf("the verdict on stability differs: %s, %s", verdict(c.NameA, c.A), verdict(c.NameB, c.B)))
	}
	for k := range c.Pairs {
		p := &c.Pairs[k]
		m, q := &c.A.Modes[p.A-1], &c.B.Modes[p.B-1]
		switch grow, grows := real(m.Value) >= 0, real(q.Value) >= 0; {
		case grow != grows:
			p.Warning = fmt.Sprintf("a shared mode decays in one and grows in the other: %s has %s, %s has %s", c.NameA, m, c.NameB, q)
		case math.Abs(m.Damping-q.Damping) > o.Damping:
			p.Warning = fmt.Sprintf("the damping of a shared mode differs: %s has %s, %s has %s", c.NameA, m, c.NameB, q)
		default:
			continue
		}
		c.Warnings = append(c.Warnings, p.Warning)
	}
}
