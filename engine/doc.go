// Package engine runs electromagnetic-transient simulations of electric
// networks: buses and topology, assembly of devices into one system, frames,
// operating point, events, channels and traces, snapshots and the energy
// ledger. It knows no concrete equipment: a device is whatever satisfies
// [Device], so a user's own ranks with those of package devices.
//
// A study in five lines:
//
//	sys := engine.NewSystem(50)
//	bus := sys.Bus("quay", 400)
//	err := sys.Add("source", source, bus) // and so on
//	sim, err := engine.Start(sys, nil)    // finds the operating point
//	trace, err := sim.Run(ctx, 2.5)
//
// # Conventions
//
// Quantities are SI: peak phase-to-neutral volts and peak amperes inside,
// radians, seconds. The Park transform is amplitude-invariant with the d axis
// on phase a at angle zero, so P = (3/2) Re(v i*). Currents into a device are
// positive. Each island has a network frame that turns at the frequency its
// sources settle at; angles and network-frame pairs are relative to it.
//
// # Cautions
//
// Results support, and never replace, local codes, utility requirements and a
// licensed engineer's judgement.
package engine
