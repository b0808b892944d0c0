package solvers

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
)

// stateWriter appends little-endian values to b.
type stateWriter struct{ b []byte }

func (w *stateWriter) floats(v ...float64) {
	for _, x := range v {
		w.b = binary.LittleEndian.AppendUint64(w.b, math.Float64bits(x))
	}
}

func (w *stateWriter) bools(v ...bool) {
	for _, x := range v {
		c := byte(0)
		if x {
			c = 1
		}
		w.b = append(w.b, c)
	}
}

func (w *stateWriter) vector(v []float64) {
	w.b = binary.LittleEndian.AppendUint32(w.b, uint32(len(v)))
	w.floats(v...)
}

func (w *stateWriter) stats(s *Stats) {
	for _, n := range []int{s.Steps, s.Rejected, s.Failed, s.Evals, s.Jacobians, s.Factorizations, s.Solves, s.Restarts} {
		w.b = binary.LittleEndian.AppendUint64(w.b, uint64(n))
	}
	w.floats(s.Smallest, s.Largest)
}

// stateReader reads what a stateWriter wrote; the first fault sticks.
type stateReader struct {
	b   []byte
	err error
}

var errCheckpoint = errors.New("solvers: saved stepper is damaged or belongs to another system")

func (r *stateReader) take(n int) []byte {
	if r.err != nil || len(r.b) < n {
		r.err = errCheckpoint
		return nil
	}
	c := r.b[:n]
	r.b = r.b[n:]
	return c
}

func (r *stateReader) floats(p ...*float64) {
	for _, x := range p {
		if c := r.take(8); c != nil {
			*x = math.Float64frombits(binary.LittleEndian.Uint64(c))
		}
	}
}

func (r *stateReader) bools(p ...*bool) {
	for _, x := range p {
		if c := r.take(1); c != nil {
			*x = c[0] != 0
		}
	}
}

func (r *stateReader) vector(v []float64) {
	c := r.take(4)
	if c == nil {
		return
	}
	if n := int(binary.LittleEndian.Uint32(c)); n != len(v) {
		r.err = fmt.Errorf("%w: it holds %d unknowns, the system has %d", errCheckpoint, n, len(v))
		return
	}
	for i := range v {
		r.floats(&v[i])
	}
}

func (r *stateReader) stats(s *Stats) {
	for _, p := range []*int{&s.Steps, &s.Rejected, &s.Failed, &s.Evals, &s.Jacobians, &s.Factorizations, &s.Solves, &s.Restarts} {
		if c := r.take(8); c != nil {
			*p = int(binary.LittleEndian.Uint64(c))
		}
	}
	r.floats(&s.Smallest, &s.Largest)
}

func (r *stateReader) finish() error {
	if r.err == nil && len(r.b) != 0 {
		r.err = errCheckpoint
	}
	return r.err
}
