package bench

import (
	"context"
	"fmt"
	"math"
	"runtime"
	"testing"
	"time"

	"islet/cases"
	"islet/engine"
)

// BenchmarkRun is a whole study as a user runs it: operating point left out,
// the frame turning, the energy ledger kept, the usual channels recorded at
// every step. It reports the simulated time over the time taken, and the work.
func BenchmarkRun(b *testing.B) {
	for _, s := range own() {
		b.Run(s.Name, func(b *testing.B) {
			var steps, rejected, unknowns int
			var spent time.Duration
			n := 0
			for b.Loop() {
				b.StopTimer()
				m, err := s.Start(&engine.Options{})
				if err != nil {
					b.Fatal(err)
				}
				b.StartTimer()
				from := time.Now()
				if _, err := m.Run(context.Background(), s.Until); err != nil {
					b.Fatal(err)
				}
				spent += time.Since(from)
				n++
				steps, rejected, unknowns = m.Stats().Steps, m.Stats().Rejected, m.Unknowns()
			}
			b.ReportMetric(float64(unknowns), "unknowns")
			b.ReportMetric(float64(steps), "steps")
			b.ReportMetric(float64(rejected), "rejected")
			b.ReportMetric(s.Until*float64(n)/spent.Seconds(), "x-real-time")
		})
	}
}

// BenchmarkOperatingPoint is the search for the steady state, with the
// building of the network from its description.
func BenchmarkOperatingPoint(b *testing.B) {
	for _, s := range own() {
		b.Run(s.Name, func(b *testing.B) {
			iterations := 0
			for b.Loop() {
				m, err := s.Start(&engine.Options{})
				if err != nil {
					b.Fatal(err)
				}
				iterations = m.OperatingPoint().Iterations
			}
			b.ReportMetric(float64(iterations), "iterations")
		})
	}
}

// allocations counts heap allocations of steps of a running simulation: from
// a tenth of the run on, to the first event or until enough steps are taken.
func allocations(s Study, o *engine.Options) (perStep float64, steps int, err error) {
	m, err := s.Start(o)
	if err != nil {
		return 0, 0, err
	}
	restarts := -1
	var before, after runtime.MemStats
	for m.Time() < s.Until {
		if restarts != m.Stats().Restarts {
			// After an event: let the next few steps size what they need.
			restarts = m.Stats().Restarts
			for k := 0; k < 5 && m.Stats().Restarts == restarts && m.Time() < s.Until; k++ {
				if err := m.Step(); err != nil {
					return 0, 0, err
				}
			}
			continue
		}
		runtime.ReadMemStats(&before)
		if err := m.Step(); err != nil {
			return 0, 0, err
		}
		runtime.ReadMemStats(&after)
		if m.Stats().Restarts == restarts {
			perStep += float64(after.Mallocs - before.Mallocs)
			steps++
		}
	}
	return perStep / math.Max(1, float64(steps)), steps, nil
}

// BenchmarkAllocations reports heap allocations per step that isn't an event:
// with nothing recorded, and with the usual channels, whose columns grow.
func BenchmarkAllocations(b *testing.B) {
	for _, s := range own() {
		b.Run(s.Name, func(b *testing.B) {
			for b.Loop() {
				bare, steps, err := allocations(s, &engine.Options{Record: []string{}, NoLedger: true})
				if err != nil {
					b.Fatal(err)
				}
				usual, _, err := allocations(s, nil)
				if err != nil {
					b.Fatal(err)
				}
				b.ReportMetric(bare, "allocs/step")
				b.ReportMetric(usual, "allocs/recorded-step")
				b.ReportMetric(float64(steps), "steps")
			}
		})
	}
}

// A step of the engine allocates nothing, events and recording aside.
func TestStepAllocatesNothing(t *testing.T) {
	per, steps, err := allocations(MicrogridStudy(10), &engine.Options{Record: []string{}, NoLedger: true})
	if err != nil {
		t.Fatal(err)
	}
	if steps < 50 {
		t.Errorf("only %d steps seen", steps)
	}
	// The runtime itself allocates now and then while it is measured.
	if per > 0.05 {
		t.Errorf("%.3g allocations a step in %d steps", per, steps)
	}
}

func own() []Study {
	return []Study{HarbourStudy(), FeederStudy(), MicrogridStudy(10), MicrogridStudy(100)}
}

func TestMicrogridRefusesTooFew(t *testing.T) {
	if _, err := Microgrid(3); err == nil {
		t.Error("3 inverters accepted")
	}
}

// The generated network is steady at its start and settles after every step:
// the frequency at the end is within the droop of all (1 % at rating).
func TestMicrogrid(t *testing.T) {
	s := MicrogridStudy(10)
	m, err := s.Start(&engine.Options{Record: []string{"*.v", "*.frequency"}})
	if err != nil {
		t.Fatal(err)
	}
	if d := m.OperatingPoint().Drift; d > 1e-6 {
		t.Errorf("operating point drifts at %g", d)
	}
	tr, err := m.Run(context.Background(), s.Until)
	if err != nil {
		t.Fatal(err)
	}
	last := tr.Rows() - 1
	for b := range m.System().BusNames() {
		if f := tr.Column(fmt.Sprintf("bus-%d.frequency", b))[last]; math.Abs(f-50) > 0.5 {
			t.Errorf("bus %d ends at %g Hz", b, f)
		}
		if v := tr.Column(fmt.Sprintf("bus-%d.v", b))[last]; math.Abs(v-400) > 40 {
			t.Errorf("bus %d ends at %g V", b, v)
		}
	}
}

// BenchmarkCaseLoading is a case file read, checked and built into a network, up
// to the search for the operating point, which isn't in it.
func BenchmarkCaseLoading(b *testing.B) {
	for _, name := range []string{"starter", "harbour", "mesh-100", "mesh-1000"} {
		b.Run(name, func(b *testing.B) {
			for b.Loop() {
				if _, err := cases.Open(name); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
