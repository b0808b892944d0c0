package solvers_test

import (
	"errors"
	"fmt"
	"math"
	"testing"

	"islet/solvers"
	tp "islet/solvers/testproblems"
)

// pump is a toy block: two own unknowns that swing, driven in time, tied to a
// node by a conductance.
type pump struct{ w, damp, drive float64 }

func (p *pump) Dims() (int, int)         { return 1, 2 }
func (p *pump) Mass(port, own []float64) { port[0], own[0], own[1] = 0.1, 1, 2 }
func (p *pump) Eval(flow, rate []float64, t float64, v, x []float64) error {
	flow[0] = 0.5*v[0] - x[1]
	rate[0] = p.w*x[1] - p.damp*x[0] + p.drive*math.Sin(3*t)
	rate[1] = -p.w*x[0] - p.damp*x[1]*x[1]*x[1] + v[0]
	return nil
}

// exactPump knows its Jacobian and its dependence on time.
type exactPump struct{ pump }

func (p *exactPump) Pattern() []solvers.Entry {
	return []solvers.Entry{{Row: 0, Col: 0}, {Row: 0, Col: 2}, {Row: 1, Col: 1}, {Row: 1, Col: 2}, {Row: 2, Col: 0}, {Row: 2, Col: 1}, {Row: 2, Col: 2}}
}
func (p *exactPump) Jacobian(jac []float64, t float64, v, x []float64) {
	jac[0], jac[2] = 0.5, -1
	jac[4], jac[5] = -p.damp, p.w
	jac[6], jac[7], jac[8] = 1, -p.w, -3*p.damp*x[1]*x[1]
}
func (p *exactPump) TimeDerivative(flow, rate []float64, t float64, v, x []float64) bool {
	if p.drive == 0 {
		return false
	}
	rate[0] += 3 * p.drive * math.Cos(3*t)
	return true
}

// pumps is a network of n pumps at two nodes.
func pumps(t testing.TB, n int, exact bool, drive float64) *solvers.Network {
	t.Helper()
	net := solvers.NewNetwork(2, 1)
	for k := range n {
		p := pump{w: 5 + float64(k), damp: 0.3, drive: drive}
		var b solvers.Block = &p
		if exact {
			b = &exactPump{p}
		}
		if _, err := net.Add(b, []int{k % 2}, nil, nil); err != nil {
			t.Fatal(err)
		}
	}
	if err := net.Configure(solvers.Configuration{}); err != nil {
		t.Fatal(err)
	}
	return net
}

var methods = []struct {
	method solvers.Method
	o      solvers.Options
}{
	{solvers.Rodas5P, solvers.Options{RelTol: 1e-6}},
	{solvers.Rodas4P, solvers.Options{RelTol: 1e-6}},
	{solvers.Trapezoidal, solvers.Options{RelTol: 1e-6, MaxStep: 1e-3}},
}

func must(t testing.TB, err error) {
	t.Helper()
	if err != nil {
		t.Fatal(err)
	}
}

func TestCheckpointGoesOnWithTheSameBits(t *testing.T) {
	for _, m := range methods {
		make := func() solvers.Stepper {
			st, err := m.method.NewStepper(pumps(t, 6, true, 1), m.o)
			must(t, err)
			return st
		}
		a := make()
		must(t, a.Reset(0, []float64{1, 0, 0, 1, 1, 1, 0, 0, 0.5, 0, 0, 0.2, 0, 0}))
		for range 20 {
			must(t, a.Step(100))
		}
		saved, err := a.AppendBinary(nil)
		must(t, err)
		b := make()
		must(t, b.UnmarshalBinary(saved))
		if b.Time() != a.Time() || b.Stats() != a.Stats() {
			t.Errorf("%s: restored at %g with %+v, want %g and %+v", m.method.Name(), b.Time(), b.Stats(), a.Time(), a.Stats())
		}
		for range 30 {
			must(t, a.Step(100))
			must(t, b.Step(100))
		}
		for i, x := range a.State() {
			if math.Float64bits(x) != math.Float64bits(b.State()[i]) || a.Time() != b.Time() {
				t.Fatalf("%s: unknown %d is %.17g after the restored run, %.17g after the unbroken one", m.method.Name(), i, b.State()[i], x)
			}
		}
		for _, bad := range [][]byte{nil, saved[:len(saved)-1], append(append([]byte(nil), saved...), 0)} {
			if err := make().UnmarshalBinary(bad); err == nil {
				t.Errorf("%s: %d damaged bytes were taken", m.method.Name(), len(bad))
			}
		}
		other, err := m.method.NewStepper(pumps(t, 3, true, 1), m.o)
		must(t, err)
		if err := other.UnmarshalBinary(saved); err == nil {
			t.Errorf("%s: the state of another system was taken", m.method.Name())
		}
	}
}

