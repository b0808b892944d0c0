package devices

import (
	"errors"
	"fmt"
	"math"
)

// faults gathers all that is wrong with a set of parameters, each with name,
// value and accepted range. Its methods report whether the value passed. NaN
// and infinities never pass.
type faults struct {
	device string // what the parameters belong to: "line"
	errs   []error
}

// add notes a fault in plain words.
func (f *faults) add(format string, args ...any) {
	f.errs = append(f.errs, fmt.Errorf("devices: %s: "+format, append([]any{f.device}, args...)...))
}

// check notes a fault of a parameter unless ok and finite.
func (f *faults) check(ok bool, name string, value float64, unit, want string) bool {
	if ok && !math.IsNaN(value) && !math.IsInf(value, 0) {
		return true
	}
	if unit != "" {
		unit = " " + unit
	}
	f.add("%s = %v%s: want %s", name, value, unit, want)
	return false
}

// finite wants any finite value.
func (f *faults) finite(name string, value float64, unit string) bool {
	return f.check(true, name, value, unit, "a finite value")
}

// positive wants value > 0.
func (f *faults) positive(name string, value float64, unit string) bool {
	return f.check(value > 0, name, value, unit, "a finite value > 0")
}

// notNegative wants value >= 0.
func (f *faults) notNegative(name string, value float64, unit string) bool {
	return f.check(value >= 0, name, value, unit, "a finite value >= 0")
}

// within wants min <= value <= max; the bounds may be infinite.
func (f *faults) within(name string, value, min, max float64, unit string) bool {
	want := fmt.Sprintf("%v to %v", min, max)
	switch {
	case math.IsInf(min, -1) && math.IsInf(max, 1):
		want = "a finite value"
	case math.IsInf(max, 1):
		want = fmt.Sprintf("a finite value >= %v", min)
	case math.IsInf(min, -1):
		want = fmt.Sprintf("a finite value <= %v", max)
	}
	return f.check(value >= min && value <= max, name, value, unit, want)
}

// err returns all faults joined, nil if there are none.
func (f *faults) err() error { return errors.Join(f.errs...) }
