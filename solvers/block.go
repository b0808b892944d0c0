package solvers

import "errors"

// ErrReject is returned (alone or wrapped) by a right-hand side that can't be
// evaluated at the given point, because an argument left the domain of a
// function or would overflow. The integrator then shortens the step and tries
// again; any other error ends the run.
var ErrReject = errors.New("solvers: evaluation outside the domain")

// Block is a part of a [Network]: local equations with ports. With v the
// values at its ports (one entry a port component) and x its own unknowns,
//
//	M x' = rate(t, v, x)                        own equations
//	(sum of port masses) v' = -sum of flow(t, v, x)   at every node component
//
// M is diagonal and constant; a zero entry makes the equation algebraic. A
// flow is positive into the block. A block keeps no state besides x: what it
// remembers (setpoints, a switch's position) is changed only between steps.
type Block interface {
	// Dims returns the number of port components and of own unknowns. Both
	// stay the same for the life of the block.
	Dims() (ports, own int)

	// Mass writes the mass the block adds at each port component into port
	// (len ports) and the diagonal of M into own (len own).
	Mass(port, own []float64)

	// Eval writes the flows into the block into flow (len ports) and the
	// right-hand sides of the own equations into rate (len own). The
	// destinations never alias the arguments. An error that wraps ErrReject
	// makes the integrator shorten the step.
	Eval(flow, rate []float64, t float64, v, x []float64) error
}

// Entry is the position of a matrix entry.
type Entry struct{ Row, Col int }

// Differentiable is the optional facet of a [Block] with an exact Jacobian. A
// block without it is differenced, alone and with its local unknowns only.
type Differentiable interface {
	// Pattern lists the entries of the local Jacobian that can be nonzero.
	// Rows are [flow | rate], columns [v | x], both counted from 0, ports
	// first. It may change when the block is switched, never between.
	Pattern() []Entry

	// Jacobian writes d(flow, rate)/d(v, x) into jac, row-major with
	// n = ports+own rows and columns. It writes every entry of Pattern, zeros
	// included; all other entries hold zero already and stay untouched.
	Jacobian(jac []float64, t float64, v, x []float64)
}

// JacobianFiller is the optional facet of a [Differentiable] block that saves
// work when it may write zeros outside its pattern.
type JacobianFiller interface {
	// FillJacobian is Jacobian, but may also write zeros to entries outside
	// Pattern, which hold zero already.
	FillJacobian(jac []float64, t float64, v, x []float64)
}

// TimeDependent is the optional facet of a [Block] that knows its explicit
// dependence on time. A block without it is differenced in t once a step.
type TimeDependent interface {
	// TimeDerivative adds the partial derivatives of flow and rate with
	// respect to t to flow and rate and returns true, or returns false and
	// writes nothing if the block doesn't depend on t explicitly at present.
	TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool
}