func TestAcceptedStepsAllocateNothing(t *testing.T) {
	for _, m := range methods {
		for _, exact := range []bool{true, false} {
			st, err := m.method.NewStepper(pumps(t, 9, exact, 1), solvers.Options{RelTol: 1e-5, MaxStep: 2e-3})
			must(t, err)
			must(t, st.Reset(0, make([]float64, 20)))
			for range 20 {
				must(t, st.Step(1e9))
			}
			which, at := []int{0, 3}, make([]float64, 2)
			if n := testing.AllocsPerRun(100, func() {
				must(t, st.Step(1e9))
				st.Interpolate(at, which, st.Previous())
			}); n != 0 {
				t.Errorf("%s on a network, exact Jacobians %v: %g allocations a step", m.method.Name(), exact, n)
			}
		}
		c := tp.HIRES()
		sys, err := c.Problem.System()
		must(t, err)
		st, err := m.method.NewStepper(sys, solvers.Options{RelTol: 1e-4, MaxStep: 1e-3})
		must(t, err)
		must(t, st.Reset(0, c.Initial))
		for range 20 {
			must(t, st.Step(1e9))
		}
		if n := testing.AllocsPerRun(100, func() { must(t, st.Step(1e9)) }); n != 0 {
			t.Errorf("%s on a problem: %g allocations a step", m.method.Name(), n)
		}
	}
}

func TestExactStopsAndRedo(t *testing.T) {
	for _, m := range methods {
		st, err := m.method.NewStepper(pumps(t, 4, true, 1), m.o)
		must(t, err)
		y0 := []float64{1, 0, 0, 1, 1, 1, 0, 0, 0, 0}
		must(t, st.Reset(0, y0))
		for _, stop := range []float64{0.1, 0.1 + 1e-9, 0.3, 1.0 / 3} {
			for st.Time() < stop {
				must(t, st.Step(stop))
			}
			if st.Time() != stop {
				t.Errorf("%s: stopped at %.17g, want %.17g", m.method.Name(), st.Time(), stop)
			}
		}
		must(t, st.Step(10))
		p, end := st.Previous(), st.Time()
		before := append([]float64(nil), st.PreviousState()...)
		mid := 0.5 * (p + end)
		must(t, st.Redo(mid))
		if st.Time() != mid || st.Previous() != p {
			t.Errorf("%s: Redo ends at %g from %g, want %g from %g", m.method.Name(), st.Time(), st.Previous(), mid, p)
		}
		must(t, st.Redo(p))
		for i, x := range before {
			if st.State()[i] != x || st.Time() != p {
				t.Fatalf("%s: taking the step back leaves unknown %d at %g, want %g", m.method.Name(), i, st.State()[i], x)
			}
		}
		if err := st.Step(st.Time()); err == nil {
			t.Errorf("%s: a step to where it is gave no error", m.method.Name())
		}
	}
}

