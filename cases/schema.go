package cases

import (
	"fmt"
	"math"
	"sort"
	"strconv"
	"strings"
)

// keyInfo tells about a key: all that the reference prints and the loader
// checks without knowing what the value is for.
type keyInfo struct {
	name string
	unit string // for the reference: of a number in trade units the suffix of the name
	def  string // default, "required", or in words; "" for an optional key without one
	doc  string

	form     form
	min, max float64 // of a number
	open     bool    // min itself isn't accepted
	inf      bool    // +inf is accepted
	choices  []string
}

// form is the type of a value.
type form uint8

const (
	number form = iota
	text
	flag
	texts
	numbers
	rows
)

func (f form) String() string {
	return [...]string{"a number", "a string", "true or false", "a list of strings", "a list of numbers", "a list of lists of numbers"}[f]
}

// accepted says in words what values pass.
func (k *keyInfo) accepted() string {
	if len(k.choices) > 0 {
		return "one of " + strings.Join(k.choices, ", ")
	}
	if k.form != number {
		return k.form.String()
	}
	var s string
	switch lo, hi := !math.IsInf(k.min, -1), !math.IsInf(k.max, 1); {
	case lo && hi && k.open:
		s = fmt.Sprintf("more than %s, up to %s", figure(k.min), figure(k.max))
	case lo && hi:
		s = fmt.Sprintf("%s to %s", figure(k.min), figure(k.max))
	default:
		s = "any number"
	}
	if k.inf {
		s += ", or inf for none"
	}
	return s
}

// span is accepted in the short form of the reference.
func (k *keyInfo) span() string {
	if k.form != number && k.form != numbers && k.form != rows || math.IsInf(k.max, 1) {
		return k.accepted()
	}
	s := figure(k.min) + " to " + figure(k.max)
	if k.open {
		s = "> " + s
	}
	if k.inf {
		s += ", inf"
	}
	return s
}

// figure writes a bound of a range.
func figure(x float64) string {
	if a := math.Abs(x); a >= 1e5 || a > 0 && a < 1e-3 {
		s := fmt.Sprintf("%.6e", x)
		mantissa, exponent, _ := strings.Cut(s, "e")
		if strings.Contains(mantissa, ".") {
			mantissa = strings.TrimRight(strings.TrimRight(mantissa, "0"), ".")
		}
		n, _ := strconv.Atoi(exponent)
		return fmt.Sprintf("%se%d", mantissa, n)
	}
	return fmt.Sprintf("%.6g", x)
}

// field is a key with the way its value goes into a T. Exactly one setter is
// there, that of the key's form. Numbers arrive in SI.
type field[T any] struct {
	keyInfo
	scale float64 // of trade units; 0 means 1
	num   func(*T, float64)
	flag  func(*T, bool)
	text  func(*T, string)
	texts func(*T, []string)
	rows  func(*T, [][]float64) // of a list of numbers: the only row
}

// values is what a table held.
type values struct {
	doc   *document
	path  []string
	given map[string]bool // keys that hold an acceptable value
	tried map[string]bool // keys that are there at all
}

// key is the full key of one in the table.
func (v *values) key(name string) []string {
	return append(append(make([]string, 0, len(v.path)+1), v.path...), name)
}

func (v *values) fault(name, format string, a ...any) { v.doc.fault(v.key(name), format, a...) }

// number sets up a field for a number.
func num[T any](name, unit, def string, min, max float64, set func(*T, float64), doc string) field[T] {
	return field[T]{keyInfo: keyInfo{name: name, unit: unit, def: def, doc: doc, min: min, max: max}, num: set}
}

// above is num with a minimum that isn't accepted itself.
func above[T any](name, unit, def string, min, max float64, set func(*T, float64), doc string) field[T] {
	f := num(name, unit, def, min, max, set, doc)
	f.open = true
	return f
}

