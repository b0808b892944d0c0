package devices

import (
	"encoding"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"

	"islet/solvers"
	"islet/solvers/facet"
)

// ZeroMass returns the block with the mass of the own unknowns in the given groups
// of dynamics ([facet.Unknown]) set to zero: their equations hold as algebraic
// ones, which is their quasi-steady state by the full equations. It is the second
// road to a level of detail, for devices that have no closed form of it and for
// tests of those that do:
//
//	ZeroMass(inverter, inverter.DroppedDynamics(devices.PrimaryOnly)...)
//
// The unknowns, equations, channels and setpoints are the block's own; both share
// its setpoints, switch and frame. The flow at a terminal that was a state
// ([facet.FlowState]) and isn't any more becomes [facet.FlowHeld] where the
// terminal's voltage determines it, else [facet.FlowInjected]: where the admittance
// that is left stays below 0.3 per unit of the block's own bases of voltage and
// current, the voltage that it could fix is one no equipment survives.
//
// The result has all facets of the block but [facet.Accountable], since the energy
// of the unknowns without mass is no longer a state's, [facet.Detailed] and
// [facet.Sized].
//
// The block must be [facet.Described]. The error names groups that none of its
// unknowns belongs to.
func ZeroMass(block solvers.Block, groups ...string) (solvers.Block, error) {
	described, ok := block.(facet.Described)
	if !ok {
		return nil, errors.New("devices: zero mass: the block doesn't describe its unknowns")
	}
	d := described.Describe()
	in, err := dynamicsMask(d.Unknowns, groups)
	if err != nil {
		return nil, fmt.Errorf("devices: zero mass: %w", err)
	}
	m := &massless{block: block, described: described, dropped: in}
	m.flows = m.correctFlows(d)
	m.framed, _ = block.(facet.Framed)
	m.measurer, _ = block.(facet.Measurer)
	m.adjustable, _ = block.(facet.Adjustable)
	m.stepped, _ = block.(facet.Stepped)
	m.starter, _ = block.(facet.Starter)
	m.kinked, _ = block.(facet.Kinked)
	m.appender, _ = block.(encoding.BinaryAppender)
	m.unmarshaler, _ = block.(encoding.BinaryUnmarshaler)
	return withFacets(m), nil
}

// dynamicsMask tells for each unknown whether it belongs to one of the groups.
func dynamicsMask(unknowns []facet.Unknown, groups []string) ([]bool, error) {
	in := make([]bool, len(unknowns))
	found := map[string]bool{}
	var known []string
	for k, u := range unknowns {
		if in[k] = slices.Contains(groups, u.Dynamics); in[k] {
			found[u.Dynamics] = true
		}
		if !slices.Contains(known, u.Dynamics) {
			known = append(known, u.Dynamics)
		}
	}
	var errs []error
	for _, g := range groups {
		if !found[g] {
			errs = append(errs, fmt.Errorf("no unknown has the dynamics %q: want some of %q", g, known))
		}
	}
	return in, errors.Join(errs...)
}

// massless is a block some of whose unknowns have lost their mass. Facets whose
// absence a caller can't tell from an empty one are its own; withFacets adds the
// others.
type massless struct {
	block     solvers.Block
	described facet.Described
	dropped   []bool       // of each own unknown
	flows     []facet.Flow // of each terminal

	framed      facet.Framed
	measurer    facet.Measurer
	adjustable  facet.Adjustable
	stepped     facet.Stepped
	starter     facet.Starter
	kinked      facet.Kinked
	appender    encoding.BinaryAppender
	unmarshaler encoding.BinaryUnmarshaler
}

func (m *massless) Dims() (ports, own int) { return m.block.Dims() }

func (m *massless) Mass(port, own []float64) {
	m.block.Mass(port, own)
	for k, drop := range m.dropped {
		if drop {
			own[k] = 0
		}
	}
}

func (m *massless) Eval(flow, rate []float64, t float64, v, x []float64) error {
	return m.block.Eval(flow, rate, t, v, x)
}

// Describe is the block's description with the kinds of flow corrected.
func (m *massless) Describe() facet.Description {
	d := m.described.Describe()
	d.Terminals = slices.Clone(d.Terminals)
	for k := range d.Terminals {
		if d.Terminals[k].Flow == facet.FlowState {
			d.Terminals[k].Flow = m.flows[k]
		}
	}
	return d
}

