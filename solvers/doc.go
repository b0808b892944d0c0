// Package solvers integrates stiff differential-algebraic systems
// M y' = f(t, y), M constant and possibly singular (index 1), with located
// events. It knows matrices, time and blocks with ports, and nothing of
// electricity.
//
// # Problems
//
// A [Problem] is a struct of functions over one flat vector. A [Network] is
// many [Block] values with ports tied together at nodes, which is how large
// systems of similar parts are stated: each block knows its local unknowns
// only, and its part of the Jacobian is eliminated locally. Both become a
// [System], which is all a method sees.
//
// # Methods and steppers
//
// A [Method] is a value without state ([Rodas5P], [Rodas4P], [Trapezoidal]);
// NewStepper gives it a workspace. A [Stepper] takes one step at a time. The
// [Driver] adds roots: it ends steps where a function of the state crosses
// zero. [Integrate] is the loop around it for those who need no other.
//
// # Errors
//
// Libraries further up give names; errors here carry indices: [StepError],
// [SingularError], [InconsistentError], [ChatterError].
package solvers
