package bench

import (
	"context"
	"math"
	"strings"
	"testing"

	"islet/engine"
)

// The feeder does what it is there for: it islands, runs on droop below the
// grid's frequency, and is joined again later than asked, by a root.
func TestFeeder(t *testing.T) {
	s := FeederStudy()
	m, err := s.Start(&engine.Options{Sample: 0.01})
	if err != nil {
		t.Fatal(err)
	}
	tr, err := m.Run(context.Background(), s.Until)
	if err != nil {
		t.Fatal(err)
	}
	opened, closed := math.NaN(), math.NaN()
	for _, n := range m.Notes() {
		switch {
		case strings.Contains(n.Text, "breaker opens"):
			opened = n.Time
		case strings.Contains(n.Text, "breaker closes"):
			closed = n.Time
		}
	}
	if opened != 0.3 || !(closed > 1.2 && closed < s.Until-0.3) {
		t.Errorf("the breaker opens at %g s and closes at %g s", opened, closed)
	}
	// At rated voltage the loads take 32 + 15 kW, of which the follower gives
	// 12; 20 kW beyond the setpoint of 15 lower the frequency by 2 % of 20/50,
	// 0.4 Hz. The voltage is some 5 to 10 % low by droop and virtual
	// impedance, and the loads' power by twice that: 0.3 to 0.4 Hz.
	if f := tr.At("mid.frequency", 1.2); !(f > 49.6 && f < 49.75) {
		t.Errorf("the island runs at %g Hz before it is joined, want 49.6 to 49.75", f)
	}
	if f := tr.At("mid.frequency", s.Until); math.Abs(f-50) > 0.05 {
		t.Errorf("%g Hz after it was joined, want near 50", f)
	}
}
