//go:build sundials

package bench

import (
	"context"
	"testing"

	"islet/solvers"
)

// The same run by two codes that share nothing but the right-hand side and the
// Jacobian: each converges to what the other does. Bounds are differences
// relative to the range of each signal, over all the usual channels.
func TestAgreement(t *testing.T) {
	ctx := context.Background()
	for _, tc := range []struct {
		study Study
		// tight bounds both codes at 1e-10, loose Rodas5P at 1e-6.
		tight, loose float64
	}{
		// In the generated microgrid some followers are far from the load
		// that changes: their signals move by 1 % of rating, so an error of
		// the tolerance, relative to rating, is 1e-4 of their range.
		{MicrogridStudy(10), 5e-6, 3e-4},
		// The instant of closing is itself a result, and the current limit
		// acts after it: kinks that both codes step across.
		{FeederStudy(), 5e-6, 5e-4},
		// The capacitor bank's losses, 2 kW beside 115 kvar, follow every
		// ripple of its voltage: there IDA at 1e-9 is 7e-5 off itself at 1e-10.
		{HarbourStudy(), 3e-5, 2e-4},
	} {
		s := tc.study
		ref, refStats, err := s.Waveforms(ctx, reference(1e-10), nil, sampling)
		if err != nil {
			t.Fatal(err)
		}
		near, _, err := s.Waveforms(ctx, reference(1e-9), nil, sampling)
		if err != nil {
			t.Fatal(err)
		}
		own := Compare(near, ref, sampling, flatChannel)
		t.Logf("%s: IDA at 1e-9 against itself at 1e-10: %.2e (%s)", s.Name, own.Largest, own.Channel)
		for _, rel := range []float64{0, 1e-6, 1e-8, 1e-10} {
			tr, st, err := s.Waveforms(ctx, Setup{Solver: solvers.Options{RelTol: rel}}, nil, sampling)
			if err != nil {
				t.Fatal(err)
			}
			d := Compare(tr, ref, sampling, flatChannel)
			t.Logf("%s: Rodas5P at %.0e (0: the default) (%d steps) against IDA at 1e-10 (%d steps): %.2e (%s at %g s; %d channels, %d samples)",
				s.Name, rel, st.Steps, refStats.Steps, d.Largest, d.Channel, d.Time, d.Channels, d.Samples)
			want := tc.loose
			switch {
			case rel == 0:
				// The engine's default, Tolerance 1e-6.
				want = 3e-5
			case rel < 1e-9:
				want = tc.tight
			}
			if !(d.Largest < want) {
				t.Errorf("%s: Rodas5P at %g and IDA at 1e-10 differ by %.3g of range, want below %g", s.Name, rel, d.Largest, want)
			}
			if d.Channels < 30 || d.Samples < int(s.Until/sampling) {
				t.Errorf("%s: only %d channels and %d samples compared", s.Name, d.Channels, d.Samples)
			}
		}
	}
}
