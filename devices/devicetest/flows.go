package devicetest

import (
	"math"
	"math/cmplx"
	"math/rand/v2"

	"islet/solvers/facet"
)

// checkFlows checks that the flow at each terminal is of the kind declared.
func checkFlows(t reporter, s *subject) {
	t.Helper()
	r := random()
	tied := make([]bool, len(s.d.Terminals))
	for _, tie := range s.d.Ties {
		tied[tie.A], tied[tie.B] = true, true
	}
	for k, term := range s.d.Terminals {
		if s.portMass[2*k] != 0 && term.Flow != facet.FlowHeld {
			t.Errorf("terminal %q: has a mass: want FlowHeld", term.Name)
		}
		switch term.Flow {
		case facet.FlowNone:
			if !tied[k] {
				s.checkNoFlow(t, k, r)
			}
		case facet.FlowState:
			s.checkStateFlow(t, k, r)
		case facet.FlowHeld:
			if s.portMass[2*k] == 0 {
				s.checkConductance(t, k, r)
			}
		case facet.FlowInjected:
			s.checkInjected(t, k, r)
		}
	}
	s.checkTies(t, r)
}

// flowAt evaluates the flow into terminal k; ok false at the domain's edge.
func (s *subject) flowAt(k int, time float64, v, x []float64) (complex128, bool) {
	f := floats(s.ports + s.own)
	err := s.eval(s.b, f, time, v, x)
	i := get(f[2*k:])
	return i, err == nil && !cmplx.IsNaN(i) && !cmplx.IsInf(i)
}

func (s *subject) checkNoFlow(t reporter, k int, r *rand.Rand) {
	t.Helper()
	for range points {
		time, v, x, ok := s.point(t, s.b, r)
		if !ok {
			return
		}
		if i, _ := s.flowAt(k, time, v, x); i != 0 {
			t.Errorf("terminal %q: FlowNone and no tie, but flow %v", s.d.Terminals[k].Name, i)
			return
		}
	}
}

// checkStateFlow checks that the flow is a linear map with constant
// coefficients of the unknowns that have mass: it superposes, whatever time,
// voltages and algebraic unknowns are.
func (s *subject) checkStateFlow(t reporter, k int, r *rand.Rand) {
	t.Helper()
	const alpha, beta = 0.7, -0.4
	nonzero := false
	for range points {
		t1, v1, x1, ok1 := s.point(t, s.b, r)
		t2, v2, x2, ok2 := s.point(t, s.b, r)
		t3, v3, x3, ok3 := s.point(t, s.b, r)
		if !ok1 || !ok2 || !ok3 {
			return
		}
		for l, m := range s.mass {
			if m > 0 {
				x3[l] = alpha*x1[l] + beta*x2[l]
			}
		}
		i1, ok1 := s.flowAt(k, t1, v1, x1)
		i2, ok2 := s.flowAt(k, t2, v2, x2)
		i3, ok3 := s.flowAt(k, t3, v3, x3)
		if !ok1 || !ok2 || !ok3 {
			continue
		}
		nonzero = nonzero || i1 != 0
		want := alpha*i1 + beta*i2
		if cmplx.Abs(i3-want) > 1e-10*(cmplx.Abs(i1)+cmplx.Abs(i2)+cmplx.Abs(i3)) {
			t.Errorf("terminal %q: FlowState, but the flow is no constant linear function of own unknowns with mass (superposition gives %v, want %v)",
				s.d.Terminals[k].Name, i3, want)
			return
		}
	}
	if !nonzero {
		t.Errorf("terminal %q: FlowState, but the flow is always 0: want FlowNone", s.d.Terminals[k].Name)
	}
}

