package cases

import (
	"fmt"
	"strings"

	"github.com/BurntSushi/toml"
)

// The decoder of TOML keeps no positions of keys, so this scanner finds them:
// it walks over the source once and notes every table header and every key
// with its line. It knows just enough of the language (keys, strings, comments,
// arrays, inline tables) to do that rightly on valid files, and goes on at the
// next line on others, which the decoder then refuses.

// entry is a table header or a key with a value.
type entry struct {
	key        []string // from the root
	line       int
	start, end int    // bytes of the source: header, or key and value
	value      string // source of the value
	header     bool
	array      bool // [[header]]
	inline     bool // within an inline table
}

type scanner struct {
	src     []byte
	pos     int
	line    int
	table   []string
	depth   int
	entries []entry
	// tooDeep is the first line where nesting exceeds maxNesting; the scan
	// ends there.
	tooDeep int
	tooMany bool // more than maxKeys entries
}

// scan walks over the source.
func scan(src []byte) *scanner {
	s := &scanner{src: src, line: 1}
	if strings.HasPrefix(string(src[:min(3, len(src))]), "\ufeff") {
		s.pos = 3
	}
	for s.pos < len(s.src) && s.tooDeep == 0 && !s.tooMany {
		s.blank(true)
		if s.pos == len(s.src) {
			break
		}
		ok := false
		if s.peek() == '[' {
			ok = s.header()
		} else {
			ok = s.pair(s.table, false)
		}
		if !ok {
			s.skipLine()
		}
	}
	return s
}

func (s *scanner) peek() byte {
	if s.pos < len(s.src) {
		return s.src[s.pos]
	}
	return 0
}

func (s *scanner) next() {
	if s.pos < len(s.src) {
		if s.src[s.pos] == '\n' {
			s.line++
		}
		s.pos++
	}
}

func (s *scanner) skipLine() {
	for s.pos < len(s.src) && s.src[s.pos] != '\n' {
		s.pos++
	}
}

// blank skips spaces and, if lines is set, ends of lines and comments.
func (s *scanner) blank(lines bool) {
	for s.pos < len(s.src) {
		switch c := s.src[s.pos]; {
		case c == ' ' || c == '\t':
			s.pos++
		case lines && (c == '\n' || c == '\r'):
			s.next()
		case lines && c == '#':
			s.skipLine()
		default:
			return
		}
	}
}

func (s *scanner) note(e entry) {
	if len(s.entries) == maxKeys {
		s.tooMany = true
		return
	}
	s.entries = append(s.entries, e)
}

func (s *scanner) header() bool {
	e := entry{start: s.pos, line: s.line, header: true}
	s.pos++
	if s.peek() == '[' {
		s.pos++
		e.array = true
	}
	key, ok := s.key()
	if !ok || s.peek() != ']' {
		return false
	}
	s.pos++
	if e.array {
		if s.peek() != ']' {
			return false
		}
		s.pos++
	}
	e.key, e.end = key, s.pos
	s.note(e)
	s.table = key
	return true
}

// pair scans key = value.
func (s *scanner) pair(table []string, inline bool) bool {
	e := entry{start: s.pos, line: s.line, inline: inline}
	key, ok := s.key()
	if !ok || s.peek() != '=' {
		return false
	}
	s.pos++
	s.blank(false)
	e.key = append(append(make([]string, 0, len(table)+len(key)), table...), key...)
	at := len(s.entries)
	s.note(e)
	if s.tooMany {
		return false
	}
	from := s.pos
	if !s.value(e.key) {
		return false
	}
	s.entries[at].end = s.pos
	s.entries[at].value = strings.TrimRight(string(s.src[from:s.pos]), " \t\r")
	return true
}

// key scans a key, dotted or not, with the spaces around it.
func (s *scanner) key() ([]string, bool) {
	var key []string
	for {
		s.blank(false)
		part, ok := s.keyPart()
		if !ok {
			return nil, false
		}
		key = append(key, part)
		if len(key) > maxNesting {
			s.tooDeep = s.line
			return nil, false
		}
		s.blank(false)
		if s.peek() != '.' {
			return key, true
		}
		s.pos++
	}
}

