package cases

import (
	"errors"
	"fmt"
	"sort"
	"strings"
)

// Fault is one thing wrong with a case: where it is, and what would be
// accepted. [Parse], [Load] and [Open] return all of them joined
// ([errors.Join]); errors.As finds the first.
type Fault struct {
	File  string // name given to Parse, or path
	Line  int    // counted from 1; 0 for an override or the file as a whole
	Set   string // the override, "device.battery-1.power_kVA=250", or ""
	Key   string // key or table concerned, "device.battery-1.power_kVA", or ""
	Value string // its value as it stands in the file, or ""
	Text  string // what is wrong; what would be accepted
}

// Error is "file:line: key = value: text"; an override has "--set key=value"
// for the position.
func (f *Fault) Error() string {
	s := f.File
	switch {
	case f.Set != "":
		s = "--set " + f.Set
	case f.Line > 0:
		s = fmt.Sprintf("%s:%d", f.File, f.Line)
	}
	switch {
	case f.Set != "" && strings.HasPrefix(f.Set, f.Key+"="):
	case f.Key != "" && f.Value != "":
		s += ": " + f.Key + " = " + f.Value
	case f.Key != "":
		s += ": " + f.Key
	}
	return s + ": " + f.Text
}

// joinFaults sorts faults by line, overrides last, and joins them.
func joinFaults(file string, faults []*Fault) error {
	sort.SliceStable(faults, func(i, j int) bool {
		a, b := faults[i], faults[j]
		if (a.Set != "") != (b.Set != "") {
			return a.Set == ""
		}
		return a.Line < b.Line
	})
	var errs []error
	for i, f := range faults {
		if i == maxReported {
			errs = append(errs, &Fault{File: file, Text: fmt.Sprintf("%d more faults", len(faults)-i)})
			break
		}
		errs = append(errs, f)
	}
	return errors.Join(errs...)
}

// causes takes joined errors apart.
func causes(err error) []error {
	if err == nil {
		return nil
	}
	if j, ok := err.(interface{ Unwrap() []error }); ok {
		var all []error
		for _, e := range j.Unwrap() {
			all = append(all, causes(e)...)
		}
		return all
	}
	return []error{err}
}

// plain is an error's text without the prefix of package devices.
func plain(err error) string { return strings.TrimPrefix(err.Error(), "devices: ") }

// keyError is what is wrong with one key of a device's table.
type keyError struct{ key, text string }

func (e *keyError) Error() string { return e.key + ": " + e.text }

// at makes a keyError.
func at(key, format string, a ...any) error { return &keyError{key, fmt.Sprintf(format, a...)} }
