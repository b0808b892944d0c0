package solvers

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"slices"
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
// left zero. A root that has been reported counts as crossed: the function is
// taken to be on the far side, whatever rounding says, until it has clearly
// left zero; if it then is on the near side, it has crossed back, which is
// reported as such.
type Driver struct {
	st      Stepper
	roots   Roots
	sign    []int8    // reference sign; 0: not armed, the function has not left zero
	side    []int8    // of a root not armed: the side it is taken to be on, 0 if none
	size    []float64 // largest magnitude seen in the last step searched
	y       []float64
	samples []sample
	start   []armed
	found   []crossing
	hits    []Hit
	scratch []float64
	vals    []float64
	fresh   bool // no step has been searched since the roots were armed
}

// armed is a root's reference at the start of the step being searched: the
// sign holds from sample k on; sign 0 if the root isn't armed in this step.
type armed struct {
	sign int8
	k    int
}

type sample struct {
	t float64
	g []float64
}

type crossing struct {
	t      float64
	root   int
	dir    Direction
	counts bool // in a direction that is asked for
}

const rootSamples = 4 // interior points of a step at which roots are looked for

// NewDriver makes a driver of s, which may have been Reset already. r may be
// nil.
func NewDriver(s Stepper, r *Roots) *Driver {
	d := &Driver{st: s}
	if r != nil && r.N > 0 {
		d.roots = *r
		n := r.N
		d.sign, d.side, d.size = make([]int8, n), make([]int8, n), make([]float64, n)
		d.start = make([]armed, n)
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
		d.sign[i], d.side[i] = signOf(g), 0
	}
	d.fresh = true
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
	switch t {
	case d.st.Time():
		d.roots.Func(dst, t, d.st.State())
		return
	case d.st.Previous():
		d.roots.Func(dst, t, d.st.PreviousState())
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
	d.search(t0, t1, t1 == tmax)
	// The earliest crossing that counts, and those that can't be told from it.
	slices.SortStableFunc(d.found, func(a, b crossing) int { return cmp.Compare(a.t, b.t) })
	together := math.Max(16*ulp(t1), 1e-11*(t1-t0))
	d.hits = d.hits[:0]
	var first crossing
	for _, c := range d.found {
		if c.counts && (len(d.hits) == 0 || c.t-first.t <= together) {
			if len(d.hits) == 0 {
				first = c
			}
			d.hits = append(d.hits, Hit{c.root, c.dir})
		}
	}
	cut := t1
	if len(d.hits) > 0 {
		cut = first.t
		if t1-cut <= together {
			cut = t1
		} else if err := d.end(first, t0, t1); err != nil {
			return nil, err
		}
	}
	// Reference signs at the new end: what crossed before it has turned, what
	// crossed at it is taken to be on the far side.
	for i, a := range d.start {
		d.sign[i] = 0
		if a.sign != 0 && d.samples[a.k].t <= cut {
			d.sign[i] = a.sign
		}
	}
	for _, c := range d.found {
		switch {
		case c.t > cut+together:
		case c.t < cut-together:
			d.sign[c.root] = int8(c.dir)
		default:
			d.sign[c.root], d.side[c.root] = 0, int8(c.dir)
		}
	}
	if len(d.hits) == 0 {
		return nil, nil
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

// search lists the crossings within the last step in d.found, and the signs
// from which they count in d.start. stop tells that the step ended where it was
// told to.
func (d *Driver) search(t0, t1 float64, stop bool) {
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
	if unarmed || d.fresh {
		take(t0 + math.Max(1e-4*h, math.Min(0.5*h, 64*ulp(t0))))
	}
	for k := 1; k <= rootSamples && !d.roots.EndsOnly; k++ {
		take(t0 + h*float64(k)/(rootSamples+1))
	}
	take(t1)
	for i := range d.sign {
		d.searchOne(i, s, stop)
	}
	d.fresh = false
}

// rootNoise is the magnitude, relative to what a root function reaches in a
// step, below which a root that was just reported counts as still zero.
const rootNoise = 1e-12

// missed is the magnitude, relative to what a root function was shortly before,
// or reaches in a step, by which rounding may make it miss zero at the end or
// at the start of a run.
const missed = 1e-11

func (d *Driver) searchOne(i int, s []sample, stop bool) {
	want := Both
	if d.roots.Direction != nil {
		want = d.roots.Direction[i]
	}
	size := 0.0
	for _, x := range s {
		size = math.Max(size, math.Abs(x.g[i]))
	}
	add := func(t float64, from int8) {
		dir := Rising
		if from > 0 {
			dir = Falling
		}
		d.found = append(d.found, crossing{t, i, dir, want == Both || want == dir})
	}
	start, reference := 0, d.sign[i]
	if d.fresh && math.Abs(s[0].g[i]) <= missed*size {
		reference = 0 // zero at the start but for rounding
	}
	d.start[i] = armed{reference, 0}
	if reference == 0 {
		noise := rootNoise * math.Max(size, d.size[i])
		for start = 1; start < len(s) && math.Abs(s[start].g[i]) <= noise; start++ {
		}
		if start == len(s) {
			return // still zero everywhere
		}
		reference = signOf(s[start].g[i])
		d.start[i] = armed{reference, start}
		if side := d.side[i]; side == -reference {
			// It was taken to be on the far side, and has come back.
			d.start[i] = armed{side, 0}
			add(d.leaves(i, s[0].t, s[start].t, noise), side)
		}
	}
	d.size[i] = size
	for k := start + 1; k < len(s); k++ {
		g := float64(reference) * s[k].g[i]
		if g > 0 {
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
				add(d.locate(i, s[m-1].t, t, reference), reference)
				if v < 0 {
					add(d.locate(i, t, s[m+1].t, -reference), -reference)
				}
				break
			}
			continue
		}
		if g == 0 && k+1 < len(s) {
			if float64(reference)*s[k+1].g[i] > 0 {
				// Touches zero at a sample and turns back.
				add(s[k].t, reference)
				add(s[k].t, -reference)
			}
			continue // else decided at the next sample
		}
		a := s[k-1].t
		if s[k-1].g[i] == 0 && k-1 > start {
			a = s[k-2].t
		}
		add(d.locate(i, a, s[k].t, reference), reference)
		reference = -reference
	}
	// A function that is headed straight for zero and misses it at a stop by
	// rounding has reached it.
	if n := len(s); stop && n-start >= 3 {
		g0, g1, g2 := float64(reference)*s[n-3].g[i], float64(reference)*s[n-2].g[i], float64(reference)*s[n-1].g[i]
		fall, before := (g1-g2)/(s[n-1].t-s[n-2].t), (g0-g1)/(s[n-2].t-s[n-3].t)
		if g2 > 0 && g2 <= missed*g1 && fall > 0.5*before {
			add(s[n-1].t, reference)
		}
	}
}

// leaves returns the time between a, where root i is within noise of zero, and
// b, where it is not, at which it leaves.
func (d *Driver) leaves(i int, a, b, noise float64) float64 {
	for range 60 {
		mid := 0.5 * (a + b)
		if mid <= a || mid >= b {
			break
		}
		if math.Abs(d.value(i, mid)) > noise {
			b = mid
		} else {
			a = mid
		}
	}
	return b
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

// Chatter finds accumulating events: feed it the time of each. Its zero value
// is ready.
type Chatter struct {
	times [64]float64
	n     int
}

// Add notes an event at time t in a run whose largest step so far is largest,
// and reports whether the last 64 events took a negligible time: on average
// less than a hundred-thousandth of that step each.
func (c *Chatter) Add(t, largest float64) bool {
	oldest := c.times[c.n%len(c.times)]
	c.times[c.n%len(c.times)] = t
	c.n++
	few := float64(len(c.times)) * 1e-5 * largest
	return c.n > len(c.times) && t-oldest <= math.Max(few, 64*ulp(t))
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
	var times [64]float64
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
			if chatter.Add(t, s.Stats().Largest) {
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

// Disarm takes the functions of hits as crossed, and waits until they have left
// zero before they count again. Call it after Reset for roots that were just
// handled and are still (nearly) zero.
func (d *Driver) Disarm(hits []Hit) {
	for _, h := range hits {
		d.sign[h.Root], d.side[h.Root] = 0, int8(h.Direction)
	}
}
