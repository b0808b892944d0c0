package devicetest

import (
	"bytes"
	"encoding"
	"math"

	"islet/solvers"
	"islet/solvers/facet"
)

// checkSetpoints checks that setpoints take good values, ramp linearly, and
// that bad arguments are errors that change nothing.
func checkSetpoints(t reporter, s *subject) {
	t.Helper()
	if _, ok := s.b.(facet.Adjustable); !ok {
		return
	}
	b, err := s.fresh()
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	a := b.(facet.Adjustable)
	list := a.Setpoints(0)
	names := map[string]bool{}
	for k, p := range list {
		if p.Name == "" || names[p.Name] {
			t.Errorf("setpoint %d: name %q is empty or used twice", k, p.Name)
		}
		names[p.Name] = true
		if p.Unit == "" || p.Doc == "" {
			t.Errorf("setpoint %q: no unit or no doc", p.Name)
		}
		if !(p.Min <= p.Value && p.Value <= p.Max) {
			t.Errorf("setpoint %q: value %v outside %v to %v", p.Name, p.Value, p.Min, p.Max)
		}
	}

	// refused checks that Set refuses the arguments and changes nothing.
	refused := func(what, name string, time, value, ramp float64) {
		t.Helper()
		before, bytesBefore := a.Setpoints(time), snapshot(b)
		if err := a.Set(name, time, value, ramp); err == nil {
			t.Errorf("Set(%q, %v, %v, %v): accepted %s", name, time, value, ramp, what)
		}
		if !sameSetpoints(before, a.Setpoints(time)) || !bytes.Equal(bytesBefore, snapshot(b)) {
			t.Errorf("Set(%q, %v, %v, %v): refused %s, but changed something", name, time, value, ramp, what)
		}
	}
	refused("an unknown name", "no such setpoint", 0, 1, 0)
	refused("an empty name", "", 0, 1, 0)
	for _, p := range list {
		refused("NaN", p.Name, 0, math.NaN(), 0)
		refused("an infinity", p.Name, 0, math.Inf(1), 0)
		refused("an infinity", p.Name, 0, math.Inf(-1), 0)
		refused("a negative ramp", p.Name, 0, p.Value, -1)
		refused("a ramp of NaN", p.Name, 0, p.Value, math.NaN())
		if !math.IsInf(p.Min, 0) {
			refused("a value below the range", p.Name, 0, p.Min-0.01*max(1, math.Abs(p.Min)), 0)
		}
		if !math.IsInf(p.Max, 0) {
			refused("a value above the range", p.Name, 0, p.Max+0.01*max(1, math.Abs(p.Max)), 0)
		}
	}

	value := func(k int, time float64) float64 { return a.Setpoints(time)[k].Value }
	for k, p := range list {
		near := func(got, want float64) bool {
			return math.Abs(got-want) <= 1e-12*(math.Abs(p.Value)+math.Abs(want))
		}
		if err := a.Set(p.Name, 0, p.Value, 0); err != nil {
			t.Errorf("setpoint %q: refused its own value %v: %v", p.Name, p.Value, err)
			continue
		}
		if got := value(k, 0); got != p.Value {
			t.Errorf("setpoint %q: set to %v, is %v", p.Name, p.Value, got)
		}
		target := s.target(p)
		if err := a.Set(p.Name, rampStart, target, rampTime); err != nil {
			t.Errorf("setpoint %q: refused %v, within its range: %v", p.Name, target, err)
			continue
		}
		for _, at := range []float64{0, 0.25, 0.5, 1, 2} {
			want := p.Value + (target-p.Value)*min(at, 1)
			if got := value(k, rampStart+at*rampTime); !near(got, want) {
				t.Errorf("setpoint %q: %v after %v of a ramp from %v to %v: want %v", p.Name, got, at, p.Value, target, want)
			}
		}
		// A ramp from within a ramp starts where that one is.
		middle := rampStart + rampTime/2
		from := value(k, middle)
		if err := a.Set(p.Name, middle, p.Value, rampTime); err != nil {
			t.Errorf("setpoint %q: %v", p.Name, err)
			continue
		}
		if got, want := value(k, middle+rampTime/2), (from+p.Value)/2; !near(got, want) {
			t.Errorf("setpoint %q: %v half-way of a ramp started within a ramp: want %v", p.Name, got, want)
		}
	}
}

func sameSetpoints(a, b []facet.Setpoint) bool {
	if len(a) != len(b) {
		return false
	}
	for k := range a {
		if a[k] != b[k] {
			return false
		}
	}
	return true
}

