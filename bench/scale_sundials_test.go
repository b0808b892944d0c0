//go:build sundials

package bench

import (
	"context"
	"flag"
	"fmt"
	"math"
	"os"
	"os/exec"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"islet/bench/sundials"
	"islet/engine"
	"islet/solvers"
)

// csvPath is where raw data go.
var csvPath = flag.String("csv", "", "write the raw data of the comparison to this file")

// TestScale compares, at each size, this engine's default with IDA and KLU on
// the same residual and Jacobian, at equal error, in turn; at up to 100
// inverters the trapezoidal rule at a fixed 20 us too, and a network whose
// formers are a user's own devices.
func TestScale(t *testing.T) {
	ctx := context.Background()
	kernel := sundials.KernelTime()
	t.Logf("SUNDIALS %s, %.2f ns an entry of a linear sum (0.1 to 0.5 if built with optimisation)", sundials.Version(), kernel)
	ours := Setup{Name: "Rodas5P (default)", TurningFrame: true}
	setups := []Setup{ours, {Name: "IDA + KLU (AMD)", Method: sundials.Method{Ordering: sundials.AMD}}, {Name: "IDA + KLU (COLAMD)", Method: sundials.IDA}}
	var runs []Row
	var targets []Target
	compare := func(s Study, record []string, n int, setups []Setup) []Target {
		bounds, repeat := []float64{1e-3}, 1
		ladders := [][]float64{ladder(1e-4, 1e-7), ladder(1e-6, 1e-9), ladder(1e-6, 1e-9)}
		if *full {
			bounds, repeat = []float64{1e-2, 1e-3, 1e-4, 1e-5}, 5
			ladders = [][]float64{ladder(1e-2, 1e-8), ladder(1e-4, 1e-9), ladder(1e-4, 1e-9)}
		}
		if n >= 1000 {
			setups, repeat = setups[:2], min(repeat, 3)
			ladders = [][]float64{ladder(1e-3, 1e-7), ladder(1e-5, 1e-9)}
		}
		if n > 1000 {
			// Minutes a run: one accuracy each.
			bounds, repeat = []float64{1e-3}, 1
			ladders = [][]float64{ladder(1e-4, 1e-6), {1e-7, 1e-8}}
		}
		with := reference(1e-10)
		if n > 1000 {
			// IDA would take the better part of an hour; at 1000 inverters the
			// two agree, see below.
			with = Setup{Name: "reference", Solver: solvers.Options{RelTol: 1e-9}}
		}
		ref, st, err := s.Waveforms(ctx, with, record, sampling)
		if err != nil {
			t.Fatal(err)
		}
		t.Logf("%s: reference in %d steps, %d signals", s.Name, st.Steps, len(ref.Channels))
		r, tg, err := s.EqualErrors(ctx, setups, ladders[:len(setups)], bounds, ref, record, sampling, repeat)
		if err != nil {
			t.Fatal(err)
		}
		runs, targets = append(runs, r...), append(targets, tg...)
		if n <= 1000 && *full {
			other, _, err := s.Waveforms(ctx, Setup{Solver: solvers.Options{RelTol: 1e-9}}, record, sampling)
			if err != nil {
				t.Fatal(err)
			}
			d := Compare(other, ref, sampling, flatChannel)
			t.Logf("%s: reference against Rodas5P at 1e-9: %.2g of range (%s)", s.Name, d.Largest, d.Channel)
			if d.Largest > 1e-4 {
				t.Errorf("the two references of %s are %.2g apart", s.Name, d.Largest)
			}
		}
		if *full && n <= 100 && strings.HasPrefix(s.Name, "microgrid") {
			trapezoid(t, s, record, ref, r)
		}
		return tg
	}
	for _, n := range scaleSizes(t) {
		tg := compare(MicrogridStudy(n), microgridSignals(n), n, setups)
		for _, row := range tg {
			a, b := row.Rows[0], row.Rows[1]
			if a == nil || b == nil {
				continue
			}
			if ratio := b.Median().Seconds() / a.Median().Seconds(); !(ratio > 1) {
				t.Errorf("%s at an error of %g: IDA takes %.2f of our time", row.Study, row.Error, ratio)
			}
		}
		if best := tg[len(tg)/2].Rows[1]; best != nil && *full && n <= 1000 {
			stock(t, n, best.RelTol)
		}
	}
	if *full && slices.Contains(scaleSizes(t), 100) {
		names := []string{"*.v", "follower-7.p", "follower-7.i"}
		compare(microgridStudy("own-devices-100", 100, plain), names, 100, setups)
		compare(microgridStudy("droop-only-100", 100, droopOnly), names, 100, setups)
	}
	if err := WriteTargets(os.Stdout, setups, targets); err != nil {
		t.Fatal(err)
	}
	if *csvPath != "" {
		write := func(name string, f func(*os.File) error) {
			file, err := os.Create(name)
			if err == nil {
				err = f(file)
			}
			if err == nil {
				err = file.Close()
			}
			if err != nil {
				t.Fatal(err)
			}
		}
		write(*csvPath, func(f *os.File) error { return WriteTargetsCSV(f, setups, targets) })
		base := strings.TrimSuffix(*csvPath, ".csv")
		write(base+"-runs.csv", func(f *os.File) error { return WriteCSV(f, runs) })
	}
	if *plotDir != "" {
		if err := PlotEqualErrors(*plotDir+"/scale-errors.svg", setups[:2], targets); err != nil {
			t.Fatal(err)
		}
	}
}

