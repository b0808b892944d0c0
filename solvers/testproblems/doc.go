// Package testproblems holds textbook problems for integrators of
// M y' = f(t, y): stiff equations, index-1 systems and systems with events,
// each with exact Jacobians, its start and known values of its solution.
//
// # Sources
//
// Short names used in the comments:
//
//   - TS24: F. Mazzia, C. Magherini, Test Set for Initial Value Problem
//     Solvers, release 2.4, Report 4/2008, Department of Mathematics,
//     University of Bari, February 2008.
//   - HW2: E. Hairer, G. Wanner, Solving Ordinary Differential Equations II,
//     Springer, 2nd ed. 1996; HNW1: Hairer, Nørsett, Wanner, Solving Ordinary
//     Differential Equations I, 2nd ed. 1993.
//   - EHL75: W.H. Enright, T.E. Hull, B. Lindberg, Comparing numerical methods
//     for stiff systems of ODEs, BIT 15 (1975) 10-48.
//   - DETEST: T.E. Hull, W.H. Enright, B.M. Fellen, A.E. Sedgwick, Comparing
//     numerical methods for ordinary differential equations, SIAM J. Numer.
//     Anal. 9 (1972) 603-637.
//   - own: closed form derived for this project.
//
// End values of problems without a closed form were computed with a Radau IIA
// collocation code in 113-bit arithmetic (7 stages at local tolerances of
// 1e-18 to 1e-20, confirmed by 5 stages), because some printed values are
// wrong in their last digits; they agree with the values printed in TS24 to 13
// digits or more, except where a problem says so.
package testproblems