// snapshot returns the block's bytes, nil if it has none.
func snapshot(b solvers.Block) []byte {
	m, ok := b.(encoding.BinaryAppender)
	if !ok {
		return nil
	}
	data, err := m.AppendBinary(nil)
	if err != nil {
		return nil
	}
	return data
}

// checkMemory restores a changed block's snapshot into a fresh one and
// compares the two; and feeds damaged snapshots.
func checkMemory(t reporter, s *subject) {
	t.Helper()
	changed, err := s.fresh()
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	_, adjustable := changed.(facet.Adjustable)
	_, switchable := changed.(facet.Switchable)
	appender, canAppend := changed.(encoding.BinaryAppender)
	_, canRead := changed.(encoding.BinaryUnmarshaler)
	switch {
	case canAppend != canRead:
		t.Errorf("memory: BinaryAppender and BinaryUnmarshaler must come together")
		return
	case !canAppend && (adjustable || switchable):
		t.Errorf("memory: has setpoints or a switch, but no BinaryAppender and BinaryUnmarshaler: snapshots would lose them")
		return
	case !canAppend:
		return
	}
	if adjustable {
		if changed = s.moving(t); changed == nil {
			return
		}
		appender = changed.(encoding.BinaryAppender)
	}
	if switchable {
		changed.(facet.Switchable).SetClosed(!s.closing)
	}

	data, err := appender.AppendBinary([]byte("ahead"))
	if err != nil {
		t.Errorf("AppendBinary: %v", err)
		return
	}
	if !bytes.HasPrefix(data, []byte("ahead")) {
		t.Errorf("AppendBinary: doesn't append to what is there")
		return
	}
	data = data[len("ahead"):]
	if !bytes.Equal(data, snapshot(changed)) {
		t.Errorf("AppendBinary: two calls differ")
	}
	restored, err := s.fresh()
	if err != nil {
		t.Errorf("%v", err)
		return
	}
	input := bytes.Clone(data)
	if err := restored.(encoding.BinaryUnmarshaler).UnmarshalBinary(input); err != nil {
		t.Errorf("UnmarshalBinary: %v", err)
		return
	}
	for k := range input {
		input[k] = 0xff // it must not hold on to the caller's bytes
	}
	if !bytes.Equal(data, snapshot(restored)) {
		t.Errorf("UnmarshalBinary: the restored block's snapshot differs")
	}
	if switchable && restored.(facet.Switchable).Closed() == s.closing {
		t.Errorf("UnmarshalBinary: switch position not restored")
	}
	for _, time := range []float64{0.5, rampStart, rampStart + 0.3*rampTime, rampStart + rampTime, 5} {
		if adjustable && !sameSetpoints(changed.(facet.Adjustable).Setpoints(time), restored.(facet.Adjustable).Setpoints(time)) {
			t.Errorf("UnmarshalBinary: setpoints at %v s not restored", time)
		}
	}
	r := random()
	for k := range points {
		time, v, x, ok := s.point(t, changed, r)
		if !ok {
			return
		}
		if k%3 == 0 {
			time += rampTime
		}
		f, g := floats(s.ports+s.own), floats(s.ports+s.own)
		if s.eval(changed, f, time, v, x) != nil || s.eval(restored, g, time, v, x) != nil || !sameBits(f, g) {
			t.Errorf("UnmarshalBinary: at %v s the restored block gives %v, want %v", time, g, f)
			return
		}
	}
	if j, ok := changed.(facet.Stepped); ok {
		x, y := floats(s.own), floats(s.own)
		j.ApplyJumps(x)
		restored.(facet.Stepped).ApplyJumps(y)
		if !sameBits(x, y) {
			t.Errorf("UnmarshalBinary: pending jumps %v not restored: %v", x, y)
		}
	}

	// Damaged snapshots
	damaged := [][]byte{append(bytes.Clone(data), 0)}
	if len(data) > 0 {
		damaged = append(damaged, nil, data[:len(data)-1], data[:len(data)/2])
	}
	for _, bad := range damaged {
		fresh, err := s.fresh()
		if err != nil {
			t.Errorf("%v", err)
			return
		}
		before := snapshot(fresh)
		if err := fresh.(encoding.BinaryUnmarshaler).UnmarshalBinary(bad); err == nil {
			t.Errorf("UnmarshalBinary: accepted %d bytes where %d are right", len(bad), len(data))
		}
		if !bytes.Equal(before, snapshot(fresh)) {
			t.Errorf("UnmarshalBinary: refused %d bytes, but changed something", len(bad))
		}
	}
}