func (s *scanner) keyPart() (string, bool) {
	from := s.pos
	switch c := s.peek(); c {
	case '"', '\'':
		if !s.str() {
			return "", false
		}
		raw := string(s.src[from:s.pos])
		if c == '"' && strings.Contains(raw, `\`) {
			var v struct{ X string }
			if _, err := toml.Decode("x = "+raw, &v); err != nil {
				return "", false
			}
			return v.X, true
		}
		return raw[1 : len(raw)-1], true
	}
	for s.pos < len(s.src) && !strings.ContainsRune(" \t\r\n.=[]{},#\"'", rune(s.src[s.pos])) {
		s.pos++
	}
	return string(s.src[from:s.pos]), s.pos > from
}

// value scans a value; keys of inline tables in it belong to the key given.
func (s *scanner) value(key []string) bool {
	switch s.peek() {
	case '"', '\'':
		return s.str()
	case '[', '{':
		open := s.peek()
		s.depth++
		defer func() { s.depth-- }()
		if s.depth > maxNesting {
			s.tooDeep = s.line
			return false
		}
		s.pos++
		for {
			s.blank(true)
			switch c := s.peek(); {
			case s.pos == len(s.src):
				return false
			case open == '[' && c == ']' || open == '{' && c == '}':
				s.pos++
				return true
			case c == ',':
				s.pos++
				continue
			}
			if open == '[' && !s.value(key) || open == '{' && !s.pair(key, true) {
				return false
			}
		}
	}
	from := s.pos
	for s.pos < len(s.src) && !strings.ContainsRune("\r\n,]}#", rune(s.src[s.pos])) {
		s.pos++
	}
	return s.pos > from
}

// str scans a string of one of the four forms.
func (s *scanner) str() bool {
	quote := s.src[s.pos]
	triple := string([]byte{quote, quote, quote})
	if strings.HasPrefix(string(s.src[s.pos:min(s.pos+3, len(s.src))]), triple) {
		s.pos += 3
		for s.pos < len(s.src) {
			if quote == '"' && s.src[s.pos] == '\\' {
				s.pos++
				s.next()
				continue
			}
			if string(s.src[s.pos:min(s.pos+3, len(s.src))]) == triple {
				s.pos += 3
				// Up to two quotes may stand before the closing ones.
				for k := 0; k < 2 && s.peek() == quote; k++ {
					s.pos++
				}
				return true
			}
			s.next()
		}
		return false
	}
	s.pos++
	for s.pos < len(s.src) && s.src[s.pos] != '\n' {
		switch c := s.src[s.pos]; {
		case c == quote:
			s.pos++
			return true
		case c == '\\' && quote == '"':
			s.pos++
			if s.peek() == '\n' {
				return false
			}
		}
		s.next()
	}
	return false
}

// repeated finds tables and keys that are defined a second time and blanks
// them out of a copy of the source, so that all else in it can be checked. It
// calls report for each with the line of the first definition.
func (s *scanner) repeated(report func(e entry, first int)) []byte {
	src := append([]byte(nil), s.src...)
	erase := func(from, to int) {
		for i := from; i < to; i++ {
			if src[i] != '\n' && src[i] != '\r' {
				src[i] = ' '
			}
		}
	}
	type mark struct {
		line   int
		header bool
	}
	seen := make(map[string]mark)
	inArray, inErased := false, false
	for i, e := range s.entries {
		if e.header {
			inArray, inErased = e.array, false
		}
		if inArray || inErased || e.inline {
			continue
		}
		id := join(e.key)
		first, dup := seen[id]
		switch {
		case !dup:
			seen[id] = mark{e.line, e.header}
		case first.header != e.header:
			// A table and a value of one name: the decoder's business.
		case e.header:
			report(e, first.line)
			inErased = true
			end := len(src)
			for _, n := range s.entries[i+1:] {
				if n.header {
					end = n.start
					break
				}
			}
			erase(e.start, end)
		case e.end > 0:
			report(e, first.line)
			erase(e.start, e.end)
		}
	}
	return src
}

// join makes a map key of a key's parts.
func join(key []string) string { return strings.Join(key, "\x00") }

// dotted writes a key as it stands in a file.
func dotted(key []string) string {
	out := make([]string, len(key))
	for i, p := range key {
		bare := p != ""
		for _, c := range p {
			bare = bare && (c == '-' || c == '_' || c >= '0' && c <= '9' || c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z')
		}
		if out[i] = p; !bare {
			out[i] = fmt.Sprintf("%q", p)
		}
	}
	return strings.Join(out, ".")
}
