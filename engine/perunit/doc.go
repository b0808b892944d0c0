// Package perunit normalises whole systems: it scales unknowns, equations, inputs
// and time by base values, instead of converting parameters one by one. What a
// parameter is per unit then follows from the equations it stands in, gains of
// controllers included, and nothing can be converted wrongly: the scaled system has
// the same trajectories and, times the base of time, the same eigenvalues.
//
// With y = S z, t = T tau and equations divided by R, M y' = f(t, y) becomes
//
//	(R^-1 M S / T) dz/dtau = R^-1 f(T tau, S z)
//
// so that a change of bases is one more scaling of the same kind. Bases of
// control signals are free: whatever they are, physical quantities do the same.
//
// Powers count as a dimension of their own. With amplitude-invariant quantities p =
// (3/2) v i, and the base of power is (3/2) times those of voltage and current: the
// factor is gone per unit.
package perunit
