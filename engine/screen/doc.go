// Package screen answers, from the equations of coupled phase oscillators, whether
// the sources of an island can run in step, at which frequency, who carries how
// much, and how far the state is from losing step, before any
// simulation: in milliseconds for tens of sources, in seconds for a thousand.
//
// Sources that lower their frequency in proportion to power turn, once their fast
// dynamics are gone and voltages stand, as
//
//	D_i dtheta_i/dt = D_i (w_i* - w) + P_i* - P_i        at sources, D = 1/m
//	              0 = P_i* - P_i                          at all other nodes
//	            P_i = sum_j a_ij sin(theta_i - theta_j)
//
// with a_ij = (3/2) E_i E_j b_ij, b the susceptance between two sources of fixed inner
// voltage: |y| where the network is lossless. [Circuit] holds a network with its buses,
// and [Circuit.Reduce] eliminates them; loads, followers and losses are then shares of
// the sources. A [Network] may have nodes without damping as well, of fixed voltage.
//
// For a tree the answer of [Screen] is exact. With loops it rests on the published norm
// condition, and on Newton's method followed from no transfer at all: of several states
// that differ by power circulating in a loop it finds the one that doesn't circulate,
// and that it finds none is no proof. [Settle] looks for others.
//
// Sources: J. W. Simpson-Porco, F. Dorfler, F. Bullo, "Synchronization and power
// sharing for droop-controlled inverters in islanded microgrids", Automatica 49(9),
// 2013; F. Dorfler, M. Chertkov, F. Bullo, "Synchronization in complex oscillator
// networks and smart grids", PNAS 110(6), 2013.
package screen
