package modes

import (
	"bufio"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"

	"gonum.org/v1/gonum/mat"
)

// The Matrix Market exchange format. Source: R. F. Boisvert, R. Pozo, K. A.
// Remington, "The Matrix Market exchange formats: initial design", NISTIR
// 5935, National Institute of Standards and Technology, 1996.

// WriteMatrixMarket writes the nonzero entries of a matrix in coordinate form,
// column by column, with all digits. The comment may have several lines.
func WriteMatrixMarket(w io.Writer, m mat.Matrix, comment string) error {
	rows, cols := m.Dims()
	b := bufio.NewWriter(w)
	fmt.Fprintln(b, "%%MatrixMarket matrix coordinate real general")
	for _, line := range strings.Split(comment, "\n") {
		if line != "" {
			fmt.Fprintln(b, "% "+line)
		}
	}
	n := 0
	for i := range rows {
		for j := range cols {
			if m.At(i, j) != 0 {
				n++
			}
		}
	}
	fmt.Fprintln(b, rows, cols, n)
	for j := range cols {
		for i := range rows {
			if v := m.At(i, j); v != 0 {
				fmt.Fprintln(b, i+1, j+1, strconv.FormatFloat(v, 'g', -1, 64))
			}
		}
	}
	return b.Flush()
}

// maxEntries bounds what ReadMatrixMarket allocates: 2 GiB.
const maxEntries = 1 << 28

// ReadMatrixMarket reads a real or integer matrix, general or symmetric, in
// coordinate or array form. The error names the line.
func ReadMatrixMarket(r io.Reader) (*mat.Dense, error) {
	s := bufio.NewScanner(r)
	line := 0
	fail := func(format string, a ...any) error {
		return fmt.Errorf("modes: matrix file, line %d: "+format, append([]any{line}, a...)...)
	}
	next := func() ([]string, error) {
		for s.Scan() {
			line++
			if f := strings.Fields(s.Text()); len(f) > 0 && !strings.HasPrefix(f[0], "%") {
				return f, nil
			}
		}
		if err := s.Err(); err != nil {
			return nil, fail("%w", err)
		}
		line++
		return nil, fail("%w", io.ErrUnexpectedEOF)
	}
	if !s.Scan() {
		return nil, errors.Join(errors.New("modes: matrix file is empty"), s.Err())
	}
	line = 1
	head := strings.Fields(strings.ToLower(s.Text()))
	if len(head) != 5 || head[0] != "%%matrixmarket" || head[1] != "matrix" {
		return nil, fail("header is %q, want %%%%MatrixMarket matrix ...", s.Text())
	}
	coordinate := head[2] == "coordinate"
	symmetric := head[4] == "symmetric"
	if !coordinate && head[2] != "array" || head[3] != "real" && head[3] != "integer" || !symmetric && head[4] != "general" {
		return nil, fail("format is %q, want coordinate or array, real or integer, general or symmetric", strings.Join(head[2:], " "))
	}
	numbers := func(f []string, n int) ([]int, error) {
		if len(f) != n {
			return nil, fail("%d fields, want %d", len(f), n)
		}
		v := make([]int, n)
		for k := range v {
			var err error
			if v[k], err = strconv.Atoi(f[k]); err != nil || v[k] < 0 {
				return nil, fail("%q, want a whole number, not negative", f[k])
			}
		}
		return v, nil
	}
	f, err := next()
	if err != nil {
		return nil, err
	}
	want := 2
	if coordinate {
		want = 3
	}
	size, err := numbers(f, want)
	if err != nil {
		return nil, err
	}
	rows, cols := size[0], size[1]
	if rows == 0 || cols == 0 || rows > maxEntries/cols || symmetric && rows != cols {
		return nil, fail("matrix is %d x %d, want at least 1 x 1, at most %d entries, and a square one if symmetric", rows, cols, maxEntries)
	}
	m := mat.NewDense(rows, cols, nil)
	set := func(i, j int, field string) error {
		v, err := strconv.ParseFloat(field, 64)
		if err != nil || math.IsNaN(v) {
			return fail("%q, want a number", field)
		}
		m.Set(i, j, v)
		if symmetric {
			m.Set(j, i, v)
		}
		return nil
	}
	if coordinate {
		for range size[2] {
			if f, err = next(); err != nil {
				return nil, err
			}
			if len(f) != 3 {
				return nil, fail("%d fields, want 3", len(f))
			}
			at, err := numbers(f[:2], 2)
			if err != nil {
				return nil, err
			}
			if at[0] < 1 || at[0] > rows || at[1] < 1 || at[1] > cols {
				return nil, fail("entry (%d, %d) lies outside %d x %d", at[0], at[1], rows, cols)
			}
			if err := set(at[0]-1, at[1]-1, f[2]); err != nil {
				return nil, err
			}
		}
		return m, nil
	}
	for j := range cols {
		first := 0
		if symmetric {
			first = j
		}
		for i := first; i < rows; i++ {
			if f, err = next(); err != nil {
				return nil, err
			}
			if len(f) != 1 {
				return nil, fail("%d fields, want 1", len(f))
			}
			if err := set(i, j, f[0]); err != nil {
				return nil, err
			}
		}
	}
	return m, nil
}

// WriteNames writes what the rows and columns of the matrices stand for as
// CSV: kind (state, input or output), index from 1, name, unit, base of a state,
// value of a signal at the linearisation, owner and dynamics. Fields that don't
// apply are empty.
func (s *StateSpace) WriteNames(w io.Writer) error {
	c := csv.NewWriter(w)
	rows := [][]string{{"kind", "index", "name", "unit", "base", "value", "owner", "dynamics"}}
	for i, u := range s.States {
		rows = append(rows, []string{"state", strconv.Itoa(i + 1), u.Name, u.Unit, number(u.Base), "", u.Owner, u.Dynamics})
	}
	for i, u := range s.Inputs {
		rows = append(rows, []string{"input", strconv.Itoa(i + 1), u.Name, u.Unit, "", number(u.Value), "", ""})
	}
	for i, u := range s.Outputs {
		rows = append(rows, []string{"output", strconv.Itoa(i + 1), u.Name, u.Unit, "", number(u.Value), "", ""})
	}
	return c.WriteAll(rows)
}

// Export writes A.mtx, B.mtx, C.mtx and D.mtx, as far as they exist, in Matrix
// Market form, and names.csv. create makes a file of that name.
func (s *StateSpace) Export(create func(name string) (io.WriteCloser, error)) error {
	write := func(name string, content func(io.Writer) error) error {
		f, err := create(name)
		if err != nil {
			return fmt.Errorf("modes: %s: %w", name, err)
		}
		if err := errors.Join(content(f), f.Close()); err != nil {
			return fmt.Errorf("modes: %s: %w", name, err)
		}
		return nil
	}
	var errs []error
	for _, p := range []struct {
		name, text string
		m          *mat.Dense
	}{
		{"A.mtx", "x' = A x + B u, SI units; rows and columns: states of names.csv", s.A},
		{"B.mtx", "x' = A x + B u, SI units; rows: states, columns: inputs of names.csv", s.B},
		{"C.mtx", "w = C x + D u, SI units; rows: outputs, columns: states of names.csv", s.C},
		{"D.mtx", "w = C x + D u, SI units; rows: outputs, columns: inputs of names.csv", s.D},
	} {
		if p.m != nil {
			errs = append(errs, write(p.name, func(w io.Writer) error { return WriteMatrixMarket(w, p.m, p.text) }))
		}
	}
	return errors.Join(append(errs, write("names.csv", s.WriteNames))...)
}
