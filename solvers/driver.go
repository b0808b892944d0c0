package solvers

import (
	"context"
	"fmt"
	"math"
	"sort"
)

// Direction is the way a root function crosses zero.
type Direction int8

// Directions.
const (
	Falling Direction = -1
	Both    Direction = 0
	Rising  Direction = +1
)

// Roots are functions of time and state whose zeros are located.
type Roots struct {
	// N is the number of functions.
	N int
	// Func writes their values at (t, y) into dst. y has full length, but
	// only the components in Needs hold valid values.
	Func func(dst []float64, t float64, y []float64)
	// Direction restricts the crossings that count; nil means both, for all.
	Direction []Direction
	// Needs lists the components of y that Func reads; nil means all.
	Needs []int
	// EndsOnly looks for crossings between the ends of a step alone, which
	// is cheap and misses pairs of crossings within one: enough for functions
	// that mark a kink in the equations.
	EndsOnly bool
}

// Hit is a located zero.
type Hit struct {
	Root      int
	Direction Direction // the way it crossed, Rising or Falling
}

// Driver takes steps that end at roots. Roots are sought on the dense output
// at a few points of every step and, where a function bends towards zero
// between them, at its extremum, so that two crossings within a step are
// found; located to rounding; and confirmed by repeating the step to end
// there, so that the state at a root has the order of the method.
//
// A function that is zero at the start counts as crossing only after it has
// left zero. A root that has been reported is not reported again before its
// function has left zero.
type Driver struct {
	st      Stepper
	roots   Roots
	sign    []int8 // reference sign; 0: not armed, the function has not left zero
	y       []float64
	samples []sample
	found   []crossing
	hits    []Hit
	scratch []float64
	vals    []float64
	full    bool
}

type sample struct {
	t float64
	g []float64
}

type crossing struct {
	t    float64
	root int
	dir  Direction
}

const rootSamples = 4 // interior points of a step at which roots are looked for

// NewDriver makes a driver of s, which may have been Reset already. r may be
// nil.
func NewDriver(s Stepper, r *Roots) *Driver {
	d := &Driver{st: s}
	if r != nil && r.N > 0 {
		d.roots = *r
		n := r.N
		d.sign = make([]int8, n)
		d.scratch = make([]float64, n)
		d.y = make([]float64, len(s.State()))
		d.samples = make([]sample, rootSamples+3)
		for i := range d.samples {
			d.samples[i].g = make([]float64, n)
		}
		d.vals = make([]float64, max(len(r.Needs), len(d.y)))
		d.arm()
	}
	return d
}

// Stepper returns the stepper the driver drives.
func (d *Driver) Stepper() Stepper { return d.st }

// Reset starts at (t, y), or starts again after a jump.
func (d *Driver) Reset(t float64, y []float64) error {
	if err := d.st.Reset(t, y); err != nil {
		return err
	}
	d.arm()
	return nil
}

// arm sets the reference signs from the present state.
func (d *Driver) arm() {
	if d.roots.N == 0 {
		return
	}
	d.roots.Func(d.scratch, d.st.Time(), d.st.State())
	for i, g := range d.scratch {
		d.sign[i] = signOf(g)
	}
}

func signOf(x float64) int8 {
	switch {
	case x > 0:
		return 1
	case x < 0:
		return -1
	}
	return 0
}

// at evaluates the root functions at t within the last step.
func (d *Driver) at(dst []float64, t float64) {
	if t == d.st.Time() {
		d.roots.Func(dst, t, d.st.State())
		return
	}
	if d.roots.Needs == nil {
		d.st.Interpolate(d.y, nil, t)
	} else {
		v := d.vals[:len(d.roots.Needs)]
		d.st.Interpolate(v, d.roots.Needs, t)
		for i, c := range d.roots.Needs {
			d.y[c] = v[i]
		}
	}
	d.roots.Func(dst, t, d.y)
}