func TestFailuresAreTyped(t *testing.T) {
	var step *solvers.StepError
	// Too many steps.
	st, err := solvers.Rodas5P.NewStepper(pumps(t, 2, true, 1), solvers.Options{MaxSteps: 5})
	must(t, err)
	must(t, st.Reset(0, make([]float64, 6)))
	for range 5 {
		must(t, st.Step(1e3))
	}
	if err := st.Step(1e3); !errors.As(err, &step) || step.Reason != "too many steps" {
		t.Errorf("a sixth step gave %v", err)
	}
	// A domain that ends: y' = -1/(2y) reaches 0 at t = 1, where f refuses.
	p := &solvers.Problem{N: 1, Autonomous: true, F: func(dst []float64, t float64, y []float64) error {
		if y[0] <= 0 {
			return fmt.Errorf("square root: %w", solvers.ErrReject)
		}
		dst[0] = -0.5 / y[0]
		return nil
	}}
	sys, err := p.System()
	must(t, err)
	for _, m := range []solvers.Method{solvers.Rodas5P, solvers.Rodas4P} {
		st, err := m.NewStepper(sys, solvers.Options{RelTol: 1e-6})
		must(t, err)
		must(t, st.Reset(0, []float64{1}))
		for err == nil {
			err = st.Step(2)
		}
		if !errors.As(err, &step) || math.Abs(step.Time-1) > 1e-4 || st.Time() != step.Time {
			t.Errorf("%s: %v, want a StepError close to t = 1", m.Name(), err)
		}
		if st.Stats().Failed+st.Stats().Rejected == 0 {
			t.Errorf("%s: no step was shortened on the way", m.Name())
		}
	}
	// An error that isn't a rejection ends the run at once, and is wrapped.
	boom := errors.New("boom")
	sys, err = (&solvers.Problem{N: 1, Autonomous: true, F: func(dst []float64, t float64, y []float64) error {
		if y[0] > 1.1 {
			return boom
		}
		dst[0] = 1
		return nil
	}}).System()
	must(t, err)
	st, err = solvers.Rodas5P.NewStepper(sys, solvers.Options{})
	must(t, err)
	must(t, st.Reset(0, []float64{1}))
	for err == nil {
		err = st.Step(2)
	}
	if !errors.Is(err, boom) || !errors.As(err, &step) {
		t.Errorf("%v, want a StepError that wraps the cause", err)
	}
	// Wrong options, all named.
	_, err = solvers.Rodas5P.NewStepper(sys, solvers.Options{RelTol: -1, AbsTol: math.NaN(), MaxStep: -2, MaxSteps: -3})
	for _, want := range []string{"RelTol is -1", "AbsTol is NaN", "MaxStep is -2", "MaxSteps is -3"} {
		if err == nil || !contains(err.Error(), want) {
			t.Errorf("options: %v lacks %q", err, want)
		}
	}
	if _, err := solvers.Trapezoidal.NewStepper(sys, solvers.Options{}); err == nil {
		t.Error("a trapezoidal rule without a step was made")
	}
}

// Networks of differenced blocks and blocks with exact Jacobians, and the same
// equations as one flat problem, give one solution.
func TestNetworkEqualsFlatProblem(t *testing.T) {
	const n = 5
	f := func(dst []float64, t float64, y []float64) error {
		node := y[2*n:]
		out := dst[2*n:]
		clear(out)
		for k := range n {
			p := pump{w: 5 + float64(k), damp: 0.3, drive: 1}
			var flow [1]float64
			if err := p.Eval(flow[:], dst[2*k:2*k+2], t, node[k%2:k%2+1], y[2*k:2*k+2]); err != nil {
				return err
			}
			out[k%2] -= flow[0]
		}
		return nil
	}
	var mass []float64
	for range n {
		mass = append(mass, 1, 2)
	}
	mass = append(mass, 0.3, 0.2) // three and two port masses of 0.1
	flat := &solvers.Problem{N: 2*n + 2, Mass: solvers.Diagonal(mass...), F: f}
	sys, err := flat.System()
	must(t, err)
	y0 := make([]float64, 2*n+2)
	for i := range y0 {
		y0[i] = math.Sin(float64(i))
	}
	end := func(s solvers.System) []float64 {
		st, err := solvers.Rodas5P.NewStepper(s, solvers.Options{RelTol: 1e-9})
		must(t, err)
		must(t, st.Reset(0, y0))
		for st.Time() < 2 {
			must(t, st.Step(2))
		}
		return st.State()
	}
	want := end(sys)
	for _, exact := range []bool{true, false} {
		got := end(pumps(t, n, exact, 1))
		for i := range want {
			if math.Abs(got[i]-want[i]) > 2e-7 {
				t.Errorf("exact Jacobians %v: unknown %d is %.10g, flat %.10g", exact, i, got[i], want[i])
			}
		}
	}
}