// in gives the scale of trade units.
func (f field[T]) in(scale float64) field[T] {
	f.scale = scale
	return f
}

// orInf accepts inf.
func (f field[T]) orInf() field[T] {
	f.inf = true
	return f
}

func word[T any](name, def string, set func(*T, string), doc string) field[T] {
	return field[T]{keyInfo: keyInfo{name: name, def: def, doc: doc, form: text}, text: set}
}

func yes[T any](name string, set func(*T, bool), doc string) field[T] {
	return field[T]{keyInfo: keyInfo{name: name, def: "false", doc: doc, form: flag}, flag: set}
}

func words[T any](name, def string, set func(*T, []string), doc string) field[T] {
	return field[T]{keyInfo: keyInfo{name: name, def: def, doc: doc, form: texts}, texts: set}
}

// series sets up a field for a list of numbers, each within the bounds.
func series[T any](name, unit, def string, min, max float64, set func(*T, []float64), doc string) field[T] {
	return field[T]{keyInfo: keyInfo{name: name, unit: unit, def: def, doc: doc, form: numbers, min: min, max: max},
		rows: func(d *T, r [][]float64) { set(d, r[0]) }}
}

// matrix sets up a field for a list of lists of numbers.
func matrix[T any](name, unit, def string, min, max float64, set func(*T, [][]float64), doc string) field[T] {
	return field[T]{keyInfo: keyInfo{name: name, unit: unit, def: def, doc: doc, form: rows, min: min, max: max}, rows: set}
}

// asTable returns a value as a table, or notes a fault.
func (d *document) asTable(key []string, v any, want string) (map[string]any, bool) {
	m, ok := v.(map[string]any)
	if !ok {
		d.fault(key, "%s; want %s", typeName(v), want)
	}
	return m, ok
}

// read takes a table's values into dst. what names the table in messages
// ("a line"); keys in skip have been dealt with.
func read[T any](d *document, path []string, table map[string]any, fields []field[T], dst *T, what string, skip ...string) *values {
	v := &values{doc: d, path: path, given: make(map[string]bool), tried: make(map[string]bool)}
	byName := make(map[string]*field[T], len(fields))
	var names []string
	for i := range fields {
		byName[fields[i].name] = &fields[i]
		names = append(names, fields[i].name)
	}
	names = append(names, skip...)
	for _, name := range d.keysOf(path, table) {
		known := false
		for _, s := range skip {
			known = known || s == name
		}
		if known {
			continue
		}
		f := byName[name]
		if f == nil {
			v.fault(name, "unknown key of %s; %s", what, d.suggest(name, names))
			continue
		}
		v.tried[name] = true
		if f.take(v, table[name], dst) {
			v.given[name] = true
		}
	}
	for i := range fields {
		if f := &fields[i]; f.def == "required" && !v.tried[f.name] {
			d.fault(path, "%s needs %s (%s), %s", what, f.name, f.doc, f.accepted())
		}
	}
	return v
}

// keysOf lists a table's keys in the order in which they stand in the file.
func (d *document) keysOf(path []string, table map[string]any) []string {
	order := d.order[join(path)]
	at := make(map[string]int, len(order))
	for i, k := range order {
		at[k] = i
	}
	keys := make([]string, 0, len(table))
	for k := range table {
		keys = append(keys, k)
	}
	sort.Slice(keys, func(i, j int) bool {
		a, inA := at[keys[i]]
		b, inB := at[keys[j]]
		if inA && inB {
			return a < b
		}
		if inA != inB {
			return inA
		}
		return keys[i] < keys[j]
	})
	return keys
}

