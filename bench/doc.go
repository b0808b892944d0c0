// Package bench measures the engine, alone and against a general-purpose
// integrator on the same equations.
//
// Speed and allocations of the engine, without anything to install:
//
//	go test ./bench -run - -bench . -count 10
//
// The comparison with SUNDIALS IDA and KLU (see package sundials for what it
// needs), which prints steps, work, time and error of each at several
// tolerances, all in one run and in turn:
//
//	go test -tags sundials ./bench -run Compare -v -args -full -csv FILE
//
// Without -full, a short form fit for a test of every change runs.
//
// An error is the largest difference over the recorded signals from a run at
// a tolerance of 1e-10, relative to each signal's range. A time is the median
// of repetitions, methods in turn, of the run alone (no operating point, one
// signal recorded, no energy ledger).
package bench