// A block that is off keeps its unknowns, a dead node stays at zero, and a
// configuration that can't be is refused.
func TestConfigurations(t *testing.T) {
	net := pumps(t, 4, true, 0)
	must(t, net.Configure(solvers.Configuration{Off: []bool{false, true, false, true}, Dead: []bool{false, true}}))
	st, err := solvers.Rodas5P.NewStepper(net, solvers.Options{})
	must(t, err)
	y := []float64{1, 2, 3, 4, 5, 6, 7, 8, 0, 0}
	must(t, st.Reset(0, y))
	for range 50 {
		must(t, st.Step(10))
	}
	for _, i := range []int{2, 3, 6, 7} {
		if st.State()[i] != y[i] {
			t.Errorf("unknown %d of a block that is off moved from %g to %g", i, y[i], st.State()[i])
		}
	}
	if v := st.State()[net.NodeUnknown(1)]; v != 0 {
		t.Errorf("the dead node is at %g", v)
	}
	for _, c := range []solvers.Configuration{
		{Off: []bool{true}},
		{Dead: []bool{true}},
		{Dead: []bool{false, true}},
		{Hidden: []solvers.Combination{{Row: 9}}},
		{Hidden: []solvers.Combination{{Row: 0, Terms: []solvers.Term{{Component: 7, Weight: 1}}}}},
		{Hidden: []solvers.Combination{{Row: 0, Terms: []solvers.Term{{Component: 0, Weight: 1}}}}}, // mass at a port
	} {
		if err := net.Configure(c); err == nil {
			t.Errorf("configuration %+v was taken", c)
		}
	}
	if _, err := net.Add(&pump{}, []int{0, 1}, []float64{1, -1}, nil); err == nil || !contains(err.Error(), "1 port components, 2 are tied") || !contains(err.Error(), "scale of own unknown 1 is -1") {
		t.Errorf("a malformed block gave %v", err)
	}
}

// limb is E behind R and L at a node of one component; flow out of the node
// positive as for any block, so its current is minus the flow.
type limb struct{ e, r, l float64 }

func (c *limb) Dims() (int, int)         { return 1, 1 }
func (c *limb) Mass(port, own []float64) { port[0], own[0] = 0, c.l }
func (c *limb) Eval(flow, rate []float64, t float64, v, x []float64) error {
	rate[0], flow[0] = c.e-v[0]-c.r*x[0], -x[0]
	return nil
}

func star(t *testing.T, off []bool, limbs ...*limb) *solvers.Network {
	t.Helper()
	net := solvers.NewNetwork(1, 1)
	for _, c := range limbs {
		_, err := net.Add(c, []int{0}, []float64{100}, nil)
		must(t, err)
	}
	net.SetNodeScale(0, 100)
	must(t, net.Configure(solvers.Configuration{Off: off, Hidden: []solvers.Combination{{Row: 0, Terms: []solvers.Term{{Component: 0, Weight: 1}}}}}))
	return net
}

// Modes of inductive stars: along a mode i_k = c/(R_k + s L_k) the trajectory is
// exp(s t). Source: power-checks E3 (computed there): roots of sum 1/(R_k + s
// L_k) = 0.
func TestStarModes(t *testing.T) {
	for _, c := range []struct {
		r, l []float64
		s    []float64
	}{
		{[]float64{0.5, 0.2, 0.1}, []float64{1e-3, 2e-3, 0.5e-3}, []float64{-118.424443881, -410.1469846904}},
		{[]float64{0.4, 0.3, 0.2, 0.1}, []float64{1e-3, 2e-3, 3e-3, 0.5e-3}, []float64{-79.1411781003, -159.906262425, -343.5612551269}},
	} {
		var limbs []*limb
		for k := range c.r {
			limbs = append(limbs, &limb{0, c.r[k], c.l[k]})
		}
		for _, s := range c.s {
			net := star(t, nil, limbs...)
			st, err := solvers.Rodas5P.NewStepper(net, solvers.Options{RelTol: 1e-10, AbsTol: 1e-12})
			must(t, err)
			y := make([]float64, net.Dim())
			for k := range limbs {
				y[k] = 1 / (c.r[k] + s*c.l[k])
			}
			y0 := append([]float64(nil), y...)
			must(t, st.Reset(0, y))
			end := 1 / math.Abs(s)
			for st.Time() < end {
				must(t, st.Step(end))
			}
			for k := range limbs {
				if got, want := st.State()[k], y0[k]*math.Exp(-1); math.Abs(got-want) > 1e-7*math.Abs(y0[0]) {
					t.Errorf("mode %g: current %d is %.12g, want %.12g", s, k, got, want)
				}
			}
		}
	}
}

