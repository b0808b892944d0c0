package cases

import (
	"context"
	"math"
	"slices"
	"strings"
	"testing"

	"islet/engine"
	"islet/engine/compare"
)

func TestGeneratedMeshes(t *testing.T) {
	for _, n := range []int{4, 10, 100} {
		name := map[int]string{4: "mesh-4", 10: "mesh-10", 100: "mesh-100"}[n]
		c, err := Open(name)
		if err != nil {
			t.Fatal(err)
		}
		again, err := Source(name)
		if err != nil || string(again) != string(meshSource(n)) {
			t.Errorf("%s: the source isn't the same twice (%v)", name, err)
		}
		count := map[string]int{}
		for _, d := range c.devices {
			count[d.kind.name]++
		}
		forming := 0
		for k := range n {
			if k%10 < 7 {
				forming++
			}
		}
		if count["grid-forming inverter"] != forming || count["grid-following inverter"] != n-forming {
			t.Errorf("%s: %v, want %d forming and %d following", name, count, forming, n-forming)
		}
		if len(c.Events) < 8 {
			t.Errorf("%s: %d events", name, len(c.Events))
		}
		m, err := c.Start(&engine.Options{Tolerance: 1e-4, Record: []string{"bus-0.v", "bus-0.frequency"}})
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if p := m.OperatingPoint(); p.PseudoTransient || p.Drift > 1e-4 {
			t.Errorf("%s: operating point %+v", name, p)
		}
		until := 15.0
		if n == 100 {
			until = 3 // the first three events; the whole run is for the benchmark
		}
		tr, err := m.Run(context.Background(), until)
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		// At rest before the next event, within a fiftieth of the droop.
		f, v := tr.Column("bus-0.frequency"), tr.Column("bus-0.v")
		if last := f[len(f)-1]; math.Abs(last-50) > 0.5 || v[len(v)-1] < 370 || v[len(v)-1] > 420 {
			t.Errorf("%s ends at %g Hz and %g V", name, last, v[len(v)-1])
		}
		if e := m.Energy().Closure(); e > 1e-3 {
			t.Errorf("%s: the ledger closes to %g", name, e)
		}
	}
	for _, bad := range []string{"mesh-3", "mesh-4001", "mesh-0010", "mesh-x", "mesh-"} {
		if _, err := Source(bad); err == nil {
			t.Errorf("%s was made", bad)
		}
	}
	shipped := Shipped()
	if last := shipped[len(shipped)-1]; last.Name != "mesh-N" || !strings.Contains(last.Title, "4 to 4000") {
		t.Errorf("the list ends with %+v", last)
	}
}

// A reduction lies. Source: power-checks J3: the network's critical droop gain
// is 1.827e-4 rad/s/W in full, 3.42e-4 without inner loops, 2.39e-3 without
// network dynamics. At 9.4e-5 all models agree on the verdict, at 2.2e-4 only
// the full one shows the growing swing.
func TestReductionLies(t *testing.T) {
	inner := DetailRule{"inverter-*", "inner loops gone"}
	primary, phasor := DetailRule{"inverter-*", "primary only"}, DetailRule{"line-*", "quasi-steady"}
	for _, gain := range []string{"9.4e-5", "2.2e-4"} {
		var ov []Override
		for _, d := range []string{"1", "2", "3"} {
			ov = append(ov, Override{"device.inverter-" + d + ".m", gain})
		}
		c, err := Open("short-lines", ov...)
		if err != nil {
			t.Fatal(err)
		}
		setting := func(name string, rules ...DetailRule) compare.Setting {
			return compare.Setting{Name: name, Start: func(o *engine.Options) (*engine.Simulation, error) { return c.Start(o, rules...) }}
		}
		r, err := compare.Run(context.Background(), []compare.Setting{setting("full"), setting("inner loops gone", inner), setting("zero order", primary, phasor)},
			compare.Options{Until: c.Until, Repetitions: 1})
		if err != nil {
			t.Fatal(err)
		}
		swings := func(k int) bool {
			return slices.Contains(r.Results[k].Verdicts, "frequencies swing with growing amplitude")
		}
		if unstable := gain == "2.2e-4"; swings(0) != unstable || swings(1) || swings(2) {
			t.Errorf("m = %s: growing swings in full %v, without inner loops %v, zero order %v", gain, swings(0), swings(1), swings(2))
		}
		for k := 1; k < 3; k++ {
			if changed := len(r.Results[k].Changes) > 0; changed != (gain == "2.2e-4") {
				t.Errorf("m = %s, %s: changes %q", gain, r.Results[k].Setting, r.Results[k].Changes)
			}
		}
	}
}
