package cases

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"sort"
	"strconv"
	"strings"

	"github.com/BurntSushi/toml"
)

// ReadSource returns the text of a shipped case, or of a file, as [Open] would read
// it, and the name that faults call it.
func ReadSource(nameOrPath string) (name string, source []byte, err error) {
	if data, err := Source(nameOrPath); err == nil {
		return nameOrPath + ".toml", data, nil
	}
	f, err := os.Open(nameOrPath)
	if errors.Is(err, fs.ErrNotExist) {
		_, err = Open(nameOrPath) // says what there is
		return "", nil, err
	}
	if err != nil {
		return "", nil, fmt.Errorf("cases: %w", err)
	}
	defer f.Close()
	data, err := readLimited(f)
	if err != nil {
		return "", nil, fmt.Errorf("cases: %s: %w", nameOrPath, err)
	}
	return nameOrPath, data, nil
}

// sourceEdit changes a case's text and leaves all that it doesn't touch as it
// stands, comments included. Positions are those of the text it was made for;
// changes are applied by bytes.
type sourceEdit struct {
	src     []byte
	scan    *scanner
	changes []splice
}

// splice replaces src[from:to].
type splice struct {
	from, to int
	text     string
}

func newSourceEdit(src []byte) *sourceEdit { return &sourceEdit{src: src, scan: scan(src)} }

// header returns the index of the header of a table among the entries, or -1.
func (e *sourceEdit) header(key ...string) int {
	id := join(key)
	for i, n := range e.scan.entries {
		if n.header && !n.array && join(n.key) == id {
			return i
		}
	}
	return -1
}

// lineStart and lineEnd return the bytes of a position's line, its end of line
// included.
func (e *sourceEdit) lineStart(at int) int { return bytes.LastIndexByte(e.src[:at], '\n') + 1 }

func (e *sourceEdit) lineEnd(at int) int {
	if n := bytes.IndexByte(e.src[at:], '\n'); n >= 0 {
		return at + n + 1
	}
	return len(e.src)
}

// table returns the bytes of a table: its header with the comment that stands
// directly above, and its keys, to the end of the last one's line.
func (e *sourceEdit) table(key ...string) (from, to int, ok bool) {
	i := e.header(key...)
	if i < 0 {
		return 0, 0, false
	}
	h := e.scan.entries[i]
	from, to = e.lineStart(h.start), e.lineEnd(h.end)
	for _, n := range e.scan.entries[i+1:] {
		if n.header {
			break
		}
		if !n.inline && n.end > 0 {
			to = e.lineEnd(n.end)
		}
	}
	for from > 0 {
		above := e.lineStart(from - 1)
		if !bytes.HasPrefix(bytes.TrimLeft(e.src[above:from], " \t"), []byte("#")) {
			break
		}
		from = above
	}
	if from == 0 {
		// The comment at the head of a file is about the file.
		from = e.lineStart(h.start)
	}
	return from, to, true
}

// remove takes out a table with the blank lines that follow it.
func (e *sourceEdit) remove(key ...string) bool {
	from, to, ok := e.table(key...)
	if !ok {
		return false
	}
	for to < len(e.src) {
		end := e.lineEnd(to)
		if len(bytes.TrimSpace(e.src[to:end])) > 0 {
			break
		}
		to = end
	}
	e.changes = append(e.changes, splice{from, to, ""})
	return true
}

// insertBefore puts text before a table and the comment above it.
func (e *sourceEdit) insertBefore(text string, key ...string) bool {
	from, _, ok := e.table(key...)
	if ok {
		e.changes = append(e.changes, splice{from, from, text})
	}
	return ok
}

// add puts text at the end, or at the start of the file.
func (e *sourceEdit) add(text string) {
	if n := len(e.src); n > 0 && e.src[n-1] != '\n' {
		text = "\n" + text
	}
	e.changes = append(e.changes, splice{len(e.src), len(e.src), text})
}

func (e *sourceEdit) prepend(text string) {
	e.changes = append(e.changes, splice{0, 0, text})
}