// An inductive star from rest: trajectories of the closed form. Source:
// power-checks E3 (computed there): R = (0.5, 0.2, 0.1) ohm, L = (1, 2, 0.5) mH,
// v = (100, 0, 0) V.
func TestStarFromRest(t *testing.T) {
	net := star(t, nil, &limb{100, 0.5, 1e-3}, &limb{0, 0.2, 2e-3}, &limb{0, 0.1, 0.5e-3})
	st, err := solvers.Rodas5P.NewStepper(net, solvers.Options{RelTol: 1e-10})
	must(t, err)
	must(t, st.Reset(0, make([]float64, net.Dim())))
	check := func(what string, got, want, tol float64) {
		t.Helper()
		if !(math.Abs(got-want) <= tol) {
			t.Errorf("%s = %.10f, want %.10f", what, got, want)
		}
	}
	check("v_int(0+)", st.State()[3], 28.5714285714, 1e-7)
	rate := make([]float64, net.Dim())
	must(t, net.Eval(rate, 0, st.State()))
	for k, want := range []float64{71428.5714286, -14285.7142857, -57142.8571429} {
		check("i'(0+)", rate[k]/[]float64{1e-3, 2e-3, 0.5e-3}[k], want, 1e-3)
	}
	for _, w := range []struct {
		t float64
		i [3]float64
		v float64
	}{
		{1e-3, [3]float64{58.6408580733, -12.2090532529, -46.4318048204}, math.NaN()},
		{5e-3, [3]float64{152.3864746048, -36.9365366787, -115.4499379261}, 14.4544011288},
		{10e-3, [3]float64{172.6074573464, -48.0868882455, -124.5205691010}, math.NaN()},
		{1, [3]float64{176.4705882353, -58.8235294118, -117.6470588235}, 11.7647058824},
	} {
		for st.Time() < w.t {
			must(t, st.Step(w.t))
		}
		for k := range 3 {
			check("i", st.State()[k], w.i[k], 2e-7)
		}
		if w.v == w.v {
			check("v_int", st.State()[3], w.v, 2e-7)
		}
	}
}

// Over thousands of steps the current law stays at rounding.
func TestHiddenLawStaysAtRounding(t *testing.T) {
	net := star(t, nil, &limb{100, 0.5, 1e-3}, &limb{-30, 0.2, 2e-3}, &limb{7, 0.1, 0.5e-3})
	for _, m := range methods {
		st, err := m.method.NewStepper(net, solvers.Options{RelTol: 1e-6, MaxStep: 1e-5})
		must(t, err)
		must(t, st.Reset(0, make([]float64, net.Dim())))
		for range 5000 {
			must(t, st.Step(1))
			y := st.State()
			if sum := y[0] + y[1] + y[2]; math.Abs(sum) > 1e-11*300 {
				t.Fatalf("%s: currents sum to %g at t = %g", m.method.Name(), sum, st.Time())
			}
		}
	}
}

// Opening one leg of a star: the others' currents jump to what the law allows
// with sum L_k dI_k^2 least, that is dI_k = -(sum of currents left)/L_k over
// sum 1/L (Lagrange), and the node takes the voltage at which both go on.
func TestProjectionKeepsFluxLinkage(t *testing.T) {
	limbs := []*limb{{100, 0.5, 1e-3}, {0, 0.2, 2e-3}, {10, 0.1, 0.5e-3}}
	i := []float64{30, -10, -20}
	net := star(t, []bool{false, false, true}, limbs...)
	y := append(append([]float64(nil), i...), 0)
	must(t, net.Initialise(0, y, true))
	left := i[0] + i[1]
	w := 1/limbs[0].l + 1/limbs[1].l
	for k := range 2 {
		if want := i[k] - left/limbs[k].l/w; math.Abs(y[k]-want) > 1e-9 {
			t.Errorf("current %d is %.12g after the opening, want %.12g", k, y[k], want)
		}
	}
	// sum (E - v - R i)/L = 0
	v := ((100-0.5*y[0])/limbs[0].l + (0-0.2*y[1])/limbs[1].l) / w
	if math.Abs(y[3]-v) > 1e-6*math.Abs(v) {
		t.Errorf("node at %.12g, want %.12g", y[3], v)
	}
	if y[2] != i[2] {
		t.Errorf("the leg that is off moved to %g", y[2])
	}
}

// An algebraic equation without a solution is named.
func TestInconsistentStartIsNamed(t *testing.T) {
	p := &solvers.Problem{N: 3, Mass: solvers.Diagonal(1, 0, 0), F: func(dst []float64, t float64, y []float64) error {
		dst[0], dst[1], dst[2] = -y[0], y[1]-y[0], y[2]*y[2]+1
		return nil
	}}
	sys, err := p.System()
	must(t, err)
	st, err := solvers.Rodas5P.NewStepper(sys, solvers.Options{})
	must(t, err)
	var inc *solvers.InconsistentError
	if err := st.Reset(0, []float64{1, 5, 3}); !errors.As(err, &inc) || inc.Index != 2 {
		t.Errorf("%v, want an InconsistentError at unknown 2", err)
	}
}
