package outside

import (
	"context"
	"encoding/csv"
	"math"
	"math/cmplx"
	"os"
	"path/filepath"
	"sort"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"islet/engine"
	"islet/solvers"
	"islet/solvers/facet"
)

// ---------------------------------------------------------------------------
// Comparing

// checker compares values, counts them and remembers the worst.
type checker struct {
	t     *testing.T
	n     int
	worst float64
	where string
}

func newChecker(t *testing.T) *checker {
	t.Helper()
	c := &checker{t: t}
	t.Cleanup(func() {
		t.Logf("%d outside values; largest deviation %.2g of what is allowed, at %s", c.n, c.worst, c.where)
	})
	return c
}

// want compares an outside value with what was found, to an absolute tolerance.
func (c *checker) want(name string, got, want, tol float64) {
	c.t.Helper()
	c.n++
	d := math.Abs(got-want) / tol
	if d > c.worst || c.where == "" || d != d {
		c.worst, c.where = d, name
	}
	if !(d <= 1) {
		c.t.Errorf("%s is %.12g, want %.12g within %.3g (off by %.3g)", name, got, want, tol, got-want)
	}
}

// agree is want for a check of the reference itself, in which the engine has no part:
// a table against the closed form it stands for. It doesn't count.
func (c *checker) agree(name string, got, want, tol float64) {
	c.t.Helper()
	if !(math.Abs(got-want) <= tol) {
		c.t.Errorf("the reference disagrees with itself: %s is %.12g, want %.12g within %.3g", name, got, want, tol)
	}
}

// wantZ is want for both parts of a complex value.
func (c *checker) wantZ(name string, got, want complex128, tol float64) {
	c.t.Helper()
	c.want(name+", real part", real(got), real(want), tol)
	c.want(name+", imaginary part", imag(got), imag(want), tol)
}

// ---------------------------------------------------------------------------
// Tables

// table is a file of testdata/: rows of cells, columns by name.
type table struct {
	t      *testing.T
	column map[string]int
	rows   [][]string
}