// Advance takes one step towards tmax. The step ends early at the first
// roots; the result lists those crossed at that very time and is valid until
// the next call. The error is a *StepError.
func (d *Driver) Advance(tmax float64) ([]Hit, error) {
	if err := d.st.Step(tmax); err != nil {
		return nil, err
	}
	if d.roots.N == 0 {
		return nil, nil
	}
	t0, t1 := d.st.Previous(), d.st.Time()
	h := t1 - t0
	d.search(t0, t1)
	if len(d.found) == 0 {
		return nil, nil
	}
	// The earliest crossing, and those that can't be told from it.
	sort.SliceStable(d.found, func(i, j int) bool { return d.found[i].t < d.found[j].t })
	first := d.found[0]
	together := math.Max(16*ulp(first.t), 1e-11*h)
	d.hits = d.hits[:0]
	for _, c := range d.found {
		if c.t-first.t <= together {
			d.hits = append(d.hits, Hit{c.root, c.dir})
		}
	}
	if first.t != t1 {
		if err := d.end(first, t0, t1); err != nil {
			return nil, err
		}
	}
	// What hasn't fired keeps its sign at the new end; what has is armed
	// again when it has left zero.
	d.roots.Func(d.scratch, d.st.Time(), d.st.State())
	for i, g := range d.scratch {
		if s := signOf(g); s != 0 && d.sign[i] == 0 {
			d.sign[i] = s
		}
	}
	for _, hit := range d.hits {
		d.sign[hit.Root] = 0
	}
	return d.hits, nil
}

// end repeats the last step to end at the crossing c, and corrects the time
// for the difference between the dense output, on which c was located, and the
// repeated step.
func (d *Driver) end(c crossing, t0, t1 float64) error {
	t := c.t
	if t-t0 <= 4*ulp(t) {
		return d.st.Redo(t0)
	}
	if err := d.st.Redo(t); err != nil {
		return err
	}
	for range 3 {
		g := d.value(c.root, t)
		if g == 0 {
			return nil
		}
		back := (t - t0) * 1e-3
		slope := (g - d.value(c.root, t-back)) / back
		next := t - g/slope
		// Only a small correction, within the step, is credible.
		if slope == 0 || !(math.Abs(next-t) < 0.05*(t1-t0)) || next <= t0+4*ulp(t) || next > t1 {
			return nil
		}
		if math.Abs(next-t) <= 2*ulp(t) {
			return nil
		}
		if err := d.st.Redo(next); err != nil {
			return err
		}
		t = next
	}
	return nil
}

func (d *Driver) value(root int, t float64) float64 {
	d.at(d.scratch, t)
	return d.scratch[root]
}

// search lists the crossings within the last step in d.found. The reference
// signs stay as they were unless there is no crossing.
func (d *Driver) search(t0, t1 float64) {
	h := t1 - t0
	d.found = d.found[:0]
	s := d.samples[:0]
	take := func(t float64) {
		s = s[:len(s)+1]
		s[len(s)-1].t = t
		d.at(s[len(s)-1].g, t)
	}
	take(t0)
	unarmed := false
	for _, sg := range d.sign {
		unarmed = unarmed || sg == 0
	}
	if unarmed {
		take(t0 + math.Max(1e-4*h, math.Min(0.5*h, 64*ulp(t0))))
	}
	for k := 1; k <= rootSamples && !d.roots.EndsOnly; k++ {
		take(t0 + h*float64(k)/(rootSamples+1))
	}
	take(t1)
	for i := range d.sign {
		d.searchOne(i, s)
	}
}

func (d *Driver) searchOne(i int, s []sample) {
	want := Both
	if d.roots.Direction != nil {
		want = d.roots.Direction[i]
	}
	sign := d.sign[i]
	start := 0
	if sign == 0 {
		start = 1
		for start < len(s) && s[start].g[i] == 0 {
			start++
		}
		if start == len(s) {
			return // still zero everywhere: not armed
		}
		sign = signOf(s[start].g[i])
	}
	add := func(a, b float64, from int8) {
		dir := Rising
		if from > 0 {
			dir = Falling
		}
		if want == Both || want == dir {
			d.found = append(d.found, crossing{d.locate(i, a, b, from), i, dir})
		}
	}
	reference := sign
	for k := start + 1; k < len(s); k++ {
		g := s[k].g[i]
		if float64(reference)*g > 0 {
			// No change of sign. Look for a dip to zero around s[k-1],
			// s[k]: the parabola through three neighbours tells where.
			for m := k - 1; m <= k; m++ {
				if m-1 < start || m+1 >= len(s) || float64(reference)*s[m+1].g[i] <= 0 || float64(reference)*s[m-1].g[i] <= 0 {
					continue
				}
				t, v := d.dip(i, s[m-1:m+2], float64(reference))
				if v > 0 || t <= s[k-1].t || t > s[k].t {
					continue
				}
				add(s[m-1].t, t, reference)
				if v < 0 {
					add(t, s[m+1].t, -reference)
				}
				break
			}
			continue
		}
		if g == 0 && k+1 < len(s) && float64(reference)*s[k+1].g[i] > 0 {
			// Touches zero at a sample and turns back.
			add(s[k-1].t, s[k].t, reference)
			add(s[k].t, s[k].t, -reference)
			continue
		}
		if g == 0 && k+1 < len(s) {
			continue // decided at the next sample
		}
		a := s[k-1].t
		if s[k-1].g[i] == 0 && k-1 > start {
			a = s[k-2].t
		}
		add(a, s[k].t, reference)
		reference = -reference
	}
	if len(d.found) == 0 {
		d.sign[i] = reference
	} else if d.sign[i] == 0 {
		d.sign[i] = sign
	}
}

