//go:build sundials

package bench

import (
	"context"
	"os"
	"testing"

	"islet/bench/sundials"
	"islet/solvers"
)

// reference is the setup of reference runs: IDA, so that our methods are not
// measured by themselves, at a tolerance where its error is far below theirs.
func reference(rel float64) Setup {
	return Setup{Name: "reference", Method: sundials.IDA, Solver: solvers.Options{RelTol: rel}}
}

func studies() []Study {
	s := []Study{HarbourStudy(), FeederStudy(), MicrogridStudy(10)}
	if *full {
		s = append(s, MicrogridStudy(100))
	}
	return s
}

const sampling = 5e-3

func TestCompare(t *testing.T) {
	t.Logf("SUNDIALS %s, %.2f ns an entry of a linear sum (0.3 to 0.5 if built with optimisation)", sundials.Version(), sundials.KernelTime())
	ctx := context.Background()
	setups := []Setup{
		{Name: "Rodas5P"},
		{Name: "Rodas5P, turning frame", TurningFrame: true},
		{Name: "Rodas5P, general LU", GeneralLU: true},
		{Name: "IDA + KLU", Method: sundials.IDA},
		// Its orders above 2 are unstable on the filters' weakly damped
		// resonances, as every BDF's.
		{Name: "IDA + KLU, order <= 2", Method: sundials.Method{MaxOrder: 2}},
	}
	tols, repeat := []float64{1e-4}, 1
	if *full {
		tols, repeat = []float64{1e-2, 1e-3, 1e-4, 1e-5, 1e-6}, 5
	}
	var all []Row
	for _, s := range studies() {
		ref, st, err := s.Waveforms(ctx, reference(1e-10), nil, sampling)
		if err != nil {
			t.Fatal(err)
		}
		t.Logf("%s: reference in %d steps", s.Name, st.Steps)
		rows, err := s.WorkPrecision(ctx, setups, tols, ref, nil, sampling, repeat)
		if err != nil {
			t.Fatal(err)
		}
		all = append(all, rows...)
		// At equal tolerance the default is the more accurate, in fewer
		// steps; times are printed, not judged: the machine may be busy.
		for k := 0; k < len(rows); k += len(setups) {
			ours, ida := rows[k], rows[k+3]
			if !(ours.Difference.Largest < ida.Difference.Largest) || !(ours.Stats.Steps < ida.Stats.Steps) {
				t.Errorf("%s at %g: %s has error %.3g in %d steps, %s %.3g in %d", s.Name, ours.RelTol,
					ours.Setup, ours.Difference.Largest, ours.Stats.Steps, ida.Setup, ida.Difference.Largest, ida.Stats.Steps)
			}
		}
	}
	if err := WriteTable(os.Stdout, all); err != nil {
		t.Fatal(err)
	}
	if *csvPath == "" {
		return
	}
	f, err := os.Create(*csvPath)
	if err != nil {
		t.Fatal(err)
	}
	if err := WriteCSV(f, all); err != nil {
		t.Fatal(err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
}
