// Package devicetest is the conformance kit for devices: blocks with ports that
// tell about themselves through islet/solvers/facet. It needs no network and
// no engine, and holds for a user's own device as for the shipped ones:
//
//	func TestHeater(t *testing.T) {
//		devicetest.Run(t, func() solvers.Block { return heater{ohms: 20} },
//			devicetest.Options{Voltages: []float64{326.6}})
//	}
//
// (example_test.go has the whole device, which needs no more than one file.)
//
// Run takes the device through every level of detail and every switch position
// it has and checks, at random states, that what it says about itself is true:
//
//   - description: dimensions, names, bases, pairs, flow kinds, ties; facets
//     refer to things that exist
//   - jacobian: equal to differences; nothing outside the pattern is nonzero or
//     written, everything inside is written
//   - time derivative: equal to differences while setpoints ramp
//   - energy: d Stored/dt = Supplied - Dissipated + power in, for arbitrary
//     terminal voltages and their derivatives
//   - rotation: turning voltages, network-frame pairs and angles turns flows
//     and the pairs' rates, and changes nothing else
//   - frame speed: another speed of the network frame adds -j dw M x to the
//     rates of pairs, -dw to those of angles, j dw C v to the flows
//   - flows: each terminal's flow is of the kind declared; ties carry nothing
//     at their voltage ratio
//   - measure: powers and currents of the channels are those of the flows
//   - setpoints: good values are taken, ramps are linear, bad arguments are
//     errors that change nothing
//   - memory: what a snapshot restores behaves the same to the last bit; bad
//     bytes are errors that change nothing
//   - detail: levels keep setpoints and switch position, and have the same
//     steady state
//   - open ratio: a terminal at its open-circuit voltage carries no current
//   - allocations: none while stepping
package devicetest
