//go:build sundials

package bench

import (
	"context"
	"testing"

	"islet/solvers"
)

// The same run by two codes that share nothing but the right-hand side and the
// Jacobian.
func TestAgreement(t *testing.T) {
	ctx := context.Background()
	for _, s := range agreeing() {
		ref, refStats, err := s.Waveforms(ctx, reference(1e-10), nil, sampling)
		if err != nil {
			t.Fatal(err)
		}
		loose, _, err := s.Waveforms(ctx, reference(1e-9), nil, sampling)
		if err != nil {
			t.Fatal(err)
		}
		own := Compare(loose, ref, sampling, flatChannel)
		t.Logf("%s: IDA at 1e-9 against IDA at 1e-10: %.2e (%s)", s.Name, own.Largest, own.Channel)
		for _, tol := range []float64{1e-6, 1e-8, 1e-10} {
			tr, st, err := s.Waveforms(ctx, Setup{Solver: solvers.Options{RelTol: tol}}, nil, sampling)
			if err != nil {
				t.Fatal(err)
			}
			d := Compare(tr, ref, sampling, flatChannel)
			t.Logf("%s: Rodas5P at %.0e (%d steps) against IDA at 1e-10 (%d steps): %.2e (%s at %g s; %d channels, %d samples)",
				s.Name, tol, st.Steps, refStats.Steps, d.Largest, d.Channel, d.Time, d.Channels, d.Samples)
		}
	}
}

func agreeing() []Study { return []Study{MicrogridStudy(10)} }
