// Package screen answers, from the equations of coupled phase oscillators, whether
// the sources of an island can run in step, at which frequency, who carries how
// much, and how far the state is from losing step: in milliseconds, before any
// simulation.
//
// Sources that lower their frequency in proportion to power turn, once their fast
// dynamics are gone and voltages stand, as
//
//	D_i dtheta_i/dt = D_i (w_i* - w) + P_i* - P_i        at sources, D = 1/m
//	              0 = P_i* - P_i                          at all other nodes
//	            P_i = sum_j a_ij sin(theta_i - theta_j)
//
// with a_ij = (3/2) V_i V_j |y_ij| for branches that are mostly inductive. Loads,
// followers and losses are constant powers (P* negative for what is drawn).
//
// Sources: J. W. Simpson-Porco, F. Dorfler, F. Bullo, "Synchronization and power
// sharing for droop-controlled inverters in islanded microgrids", Automatica 49(9),
// 2013; F. Dorfler, M. Chertkov, F. Bullo, "Synchronization in complex oscillator
// networks and smart grids", PNAS 110(6), 2013.
package screen
