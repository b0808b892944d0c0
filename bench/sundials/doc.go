// Package sundials integrates the systems of package solvers with IDA, the
// variable-order BDF integrator of the SUNDIALS library, and KLU, the sparse
// LU of SuiteSparse: the same residual and Jacobian in the hands of another
// code. It serves tests and benchmarks, never the library.
//
// All of it stands behind the build tag sundials and needs cgo and the C
// libraries; without the tag the package is empty. On Debian or Ubuntu:
//
//	apt-get install --no-install-recommends gcc libsundials-dev libsuitesparse-dev
//	go test -tags sundials ./bench/...
//
// Written against SUNDIALS 6.4.1. Debian's build of it carries no compiler
// optimisation (the machine code of its vector kernels keeps every local
// variable on the stack), its KLU does. build-optimised.sh builds Debian's source
// package with -O3, which LD_LIBRARY_PATH puts before it, as the soname is the
// same; KernelTime tells them apart.
//
// # The equations IDA sees
//
// For M y' = f(t, y) the residual is
//
//	F(t, y, y') = M y' - f(t, y)           dF/dy + c dF/dy' = c M - J
//
// and for an equation of System.Hidden, 0 = s(y) with s linear in differential
// unknowns alone, BDF needs the differentiated form (index 1), here with a
// term that pulls the solution back to s = 0 (as s is linear, BDF keeps it to
// rounding from a consistent start; the term is for what rounding adds up to),
//
//	F = -(d s(y)/dt + a s(y)),   ds/dt = S y',   S = ds/dy constant
//
// after J. Baumgarte, Stabilization of constraints and integrals of motion in
// dynamical systems, Comput. Methods Appl. Mech. Eng. 1 (1972) 1-16.
//
// A start solves the algebraic equations by System.Initialise, as every other
// stepper does, and y' from M y' = f with the time derivatives of the
// algebraic and hidden equations, so that IDACalcIC isn't needed. The weights
// of the error norm are those of solvers.Tolerance, component by component,
// but IDA's norm is the root mean square over all unknowns, not the largest
// over groups: at equal tolerances it is the more lenient.
package sundials
