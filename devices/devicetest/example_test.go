package devicetest_test

import (
	"testing"

	"islet/devices/devicetest"
	"islet/solvers"
	"islet/solvers/facet"
)

// heater is the least a device needs: a resistor to neutral, in one file, with
// nothing but the block and its description. The solvers difference it.
type heater struct{ ohms float64 }

func (h heater) Dims() (ports, own int) { return 2, 0 }

func (h heater) Mass(port, own []float64) { clear(port) }

func (h heater) Eval(flow, rate []float64, t float64, v, x []float64) error {
	flow[0], flow[1] = v[0]/h.ohms, v[1]/h.ohms
	return nil
}

func (h heater) Describe() facet.Description {
	return facet.Description{Kind: "heater", Terminals: []facet.Terminal{{Name: "ac", Flow: facet.FlowHeld}}}
}

func TestHeater(t *testing.T) {
	devicetest.Run(t, func() solvers.Block { return heater{ohms: 20} },
		devicetest.Options{Voltages: []float64{326.6}})
}
