package bench

import (
	"context"
	"errors"
	"math"
	"os"
	"runtime"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"islet/engine"
	"islet/solvers"
)

// scaleSizes are the sizes asked for.
func scaleSizes(t *testing.T) []int {
	t.Helper()
	list := *sizes
	if list == "" {
		list = "10"
		if *full {
			list = "10,100,1000,10000"
		}
	}
	var out []int
	for _, s := range strings.Split(list, ",") {
		n, err := strconv.Atoi(s)
		if err != nil || n < 4 {
			t.Fatalf("-sizes holds %q, want numbers of at least 4", s)
		}
		out = append(out, n)
	}
	return out
}

// What a study costs at every size, and where the time of a step goes.
func TestCosts(t *testing.T) {
	ctx := context.Background()
	var costs []Costs
	for _, n := range scaleSizes(t) {
		c, err := MicrogridCosts(ctx, n, 1e-4)
		if err != nil {
			t.Fatal(err)
		}
		costs = append(costs, c)
		if kb := c.Bytes / float64(n) / 1e3; !(kb <= 40) {
			t.Errorf("%d inverters hold %.1f kB each", n, kb)
		}
	}
	if err := WriteCosts(os.Stdout, costs); err != nil {
		t.Fatal(err)
	}
	for _, n := range scaleSizes(t) {
		f, err := MicrogridFloors(ctx, n, 1e-4)
		if err != nil {
			t.Fatal(err)
		}
		us := func(d time.Duration) float64 { return 1e6 * d.Seconds() }
		t.Logf("%d inverters, us: evaluation %.1f, Jacobian %.1f, factorisation %.1f, solution %.1f, norm %.1f; a step %.1f, of which stages and engine %.1f",
			n, us(f.Eval), us(f.Linearise), us(f.Factor), us(f.Solve), us(f.Norm), us(f.Step), us(f.Rest()))
	}
	if *plotDir != "" {
		if err := PlotCosts(*plotDir+"/scale-costs.svg", costs); err != nil {
			t.Fatal(err)
		}
	}
}

// Independent runs on all cores, against the same runs one after the other.
func BenchmarkIndependentRuns(b *testing.B) {
	const runs = 4
	study := MicrogridStudy(100)
	fresh := func() []*engine.Simulation {
		var ms []*engine.Simulation
		for range runs {
			m, err := study.Start(&engine.Options{Record: []string{study.Signal}, NoLedger: true, Solver: solvers.Options{RelTol: 1e-4}})
			if err != nil {
				b.Fatal(err)
			}
			ms = append(ms, m)
		}
		runtime.GC()
		return ms
	}
	var one, all time.Duration
	for b.Loop() {
		ms := fresh()
		from := time.Now()
		for _, m := range ms {
			if _, err := m.Run(context.Background(), study.Until); err != nil {
				b.Fatal(err)
			}
		}
		one += time.Since(from)
		ms = fresh()
		errs := make([]error, runs)
		var wg sync.WaitGroup
		from = time.Now()
		for k, m := range ms {
			wg.Go(func() { _, errs[k] = m.Run(context.Background(), study.Until) })
		}
		wg.Wait()
		all += time.Since(from)
		if err := errors.Join(errs...); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(one.Seconds()/all.Seconds(), "speed-up")
}

// yardstick takes the time of a fixed piece of work of the kind the engine does:
// chained multiplications and additions over vectors that fit the cache, in Go.
func yardstick() time.Duration {
	const n, repeat = 1420, 400
	x, y := make([]float64, n), make([]float64, n)
	for i := range x {
		x[i], y[i] = 1/float64(i+1), float64(i%7)
	}
	best := time.Duration(math.MaxInt64)
	for range 7 {
		from := time.Now()
		for r := range repeat {
			a := 1 / float64(r+2)
			for i, v := range x {
				y[i] = y[i]*a + v
			}
		}
		best = min(best, time.Since(from))
	}
	if y[3] != y[3] {
		panic("the yardstick broke")
	}
	return best
}

// The guard against a loss of speed: the work of a study, which doesn't depend
// on the machine, and its time over that of the yardstick in the same run. The
// bounds leave room for rounding in the steps (a quarter) and for a busy or
// different machine in time (a factor of 2.5).
func TestSpeedGuard(t *testing.T) {
	s := MicrogridStudy(100)
	s.Until = 4
	run := func() (time.Duration, solvers.Stats) {
		d, st, err := s.Time(context.Background(), Setup{Solver: solvers.Options{RelTol: 1e-4}, TurningFrame: true})
		if err != nil {
			t.Fatal(err)
		}
		return d, st
	}
	best, st := run()
	unit := yardstick()
	ratio := math.Inf(1)
	for range 6 {
		d, _ := run()
		best = min(best, d)
		unit = min(unit, yardstick())
		ratio = min(ratio, best.Seconds()/unit.Seconds())
	}
	t.Logf("%d steps, %d rejected, %d evaluations; %v, %.1f yardsticks of %v", st.Steps, st.Rejected, st.Evals, best, ratio, unit)
	const steps, times = 83, 78.0 // as measured when this was written
	if st.Steps > steps*5/4 || st.Evals > 10*steps*5/4 {
		t.Errorf("%d steps and %d evaluations, want %d and %d or less, within a quarter", st.Steps, st.Evals, steps, 10*steps)
	}
	if ratio > 2.5*times {
		t.Errorf("the study takes %.1f yardsticks, want %.1f within a factor of 2.5", ratio, times)
	}
}
