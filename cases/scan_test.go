package cases

import (
	"fmt"
	"reflect"
	"strings"
	"testing"

	"github.com/BurntSushi/toml"
)

func TestScanFindsLines(t *testing.T) {
	for _, c := range []struct {
		name, src string
		want      []string // "line key" in order
	}{
		{"plain", "a = 1\n\n[t]\nb = 2 # c = 3\n# d = 4\ne=\"x\"\n", []string{"1 a", "3 t", "4 t.b", "6 t.e"}},
		{"dotted and quoted", "[bus.quay]\nx.y . \"z w\" = 1\n'q.r' = 2\n[\"a b\".'c']\nk=1", []string{"1 bus.quay", `2 bus.quay.x.y."z w"`, `3 bus.quay."q.r"`, `4 "a b".c`, `5 "a b".c.k`}},
		{"strings", "a = \"\"\"\nb = 1\n\\\"\"\"\"\"\nc = '''\nd = 2\n'''\ne = \"# \\\" [x]\"\nf = '\\'\ng = 1", []string{"1 a", "4 c", "7 e", "8 f", "9 g"}},
		{"inline", "a = { b = 1, c = { d = [1, 2] } }\ne = 2", []string{"1 a", "1 a.b", "1 a.c", "1 a.c.d", "2 e"}},
		{"lists", "a = [ # one\n  1, [2, \"]\"],\n  { b = 1 },\n]\nc = 1", []string{"1 a", "3 a.b", "5 c"}},
		{"array tables", "[[d]]\nk = 1\n[[d]]\nk = 2", []string{"1 d", "2 d.k", "3 d", "4 d.k"}},
		{"line ends", "a = 1\r\nb = 2\r\n", []string{"1 a", "2 b"}},
		{"byte order mark", "\ufeffa = 1\nb = 2", []string{"1 a", "2 b"}},
		{"escaped key", "\"\\u0061\" = 1", []string{"1 a"}},
		{"empty key", "\"\" = 1", []string{`1 ""`}},
		{"goes on after rubbish", "a b\n[x\nc = 1\n= 2\nd = 3", []string{"3 c", "5 d"}},
	} {
		s := scan([]byte(c.src))
		var got []string
		for _, e := range s.entries {
			got = append(got, fmt.Sprintf("%d %s", e.line, dotted(e.key)))
		}
		if !reflect.DeepEqual(got, c.want) {
			t.Errorf("%s: got %q, want %q", c.name, got, c.want)
		}
	}
}

func TestScanKeepsValues(t *testing.T) {
	s := scan([]byte("a = 1.50 # x\nb = \"q\"  \nc = [1,\n 2]\n"))
	want := []string{"1.50", `"q"`, "[1,\n 2]"}
	for i, e := range s.entries {
		if e.value != want[i] {
			t.Errorf("value of %s is %q, want %q", dotted(e.key), e.value, want[i])
		}
	}
}

// agrees compares the scanner with the decoder on a source that the decoder
// accepts: the same keys in the same order.
func agrees(t *testing.T, src string) {
	t.Helper()
	var v map[string]any
	md, err := toml.Decode(src, &v)
	s := scan([]byte(src))
	if err != nil || s.tooDeep > 0 || s.tooMany {
		return
	}
	var got, want []string
	for _, e := range s.entries {
		got = append(got, join(e.key))
	}
	for _, k := range md.Keys() {
		want = append(want, join(k))
	}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("of %q the scanner finds %q, the decoder %q", src, got, want)
	}
}

func TestScanAgreesWithTheDecoder(t *testing.T) {
	for _, name := range shippedNames() {
		data, err := Source(name)
		if err != nil {
			t.Fatal(err)
		}
		agrees(t, string(data))
	}
}

func FuzzScan(f *testing.F) {
	for _, s := range []string{
		"a.b=1\na.c=2\n[x]\ny={p=1,q={r=2}}\n[[z]]\nk=[{m=1},{m=2}]\n[[z]]\nj=1\n[u.v.w]\n[u]\n'q.r'.\"s t\"=3\n",
		"a={\n b=1, # hi\n c=2,\n}\n", "a='\\e'\nb=\"\\e\\x41\"", "a=[[[1]]]\n[b]\nc=07:32\n", "\xef\xbb\xbfa=1",
		"d=1979-05-27 07:32:00Z\n", "a=\"\"\"\"\"x\"\"\"\"\"\nb=''''a'''''\n", "a = \"\"\"\\\n  b\"\"\" # c\n", "a=[1,2\n,#\n]", "\"\\u00e9\"=1\n\"a\\nb\"=2",
		strings.Repeat("[", 20), "a" + strings.Repeat(".a", 20) + "=1",
	} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, src string) { agrees(t, src) })
}