// dip returns the place and signed value (reference times g) of the minimum
// of reference*g near the middle of three samples of one sign, if a parabola
// through them gives hope that it reaches zero; else a positive value.
func (d *Driver) dip(i int, s []sample, reference float64) (t, v float64) {
	a, b, c := s[0].t, s[1].t, s[2].t
	ga, gb, gc := reference*s[0].g[i], reference*s[1].g[i], reference*s[2].g[i]
	// Newton's form of the parabola.
	d1 := (gb - ga) / (b - a)
	d2 := ((gc-gb)/(c-b) - d1) / (c - a)
	if !(d2 > 0) {
		return b, gb
	}
	x := 0.5 * (a + b - d1/d2)
	if x <= a || x >= c {
		return b, gb
	}
	if p := ga + d1*(x-a) + d2*(x-a)*(x-b); p > 0.25*math.Min(gb, math.Min(ga, gc)) {
		return x, p
	}
	// Golden section; stops as soon as the function is seen on the other
	// side.
	const ratio = 0.6180339887498949
	lo, hi := a, c
	x1, x2 := hi-ratio*(hi-lo), lo+ratio*(hi-lo)
	if x > lo && x < hi {
		if v := reference * d.value(i, x); v <= 0 {
			return x, v
		}
	}
	v1, v2 := reference*d.value(i, x1), reference*d.value(i, x2)
	for range 80 {
		if v1 <= 0 {
			return x1, v1
		}
		if v2 <= 0 {
			return x2, v2
		}
		if hi-lo <= 1e-9*(c-a) {
			break
		}
		if v1 < v2 {
			hi, x2, v2 = x2, x1, v1
			x1 = hi - ratio*(hi-lo)
			v1 = reference * d.value(i, x1)
		} else {
			lo, x1, v1 = x1, x2, v2
			x2 = lo + ratio*(hi-lo)
			v2 = reference * d.value(i, x2)
		}
	}
	return x1, v1
}

// locate finds the crossing of root i between a, where its sign is from, and
// b, where it is not, by the ITP method (I. F. D. Oliveira, R. H. C. Takahashi,
// ACM TOMS 47(1), 2021): as fast as the secant rule, never slower than
// bisection. The result is on b's side of the crossing, or at it.
func (d *Driver) locate(i int, a, b float64, from int8) float64 {
	f := float64(from)
	if a >= b {
		return b
	}
	ga, gb := f*d.value(i, a), f*d.value(i, b)
	if gb > 0 || ga <= 0 {
		return b
	}
	if gb == 0 {
		// Zero at b itself; an earlier zero would have shown a sign.
		return b
	}
	eps := 2 * ulp(b)
	const n0 = 1
	nHalf := math.Ceil(math.Log2((b - a) / (2 * eps)))
	nMax := nHalf + n0
	k1 := 0.2 / (b - a)
	for j := 0.0; b-a > 2*eps && j < 200; j++ {
		mid := 0.5 * (a + b)
		r := eps*math.Exp2(nMax-j) - 0.5*(b-a)
		delta := k1 * (b - a) * (b - a)
		x := (gb*a - ga*b) / (gb - ga)
		sg := 1.0
		if mid < x {
			sg = -1
		}
		if delta <= math.Abs(mid-x) {
			x += sg * delta
		} else {
			x = mid
		}
		if math.Abs(x-mid) > r {
			x = mid - sg*r
		}
		if x <= a || x >= b {
			x = mid
		}
		switch g := f * d.value(i, x); {
		case g > 0:
			a, ga = x, g
		case g < 0:
			b, gb = x, g
		default:
			return x
		}
	}
	return b
}

// Action tells Integrate how to go on after a handler.
type Action int