func readTable(t *testing.T, name string) *table {
	t.Helper()
	f, err := os.Open(filepath.Join("..", "..", "testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r := csv.NewReader(f)
	r.Comment = '#'
	all, err := r.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	tb := &table{t: t, column: make(map[string]int), rows: all[1:]}
	for k, h := range all[0] {
		tb.column[h] = k
	}
	return tb
}

func (tb *table) text(row int, column string) string {
	tb.t.Helper()
	k, ok := tb.column[column]
	if !ok {
		tb.t.Fatalf("no column %q", column)
	}
	return tb.rows[row][k]
}

// number returns a cell and the value of a unit in its last printed place.
func (tb *table) number(row int, column string) (value, unit float64) {
	tb.t.Helper()
	s := tb.text(row, column)
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		tb.t.Fatal(err)
	}
	unit = 1
	if dot := strings.IndexByte(s, '.'); dot >= 0 {
		unit = math.Pow(10, -float64(len(s)-dot-1))
	}
	return v, unit
}

func (tb *table) value(row int, column string) float64 {
	tb.t.Helper()
	v, _ := tb.number(row, column)
	return v
}

// ---------------------------------------------------------------------------
// Networks and runs

// network is a system under construction; buses come into being on first use.
type network struct {
	t     *testing.T
	sys   *engine.System
	volts float64 // of buses made from now on, V line-line rms
}

func newNetwork(t *testing.T, hertz, volts float64) *network {
	return &network{t: t, sys: engine.NewSystem(hertz), volts: volts}
}

func (n *network) bus(name string) engine.Bus {
	if b, ok := n.sys.FindBus(name); ok {
		return b
	}
	return n.sys.Bus(name, n.volts)
}

// add returns a function that adds what a constructor returns.
func (n *network) add(name string, at ...string) func(d engine.Device, err error) {
	return n.addAt("", name, at...)
}

// addAt is add with a level of detail, "" for the one the constructor gives.
func (n *network) addAt(level, name string, at ...string) func(d engine.Device, err error) {
	n.t.Helper()
	return func(d engine.Device, err error) {
		n.t.Helper()
		if err != nil {
			n.t.Fatal(err)
		}
		if level != "" {
			b, err := d.(facet.Detailed).WithDetail(level)
			if err != nil {
				n.t.Fatal(err)
			}
			d = b.(engine.Device)
		}
		var buses []engine.Bus
		for _, b := range at {
			buses = append(buses, n.bus(b))
		}
		if err := n.sys.Add(name, d, buses...); err != nil {
			n.t.Fatal(err)
		}
	}
}

// run is a simulation in a test: every failure is fatal.
type run struct {
	t   *testing.T
	sim *engine.Simulation
}

// tight is the tolerance of checks that aim at a reference's printed digits.
var tight = solvers.Options{RelTol: 1e-10}

func (n *network) start(o engine.Options) *run {
	n.t.Helper()
	sim, err := engine.Start(n.sys, &o)
	if err != nil {
		n.t.Fatal(err)
	}
	return &run{n.t, sim}
}

func (r *run) at(t float64, e engine.Event) {
	r.t.Helper()
	if err := r.sim.At(t, e); err != nil {
		r.t.Fatal(err)
	}
}

func (r *run) until(t float64) *engine.Trace {
	r.t.Helper()
	tr, err := r.sim.Run(context.Background(), t)
	if err != nil {
		r.t.Fatal(err)
	}
	return tr
}

func (r *run) value(channel string) float64 {
	r.t.Helper()
	v, err := r.sim.Value(channel)
	if err != nil {
		r.t.Fatal(err)
	}
	return v
}

// pair is the d, q pair of channels prefix + "d" and prefix + "q".
func (r *run) pair(prefix string) complex128 {
	r.t.Helper()
	return complex(r.value(prefix+"d"), r.value(prefix+"q"))
}

// column returns a trace's channel from time from on.
func column(t *testing.T, tr *engine.Trace, channel string, from float64) []float64 {
	t.Helper()
	c := tr.Column(channel)
	if c == nil {
		t.Fatalf("no channel %s recorded", channel)
	}
	k := sort.SearchFloat64s(tr.Time, from)
	if k == len(tr.Time) {
		t.Fatalf("nothing recorded from %g s on", from)
	}
	return c[k:]
}

// ---------------------------------------------------------------------------
// Signals

// modes fits x(k T) = c + sum of n exponentials to samples and returns the
// exponents, 1/s (R. de Prony's method on the differences of successive
// samples, the linear prediction solved in the sense of least squares).
func modes(t *testing.T, x []float64, spacing float64, n int) []complex128 {
	t.Helper()
	y := make([]float64, len(x)-1)
	for k := range y {
		y[k] = x[k+1] - x[k]
	}
	rows := len(y) - n
	a, b := mat.NewDense(rows, n, nil), mat.NewVecDense(rows, nil)
	for k := range rows {
		for j := range n {
			a.Set(k, j, y[k+j])
		}
		b.SetVec(k, y[k+n])
	}
	var c mat.VecDense
	if err := c.SolveVec(a, b); err != nil {
		t.Fatal(err)
	}
	s := roots(t, c.RawVector().Data)
	for k := range s {
		s[k] = cmplx.Log(s[k]) / complex(spacing, 0)
	}
	return s
}

// roots returns the roots of x^n = sum of c[j] x^j, j < n = len(c).
func roots(t *testing.T, c []float64) []complex128 {
	t.Helper()
	n := len(c)
	companion := mat.NewDense(n, n, nil)
	for j := range n {
		companion.Set(n-1, j, c[j])
		if j > 0 {
			companion.Set(j-1, j, 1)
		}
	}
	var eig mat.Eigen
	if !eig.Factorize(companion, mat.EigenNone) {
		t.Fatal("no eigenvalues")
	}
	return eig.Values(nil)
}

// pairOf returns the exponent of a fitted pair that has a positive imaginary part.
func pairOf(t *testing.T, x []float64, spacing float64) complex128 {
	t.Helper()
	s := modes(t, x, spacing, 2)
	if imag(s[0]) < 0 {
		s[0] = s[1]
	}
	return s[0]
}

// peak returns the first maximum of sign times a recorded channel after time from,
// and its time: that of the polynomial of degree four through the samples around it.
func peak(t *testing.T, tr *engine.Trace, channel string, sign, from float64) (at, value float64) {
	t.Helper()
	x := column(t, tr, channel, math.Nextafter(from, math.Inf(1)))
	times := tr.Time[len(tr.Time)-len(x):]
	for k := 2; k+2 < len(x); k++ {
		if sign*x[k] < sign*x[k-1] || sign*x[k] <= sign*x[k+1] {
			continue
		}
		// Newton's divided differences, times relative to the middle sample and
		// in spacings.
		h := times[k+1] - times[k]
		var s, c [5]float64
		for j := range c {
			s[j], c[j] = (times[k-2+j]-times[k])/h, sign*x[k-2+j]
		}
		for d := 1; d < 5; d++ {
			for j := 4; j >= d; j-- {
				c[j] = (c[j] - c[j-1]) / (s[j] - s[j-d])
			}
		}
		eval := func(u float64) (p, dp, ddp float64) {
			for j := 4; j >= 0; j-- {
				p, dp, ddp = c[j]+(u-s[j])*p, p+(u-s[j])*dp, 2*dp+(u-s[j])*ddp
			}
			return p, dp, ddp
		}
		u := 0.0
		for range 20 {
			_, dp, ddp := eval(u)
			u -= dp / ddp
		}
		p, _, _ := eval(u)
		return times[k] + u*h, p
	}
	t.Fatalf("%s has no maximum after %g s", channel, from)
	return 0, 0
}

// turn is e^{j angle}.
func turn(angle float64) complex128 { return cmplx.Rect(1, angle) }
