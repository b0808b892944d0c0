package solvers

import (
	"encoding/binary"
	"errors"
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// FuzzSparseLU builds a matrix from bytes (order, then row, column and a
// 16-bit value for each entry) and compares with dense elimination: whatever
// is well conditioned must be solved, and whatever is solved must have a small
// backward error.
func FuzzSparseLU(f *testing.F) {
	f.Add([]byte{1})
	f.Add([]byte{1, 0, 0, 1, 0})
	f.Add([]byte{2, 0, 1, 7, 0, 1, 0, 9, 0})
	f.Add([]byte{2, 0, 0, 1, 0, 1, 1, 1, 0, 0, 1, 1, 0, 1, 0, 1, 0}) // singular
	f.Add([]byte{3, 0, 0, 0, 0, 1, 1, 2, 1, 2, 2, 3, 2, 0, 1, 1, 1, 1, 0, 4, 4, 2, 0, 9, 200, 0, 2, 8, 8})
	f.Add([]byte{5, 0, 4, 1, 90, 1, 3, 1, 30, 2, 2, 1, 240, 3, 1, 1, 130, 4, 0, 1, 250, 0, 0, 3, 3, 1, 1, 9, 9, 3, 4, 5, 5})
	f.Add([]byte{4, 0, 0, 1, 64, 1, 0, 2, 64, 2, 0, 3, 64, 3, 0, 4, 64, 0, 1, 5, 0, 1, 1, 6, 0, 2, 2, 7, 128, 3, 3, 8, 128, 0, 3, 1, 1})
	f.Fuzz(func(t *testing.T, data []byte) {
		if len(data) == 0 {
			return
		}
		n := 1 + int(data[0])%12
		var at []Entry
		var val []float64
		for data = data[1:]; len(data) >= 4 && len(at) < 150; data = data[4:] {
			at = append(at, Entry{int(data[0]) % n, int(data[1]) % n})
			// 12 bits of sign and mantissa, 4 of exponent
			w := int16(binary.LittleEndian.Uint16(data[2:]))
			val = append(val, math.Ldexp(float64(w>>4), 4*(int(w&15)-8)))
		}
		a, slot := NewCSC(n, n, at)
		for k, s := range slot {
			a.X[s] = val[k]
		}
		var dense mat.LU
		dense.Factorize(luDense(a))
		cond := dense.Cond()

		lu, err := NewSparseLU(a, LUOptions{})
		if err == nil {
			err = lu.Factor()
		}
		if err != nil {
			var s *SingularError
			if !errors.As(err, &s) || s.Column < 0 || s.Column >= n {
				t.Fatalf("unexpected error %v", err)
			}
			if cond < 1e13 {
				t.Fatalf("condition %.3g, but %v", cond, err)
			}
			return
		}
		if err := lu.Factor(); err != nil || lu.Stats().Fallbacks != 0 && lu.Condition() < 1e10 {
			t.Fatalf("refactoring the same values: %v, %+v", err, lu.Stats())
		}
		if cond > 1e13 {
			return
		}
		x, b := make([]float64, n), make([]float64, n)
		for i := range b {
			b[i] = float64(1 + i%3)
		}
		copy(x, b)
		lu.Solve(x)
		if e := luBackward(a, x, b); !(e < 1e-12) {
			t.Errorf("backward error %.3g, condition %.3g", e, cond)
		}
		copy(x, b)
		lu.SolveTranspose(x)
		if e := luBackward(luTranspose(a), x, b); !(e < 1e-12) {
			t.Errorf("transpose: backward error %.3g, condition %.3g", e, cond)
		}
	})
}