// Actions.
const (
	Continue Action = iota // nothing changed
	Jump                   // y was changed in place, or the right-hand side was
	Stop                   // end the integration here
)

// Handlers are the events of Integrate.
type Handlers struct {
	// Roots are located; AtRoot is called for each time at which some are
	// crossed, with all of those.
	Roots  *Roots
	AtRoot func(t float64, hits []Hit, y []float64) (Action, error)
	// Stops are ascending times at which a step must end; AtStop is called
	// there.
	Stops  []float64
	AtStop func(t float64, y []float64) (Action, error)
	// AfterStep sees every accepted step, before AtRoot or AtStop.
	AfterStep func(s Stepper) error
}

// ChatterError reports events that accumulate: a switch that the solution
// pushes back from both sides, or infinitely many events in a finite time.
type ChatterError struct {
	Time   float64
	Root   int // the root that fired last
	Events int // number of events within a negligible stretch of time
}

func (e *ChatterError) Error() string {
	return fmt.Sprintf("solvers: t = %.9g: root %d chatters: %d events without progress in time", e.Time, e.Root, e.Events)
}

// Chatter finds accumulating events: feed it the time of each.
type Chatter struct {
	times [32]float64
	n     int
}

// Add notes an event and reports whether the last 32 took a negligible time.
func (c *Chatter) Add(t float64) bool {
	oldest := c.times[c.n%len(c.times)]
	c.times[c.n%len(c.times)] = t
	c.n++
	return c.n > len(c.times) && t-oldest <= 1e-9*math.Max(math.Abs(t), 1e-3)
}

// Events is the number of events that count as chatter.
func (c *Chatter) Events() int { return len(c.times) }

// AppendBinary saves the times noted.
func (c *Chatter) AppendBinary(b []byte) ([]byte, error) {
	w := stateWriter{b}
	w.floats(float64(c.n))
	w.vector(c.times[:])
	return w.b, nil
}

// UnmarshalBinary restores the times noted.
func (c *Chatter) UnmarshalBinary(data []byte) error {
	r := stateReader{b: data}
	var n float64
	var times [32]float64
	r.floats(&n)
	r.vector(times[:])
	if err := r.finish(); err != nil {
		return err
	}
	c.n, c.times = int(n), times
	return nil
}

// Integrate steps s, which has been Reset, until the given time, and handles
// events on the way. h may be nil. It returns ctx's error when ctx ends, a
// *StepError, a *ChatterError, or a handler's error as it is; s then holds
// the last accepted state.
func Integrate(ctx context.Context, s Stepper, until float64, h *Handlers) error {
	if h == nil {
		h = &Handlers{}
	}
	d := NewDriver(s, h.Roots)
	y := make([]float64, len(s.State()))
	var chatter Chatter
	stops := h.Stops
	for len(stops) > 0 && stops[0] <= s.Time() {
		stops = stops[1:]
	}
	for s.Time() < until {
		if err := ctx.Err(); err != nil {
			return err
		}
		tmax := until
		if len(stops) > 0 && stops[0] < until {
			tmax = stops[0]
		}
		hits, err := d.Advance(tmax)
		if err != nil {
			return err
		}
		if h.AfterStep != nil {
			if err := h.AfterStep(s); err != nil {
				return err
			}
		}
		act := Continue
		merge := func(a Action) {
			if a > act {
				act = a
			}
		}
		copy(y, s.State())
		t := s.Time()
		if len(hits) > 0 {
			if chatter.Add(t) {
				return &ChatterError{Time: t, Root: hits[0].Root, Events: chatter.Events()}
			}
			if h.AtRoot != nil {
				a, err := h.AtRoot(t, hits, y)
				if err != nil {
					return err
				}
				merge(a)
			}
		}
		if len(stops) > 0 && t == stops[0] {
			stops = stops[1:]
			if h.AtStop != nil && act != Stop {
				a, err := h.AtStop(t, y)
				if err != nil {
					return err
				}
				merge(a)
			}
		}
		switch act {
		case Jump:
			fired := append([]Hit(nil), hits...)
			if err := d.Reset(t, y); err != nil {
				return err
			}
			d.Disarm(fired)
		case Stop:
			return nil
		}
	}
	return nil
}

// Disarm makes the driver wait until the functions of hits have left zero
// before they count again. Call it after Reset for roots that were just
// handled and are still (nearly) zero.
func (d *Driver) Disarm(hits []Hit) {
	for _, h := range hits {
		d.sign[h.Root] = 0
	}
}
