package engine

import (
	"islet/solvers"
	"islet/solvers/facet"
)

// Device is a piece of equipment: a block of equations that can describe
// itself. Everything else it may offer is an optional facet of package
// solvers (Differentiable, TimeDependent) or facet (Framed, Measurer,
// Accountable, Adjustable, Switchable, Former, Starter, Ratioed, Detailed,
// Sized), or encoding.BinaryAppender with encoding.BinaryUnmarshaler for what
// it remembers outside its unknowns; all are found once, when it is added.
//
// Terminal k has the port components 2k (d) and 2k+1 (q): peak phase volts in
// the network frame, and amperes into the device. A device value belongs to
// one System.
type Device interface {
	solvers.Block
	facet.Described
}

// The vocabulary of package facet under the engine's name, so that an own
// device imports nothing else.
type (
	Description = facet.Description
	Terminal    = facet.Terminal
	Tie         = facet.Tie
	Unknown     = facet.Unknown
	Channel     = facet.Channel
	Setpoint    = facet.Setpoint
	Energy      = facet.Energy
)

// Kinds of unknowns and flows; see package facet.
const (
	Invariant = facet.Invariant
	PairD     = facet.PairD
	PairQ     = facet.PairQ
	Angle     = facet.Angle

	FlowNone     = facet.FlowNone
	FlowState    = facet.FlowState
	FlowHeld     = facet.FlowHeld
	FlowInjected = facet.FlowInjected
)
