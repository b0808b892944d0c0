package engine

import (
	"errors"
	"fmt"

	"islet/solvers"
)

// RunError tells, with names, where a run or an initialisation failed.
type RunError struct {
	Time float64 // s
	Step float64 // s, 0 if no step was under way
	At   string  // `device "x", state i_f.q`, `bus "b", v.d`, or ""
	Err  error   // the solver's error
}

func (e *RunError) Error() string {
	s := fmt.Sprintf("engine: t = %.9g s", e.Time)
	if e.Step != 0 {
		s += fmt.Sprintf(", h = %.3g s", e.Step)
	}
	if e.At != "" {
		s += ": " + e.At
	}
	return s + ": " + e.Err.Error()
}

func (e *RunError) Unwrap() error { return e.Err }

// unknownName names unknown i of the whole system.
func (m *Simulation) unknownName(i int) string {
	if i < 0 || i >= m.net.Dim() {
		return ""
	}
	for _, d := range m.sys.devices {
		if i >= d.lo && i < d.lo+d.own {
			return fmt.Sprintf("device %q, state %s", d.name, d.desc.Unknowns[i-d.lo].Name)
		}
	}
	c := i - m.net.NodeUnknown(0)
	return fmt.Sprintf("bus %q, v.%c", m.sys.buses[c/2].name, "dq"[c%2])
}

// named turns indices of a solver's error into names.
func (m *Simulation) named(err error) error {
	e := &RunError{Time: m.t, Err: err}
	var step *solvers.StepError
	var inc *solvers.InconsistentError
	var sing *solvers.SingularError
	var blk *solvers.BlockError
	index := -1
	switch {
	case errors.As(err, &step):
		e.Time, e.Step, index = step.Time, step.Step, step.Index
	case errors.As(err, &inc):
		e.Time, index = inc.Time, inc.Index
	}
	if index < 0 && errors.As(err, &sing) {
		index = sing.Column
	}
	e.At = m.unknownName(index)
	if e.At == "" && errors.As(err, &blk) {
		for _, d := range m.sys.devices {
			if d.block == blk.Block {
				e.At = fmt.Sprintf("device %q", d.name)
			}
		}
	}
	return e
}