// take checks a value and sets it.
func (f *field[T]) take(v *values, value any, dst *T) bool {
	switch f.form {
	case number:
		x, ok := toNumber(value)
		if !ok {
			v.fault(f.name, "%s; want a number, %s", typeName(value), f.accepted())
			return false
		}
		inside := x > f.min || x == f.min && !f.open
		if !(inside && x <= f.max || f.inf && math.IsInf(x, 1)) {
			v.fault(f.name, "out of range; accepted is %s", f.accepted())
			return false
		}
		if f.scale != 0 {
			x *= f.scale
		}
		f.num(dst, x)
	case flag:
		b, ok := value.(bool)
		if !ok {
			v.fault(f.name, "%s; want true or false", typeName(value))
			return false
		}
		f.flag(dst, b)
	case text:
		s, ok := value.(string)
		if !ok {
			v.fault(f.name, "%s; want a string", typeName(value))
			return false
		}
		if len(s) > MaxString {
			v.fault(f.name, "%d bytes; accepted are %d", len(s), MaxString)
			return false
		}
		if len(f.choices) > 0 {
			found := false
			for _, c := range f.choices {
				found = found || c == s
			}
			if !found {
				v.fault(f.name, "unknown; accepted is %s", f.accepted())
				return false
			}
		}
		f.text(dst, s)
	case texts:
		l, ok := value.([]any)
		if !ok {
			v.fault(f.name, "%s; want a list of strings", typeName(value))
			return false
		}
		if len(l) > MaxEntries {
			v.fault(f.name, "%d entries; accepted are %d", len(l), MaxEntries)
			return false
		}
		out := make([]string, 0, len(l))
		for _, e := range l {
			s, ok := e.(string)
			if !ok {
				v.fault(f.name, "holds %s; want a list of strings", typeName(e))
				return false
			}
			if len(s) > MaxString {
				v.fault(f.name, "holds a string of %d bytes; accepted are %d", len(s), MaxString)
				return false
			}
			out = append(out, s)
		}
		f.texts(dst, out)
	case numbers:
		r, ok := f.takeRow(v, value)
		if !ok {
			return false
		}
		f.rows(dst, [][]float64{r})
	case rows:
		l, ok := value.([]any)
		if !ok {
			v.fault(f.name, "%s; want %s", typeName(value), f.form)
			return false
		}
		if len(l) > MaxNumbers {
			v.fault(f.name, "%d entries; accepted are %d", len(l), MaxNumbers)
			return false
		}
		out := make([][]float64, 0, len(l))
		for _, e := range l {
			r, ok := f.takeRow(v, e)
			if !ok {
				return false
			}
			out = append(out, r)
		}
		f.rows(dst, out)
	}
	return true
}

// takeRow checks a list of numbers.
func (f *field[T]) takeRow(v *values, value any) ([]float64, bool) {
	l, ok := value.([]any)
	if !ok {
		v.fault(f.name, "%s; want %s", typeName(value), f.form)
		return nil, false
	}
	if len(l) > MaxNumbers {
		v.fault(f.name, "%d entries; accepted are %d", len(l), MaxNumbers)
		return nil, false
	}
	out := make([]float64, 0, len(l))
	for _, e := range l {
		x, ok := toNumber(e)
		if !ok {
			v.fault(f.name, "holds %s; want %s", typeName(e), f.form)
			return nil, false
		}
		if !((x > f.min || x == f.min && !f.open) && x <= f.max) {
			open := ""
			if f.open {
				open = "> "
			}
			v.fault(f.name, "holds %v; accepted are %s%s to %s", x, open, figure(f.min), figure(f.max))
			return nil, false
		}
		out = append(out, x)
	}
	return out, true
}

func toNumber(v any) (float64, bool) {
	switch x := v.(type) {
	case int64:
		return float64(x), true
	case float64:
		return x, true
	}
	return 0, false
}

// typeName says what a decoded value is.
func typeName(v any) string {
	switch v.(type) {
	case string:
		return "a string"
	case int64, float64:
		return "a number"
	case bool:
		return "true or false"
	case []any:
		return "a list"
	case []map[string]any:
		return "an array of tables"
	case map[string]any:
		return "a table"
	}
	return "a date or time"
}
