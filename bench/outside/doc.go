// Package outside holds the checks of the whole stack (devices, network,
// operating point, events, traces) against values that come from elsewhere:
// published figures, textbook closed forms, and numbers computed independently
// of this project from published models. It has tests only; the larger tables
// are in testdata/ at the top of the repository, each with its source.
//
//	go test -v ./bench/outside
//
// prints with each check how many outside values it has compared and the
// largest deviation found, in units of what was allowed.
//
// Two uses of the engine in these checks may surprise. A system whose nominal
// frequency is a microhertz is a direct-current network for any length of time
// looked at here, so that step responses of textbooks are met by the same
// devices; and a grid of 50 Hz or 1 kHz started from rest in such a system,
// its frame held, shows alternating quantities to the integrator as they are,
// so that a fixed-step method's own errors can be measured.
package outside