// set gives a key the value, which is TOML. A key that isn't there is added to its
// table, and the table to the end of the file.
func (e *sourceEdit) set(value string, key ...string) {
	id := join(key)
	for _, n := range e.scan.entries {
		if !n.header && n.end > 0 && join(n.key) == id {
			at := n.start + strings.LastIndex(string(e.src[n.start:n.end]), n.value)
			e.changes = append(e.changes, splice{at, at + len(n.value), value})
			return
		}
	}
	line := dotted(key[len(key)-1:]) + " = " + value + "\n"
	if i := e.header(key[:len(key)-1]...); i >= 0 {
		at := e.lineEnd(e.scan.entries[i].end)
		if at == len(e.src) && at > 0 && e.src[at-1] != '\n' {
			line = "\n" + line
		}
		e.changes = append(e.changes, splice{at, at, line})
		return
	}
	e.add("\n[" + dotted(key[:len(key)-1]) + "]\n" + line)
}

// unset removes a key with its line.
func (e *sourceEdit) unset(key ...string) {
	id := join(key)
	for _, n := range e.scan.entries {
		if !n.header && n.end > 0 && join(n.key) == id {
			e.changes = append(e.changes, splice{e.lineStart(n.start), e.lineEnd(n.end), ""})
		}
	}
}

// apply returns the changed text. Where changes meet, those made first come first;
// a change within a removed stretch is lost with it.
func (e *sourceEdit) apply() []byte {
	c := append([]splice(nil), e.changes...)
	sort.SliceStable(c, func(i, j int) bool { return c[i].from < c[j].from })
	var out bytes.Buffer
	at := 0
	for _, x := range c {
		if x.from < at {
			out.WriteString(x.text) // an insertion at the edge of what is gone
			at = max(at, x.to)
			continue
		}
		out.Write(e.src[at:x.from])
		out.WriteString(x.text)
		at = x.to
	}
	out.Write(e.src[at:])
	return out.Bytes()
}

// withOverrides writes overrides into the text, so that the text alone is the case.
func withOverrides(src []byte, ov []Override) ([]byte, error) {
	for _, o := range ov {
		s := &scanner{src: []byte(o.Path), line: 1}
		key, ok := s.key()
		if !ok || s.pos != len(s.src) || len(key) < 2 {
			return nil, fmt.Errorf("cases: --set %s=%s: want a key in a table, like study.until_s", o.Path, o.Value)
		}
		value := o.Value
		var v map[string]any
		if md, err := toml.Decode("x = "+value, &v); err != nil || len(v) != 1 || len(md.Keys()) < 1 {
			value = quote(value)
		}
		e := newSourceEdit(src)
		e.set(value, key...)
		src = e.apply()
	}
	return src, nil
}

// quote writes a string as a basic string of TOML.
func quote(s string) string {
	var b strings.Builder
	b.WriteByte('"')
	for _, c := range s {
		switch {
		case c == '"' || c == '\\':
			b.WriteRune('\\')
			b.WriteRune(c)
		case c < ' ' || c == 0x7f:
			fmt.Fprintf(&b, "\\u%04X", c)
		default:
			b.WriteRune(c)
		}
	}
	b.WriteByte('"')
	return b.String()
}

// quotes writes a list of strings.
func quotes(list []string) string {
	out := make([]string, len(list))
	for i, s := range list {
		out[i] = quote(s)
	}
	return "[" + strings.Join(out, ", ") + "]"
}

// digits writes a number to fifteen digits: what is beyond is rounding of the
// reduction.
func digits(x float64) string { return strconv.FormatFloat(x, 'g', 15, 64) }

func digitsAll(x []float64) string {
	out := make([]string, len(x))
	for i, v := range x {
		out[i] = digits(v)
	}
	return "[" + strings.Join(out, ", ") + "]"
}

// baseName is a file's name without directory and ending.
func baseName(name string) string { return strings.TrimSuffix(filepath.Base(name), ".toml") }

// appendTo adds a line to the end of a table, which is made if it isn't there.
func (e *sourceEdit) appendTo(line string, key ...string) {
	_, to, ok := e.table(key...)
	if !ok {
		head := "\n[" + dotted(key) + "]\n"
		for _, c := range e.changes {
			if strings.HasPrefix(strings.TrimPrefix(c.text, "\n"), head) || strings.Contains(c.text, head) {
				head = "" // made by a line before
			}
		}
		e.add(head + line)
		return
	}
	if to > 0 && e.src[to-1] != '\n' {
		line = "\n" + line
	}
	e.changes = append(e.changes, splice{to, to, line})
}
