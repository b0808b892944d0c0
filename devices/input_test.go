package devices

import (
	"math"
	"testing"

	"islet/solvers/facet"
)

func TestInput(t *testing.T) {
	in := constant(5)
	in.set(1, 9, 2) // 5 to 9 from 1 s to 3 s
	ramp := in
	in.set(2, 3, 4) // from 7 on the way to 9, to 3 from 2 s to 6 s
	again := in
	in.set(3, -1, 0)
	jump := in
	in.set(3, 8, 1e-300) // too short to be told from none
	short := in
	tests := []struct {
		name         string
		in           input
		t            float64
		value, slope float64
	}{
		{"constant", constant(5), -7, 5, 0},
		{"constant", constant(5), 7, 5, 0},
		{"before the ramp", ramp, 0, 5, 0},
		{"at its start", ramp, 1, 5, 2},
		{"within it", ramp, 1.5, 6, 2},
		{"just before its end", ramp, math.Nextafter(3, 0), 9, 2},
		{"at its end", ramp, 3, 9, 0},
		{"after it", ramp, 99, 9, 0},
		{"a ramp from within a ramp, start", again, 2, 7, -1},
		{"within", again, 4, 5, -1},
		{"end", again, 6, 3, 0},
		{"a jump", jump, 3, -1, 0},
		{"after it", jump, 4, -1, 0},
		{"a short ramp", short, 3, 8, 0},
		{"the zero value", input{}, 3, 0, 0},
	}
	for _, test := range tests {
		if got := test.in.value(test.t); math.Abs(got-test.value) > 1e-14 {
			t.Errorf("%s: value(%v) = %v, want %v", test.name, test.t, got, test.value)
		}
		if got := test.in.slope(test.t); got != test.slope {
			t.Errorf("%s: slope(%v) = %v, want %v", test.name, test.t, got, test.slope)
		}
	}
	if ramp.final() != 9 || again.final() != 3 {
		t.Errorf("final values %v and %v, want 9 and 3", ramp.final(), again.final())
	}
}

func TestInputSnapshot(t *testing.T) {
	a, b := constant(5), constant(-2)
	a.set(1, 9, 2)
	data := appendInputs([]byte("x"), &a, &b)[1:]
	if len(data) != 2*inputSize {
		t.Fatalf("%d bytes for two inputs of %d", len(data), inputSize)
	}
	var c, d input
	if err := readInputs("test", data, &c, &d); err != nil || c != a || d != b {
		t.Errorf("read %v, %v, error %v: want %v, %v", c, d, err, a, b)
	}
	wantFaults(t, readInputs("test", data[1:], &c, &d), "63 bytes", "want 64")
	bad := appendInputs(nil, &a, &input{from: math.NaN()})
	wantFaults(t, readInputs("test", bad, &d, &c), "NaN")
	bad = appendInputs(nil, &a, &input{start: 2, end: 1})
	wantFaults(t, readInputs("test", bad, &d, &c), "ends at 1 s")
	if c != a || d != b {
		t.Errorf("a damaged snapshot changed the inputs to %v, %v", c, d)
	}
}

func TestCheckSet(t *testing.T) {
	list := []facet.Setpoint{
		{Name: "p", Unit: "W", Min: 0, Max: math.Inf(1)},
		{Name: "f", Unit: "Hz", Min: 45, Max: 55},
		{Name: "g", Unit: "V", Min: math.Inf(-1), Max: 3},
		{Name: "phase", Unit: "rad", Min: math.Inf(-1), Max: math.Inf(1)},
	}
	for k, s := range list {
		for _, value := range []float64{s.Min, s.Max, 50, 3} {
			ok := value >= s.Min && value <= s.Max && !math.IsInf(value, 0)
			got, err := checkSet("test", list, s.Name, 0, value, 1)
			if ok != (err == nil) || got != k {
				t.Errorf("checkSet(%q, %v) = %d, %v", s.Name, value, got, err)
			}
		}
	}
	_, err := checkSet("test", list, "f", math.NaN(), 56, -1)
	wantFaults(t, err, "f = 56 Hz: want 45 to 55", "time = NaN", "ramp = -1 s")
	_, err = checkSet("test", list, "P", 0, 1, 0)
	wantFaults(t, err, `no setpoint "P"`, `["p" "f" "g" "phase"]`)
	_, err = checkSet("test", list, "p", 0, -1, 0)
	wantFaults(t, err, "p = -1 W: want a finite value >= 0")
	_, err = checkSet("test", list, "g", 0, 4, 0)
	wantFaults(t, err, "g = 4 V: want a finite value <= 3")
}
