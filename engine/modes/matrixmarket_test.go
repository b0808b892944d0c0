package modes_test

import (
	"bytes"
	"encoding/csv"
	"io"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/engine/modes"
)

type file struct{ bytes.Buffer }

func (*file) Close() error { return nil }

// What is exported comes back with the same bits, under its names.
func TestExport(t *testing.T) {
	s, err := modes.Reduce(linear(t, two(t).start(nil), nil), false)
	if err != nil {
		t.Fatal(err)
	}
	files := make(map[string]*file)
	err = s.Export(func(name string) (io.WriteCloser, error) {
		files[name] = new(file)
		return files[name], nil
	})
	if err != nil {
		t.Fatal(err)
	}
	for name, want := range map[string]*mat.Dense{"A.mtx": s.A, "B.mtx": s.B, "C.mtx": s.C, "D.mtx": s.D} {
		got, err := modes.ReadMatrixMarket(files[name])
		if err != nil {
			t.Fatal(err)
		}
		if !mat.Equal(got, want) {
			t.Errorf("%s comes back changed", name)
		}
	}
	rows, err := csv.NewReader(files["names.csv"]).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) != 1+len(s.States)+len(s.Inputs)+len(s.Outputs) || rows[1][2] != s.States[0].Name {
		t.Errorf("%d rows of names, the first %q", len(rows), rows[1])
	}
}

// The first example is that of the format's description (Boisvert, Pozo,
// Remington, NISTIR 5935, 1996), value from memory.
func TestReadMatrixMarket(t *testing.T) {
	m, err := modes.ReadMatrixMarket(strings.NewReader(`%%MatrixMarket matrix coordinate real general
% A 5x5 sparse matrix with 8 nonzeros
5 5 8
1 1 1.0
2 2 10.5
4 2 250.5
3 3 0.015
1 4 6.0
4 4 -280.0
4 5 33.32
5 5 12.0
`))
	if err != nil {
		t.Fatal(err)
	}
	if m.At(3, 1) != 250.5 || m.At(3, 4) != 33.32 || m.At(4, 3) != 0 || m.At(0, 3) != 6 || m.At(2, 2) != 0.015 {
		t.Errorf("read %v", mat.Formatted(m))
	}
	m, err = modes.ReadMatrixMarket(strings.NewReader("%%MatrixMarket matrix array integer symmetric\n2 2\n1\n2\n\n3\n"))
	if err != nil || m.At(0, 1) != 2 || m.At(1, 0) != 2 || m.At(1, 1) != 3 {
		t.Errorf("array, symmetric: %v, %v", m, err)
	}
	for _, c := range []struct{ text, want string }{
		{"", "empty"},
		{"hello", "header"},
		{"%%MatrixMarket matrix coordinate complex general\n", "format"},
		{"%%MatrixMarket matrix coordinate real general\n", "unexpected EOF"},
		{"%%MatrixMarket matrix coordinate real general\n2 2\n", "line 2: 2 fields"},
		{"%%MatrixMarket matrix coordinate real general\n0 2 0\n", "at least 1 x 1"},
		{"%%MatrixMarket matrix coordinate real general\n999999999 999999999 0\n", "at most"},
		{"%%MatrixMarket matrix coordinate real general\n2 2 1\n3 1 1\n", "outside"},
		{"%%MatrixMarket matrix coordinate real general\n2 2 1\n1 1 x\n", "want a number"},
		{"%%MatrixMarket matrix coordinate real general\n2 2 1\n1 1\n", "want 3"},
		{"%%MatrixMarket matrix coordinate real general\n2 -2 1\n", "whole number"},
		{"%%MatrixMarket matrix array real general\n1 1\n1 2\n", "want 1"},
	} {
		if _, err := modes.ReadMatrixMarket(strings.NewReader(c.text)); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: %v, want %q", c.text, err, c.want)
		}
	}
}

// Every form of output holds what it should and no value that isn't finite.
func TestWriters(t *testing.T) {
	l := linear(t, two(t).start(nil), nil)
	r := analyse(t, l, nil)
	resp, err := modes.FrequencyResponse(l, []float64{1, 10})
	if err != nil {
		t.Fatal(err)
	}
	z, err := modes.BusImpedance(l, "b", []float64{1, 10})
	if err != nil {
		t.Fatal(err)
	}
	p, err := r.Propose(10, modes.Separation{})
	if err != nil {
		t.Fatal(err)
	}
	for name, c := range map[string]struct {
		write func(io.Writer) error
		want  string
		lines int
	}{
		"report text":     {r.WriteText, "common turn of left's island", len(r.Modes) + 4},
		"report csv":      {r.WriteCSV, "time_constant_s", len(r.Modes) + 1},
		"report json":     {r.WriteJSON, `"stable": true`, 10},
		"participation":   {r.WriteParticipation, "left.delta,primary control", len(r.States) + 1},
		"proposal":        {func(w io.Writer) error { return modes.WriteProposal(w, p) }, "network", 4},
		"response csv":    {resp.WriteCSV, "arg left.p / left.e", 3},
		"response text":   {resp.WriteText, "left.p / left.e", 10},
		"impedance csv":   {z.WriteCSV, "Re dd ohm", 3},
		"impedance text":  {z.WriteText, "seen at b", 4},
		"state space csv": {func(w io.Writer) error { s, _ := modes.Reduce(l, true); return s.WriteNames(w) }, "output,", 10},
	} {
		var b bytes.Buffer
		if err := c.write(&b); err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		s := b.String()
		if !strings.Contains(s, c.want) || strings.Count(s, "\n") < c.lines || strings.Contains(s, "NaN") {
			t.Errorf("%s lacks %q or %d lines:\n%s", name, c.want, c.lines, s)
		}
	}
}
