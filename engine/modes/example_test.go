package modes_test

import (
	"context"
	"fmt"
	"math"

	"islet/engine"
	"islet/engine/modes"
)

// The swing of one droop source on a stiff grid, and how far its droop gain may
// be raised (Routh's closed form, power-checks J1, gives 1.156189e-3).
func Example() {
	build := func(m float64) (*engine.Simulation, error) {
		s := engine.NewSystem(50)
		bus := s.Bus("quay", 380)
		v := 380 * math.Sqrt(2.0/3)
		if err := s.Add("battery", &machine{v0: v, r: 0.1, l: 0.9e-3, w0: 100 * math.Pi, m: m}, bus); err != nil {
			return nil, err
		}
		if err := s.Add("grid", &machine{v0: v, r: 0.1, l: 0.3e-3, w0: 100 * math.Pi}, bus); err != nil {
			return nil, err
		}
		return engine.Start(s, nil)
	}
	sim, err := build(1e-4)
	if err != nil {
		fmt.Println(err)
		return
	}
	linear, err := sim.Linearise(nil)
	if err != nil {
		fmt.Println(err)
		return
	}
	report, err := modes.Analyse(linear, nil)
	if err != nil {
		fmt.Println(err)
		return
	}
	swing := report.Rightmost()
	fmt.Println(swing)
	for _, s := range report.Participants(swing, 2, 0.1) {
		fmt.Printf("%s %.0f %%\n", s.Name, 100*s.Value)
	}
	edge, err := modes.FindCritical(context.Background(), 1e-4, 1e-2, build, nil)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("unstable from m = %.6g rad/s/W on\n", edge.Value)
	// Output:
	// mode 2: -14.479 ± j27.0308 1/s, 4.302 Hz, damping 47.2 %
	// battery.delta 49 %
	// battery.P 47 %
	// unstable from m = 0.00115619 rad/s/W on
}
