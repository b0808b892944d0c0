package devices

import (
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// Levels of detail of the inverters besides [Full], for WithDetail, from fine to
// coarse. One name means the same in every inverter: what is named is gone, or is
// all that is left, and stands at its quasi-steady state (singular perturbation of
// order zero: its derivative is dropped in the frame in which its equation is
// written). What stays keeps its parameters, names and meaning.
const (
	// CurrentLoopGone has the bridge's current i_f and the current controller's
	// gamma at their quasi-steady state: i_f = i_ref', the limited reference.
	CurrentLoopGone = "current loop gone"
	// InnerLoopsGone (grid-forming) has the voltage loop and the filter's
	// capacitor at their quasi-steady state too: v_c = v_ref.
	InnerLoopsGone = "inner loops gone"
	// PrimaryOnly keeps the power filter and the primary control, which in a
	// follower is the PLL with the filter of v_md. The grid-side current is at its
	// quasi-steady state too.
	PrimaryOnly = "primary only"
	// PhaseOnly (grid-forming) keeps the angle alone: a phase oscillator. Powers
	// are instantaneous and the voltage's magnitude is at its quasi-steady value.
	PhaseOnly = "phase only"
	// InjectionOnly (grid-following) has the PLL at its quasi-steady state too: a
	// current in line with the measured voltage, from the filtered v_md.
	InjectionOnly = "injection only"
)

// Groups of dynamics of the inverters' unknowns.
const (
	dynAngle   = "angle"
	dynPrimary = "primary control"
	dynPower   = "power filter"
	dynVoltage = "voltage loop"
	dynCurrent = "current loop"
	dynFilter  = "filter"
	dynNetwork = "network"
	dynPLL     = "PLL"
)

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

// LimitPriority tells which part of a current reference gives way to the
// current limit.
type LimitPriority string

// Priorities of the current limit. The three are found in many papers on current
// limiting, e.g. B. Fan, T. Liu, F. Zhao, H. Wu, X. Wang, "A review of
// current-limiting control of grid-forming inverters under symmetrical
// disturbances", IEEE Open J. Power Electronics 3, 2022 (citation from memory).
const (
	// AngleKept scales the reference to magnitude I_max: i' = i min(1, I_max/|i|).
	// The zero value of LimitPriority stands for it.
	AngleKept LimitPriority = "angle kept"
	// DFirst keeps the d part as far as the limit allows:
	// i'_d = i_d within +-I_max, then i'_q = i_q within +-sqrt(I_max^2 - i'_d^2).
	DFirst LimitPriority = "d first"
	// QFirst is DFirst with d and q exchanged.
	QFirst LimitPriority = "q first"
)

// check notes an unknown priority.
func (l LimitPriority) check(to *faults) {
	switch l {
	case "", AngleKept, DFirst, QFirst:
	default:
		to.add("Priority = %q: want %q, %q or %q", string(l), AngleKept, DFirst, QFirst)
	}
}

// limiter is a magnitude limit of a current reference.
type limiter struct {
	max      float64 // A peak, +Inf for none
	priority LimitPriority
}

// saturation is a limiter's output at one point, and its derivative there.
type saturation struct {
	out            complex128 // the limited current
	scale          float64    // |out|/|in|, 1 when not limiting
	dd, dq, qd, qq float64    // d out/d in
}

// apply limits i.
func (l *limiter) apply(i complex128) saturation {
	re, im := real(i), imag(i)
	m := math.Sqrt(re*re + im*im)
	if m <= l.max {
		return saturation{out: i, scale: 1, dd: 1, qq: 1}
	}
	s := l.max / m
	switch l.priority {
	case DFirst:
		d, q, own, other := favour(re, im, l.max)
		return saturation{out: complex(d, q), scale: s, dd: own, qd: other}
	case QFirst:
		q, d, own, other := favour(im, re, l.max)
		return saturation{out: complex(d, q), scale: s, qq: own, dq: other}
	}
	nr, ni := re/m, im/m // s (1 - n n^T)
	return saturation{
		out:   complex(s*re, s*im),
		scale: s,
		dd:    s * ni * ni, dq: -s * nr * ni,
		qd: -s * nr * ni, qq: s * nr * nr,
	}
}

// favour limits the pair (a, b), whose magnitude is beyond max, with a going
// first, and returns the slopes d a'/d a and d b'/d a. The second is unbounded as
// |a| nears max, where nothing is left for b.
func favour(a, b, max float64) (a1, b1, own, other float64) {
	if math.Abs(a) >= max {
		return math.Copysign(max, a), 0, 0, 0
	}
	b1 = math.Copysign(math.Sqrt((max-a)*(max+a)), b)
	return a, b1, 1, -a / b1
}

// slope returns the change of the limited current for a change d of the
// unlimited one.
func (s *saturation) slope(d complex128) complex128 {
	re, im := real(d), imag(d)
	return complex(s.dd*re+s.dq*im, s.qd*re+s.qq*im)
}

// kinks names the kinks of the limiter, see evalKinks; none if there is no limit.
func (l *limiter) kinks() []string {
	switch {
	case math.IsInf(l.max, 1):
		return nil
	case l.priority == DFirst:
		return []string{"current limit", "current limit taken up by d"}
	case l.priority == QFirst:
		return []string{"current limit", "current limit taken up by q"}
	}
	return []string{"current limit"}
}

// evalKinks writes what is positive where the limiter acts on the reference i: its
// magnitude less the limit, and the magnitude of the part that goes first less
// the limit. It returns the number written.
func (l *limiter) evalKinks(dst []float64, i complex128) int {
	if math.IsInf(l.max, 1) {
		return 0
	}
	dst[0] = abs(i) - l.max
	switch l.priority {
	case DFirst:
		dst[1] = math.Abs(real(i)) - l.max
		return 2
	case QFirst:
		dst[1] = math.Abs(imag(i)) - l.max
		return 2
	}
	return 1
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
	s, c := sincos(angle)
	return complex(c, s)
}

// sincos is math.Sincos, about twice as fast for arguments of moderate size: one
// reduction by multiples of pi/2 in three parts, then the polynomials of fdlibm's
// k_sin.c and k_cos.c (Sun Microsystems, 1993; coefficients from memory, checked
// against math.Sincos). The error is below one unit in the last place or so.
func sincos(x float64) (sin, cos float64) {
	const (
		limit = 1 << 19 // multiples below 2^20, of which the first two parts are exact
		shift = 0x1.8p52
		part1 = 1.57079632673412561417e+00 // first 33 bits of pi/2
		part2 = 6.07710050630396597660e-11 // next 33
		part3 = 2.02226624879595063154e-21 // the rest

		s1 = -1.66666666666666324348e-01
		s2 = 8.33333333332248946124e-03
		s3 = -1.98412698298579493134e-04
		s4 = 2.75573137070700676789e-06
		s5 = -2.50507602534068634195e-08
		s6 = 1.58969099521155010221e-10
		c1 = 4.16666666666666019037e-02
		c2 = -1.38888888888741095749e-03
		c3 = 2.48015872894767294178e-05
		c4 = -2.75573143513906633035e-07
		c5 = 2.08757232129817482790e-09
		c6 = -1.13596475577881948265e-11
	)
	if !(math.Abs(x) < limit) {
		return math.Sincos(x)
	}
	k := x*(2/math.Pi) + shift
	quarter := math.Float64bits(k)
	k -= shift
	r := ((x - k*part1) - k*part2) - k*part3
	// In pairs (Estrin), so that multiplications overlap.
	z := r * r
	z2 := z * z
	z4 := z2 * z2
	s := r + r*z*((s1+z*s2)+z2*(s3+z*s4)+z4*(s5+z*s6))
	c := 1 - (0.5*z - z2*((c1+z*c2)+z2*(c3+z*c4)+z4*(c5+z*c6)))
	switch quarter & 3 {
	case 0:
		return s, c
	case 1:
		return c, -s
	case 2:
		return -s, -c
	}
	return -c, s
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

// sparsity is the pattern of a local Jacobian: a kernel fills a dense work
// matrix, of which the entries of the pattern are handed on.
type sparsity struct {
	order   int
	own     []float64 // a work matrix, made when first needed
	work    []float64 // the one in use: order x order, row-major
	entries []solvers.Entry
}

// newSparsity returns a sparsity without entries.
func newSparsity(order int) *sparsity { return &sparsity{order: order} }

// begin makes work the matrix that is filled next; nil is one of its own.
func (s *sparsity) begin(work []float64) {
	if work == nil {
		if s.own == nil {
			s.own = make([]float64, s.order*s.order)
		}
		work = s.own
	}
	s.work = work[:s.order*s.order]
}

// find finds the entries that differ from zero for the given parameters: fill
// computes the Jacobian at scattered point k into the work matrix. An entry that
// is not structurally zero vanishes at all of them with probability zero.
func (s *sparsity) find(fill func(k int)) {
	s.begin(make([]float64, s.order*s.order))
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
		}
	}
	s.work = nil
}

// store copies the entries of the pattern from the work matrix to jac.
func (s *sparsity) store(jac []float64) {
	w := s.work
	jac = jac[:len(w)]
	for _, e := range s.entries {
		k := e.Row*s.order + e.Col
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
