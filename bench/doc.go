// Package bench measures the engine, alone and against a general-purpose
// integrator on the same equations.
//
// Speed and allocations of the engine, without anything to install:
//
//	go test ./bench -run - -bench . -count 10
//
// The comparison with SUNDIALS IDA and KLU, built with optimisation from
// Debian's source package, at equal error and from 10 to 10,000 inverters, with
// the time of Debian's own build, the trapezoidal rule at 20 us, a user's own
// devices, costs by size, raw data and plots:
//
//	bench/scale.sh DIR [SIZES]
//
// The errors and work of each at the same tolerances, on smaller networks too
// (see package sundials for what it needs):
//
//	go test -tags sundials ./bench -run Compare -v -args -full -csv FILE
//
// Without -full, short forms fit for a test of every change run.
//
// An error is the largest difference over the recorded signals from a run at
// a tolerance of 1e-10, relative to each signal's range. A time is the median
// of repetitions, methods in turn, of the run alone (no operating point, one
// signal recorded, no energy ledger).
package bench
