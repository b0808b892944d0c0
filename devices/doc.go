// Package devices holds the equipment: lines, loads, transformers, grids,
// breakers, faults, meters and inverters, each as a block with ports
// ([islet/solvers.Block]) that tells about itself through the facets of
// [islet/solvers/facet]. A device knows its terminals, never the network.
//
// # Conventions
//
// Three-phase quantities use the amplitude-invariant Park transform with the
// d axis on phase a at angle 0,
//
//	x_d + j x_q = (2/3) e^{-j theta} (x_a + a x_b + a^2 x_c),   a = e^{j 2 pi/3},
//
// so that v_a = V cos(theta) is v_d = V, v_q = 0, and a balanced three-phase
// power is P + jQ = (3/2) v i*. An inductive load has Q > 0.
//
// Everything is SI: peak phase-to-neutral volts, peak amperes, radians,
// seconds. Trade units (line-to-line rms volts, VA, per cent impedance, X/R,
// ohm/km) enter through the rating structs and are converted in units.go
// alone; hertz and rms volts reappear only in channels and setpoints, whose
// unit strings say so.
//
// Port components are v_d, v_q of each terminal in turn, in the network frame,
// which turns at omega_f (SetFrame; 0, a frame at rest, until it is called).
// Flows are currents into the device. A device with a frame of its own has an
// angle delta to it: x_local = e^{-j delta} x_network and
// d delta/dt = omega - omega_f.
//
// # Channels
//
// Passive equipment reports power and current into its terminals: p ("W in"),
// q ("var in"), i ("A rms"), with the suffixes _from and _to where there are
// two terminals. Sources report what they generate: p ("W generated"), q ("var
// generated"), i, and frequency ("Hz"). The current of a channel is the flow of
// the block: at a terminal with a capacitor it leaves out C dv/dt, which is
// zero in steady state.
//
// # Detail
//
// Where a device has two levels, "full" integrates all its inductors and
// capacitors, and "quasi-steady" sets their derivatives in the network frame to
// zero: the phasor model at the frame's speed. Quasi-steady elements store no
// energy in the ledger. Inverters have a ladder of levels, from "full" by
// "current loop gone", "inner loops gone" and "primary only" to "phase only"
// (grid-forming) or "injection only" (grid-following); see inverter.go.
package devices
