package solvers_test

import (
	"fmt"
	"math"
	"testing"

	"islet/solvers"
	tp "islet/solvers/testproblems"
)

// BenchmarkWorkPrecision prints the work against the precision reached, for
// each smooth problem, method and tolerance: steps, rejections, evaluations,
// factorisations, significant correct digits and the time of a run. The same
// lines appear as a table under -v:
//
//	go test -run '^$' -bench WorkPrecision -benchtime 1x -v ./solvers
func BenchmarkWorkPrecision(b *testing.B) {
	type entry struct {
		name string
		make func() *tp.Case
		abs  float64 // AbsTol; 0: that of the relative tolerance
	}
	problems := []entry{
		{"ROBER", tp.Robertson, 0},
		{"HIRES", tp.HIRES, 0},
		{"OREGO", tp.Oregonator, 0},
		{"VDPOL", tp.VanDerPol, 0},
		{"E5", tp.E5, 1e-7},
		{"PLEI", tp.Pleiades, 0},
		{"TRANSAMP", tp.TransistorAmplifier, 0},
		{"ROBER-DAE", tp.RobertsonDAE, 0},
		{"Kaps-1e-8", func() *tp.Case { return tp.Kaps(1e-8) }, 0},
		{"Kaps-0", func() *tp.Case { return tp.Kaps(0) }, 0},
		{"Prothero-Robinson", func() *tp.Case { return tp.ProtheroRobinson(-1e6, 2) }, 0},
		{"B5", func() *tp.Case { return tp.DampedRotation(100) }, 0},
	}
	table := fmt.Sprintf("%-18s %-8s %7s %7s %7s %8s %7s %6s %6s %10s\n",
		"problem", "method", "rtol", "steps", "reject", "evals", "factor", "scd", "mescd", "us")
	for _, p := range problems {
		for _, m := range []solvers.Method{solvers.Rodas5P, solvers.Rodas4P} {
			for _, rtol := range []float64{1e-3, 1e-5, 1e-7, 1e-9} {
				b.Run(fmt.Sprintf("%s/%s/%.0e", p.name, m.Name(), rtol), func(b *testing.B) {
					c := p.make()
					o := solvers.Options{RelTol: rtol, AbsTol: p.abs}
					if o.AbsTol == 0 {
						o.AbsTol = rtol
					}
					sys, err := c.Problem.System()
					if err != nil {
						b.Fatal(err)
					}
					var s solvers.Stepper
					for b.Loop() {
						if s, err = m.NewStepper(sys, o); err != nil {
							b.Fatal(err)
						}
						if err = s.Reset(c.Start, c.Initial); err != nil {
							b.Fatal(err)
						}
						for s.Time() < c.End {
							if err = s.Step(c.End); err != nil {
								b.Fatal(err)
							}
						}
					}
					st, want := s.Stats(), c.At(c.End)
					scd := c.SCD(s.State(), want)
					mescd := c.MESCD(s.State(), want, solvers.Tolerance{Rel: rtol, Abs: o.AbsTol})
					b.ReportMetric(float64(st.Steps), "steps")
					b.ReportMetric(float64(st.Rejected), "rejected")
					b.ReportMetric(float64(st.Evals), "evals")
					b.ReportMetric(float64(st.Factorizations), "factorisations")
					b.ReportMetric(math.Min(scd, 99), "scd") // exact states have no end of digits
					us := float64(b.Elapsed().Microseconds()) / float64(b.N)
					table += fmt.Sprintf("%-18s %-8s %7.0e %7d %7d %8d %7d %6.2f %6.2f %10.0f\n",
						p.name, m.Name(), rtol, st.Steps, st.Rejected+st.Failed, st.Evals, st.Factorizations, scd, mescd, us)
				})
			}
		}
	}
	if testing.Verbose() {
		fmt.Print(table)
	}
}
