// Package facet holds the vocabulary in which a block tells about itself:
// names, units and bases of its unknowns, how its terminals connect, and the
// optional abilities (channels, setpoints, switching, energy, detail levels)
// that whoever assembles a model finds by a type assertion.
//
// It stands below both the equipment and the engine so that neither needs to
// import the other. It holds types only.
package facet

import "islet/solvers"

// Frame tells how an unknown behaves when the rotating network frame is
// turned by an angle.
type Frame uint8

const (
	// Invariant unknowns don't change (own-frame currents, filters, ...).
	Invariant Frame = iota
	// PairD is the d part of a network-frame pair; the next unknown must be
	// its PairQ.
	PairD
	// PairQ is the q part of a network-frame pair.
	PairQ
	// Angle is an angle relative to the network frame, rad.
	Angle
)

// Flow tells how the flow at a terminal depends on the unknowns. The engine
// needs it to find current laws that hold only differential unknowns (index
// 2), and to refuse what has no solution.
type Flow uint8

const (
	// FlowUndeclared is the zero value, and an error.
	FlowUndeclared Flow = iota
	// FlowNone: no flow, or only the flow of the ties of the description.
	FlowNone
	// FlowState: the flow is a linear function, with constant coefficients,
	// of own differential unknowns alone (an inductor's current).
	FlowState
	// FlowHeld: the block has a mass (capacitor) or a conductive path to
	// ground at the terminal, so that its current law fixes the voltage.
	FlowHeld
	// FlowInjected: the flow is a given function of own unknowns and time
	// that doesn't fix the voltage and is no constant linear function of
	// differential unknowns (a controlled current source).
	FlowInjected
)

// Terminal describes one two-axis terminal. Terminal k of a block has the
// port components 2k (d) and 2k+1 (q), network frame.
type Terminal struct {
	Name string
	Flow Flow
}

// Tie is a conductive path between two terminals of a block without a path to
// ground: with no flow through it, v_A = Ratio v_B.
type Tie struct {
	A, B  int
	Ratio complex128
}

// Unknown describes one own unknown.
type Unknown struct {
	// Name is unique within the block: "delta", "i_f.d", "i_f.q".
	Name string
	// Unit is the SI unit: "A", "V", "rad", "W", "var", "V s".
	Unit string
	// Base is the value that counts as 1 per unit in error norms, > 0.
	Base float64
	// Frame tells how the unknown turns with the network frame.
	Frame Frame
	// Dynamics names the group of dynamics the unknown belongs to
	// ("network", "filter", "current loop", "voltage loop", "power filter",
	// "primary control", "PLL").
	Dynamics string
}

// Description is what a block tells about itself. It may change when the
// block is switched, except for the unknowns and the number of terminals.
type Description struct {
	// Kind is what the block is, in the trade's words: "RL line".
	Kind      string
	Terminals []Terminal
	Ties      []Tie
	Unknowns  []Unknown
}

// Described is the required part beside [solvers.Block].
type Described interface {
	Describe() Description
}

// Framed is a block whose equations hold the speed of the network frame.
type Framed interface {
	// SetFrame sets the speed of the network frame, rad/s.
	SetFrame(speed float64)
}

// Channel describes one quantity a block can report.
type Channel struct {
	// Name is unique within the block, other than the names of unknowns.
	Name string
	// Unit carries the sign where there is one: "W generated", "A rms".
	Unit string
	// Doc is a line for people.
	Doc string
}

// Measurer reports derived quantities.
type Measurer interface {
	// Channels lists the quantities in the order Measure writes them. It
	// never changes.
	Channels() []Channel
	// Measure writes them into dst (len(Channels())).
	Measure(dst []float64, t float64, v, x []float64)
}

// Energy is a block's part in the energy ledger, three-phase totals.
type Energy struct {
	// Stored energy, J.
	Stored float64
	// Supplied is the power that enters the model in the block (a source's
	// inner voltage times its current, an inverter bridge's power), W.
	Supplied float64
	// Dissipated is the power turned into heat or consumed, W.
	Dissipated float64
}

// Accountable is a block that takes part in the energy ledger. Over every
// smooth stretch, d Stored/dt = Supplied - Dissipated + power flowing in at
// the terminals, (3/2) sum Re(v i*).
type Accountable interface {
	Energy(t float64, v, x []float64) Energy
}

// Setpoint describes a quantity that events may change.
type Setpoint struct {
	Name, Unit, Doc string
	// Min and Max bound the accepted values, inclusive; use ±Inf for none.
	Min, Max float64
	// Value is the present value.
	Value float64
}

// Adjustable is a block with setpoints.
type Adjustable interface {
	// Setpoints lists the setpoints with their present values at time t.
	Setpoints(t float64) []Setpoint
	// Set moves a setpoint to value: at once if ramp is 0, else linearly
	// over ramp seconds from t on. The error names what is wrong (unknown
	// name, value out of range, negative ramp) and changes nothing.
	Set(name string, t, value, ramp float64) error
}

// Stepped is an [Adjustable] some of whose setpoints act by a jump of an
// unknown (the angle of a source). The engine calls ApplyJumps once after Set and, on a [Switchable], after SetClosed.
type Stepped interface {
	// ApplyJumps adds pending jumps to the own unknowns x.
	ApplyJumps(x []float64)
}

// Switchable is a block that opens and closes: a breaker, a switched fault.
type Switchable interface {
	Closed() bool
	SetClosed(closed bool)
}

// Former is a block that can hold voltage and frequency of an island.
type Former interface {
	// AngleUnknown is the index of the own unknown (of frame kind Angle)
	// that places the source's voltage in the network frame.
	AngleUnknown() int
	// Speed is the frequency the source runs at, rad/s.
	Speed(t float64, v, x []float64) float64
	// Weight is a rating (VA) by which speeds of several sources are
	// averaged and reference sources chosen.
	Weight() float64
}

// Starter gives a starting point for the operating point.
type Starter interface {
	// Guess writes a guess of the own unknowns into x, given terminal
	// voltages v near the operating point.
	Guess(x []float64, t float64, v []float64)
}

// Ratioed is a block that relates the voltages of its terminals other than by
// rated voltage and zero angle (a transformer with a phase shift).
type Ratioed interface {
	// OpenRatio is v_to / v_from with no flow at to.
	OpenRatio(from, to int) complex128
}

// Detailed is a block offered at several levels of detail.
type Detailed interface {
	// Detail is the present level, and Details all, from full to coarsest.
	Detail() string
	Details() []string
	// WithDetail returns a block of the same parameters and setpoints at
	// another level; the receiver is unchanged.
	WithDetail(level string) (solvers.Block, error)
}

// Sized is a block whose rating bounds an operating quantity that a study
// reports against it.
type Sized interface {
	// CurrentLimit is the rated or limiting terminal current, A peak, and
	// the index of the channel (A rms) to compare with CurrentLimit/sqrt 2.
	CurrentLimit() (limit float64, channel int)
}

// Kinked is a block whose equations have kinks: places where they are
// continuous and their derivatives are not, such as the entry of a limiter.
// The engine ends a step there and tells of it.
type Kinked interface {
	// Kinks names what each function marks, "current limit". It never
	// changes.
	Kinks() []string
	// EvalKinks writes the functions into dst (len(Kinks())): positive where
	// the limit acts, negative where it doesn't.
	EvalKinks(dst []float64, t float64, v, x []float64)
}
