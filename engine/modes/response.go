package modes

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"islet/engine"
)

// Response is a frequency response: H[k][out][in] at frequency Hz[k] in the
// rotating network frame, in output's unit per input's.
type Response struct {
	Hz      []float64
	Inputs  []engine.LinearSignal
	Outputs []engine.LinearSignal
	H       [][][]complex128
}

// FrequencyResponse computes H = C (j omega E - J)^-1 B + D for each frequency,
// Hz, from the linear system as it is, sparse: nothing is reduced before. The
// error joins all frequencies that are no finite value above zero (or zero, in
// a system without a rotational mode).
func FrequencyResponse(l *engine.Linear, hz []float64) (*Response, error) {
	if err := checkFrequencies(l, hz); err != nil {
		return nil, err
	}
	r := &Response{Hz: append([]float64(nil), hz...), Inputs: l.Inputs, Outputs: l.Outputs}
	s := newShifted(l, true)
	y := make([]complex128, len(l.E))
	for _, f := range hz {
		if err := s.factor(complex(0, 2*math.Pi*f)); err != nil {
			return nil, err
		}
		h := make([][]complex128, len(l.Outputs))
		for i := range h {
			h[i] = make([]complex128, len(l.Inputs))
		}
		for k := range l.Inputs {
			clear(y)
			for p := l.B.P[k]; p < l.B.P[k+1]; p++ {
				y[l.B.I[p]] = complex(l.B.X[p], 0)
			}
			s.solve(y)
			for j, v := range y {
				for p := l.C.P[j]; p < l.C.P[j+1]; p++ {
					h[l.C.I[p]][k] += complex(l.C.X[p], 0) * v
				}
			}
			for p := l.D.P[k]; p < l.D.P[k+1]; p++ {
				h[l.D.I[p]][k] += complex(l.D.X[p], 0)
			}
		}
		r.H = append(r.H, h)
	}
	return r, nil
}

func checkFrequencies(l *engine.Linear, hz []float64) error {
	turns := len(rotating(l)) > 0
	var errs []error
	if len(hz) == 0 {
		errs = append(errs, errors.New("modes: no frequency given"))
	}
	for _, f := range hz {
		switch {
		case !(f >= 0) || math.IsInf(f, 0):
			errs = append(errs, fmt.Errorf("modes: frequency is %g Hz, want a finite value, not negative", f))
		case f == 0 && turns:
			errs = append(errs, errors.New("modes: frequency is 0 Hz, where the common turn of an island has no steady state; want a value above"))
		}
	}
	return errors.Join(errs...)
}

// Impedance is what a current that is fed into a bus sees: (v_d, v_q) = Z (i_d,
// i_q), ohm (peak phase volts per peak ampere) in axes that turn with the
// network frame, d on the bus voltage at the linearisation.
type Impedance struct {
	Bus   string
	Angle float64 // of the bus voltage in the network frame, rad
	Speed float64 // of the frame, rad/s
	Hz    []float64
	Z     [][2][2]complex128 // dd, dq; qd, qq
}

// BusImpedance computes the impedance seen at a bus with everything connected
// that is in service. A bus fed by inductors alone has one that grows with
// frequency, exactly.
func BusImpedance(l *engine.Linear, bus string, hz []float64) (*Impedance, error) {
	err := checkFrequencies(l, hz)
	at, ok := l.BusUnknown(bus)
	if !ok {
		err = errors.Join(err, l.Inject(nil, bus, 0, 0))
	}
	if err != nil {
		return nil, err
	}
	is := &l.Islands[l.Unknowns[at].Island]
	// The rotation of a voltage is j times it.
	angle := math.Atan2(-is.Rotation[at], is.Rotation[at+1])
	z := &Impedance{Bus: bus, Angle: angle, Speed: is.Speed, Hz: append([]float64(nil), hz...)}
	sin, cos := math.Sincos(angle)
	s := newShifted(l, true)
	f := make([]float64, len(l.E))
	y := make([]complex128, len(l.E))
	for _, h := range hz {
		if err := s.factor(complex(0, 2*math.Pi*h)); err != nil {
			return nil, err
		}
		var m [2][2]complex128
		for k := range 2 {
			clear(f)
			d, q := cos, sin
			if k == 1 {
				d, q = -sin, cos
			}
			if err := l.Inject(f, bus, d, q); err != nil {
				return nil, err
			}
			for i, v := range f {
				y[i] = complex(v, 0)
			}
			s.solve(y)
			vd, vq := y[at], y[at+1]
			m[0][k] = complex(cos, 0)*vd + complex(sin, 0)*vq
			m[1][k] = complex(cos, 0)*vq - complex(sin, 0)*vd
		}
		z.Z = append(z.Z, m)
	}
	return z, nil
}

// Sequence returns what Z[k] means in the phases: the impedance of a positive
// sequence at the frame's frequency plus Hz[k], and at the frame's minus it
// (below zero: a negative sequence, conjugated). coupling is the voltage at
// the other of the two frequencies that the first one's current causes, per
// ampere; it is zero where d and q axes are alike.
func (z *Impedance) Sequence(k int) (above, below, coupling complex128) {
	m := &z.Z[k]
	sum, cross := m[0][0]+m[1][1], 1i*(m[1][0]-m[0][1])
	above = (sum + cross) / 2
	below = cmplx.Conj(sum-cross) / 2
	coupling = cmplx.Conj(m[0][0]-m[1][1]-1i*(m[1][0]+m[0][1])) / 2
	return above, below, coupling
}

// LogSpace returns n values from lo to hi, both included and positive, in equal
// ratios. It panics for n < 2.
func LogSpace(lo, hi float64, n int) []float64 {
	v := make([]float64, n)
	for k := range v {
		v[k] = lo * math.Pow(hi/lo, float64(k)/float64(n-1))
	}
	v[n-1] = hi
	return v
}