func (m *massless) SetFrame(speed float64) {
	if m.framed != nil {
		m.framed.SetFrame(speed)
	}
}

func (m *massless) Channels() []facet.Channel {
	if m.measurer == nil {
		return nil
	}
	return m.measurer.Channels()
}

func (m *massless) Measure(dst []float64, t float64, v, x []float64) {
	if m.measurer != nil {
		m.measurer.Measure(dst, t, v, x)
	}
}

func (m *massless) Setpoints(t float64) []facet.Setpoint {
	if m.adjustable == nil {
		return nil
	}
	return m.adjustable.Setpoints(t)
}

func (m *massless) Set(name string, t, value, ramp float64) error {
	if m.adjustable == nil {
		return fmt.Errorf("devices: %s has no setpoints: %q", m.described.Describe().Kind, name)
	}
	return m.adjustable.Set(name, t, value, ramp)
}

func (m *massless) ApplyJumps(x []float64) {
	if m.stepped != nil {
		m.stepped.ApplyJumps(x)
	}
}

func (m *massless) Guess(x []float64, t float64, v []float64) {
	if m.starter != nil {
		m.starter.Guess(x, t, v)
	}
}

func (m *massless) Kinks() []string {
	if m.kinked == nil {
		return nil
	}
	return m.kinked.Kinks()
}

func (m *massless) EvalKinks(dst []float64, t float64, v, x []float64) {
	if m.kinked != nil {
		m.kinked.EvalKinks(dst, t, v, x)
	}
}

func (m *massless) AppendBinary(b []byte) ([]byte, error) {
	if m.appender == nil {
		return b, nil
	}
	return m.appender.AppendBinary(b)
}

func (m *massless) UnmarshalBinary(data []byte) error {
	switch {
	case m.unmarshaler != nil:
		return m.unmarshaler.UnmarshalBinary(data)
	case len(data) > 0:
		return fmt.Errorf("devices: %s: snapshot of %d bytes: want none", m.described.Describe().Kind, len(data))
	}
	return nil
}

// leastAdmittance, per unit of a block's own bases, tells a voltage that is held
// from one that isn't (arbitrary: above an inverter's filter capacitor, below any
// coupling).
const leastAdmittance = 0.3

// correctFlows returns the kinds of the terminals' flows.
func (m *massless) correctFlows(d facet.Description) []facet.Flow {
	ports, own := m.block.Dims()
	n := ports + own
	flows := make([]facet.Flow, len(d.Terminals))
	var (
		volts, amperes = unitBase(d.Unknowns, "V"), unitBase(d.Unknowns, "A")
		v, x           = make([]float64, ports), make([]float64, own)
		rnd            = scatter(3)
		port, mass     = make([]float64, ports), make([]float64, own)
		algebraic      []int
	)
	m.Mass(port, mass)
	for k, a := range mass {
		if a == 0 {
			algebraic = append(algebraic, ports+k)
		}
	}
	for k := range flows {
		flows[k] = d.Terminals[k].Flow
	}
	for range patternPoints {
		for k := range v {
			v[k] = orDefault(volts, 1) * rnd.next()
		}
		for k := range x {
			x[k] = d.Unknowns[k].Base * rnd.next()
		}
		jac, err := localJacobian(m.block, d, 0, v, x)
		if err != nil {
			continue
		}
		a := mat.NewDense(n, n, jac)
		for k := range flows {
			rows := []int{2 * k, 2*k + 1}
			if d.Terminals[k].Flow != facet.FlowState {
				continue
			}
			if !m.dependsOnDropped(a, rows, ports) || flows[k] == facet.FlowHeld {
				continue
			}
			flows[k] = facet.FlowInjected
			y, err := eliminated(a, rows, rows, algebraic)
			if err != nil {
				continue
			}
			// The least singular value of the 2 x 2 admittance.
			det := math.Abs(y.At(0, 0)*y.At(1, 1) - y.At(0, 1)*y.At(1, 0))
			size := mat.Norm(y, 2)
			least := leastAdmittance * amperes / volts
			if volts == 0 || amperes == 0 {
				least = 1e-8 * size // no bases to go by: any that isn't round-off
			}
			if size > 0 && det/size > least {
				flows[k] = facet.FlowHeld
			}
		}
	}
	return flows
}