// microgridSignals lists what a study of a microgrid records: at the buses of the
// load steps and at others, ten in all if there are so many, the voltage, and
// the power and current of an inverter.
func microgridSignals(inverters int) []string {
	n := (inverters + 3) / 4
	var list []int
	for k := 0; len(list) < min(10, n); k++ {
		b := 7 * k % n
		if k >= 4 {
			b = (k*n/10 + 1) % n
		}
		for slices.Contains(list, b) {
			b = (b + 1) % n
		}
		list = append(list, b)
	}
	var names []string
	for _, b := range list {
		kind := "former"
		if b%10 >= 7 {
			kind = "follower"
		}
		names = append(names, fmt.Sprintf("bus-%d.v", b), fmt.Sprintf("%s-%d.p", kind, b), fmt.Sprintf("%s-%d.i", kind, b))
	}
	return names
}

// ladder lists tolerances from a to b, two a decade.
func ladder(a, b float64) []float64 {
	var l []float64
	for e := math.Log10(a); e >= math.Log10(b)-1e-9; e -= 0.5 {
		l = append(l, math.Pow(10, math.Round(2*e)/2))
	}
	return slices.Clip(l)
}

// trapezoid runs the fixed-step trapezoidal rule at 20 us, tells its error and
// time, and by how much the default, at the tolerance whose error is no larger,
// is faster.
func trapezoid(t *testing.T, s Study, record []string, ref *engine.Trace, ours []Row) {
	t.Helper()
	ctx := context.Background()
	with := Setup{Name: "trapezoidal, 20 us", Method: solvers.Trapezoidal, Solver: solvers.Options{RelTol: 1e-6, MaxStep: 20e-6}}
	from := time.Now() // of a minute, the operating point is nothing
	tr, st, err := s.Waveforms(ctx, with, record, sampling)
	if err != nil {
		t.Fatal(err)
	}
	d := time.Since(from)
	diff := Compare(tr, ref, sampling, flatChannel)
	line := fmt.Sprintf("%s: trapezoidal at 20 us: error %.2g (%s), %d steps, %.1f s", s.Name, diff.Largest, diff.Channel, st.Steps, d.Seconds())
	for _, r := range ours {
		if r.Setup != "Rodas5P (default)" || r.Difference.Largest > diff.Largest {
			continue
		}
		own := Setup{TurningFrame: true, Solver: solvers.Options{RelTol: r.RelTol}}
		mine, _, err := s.Time(ctx, own)
		if err != nil {
			t.Fatal(err)
		}
		line += fmt.Sprintf("; Rodas5P at %.0e: error %.2g, %.1f ms, %.0f times faster", r.RelTol, r.Difference.Largest, 1e3*mine.Seconds(), d.Seconds()/mine.Seconds())
		break
	}
	t.Log(line)
}

// stock runs IDA in a process of its own with the library that the system
// installed, if this one was given another by LD_LIBRARY_PATH, and tells its
// time.
func stock(t *testing.T, n int, tol float64) {
	t.Helper()
	if os.Getenv("LD_LIBRARY_PATH") == "" {
		return
	}
	cmd := exec.Command(os.Args[0], "-test.run", "^TestStock$", "-test.v")
	for _, e := range os.Environ() {
		if !strings.HasPrefix(e, "LD_LIBRARY_PATH=") {
			cmd.Env = append(cmd.Env, e)
		}
	}
	cmd.Env = append(cmd.Env, fmt.Sprintf("ISLET_STOCK=%d,%g", n, tol))
	out, err := cmd.CombinedOutput()
	if err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	for line := range strings.SplitSeq(string(out), "\n") {
		if _, rest, ok := strings.Cut(line, "stock: "); ok {
			t.Log(rest)
		}
	}
}

// TestStock times IDA as linked, once; TestScale runs it in another process.
func TestStock(t *testing.T) {
	n, tol := 10, 1e-6
	if ask := os.Getenv("ISLET_STOCK"); ask != "" {
		a, b, _ := strings.Cut(ask, ",")
		var err error
		if n, err = strconv.Atoi(a); err == nil {
			tol, err = strconv.ParseFloat(b, 64)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	best := time.Duration(1<<63 - 1)
	var st solvers.Stats
	for range 3 {
		d, s, err := MicrogridStudy(n).Time(context.Background(), Setup{Method: sundials.Method{Ordering: sundials.AMD}, Solver: solvers.Options{RelTol: tol}})
		if err != nil {
			t.Fatal(err)
		}
		best, st = min(best, d), s
	}
	if st.Steps < 100 {
		t.Errorf("IDA took %d steps", st.Steps)
	}
	t.Logf("stock: microgrid-%d: IDA + KLU (AMD) of the system's library (%.2f ns an entry of a linear sum) at %.0e: %d steps, %.2f ms, best of 3",
		n, sundials.KernelTime(), tol, st.Steps, 1e3*best.Seconds())
}
