package devices

import (
	"errors"
	"math"
	"math/cmplx"
	"testing"

	"islet/devices/devicetest"
	"islet/solvers"
	"islet/solvers/facet"
)

// A block without mass is a device like any other: the kit holds for it.
func TestZeroMassConformance(t *testing.T) {
	limits := testForming()
	limits.Primary, limits.IMax = oscillatorOf(0.6), 25
	limits.LimitImpedance = LimitImpedance{12, 0.4, 3}
	machine := testForming()
	machine.Primary = machineOf(1.2)
	coil := testFollowing()
	coil.Filter = LCL{Lf: 2e-3, Rf: 0.15}
	for name, full := range map[string]reducible{
		"droop":      mustForming(t, testForming()),
		"oscillator": mustForming(t, limits),
		"machine":    mustForming(t, machine),
		"LCL":        mustFollowing(t, testFollowing()),
		"L":          mustFollowing(t, coil),
	} {
		for _, level := range full.Details()[1:] {
			t.Run(name+"/"+level, func(t *testing.T) {
				devicetest.Run(t, func() solvers.Block {
					fresh, err := full.WithDetail(Full)
					if err != nil {
						t.Fatal(err)
					}
					b, err := ZeroMass(fresh, full.DroppedDynamics(level)...)
					if err != nil {
						t.Fatal(err)
					}
					return b
				}, devicetest.Options{
					Voltages:    []float64{326},
					Steady:      []complex128{cmplx.Rect(324, 0.3)},
					Point:       nearOwnFrame,
					QuasiSteady: true,
				})
			})
		}
	}
}

// source is a user's own device with no facet but the required one: a voltage E
// behind R and L, with a filter of its current that nothing reads. Frame at rest.
//
//	L di/dt = v - E - R i        T dm/dt = |i| - m
type source struct{ held bool }

func (s source) Dims() (ports, own int) { return 2, 3 }

func (s source) Mass(port, own []float64) {
	clear(port)
	own[0], own[1], own[2] = 1e-3, 1e-3, 0.1
}

func (s source) Eval(flow, rate []float64, t float64, v, x []float64) error {
	if !(math.Abs(x[2]) < 1e6) {
		return errors.New("too large")
	}
	flow[0], flow[1] = x[0], x[1]
	e := 300.0
	if !s.held { // a current source behind a fast loop: v doesn't reach i
		e = 0
		v = []float64{5, 1}
	}
	rate[0], rate[1] = v[0]-e-0.5*x[0], v[1]-0.5*x[1]
	rate[2] = math.Hypot(x[0], x[1]) - x[2]
	return nil
}

func (s source) Describe() facet.Description {
	return facet.Description{
		Kind:      "source",
		Terminals: []facet.Terminal{{Name: "a", Flow: facet.FlowState}},
		Unknowns: []facet.Unknown{
			{Name: "i.d", Unit: "A", Base: 100, Frame: facet.PairD, Dynamics: "coil"},
			{Name: "i.q", Unit: "A", Base: 100, Frame: facet.PairQ, Dynamics: "coil"},
			{Name: "m", Unit: "A", Base: 100, Dynamics: "meter"},
		},
	}
}

// A user's own device gets the road by the names of its groups alone: mass gone
// where told, flow corrected where it is no state any more, no facet made up.
func TestZeroMassOwnDevice(t *testing.T) {
	for _, c := range []struct {
		held   bool
		groups []string
		mass   [3]float64
		flow   facet.Flow
	}{
		{true, nil, [3]float64{1e-3, 1e-3, 0.1}, facet.FlowState},
		{true, []string{"meter"}, [3]float64{1e-3, 1e-3, 0}, facet.FlowState},
		{true, []string{"coil"}, [3]float64{0, 0, 0.1}, facet.FlowHeld},
		{true, []string{"meter", "coil"}, [3]float64{}, facet.FlowHeld},
		{false, []string{"coil"}, [3]float64{0, 0, 0.1}, facet.FlowInjected},
	} {
		b, err := ZeroMass(source{c.held}, c.groups...)
		if err != nil {
			t.Fatal(err)
		}
		mass := make([]float64, 3)
		b.Mass(make([]float64, 2), mass)
		if [3]float64(mass) != c.mass {
			t.Errorf("without %q: masses %v, want %v", c.groups, mass, c.mass)
		}
		if got := b.(facet.Described).Describe().Terminals[0].Flow; got != c.flow {
			t.Errorf("held %v without %q: flow of kind %d, want %d", c.held, c.groups, got, c.flow)
		}
		if got := (source{c.held}).Describe().Terminals[0].Flow; got != facet.FlowState {
			t.Errorf("without %q: the block's own description has changed", c.groups)
		}
		if _, ok := b.(solvers.Differentiable); ok {
			t.Error("has a Jacobian that its block lacks")
		}
		if _, ok := b.(solvers.TimeDependent); ok {
			t.Error("has a time derivative that its block lacks")
		}
		if _, ok := b.(facet.Former); ok {
			t.Error("forms a network, as its block doesn't")
		}
	}
	_, err := ZeroMass(source{}, "coil", "coils")
	if err == nil {
		t.Fatal("unknown group accepted")
	}
	wantFaults(t, err, `"coils"`, `"coil" "meter"`)
	type bare struct{ solvers.Block }
	if _, err := ZeroMass(bare{source{}}, "coil"); err == nil {
		t.Error("a block that tells nothing about itself accepted")
	}
}

// facets tells which of the facets that can't be empty a block has.
func facets(b solvers.Block) (list [5]bool) {
	_, list[0] = b.(solvers.Differentiable)
	_, list[1] = b.(solvers.TimeDependent)
	_, list[2] = b.(facet.Former)
	_, list[3] = b.(facet.Ratioed)
	_, list[4] = b.(facet.Switchable)
	return list
}

// Every combination of facets carries over.
func TestZeroMassFacets(t *testing.T) {
	full := mustForming(t, testForming())
	m := &massless{block: source{true}, described: source{true}}
	for k := range 32 {
		var (
			want       [5]bool
			diff       solvers.Differentiable
			timed      solvers.TimeDependent
			former     facet.Former
			ratioed    facet.Ratioed
			switchable facet.Switchable
		)
		for i := range want {
			want[i] = k>>i&1 == 1
		}
		if want[0] {
			diff = full
		}
		if want[1] {
			timed = full
		}
		if want[2] {
			former = full
		}
		if want[3] {
			ratioed = new(Transformer)
		}
		if want[4] {
			switchable = new(Breaker)
		}
		if got := facets(combine(m, diff, timed, former, ratioed, switchable)); got != want {
			t.Errorf("combination %v became %v", want, got)
		}
	}
}
