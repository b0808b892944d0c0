package cases

import (
	"strings"

	"islet/engine"
)

// part is what a device's table has been read into, not yet a device.
type part interface {
	// rating is the three-phase rating by which a source or transformer
	// counts in the default of rated currents, VA; 0 for what is none.
	rating(s *site) float64
	// build makes the device. It may be called several times and gives a
	// fresh device each time. The error joins all faults.
	build(s *site) (engine.Device, error)
}

// site is what a device finds where it stands.
type site struct {
	hertz   float64   // nominal frequency
	volts   []float64 // rated voltages of its buses, V line-to-line rms
	given   map[string]bool
	feeding func() float64 // total rating that feeds its part of the network, VA
}

// kind is a kind of device: what the loader and the reference know of it.
type kind struct {
	name      string // as devices describe themselves
	doc       string
	terminals []string // keys of the buses: bus, from and to, or buses for a list
	sameVolts bool     // both buses have one voltage
	infos     []keyInfo
	read      func(d *document, path []string, table map[string]any, skip []string) (part, *values)
}

// what is the kind with its article.
func (k *kind) what() string {
	if strings.ContainsRune("aeiou", rune(k.name[0])) {
		return "an " + k.name
	}
	return "a " + k.name
}

// makeKind makes a kind of a table of keys.
func makeKind[T any, P interface {
	*T
	part
}](name, doc string, terminals []string, sameVolts bool, fields []field[T]) *kind {
	k := &kind{name: name, doc: doc, terminals: terminals, sameVolts: sameVolts}
	for i := range fields {
		k.infos = append(k.infos, fields[i].keyInfo)
	}
	k.read = func(d *document, path []string, table map[string]any, skip []string) (part, *values) {
		p := P(new(T))
		v := read(d, path, table, fields, (*T)(p), k.what(), skip...)
		return p, v
	}
	return k
}

var (
	shunt  = []string{"bus"}
	branch = []string{"from", "to"}
	multi  = []string{"buses"} // any number of them, in a list
)

// many tells whether the kind's buses stand in a list.
func (k *kind) many() bool { return k.terminals[0] == multi[0] }

// kinds is the table of device kinds, in the order of the reference.
func kinds() []*kind {
	return []*kind{
		gridKind(), formingKind(), followingKind(),
		lineKind(), transformerKind(), breakerKind(), reducedKind(),
		loadKind(), seriesLoadKind(), capacitorKind(),
		faultKind(), meterKind(),
	}
}

// kindNames lists the kinds.
func kindNames() []string {
	var names []string
	for _, k := range kinds() {
		names = append(names, k.name)
	}
	return names
}

// findKind finds a kind by name. Hyphens and spaces count as the same.
func findKind(all []*kind, name string) *kind {
	plain := func(s string) string { return strings.ReplaceAll(s, "-", " ") }
	for _, k := range all {
		if plain(k.name) == plain(name) {
			return k
		}
	}
	return nil
}
