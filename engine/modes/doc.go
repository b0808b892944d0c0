// Package modes analyses the linearised system of a simulation: state-space
// form, eigenvalues with participation factors, timescales, the match of modes
// between settings of detail, root loci and critical parameter values, the
// modes nearest a shift of a large system, frequency responses and the
// impedance seen at a bus, and open files of the matrices.
//
// Everything comes from [engine.Simulation.Linearise], so from the equations
// that are simulated:
//
//	linear, err := sim.Linearise(nil)
//	report, err := modes.Analyse(linear, nil)
//	report.WriteText(os.Stdout)
//
// # Conventions
//
// Eigenvalues are in 1/s, deviations grow as e^(lambda t). A mode is a real
// eigenvalue or a complex pair, of which the one with positive imaginary part
// stands for both. Frequencies of modes are |Im lambda|/2 pi, Hz, seen in the
// rotating network frame: a frequency f there is f0 ± f in the phases. A mode at the frame's own
// frequency, ± j314 1/s at 50 Hz, is a DC offset of phase currents; its damping
// ratio says little, its time constant what it seems.
package modes