// dependsOnDropped tells whether the rows hold unknowns that have lost their mass.
func (m *massless) dependsOnDropped(a *mat.Dense, rows []int, ports int) bool {
	for _, r := range rows {
		for k, drop := range m.dropped {
			if drop && a.At(r, ports+k) != 0 {
				return true
			}
		}
	}
	return false
}

// unitBase returns the base of the first unknown of the given unit, 0 if there is
// none.
func unitBase(unknowns []facet.Unknown, unit string) float64 {
	for _, u := range unknowns {
		if u.Unit == unit {
			return u.Base
		}
	}
	return 0
}

// localJacobian returns d[flow | rate]/d[v | x], row-major, from the block itself
// or by central differences with steps of 1e-6 of the unknown's base (near the
// cube root of the round-off).
func localJacobian(b solvers.Block, d facet.Description, t float64, v, x []float64) ([]float64, error) {
	ports, own := len(v), len(x)
	n := ports + own
	jac := make([]float64, n*n)
	if diff, ok := b.(solvers.Differentiable); ok {
		diff.Jacobian(jac, t, v, x)
		return jac, nil
	}
	volts := orDefault(unitBase(d.Unknowns, "V"), 1)
	at := append(slices.Clone(v), x...)
	up, down := make([]float64, n), make([]float64, n)
	for c := range n {
		h := 1e-6 * volts
		if c >= ports {
			h = 1e-6 * d.Unknowns[c-ports].Base
		}
		center := at[c]
		at[c] = center + h
		err := b.Eval(up[:ports], up[ports:], t, at[:ports], at[ports:])
		at[c] = center - h
		err = errors.Join(err, b.Eval(down[:ports], down[ports:], t, at[:ports], at[ports:]))
		at[c] = center
		if err != nil {
			return nil, err
		}
		for r := range n {
			jac[r*n+c] = (up[r] - down[r]) / (2 * h)
		}
	}
	return jac, nil
}

// part returns the rows and columns of a.
func part(a *mat.Dense, rows, cols []int) *mat.Dense {
	p := mat.NewDense(len(rows), len(cols), nil)
	for i, r := range rows {
		for k, c := range cols {
			p.Set(i, k, a.At(r, c))
		}
	}
	return p
}

// eliminated returns the rows and columns of a with the equations and unknowns of
// gone solved for: a_rc - a_rg a_gg^-1 a_gc. The error tells that these don't
// determine the unknowns.
func eliminated(a *mat.Dense, rows, cols, gone []int) (*mat.Dense, error) {
	out := part(a, rows, cols)
	if len(gone) == 0 {
		return out, nil
	}
	var sol, change mat.Dense
	if err := sol.Solve(part(a, gone, gone), part(a, gone, cols)); err != nil {
		// A bad condition is what unscaled units give; only singular is an error.
		if c, ok := err.(mat.Condition); !ok || math.IsInf(float64(c), 1) {
			return nil, err
		}
	}
	change.Mul(part(a, rows, gone), &sol)
	out.Sub(out, &change)
	return out, nil
}

// eigenvaluesOf returns the eigenvalues of a, slowest (least magnitude) first.
func eigenvaluesOf(a *mat.Dense) ([]complex128, error) {
	if a.IsEmpty() {
		return nil, nil
	}
	var e mat.Eigen
	if !e.Factorize(a, mat.EigenNone) {
		return nil, errors.New("the eigenvalues don't converge")
	}
	list := e.Values(nil)
	slices.SortStableFunc(list, func(a, b complex128) int {
		switch d := cmplx.Abs(a) - cmplx.Abs(b); {
		case d < 0:
			return -1
		case d > 0:
			return 1
		}
		return 0
	})
	return list, nil
}

// withFacets returns m with those facets of its block that can't be empty.
func withFacets(m *massless) solvers.Block {
	diff, _ := m.block.(solvers.Differentiable)
	timed, _ := m.block.(solvers.TimeDependent)
	former, _ := m.block.(facet.Former)
	ratioed, _ := m.block.(facet.Ratioed)
	switchable, _ := m.block.(facet.Switchable)
	return combine(m, diff, timed, former, ratioed, switchable)
}

