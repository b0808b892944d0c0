package engine_test

import (
	"context"
	"fmt"
	"log"
	"math"

	"islet/engine"
)

// heatPump is an own device: a series R-L load whose resistance falls as it
// warms up, T dg/dt = g_hot - g. It has no Jacobian, so the engine differences
// its three unknowns; nothing else is needed.
type heatPump struct{ l, gHot, t, wf float64 }

func (h *heatPump) Describe() engine.Description {
	return engine.Description{
		Kind:      "heat pump",
		Terminals: []engine.Terminal{{Name: "ac", Flow: engine.FlowState}},
		Unknowns: []engine.Unknown{
			{Name: "i.d", Unit: "A", Base: 30, Frame: engine.PairD},
			{Name: "i.q", Unit: "A", Base: 30, Frame: engine.PairQ},
			{Name: "g", Unit: "S", Base: 0.1},
		},
	}
}
func (h *heatPump) Dims() (ports, own int)                    { return 2, 3 }
func (h *heatPump) SetFrame(speed float64)                    { h.wf = speed }
func (h *heatPump) Mass(port, own []float64)                  { clear(port); own[0], own[1], own[2] = h.l, h.l, h.t }
func (h *heatPump) Guess(x []float64, t float64, v []float64) { x[2] = h.gHot }
func (h *heatPump) Eval(flow, rate []float64, t float64, v, x []float64) error {
	rate[0] = v[0] - x[0]/x[2] + h.wf*h.l*x[1]
	rate[1] = v[1] - x[1]/x[2] - h.wf*h.l*x[0]
	rate[2] = h.gHot - x[2]
	flow[0], flow[1] = x[0], x[1]
	return nil
}

// A network built in Go, with a device of one's own: it starts in its steady
// state, a switch brings a second load in, and the ledger closes.
func Example() {
	sys := engine.NewSystem(50)
	jetty, shed, hut := sys.Bus("jetty", 400), sys.Bus("shed", 400), sys.Bus("hut", 400)
	add := func(name string, d engine.Device, at ...engine.Bus) {
		if err := sys.Add(name, d, at...); err != nil {
			log.Fatal(err)
		}
	}
	add("battery", &source{e: 327, r: 0.05, l: 1e-3, w: 100 * math.Pi, m: 1e-4}, jetty)
	add("cable", &branch{r: 0.1, l: 0.1e-3}, jetty, shed)
	add("pump", &heatPump{l: 5e-3, gHot: 0.1, t: 0.2}, shed)
	add("switch", newContact(1e-3, true), shed, hut)
	add("lamps", &shunt{r: 40}, hut)

	sim, err := engine.Start(sys, nil)
	if err != nil {
		log.Fatal(err)
	}
	if err := sim.At(0.1, engine.Close("switch")); err != nil {
		log.Fatal(err)
	}
	trace, err := sim.Run(context.Background(), 1)
	if err != nil {
		log.Fatal(err)
	}
	for _, t := range []float64{0, 1} {
		fmt.Printf("t = %g s: %.1f V, %.3f Hz, %.2f kW\n", t, trace.At("shed.v", t), trace.At("shed.frequency", t), trace.At("battery.p", t)/1e3)
	}
	fmt.Println("ledger closes within 1e-6:", sim.Energy().Closure() < 1e-6)
	// Output:
	// t = 0 s: 392.5 V, 49.757 Hz, 15.19 kW
	// t = 1 s: 391.0 V, 49.696 Hz, 18.97 kW
	// ledger closes within 1e-6: true
}

// Ten studies from one snapshot: each goes on from the same moment with
// another inner voltage of the battery.
func ExampleSimulation_Restore() {
	sys := engine.NewSystem(50)
	bus := sys.Bus("jetty", 400)
	if err := sys.Add("battery", &source{e: 327, r: 0.05, l: 1e-3, w: 100 * math.Pi, m: 1e-4}, bus); err != nil {
		log.Fatal(err)
	}
	if err := sys.Add("load", &shunt{r: 20}, bus); err != nil {
		log.Fatal(err)
	}
	sim, err := engine.Start(sys, nil)
	if err != nil {
		log.Fatal(err)
	}
	ctx := context.Background()
	if _, err := sim.Run(ctx, 0.5); err != nil {
		log.Fatal(err)
	}
	here, err := sim.Snapshot()
	if err != nil {
		log.Fatal(err)
	}
	for study := range 10 {
		if err := sim.Restore(here); err != nil {
			log.Fatal(err)
		}
		if err := sim.Apply(engine.Set("battery", "e", 327+float64(study))); err != nil {
			log.Fatal(err)
		}
		if _, err := sim.Run(ctx, 1); err != nil {
			log.Fatal(err)
		}
		if study%3 == 0 {
			v, err := sim.Value("jetty.v")
			if err != nil {
				log.Fatal(err)
			}
			fmt.Printf("inner voltage %.0f V peak: %.2f V at the bus\n", 327+float64(study), v)
		}
	}
	// Output:
	// inner voltage 327 V peak: 399.44 V at the bus
	// inner voltage 330 V peak: 403.11 V at the bus
	// inner voltage 333 V peak: 406.77 V at the bus
	// inner voltage 336 V peak: 410.44 V at the bus
}