// checkConductance checks that the flow depends on the terminal's own voltage,
// once the algebraic unknowns follow it, by a regular 2 x 2 block.
func (s *subject) checkConductance(t reporter, k int, r *rand.Rand) {
	t.Helper()
	n := s.ports + s.own
	algebraic := s.unknowns(false)
	m := len(algebraic)
	for range points {
		time, v, x, ok := s.point(t, s.b, r)
		if !ok {
			return
		}
		if s.solve(s.b, time, v, x, algebraic) != nil {
			continue
		}
		jac, err := s.jacobian(s.b, time, v, x)
		if err != nil || !finite(jac) {
			continue
		}
		// The Schur complement of the algebraic rows.
		var block [2][2]float64
		for j := range 2 {
			a, rhs := floats(m*m), floats(m)
			for p, row := range algebraic {
				var scale float64
				for q, col := range algebraic {
					a[p*m+q] = jac[(s.ports+row)*n+s.ports+col] * s.bases[s.ports+col]
					scale = max(scale, math.Abs(a[p*m+q]))
				}
				if scale == 0 {
					continue
				}
				for q := range algebraic {
					a[p*m+q] /= scale
				}
				rhs[p] = -jac[(s.ports+row)*n+2*k+j] / scale
			}
			eliminate(a, rhs)
			for i := range 2 {
				block[i][j] = jac[(2*k+i)*n+2*k+j]
				for q, col := range algebraic {
					block[i][j] += jac[(2*k+i)*n+s.ports+col] * s.bases[s.ports+col] * rhs[q]
				}
			}
		}
		size := max(math.Abs(block[0][0]), math.Abs(block[0][1]), math.Abs(block[1][0]), math.Abs(block[1][1]))
		det := block[0][0]*block[1][1] - block[0][1]*block[1][0]
		if math.Abs(det) > 1e-8*size*size {
			return // regular at one state is regular at almost all
		}
	}
	t.Errorf("terminal %q: FlowHeld, but it has no mass and its voltage doesn't determine its flow", s.d.Terminals[k].Name)
}

func (s *subject) checkInjected(t reporter, k int, r *rand.Rand) {
	t.Helper()
	nonzero := false
	for range points {
		time, v, x, ok := s.point(t, s.b, r)
		if !ok {
			return
		}
		i, ok := s.flowAt(k, time, v, x)
		if !ok {
			continue
		}
		nonzero = nonzero || i != 0
		_, other, _, ok := s.point(t, s.b, r)
		if !ok {
			return
		}
		if j, ok := s.flowAt(k, time, other, x); ok && cmplx.Abs(i-j) > 1e-10*cmplx.Abs(i) {
			t.Errorf("terminal %q: FlowInjected, but the flow changes with the voltages from %v to %v", s.d.Terminals[k].Name, i, j)
			return
		}
	}
	if !nonzero {
		t.Errorf("terminal %q: FlowInjected, but the flow is always 0: want FlowNone", s.d.Terminals[k].Name)
	}
}

// checkTies checks that terminals of kind FlowNone carry nothing when all ties
// are at their voltage ratios, and carry something when one isn't.
func (s *subject) checkTies(t reporter, r *rand.Rand) {
	t.Helper()
	if len(s.d.Ties) == 0 {
		return
	}
	time, v, x, ok := s.point(t, s.b, r)
	if !ok {
		return
	}
	scale, err := s.rowScales(s.b, time, v, x)
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	// Each tie sets the voltage of the end that no tie before it has set.
	set := make([]bool, len(s.d.Terminals))
	for _, tie := range s.d.Ties {
		a, b := tie.A, tie.B
		switch {
		case set[a] && set[b]:
			if cmplx.Abs(get(v[2*a:])-tie.Ratio*get(v[2*b:])) > 1e-9*cmplx.Abs(get(v[2*a:])) {
				t.Errorf("ties: the ratios around the loop closed by terminals %q and %q don't multiply to 1",
					s.d.Terminals[a].Name, s.d.Terminals[b].Name)
				return
			}
		case set[a]:
			put(v[2*b:], get(v[2*a:])/tie.Ratio)
		default:
			put(v[2*a:], tie.Ratio*get(v[2*b:]))
		}
		set[a], set[b] = true, true
	}
	for k, term := range s.d.Terminals {
		if !set[k] || term.Flow != facet.FlowNone {
			continue
		}
		if i, _ := s.flowAt(k, time, v, x); !(cmplx.Abs(i) <= 1e-10*(scale[2*k]+scale[2*k+1])) {
			t.Errorf("terminal %q: flow %v with all ties at their ratios: want 0", term.Name, i)
		}
	}
	for _, tie := range s.d.Ties {
		off := append(floats(0), v...)
		put(off[2*tie.A:], 1.1*get(v[2*tie.A:]))
		i, _ := s.flowAt(tie.A, time, v, x)
		j, _ := s.flowAt(tie.A, time, off, x)
		if cmplx.Abs(i-j) == 0 {
			t.Errorf("tie of terminals %q and %q carries no current when off its ratio", s.d.Terminals[tie.A].Name, s.d.Terminals[tie.B].Name)
		}
	}
}
