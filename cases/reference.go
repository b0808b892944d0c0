package cases

import (
	"fmt"
	"strings"
)

// Reference returns the table of the keys of a case file, made from the same
// table that the loader checks by. kind is "" for all of it, a kind of device,
// or one of study, bus, device, event, condition and detail.
func Reference(kind string) (string, error) {
	var b strings.Builder
	all := kinds()
	switch kind {
	case "":
		b.WriteString(referenceHead)
		for _, s := range []string{"study", "bus", "device"} {
			b.WriteByte('\n')
			referenceSection(&b, s)
		}
		for _, k := range all {
			b.WriteByte('\n')
			referenceKind(&b, k)
		}
		for _, s := range []string{"event", "condition", "detail"} {
			b.WriteByte('\n')
			referenceSection(&b, s)
		}
		return b.String(), nil
	case "study", "bus", "device", "event", "condition", "detail":
		referenceSection(&b, kind)
		return b.String(), nil
	}
	if k := findKind(all, kind); k != nil {
		referenceKind(&b, k)
		return b.String(), nil
	}
	known := append(append([]string(nil), kindNames()...), sections...)
	if n, ok := nearest(kind, known); ok {
		return "", fmt.Errorf("cases: no kind of device or table %q; did you mean %q?", kind, n)
	}
	return "", fmt.Errorf("cases: no kind of device or table %q; there are %s", kind, strings.Join(known, ", "))
}

const referenceHead = `A case file is TOML with named tables: [study], [bus.NAME], [device.NAME],
[event.NAME], [condition.NAME] and [detail]. Names have letters, digits, - and _.
Keys in trade units end in the unit. Keys named after a symbol of the equations
are in SI and replace what the nameplate would give; powers are three-phase
totals, impedances those of one phase of a star, voltages line to line rms unless
the unit says "peak phase". Ranges: "> 0 to 10" leaves 0 itself out; inf stands
for none.
`

func referenceSection(b *strings.Builder, section string) {
	switch section {
	case "study":
		b.WriteString("[study]\n")
		referenceTable(b, infosOf(studyFields()))
	case "bus":
		b.WriteString("[bus.NAME]\n")
		referenceTable(b, infosOf(busFields()))
	case "device":
		fmt.Fprintf(b, "[device.NAME]\n  kind          one of %s\n", strings.Join(kindNames(), ", "))
		b.WriteString("  bus           the bus it is connected to, or\n  from, to      its two buses; for a transformer the high-voltage one is from\n  buses         a list of them, for a reduced network\n")
	case "event":
		b.WriteString("[event.NAME]\nEvents at one time happen in the order in which they stand.\n")
		referenceTable(b, infosOf(eventFields()))
	case "condition":
		b.WriteString("[condition.NAME]\nIts event happens once, when the condition has held. Exactly one limit is given.\n")
		referenceTable(b, infosOf(conditionFields()))
	case "detail":
		b.WriteString("[detail]\n  \"PATTERN\" = \"LEVEL\"\n")
		b.WriteString("PATTERN is a device's name in which * stands for any characters, kind:LINE for\nall of a kind, near:NAME:N for all within N buses of a bus or device, or far:NAME:N\nfor all others. Of several lines for a device the last counts. Levels are full and\nquasi-steady for networks; for inverters full, current loop gone, inner loops gone,\nprimary only, phase only (forming), and injection only (following).\n")
	}
}

func infosOf[T any](fields []field[T]) []keyInfo {
	var out []keyInfo
	for i := range fields {
		out = append(out, fields[i].keyInfo)
	}
	return out
}

func referenceKind(b *strings.Builder, k *kind) {
	fmt.Fprintf(b, "kind = %q\n%s\n", k.name, k.doc)
	var infos []keyInfo
	for _, t := range k.terminals {
		info := keyInfo{name: t, def: "required", doc: "the bus at this terminal", form: text}
		if k.many() {
			info.doc, info.form = "the buses at its terminals, in order", texts
		}
		infos = append(infos, info)
	}
	referenceTable(b, append(infos, k.infos...))
}

// referenceTable prints keys, units, defaults, ranges and meanings. A default or
// range too long for its column follows the meaning.
func referenceTable(b *strings.Builder, infos []keyInfo) {
	const widest = 26
	rows := [][5]string{{"key", "unit", "default", "accepted", "meaning"}}
	for _, k := range infos {
		r := [5]string{k.name, k.unit, k.def, k.span(), k.doc}
		for i, what := range [5]string{2: "default", 3: "accepted"} {
			switch {
			case r[i] == "":
				r[i] = "-"
			case what != "" && len(r[i]) > widest:
				r[4] += "; " + what + ": " + r[i]
				r[i] = "..."
			}
		}
		rows = append(rows, r)
	}
	var width [4]int
	for _, r := range rows {
		for i := range width {
			width[i] = max(width[i], len(r[i]))
		}
	}
	for _, r := range rows {
		line := " "
		for i, w := range width {
			line += fmt.Sprintf(" %-*s", w, r[i])
		}
		b.WriteString(line + " " + r[4] + "\n")
	}
}
