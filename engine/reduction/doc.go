// Package reduction eliminates nodes from networks of RL branches.
//
// A [Network] has nodes, and branches of a resistance and an inductance in
// series between them or to [Ground]. Nodes that are kept have voltages given
// from outside; at all others Kirchhoff's current law holds with nothing but
// branches. Three reductions give the currents that flow into the network at
// the kept nodes:
//
//   - [KronPhasor], at one frequency: the Schur complement of the nodal
//     admittance matrix.
//   - [Uniform], at all frequencies and in transients, where every branch has
//     one ratio R/L: RL branches between the kept nodes again.
//   - [Reduce], at all frequencies and in transients for any R and L: decoupled
//     RL circuits, each driven by a combination of the kept voltages. The other
//     two are its special cases.
//
// [PlainBranches] is an approximation of the last by RL branches, right at one
// frequency, together with its error. [Project] gives the projection behind
// [Reduce] in branch currents.
//
// All is per phase, SI, and says nothing of frames: in a frame that turns at
// omega, s stands for d/dt + j omega. Quantities aren't bound to be electrical,
// as long as flows balance at nodes and branches are linear of first order.
package reduction