// combine returns m with the facets that are not nil, and no others: a type for
// each combination, since facets are found by type assertions.
func combine(m *massless, diff solvers.Differentiable, timed solvers.TimeDependent,
	former facet.Former, ratioed facet.Ratioed, switchable facet.Switchable) solvers.Block {
	which := 0
	for k, is := range []bool{diff != nil, timed != nil, former != nil, ratioed != nil, switchable != nil} {
		if is {
			which |= 1 << k
		}
	}
	switch which {
	case 0:
		return m
	case 1:
		return struct {
			*massless
			solvers.Differentiable
		}{m, diff}
	case 2:
		return struct {
			*massless
			solvers.TimeDependent
		}{m, timed}
	case 3:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
		}{m, diff, timed}
	case 4:
		return struct {
			*massless
			facet.Former
		}{m, former}
	case 5:
		return struct {
			*massless
			solvers.Differentiable
			facet.Former
		}{m, diff, former}
	case 6:
		return struct {
			*massless
			solvers.TimeDependent
			facet.Former
		}{m, timed, former}
	case 7:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
			facet.Former
		}{m, diff, timed, former}
	case 8:
		return struct {
			*massless
			facet.Ratioed
		}{m, ratioed}
	case 9:
		return struct {
			*massless
			solvers.Differentiable
			facet.Ratioed
		}{m, diff, ratioed}
	case 10:
		return struct {
			*massless
			solvers.TimeDependent
			facet.Ratioed
		}{m, timed, ratioed}
	case 11:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
			facet.Ratioed
		}{m, diff, timed, ratioed}
	case 12:
		return struct {
			*massless
			facet.Former
			facet.Ratioed
		}{m, former, ratioed}
	case 13:
		return struct {
			*massless
			solvers.Differentiable
			facet.Former
			facet.Ratioed
		}{m, diff, former, ratioed}
	case 14:
		return struct {
			*massless
			solvers.TimeDependent
			facet.Former
			facet.Ratioed
		}{m, timed, former, ratioed}
	case 15:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
			facet.Former
			facet.Ratioed
		}{m, diff, timed, former, ratioed}
	case 16:
		return struct {
			*massless
			facet.Switchable
		}{m, switchable}
	case 17:
		return struct {
			*massless
			solvers.Differentiable
			facet.Switchable
		}{m, diff, switchable}
	case 18:
		return struct {
			*massless
			solvers.TimeDependent
			facet.Switchable
		}{m, timed, switchable}
	case 19:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
			facet.Switchable
		}{m, diff, timed, switchable}
	case 20:
		return struct {
			*massless
			facet.Former
			facet.Switchable
		}{m, former, switchable}
	case 21:
		return struct {
			*massless
			solvers.Differentiable
			facet.Former
			facet.Switchable
		}{m, diff, former, switchable}
	case 22:
		return struct {
			*massless
			solvers.TimeDependent
			facet.Former
			facet.Switchable
		}{m, timed, former, switchable}
	case 23:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
			facet.Former
			facet.Switchable
		}{m, diff, timed, former, switchable}
	case 24:
		return struct {
			*massless
			facet.Ratioed
			facet.Switchable
		}{m, ratioed, switchable}
	case 25:
		return struct {
			*massless
			solvers.Differentiable
			facet.Ratioed
			facet.Switchable
		}{m, diff, ratioed, switchable}
	case 26:
		return struct {
			*massless
			solvers.TimeDependent
			facet.Ratioed
			facet.Switchable
		}{m, timed, ratioed, switchable}
	case 27:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
			facet.Ratioed
			facet.Switchable
		}{m, diff, timed, ratioed, switchable}
	case 28:
		return struct {
			*massless
			facet.Former
			facet.Ratioed
			facet.Switchable
		}{m, former, ratioed, switchable}
	case 29:
		return struct {
			*massless
			solvers.Differentiable
			facet.Former
			facet.Ratioed
			facet.Switchable
		}{m, diff, former, ratioed, switchable}
	case 30:
		return struct {
			*massless
			solvers.TimeDependent
			facet.Former
			facet.Ratioed
			facet.Switchable
		}{m, timed, former, ratioed, switchable}
	case 31:
		return struct {
			*massless
			solvers.Differentiable
			solvers.TimeDependent
			facet.Former
			facet.Ratioed
			facet.Switchable
		}{m, diff, timed, former, ratioed, switchable}
	}
	panic("devices: more facets than combinations")
}
