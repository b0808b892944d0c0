package devices

import (
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// PrimaryOnly is the inverters' level of detail besides [Full], for WithDetail.
// It keeps the power filter and the primary control (the PLL of a follower), and
// has inner loops, filter and grid-side current at their quasi-steady state.
const PrimaryOnly = "primary only"

// LCL holds the elements of an inverter's output filter, one phase of a star.
// A filter without capacitor and grid side (Cf = Lg = Rg = 0) is an L filter.
type LCL struct {
	Lf float64 // converter-side inductance, H, > 0
	Rf float64 // its resistance, ohm, >= 0
	Cf float64 // capacitance to neutral, F, > 0 (0 for an L filter)
	Lg float64 // grid-side inductance, H, > 0 (0 for an L filter)
	Rg float64 // its resistance, ohm, >= 0
}

// isL tells whether the filter is the converter-side inductor alone.
func (f LCL) isL() bool { return f.Cf == 0 && f.Lg == 0 && f.Rg == 0 }

// check notes the faults of the filter.
func (f LCL) check(to *faults, allowL bool) {
	to.positive("Filter.Lf", f.Lf, "H")
	to.notNegative("Filter.Rf", f.Rf, "ohm")
	if allowL && f.isL() {
		return
	}
	to.positive("Filter.Cf", f.Cf, "F")
	to.positive("Filter.Lg", f.Lg, "H")
	to.notNegative("Filter.Rg", f.Rg, "ohm")
}

// checkLimit wants value > 0, with +Inf for no limit.
func checkLimit(f *faults, name string, value float64, unit string) {
	if !math.IsInf(value, 1) {
		f.check(value > 0, name, value, unit, "a value > 0, +Inf for no limit")
	}
}

// saturation is the magnitude limit of a current reference at one point, and
// its derivative there: i' = s i, s = min(1, I_max/|i|), angle kept.
type saturation struct {
	out   complex128 // the limited current
	scale float64    // s, 1 when not limiting
	dir   complex128 // i/|i| when limiting, else 0
}

// saturate limits i to magnitude max.
func saturate(i complex128, max float64) saturation {
	re, im := real(i), imag(i)
	m := math.Sqrt(re*re + im*im)
	if m <= max {
		return saturation{out: i, scale: 1}
	}
	s := max / m
	return saturation{
		out:   complex(s*re, s*im),
		scale: s,
		dir:   complex(re/m, im/m),
	}
}

// slope returns the change of the limited current for a change d of the
// unlimited one: s (d - n Re(n* d)), n = i/|i|. It is no complex factor.
func (l *saturation) slope(d complex128) complex128 {
	nr, ni := real(l.dir), imag(l.dir)
	r := nr*real(d) + ni*imag(d)
	return complex(l.scale*(real(d)-nr*r), l.scale*(imag(d)-ni*r))
}

// conj is cmplx.Conj, which the compiler inlines in this form.
func conj(a complex128) complex128 { return complex(real(a), -imag(a)) }

// dot returns Re(a b*).
func dot(a, b complex128) float64 { return real(a)*real(b) + imag(a)*imag(b) }

// abs returns |a| without the range guards of math.Hypot.
func abs(a complex128) float64 { return math.Sqrt(dot(a, a)) }

// times scales a by the real r.
func times(r float64, a complex128) complex128 { return complex(r*real(a), r*imag(a)) }

// jtimes returns j r a.
func jtimes(r float64, a complex128) complex128 { return complex(-r*imag(a), r*real(a)) }

// rotor returns e^{j angle}.
func rotor(angle float64) complex128 {
	s, c := math.Sincos(angle)
	return complex(c, s)
}

// pair reads the complex unknown that starts at x[k].
func pair(x []float64, k int) complex128 { return complex(x[k], x[k+1]) }

// setPair writes the complex value z at x[k].
func setPair(x []float64, k int, z complex128) { x[k], x[k+1] = real(z), imag(z) }

// column writes the complex derivative z of the pair of rows row, row+1 in
// column col of the row-major matrix w of order n.
func column(w []float64, n, row, col int, z complex128) {
	w[row*n+col] = real(z)
	w[(row+1)*n+col] = imag(z)
}

// block writes the complex factor z between the pair of rows at row and the
// pair of columns at col.
func block(w []float64, n, row, col int, z complex128) {
	w[row*n+col], w[row*n+col+1] = real(z), -imag(z)
	w[(row+1)*n+col], w[(row+1)*n+col+1] = imag(z), real(z)
}

// sparsity is the pattern of a local Jacobian: a kernel fills a dense
// work matrix, and only the entries of the pattern are handed on.
type sparsity struct {
	order   int
	work    []float64 // order x order, row-major
	entries []solvers.Entry
	index   []int // positions of entries in work
}

// newSparsity returns a sparsity without entries.
func newSparsity(order int) *sparsity {
	return &sparsity{order: order, work: make([]float64, order*order)}
}

// find finds the entries that differ from zero for the given parameters: fill
// computes the Jacobian at scattered point k into the work matrix. An entry that
// is not structurally zero vanishes at all of them with probability zero.
func (s *sparsity) find(fill func(k int)) {
	seen := make([]bool, len(s.work))
	for k := range patternPoints {
		fill(k)
		for i, a := range s.work {
			seen[i] = seen[i] || a != 0
		}
	}
	for i, hit := range seen {
		if hit {
			s.entries = append(s.entries, solvers.Entry{Row: i / s.order, Col: i % s.order})
			s.index = append(s.index, i)
		}
	}
}

// store copies the entries of the pattern from the work matrix to jac.
func (s *sparsity) store(jac []float64) {
	w := s.work
	jac = jac[:len(w)]
	for _, k := range s.index {
		jac[k] = w[k]
	}
}

// scatter is a small linear congruential generator for the points at which a
// pattern is found (multiplier and increment: Knuth, The Art of Computer
// Programming vol. 2, 3.3.4, line 26).
type scatter uint64

// next returns a number in (-1, 1).
func (s *scatter) next() float64 {
	*s = *s*6364136223846793005 + 1442695040888963407
	return float64(int64(*s>>11))/(1<<52) - 1
}

// patternPoints is the number of scattered points of find. Their size
// runs through four decades, so that limits and floors act at some of them
// and not at others.
const patternPoints = 48

// patternScale is the size of point k relative to the bases.
func patternScale(k int) float64 { return math.Pow(10, float64(k%8)/2-2) }

// statePair returns the descriptions of a complex unknown.
func statePair(name, unit string, base float64, network bool, dynamics string) [2]facet.Unknown {
	fd, fq := facet.Invariant, facet.Invariant
	if network {
		fd, fq = facet.PairD, facet.PairQ
	}
	return [2]facet.Unknown{
		{Name: name + ".d", Unit: unit, Base: base, Frame: fd, Dynamics: dynamics},
		{Name: name + ".q", Unit: unit, Base: base, Frame: fq, Dynamics: dynamics},
	}
}

// ratio returns a/b, or fallback if b is 0.
func ratio(a, b, fallback float64) float64 {
	if b == 0 {
		return fallback
	}
	return a / b
}
