package cases

import (
	"errors"
	"fmt"
	"strings"

	"github.com/BurntSushi/toml"
)

// place is where a key or table stands.
type place struct {
	line  int
	set   string // override
	value string // source of the value
}

// document is a decoded file with the places of its keys, overrides applied.
type document struct {
	file   string
	root   map[string]any
	places map[string]place // by joined key
	order  map[string][]string
	faults []*Fault
}

// fault notes a fault at a key; its place is that of the key, or of the
// nearest table around it that has one.
func (d *document) fault(key []string, format string, a ...any) {
	f := &Fault{File: d.file, Key: dotted(key), Text: fmt.Sprintf(format, a...)}
	for n := len(key); n > 0; n-- {
		if p, ok := d.places[join(key[:n])]; ok {
			f.Line, f.Set = p.line, p.set
			if n == len(key) {
				f.Value = shorten(p.value)
			}
			break
		}
	}
	d.faults = append(d.faults, f)
}

// full tells whether so many faults are known that more of them need no help.
func (d *document) full() bool { return len(d.faults) >= maxReported }

// suggest is suggest as long as that is worth its time.
func (d *document) suggest(name string, known []string) string {
	if d.full() {
		return "see the faults before"
	}
	return suggest(name, known)
}

// shorten makes a source text fit a message.
func shorten(s string) string {
	s = strings.Join(strings.Fields(s), " ")
	if r := []rune(s); len(r) > 60 {
		return string(r[:57]) + "..."
	}
	return s
}

// decode reads a file. Without a document, the file as a whole is refused.
func decode(file string, data []byte) (*document, error) {
	d := &document{file: file, places: make(map[string]place), order: make(map[string][]string)}
	refuse := func(line int, format string, a ...any) (*document, error) {
		d.faults = append(d.faults, &Fault{File: file, Line: line, Text: fmt.Sprintf(format, a...)})
		return nil, joinFaults(file, d.faults)
	}
	if len(data) > MaxBytes {
		return refuse(0, "%d bytes; accepted are %d", len(data), MaxBytes)
	}
	s := scan(data)
	if s.tooDeep > 0 {
		return refuse(s.tooDeep, "keys, arrays or inline tables are nested too deep; accepted are %d levels", maxNesting)
	}
	if s.tooMany {
		return refuse(0, "too many keys; accepted are %d", maxKeys)
	}
	src := s.repeated(func(e entry, first int) {
		what := "key"
		if e.header {
			what = "table"
		}
		d.faults = append(d.faults, &Fault{File: file, Line: e.line, Key: dotted(e.key), Value: shorten(e.value),
			Text: fmt.Sprintf("the same %s is on line %d already; names can be used once", what, first)})
	})
	if _, err := toml.Decode(string(src), &d.root); err != nil {
		var p toml.ParseError
		if errors.As(err, &p) {
			text := p.Message
			if text == "" {
				text = strings.TrimPrefix(err.Error(), "toml: ")
			}
			return refuse(p.Position.Line, "not TOML 1.0: %s", text)
		}
		return refuse(0, "not TOML 1.0: %v", err)
	}
	if d.root == nil {
		d.root = make(map[string]any)
	}
	for _, e := range s.entries {
		d.enter(e.key, place{line: e.line, value: e.value})
	}
	return d, nil
}

// enter notes the place of a key and the order of tables around it. The first
// place counts.
func (d *document) enter(key []string, p place) {
	for n := 1; n <= len(key); n++ {
		id := join(key[:n])
		if _, ok := d.places[id]; ok {
			continue
		}
		at := place{line: p.line, set: p.set}
		if n == len(key) {
			at.value = p.value
		}
		d.places[id] = at
		up := join(key[:n-1])
		d.order[up] = append(d.order[up], key[n-1])
	}
}

// Override changes one value of a case before it is checked, or adds it.
type Override struct {
	Path  string // key as in the file: "device.battery-1.power_kVA"
	Value string // value as in the file; strings need no quotes
}

// override applies an override.
func (d *document) override(o Override) {
	set := o.Path + "=" + o.Value
	bad := func(format string, a ...any) {
		d.faults = append(d.faults, &Fault{File: d.file, Set: shorten(set), Text: fmt.Sprintf(format, a...)})
	}
	if len(o.Path) > MaxString || len(o.Value) > MaxString {
		bad("longer than %d bytes", MaxString)
		return
	}
	s := &scanner{src: []byte(o.Path), line: 1}
	key, ok := s.key()
	if !ok || s.pos != len(s.src) {
		bad("%q is no key; want one like device.battery-1.power_kVA", o.Path)
		return
	}
	var v any = o.Value
	var parsed map[string]any
	if scan([]byte("x = "+o.Value)).tooDeep == 0 {
		if md, err := toml.Decode("x = "+o.Value, &parsed); err == nil && len(md.Keys()) >= 1 && len(parsed) == 1 {
			v = parsed["x"]
		}
	}
	if len(key) < 2 {
		bad("want a key in a table, like study.until_s")
		return
	}
	table := d.root
	for n := 1; n < len(key); n++ {
		part := key[:n]
		next, there := table[key[n-1]]
		if !there {
			// New tables only where any name will do: a misspelt device
			// would otherwise be a new one.
			if !(n == 1 && (key[0] == "study" || key[0] == "detail")) {
				if n == 1 {
					bad("there is no table %s in the case; %s", dotted(part), suggest(key[0], d.order[""]))
				} else {
					bad("there is no table %s in the case; %s", dotted(part), suggest(key[n-1], d.order[join(key[:n-1])]))
				}
				return
			}
			next = make(map[string]any)
			table[key[n-1]] = next
		}
		m, ok := next.(map[string]any)
		if !ok {
			bad("%s is a value, not a table", dotted(part))
			return
		}
		table = m
	}
	if _, isTable := table[key[len(key)-1]].(map[string]any); isTable {
		bad("%s is a table; name one of its keys", dotted(key))
		return
	}
	table[key[len(key)-1]] = v
	id := join(key)
	if _, ok := d.places[id]; !ok {
		d.enter(key, place{set: shorten(set)})
	}
	d.places[id] = place{set: shorten(set), value: o.Value}
}
