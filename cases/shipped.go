package cases

import (
	"embed"
	"fmt"
	"io"
	"path"
	"sort"
	"strings"

	"github.com/BurntSushi/toml"
)

//go:embed files/*.toml
var shipped embed.FS

// Info tells about a shipped case.
type Info struct {
	Name, Title string
	Text        string // first line of the study's text
}

func shippedNames() []string {
	files, err := shipped.ReadDir("files")
	if err != nil {
		return nil
	}
	var names []string
	for _, f := range files {
		names = append(names, strings.TrimSuffix(f.Name(), ".toml"))
	}
	sort.Strings(names)
	return names
}

// Shipped lists the shipped cases by name, and last the generated ones.
func Shipped() []Info {
	var out []Info
	for _, name := range shippedNames() {
		var v struct {
			Study struct{ Title, Text string }
		}
		data, err := Source(name)
		if err != nil {
			continue
		}
		if _, err := toml.Decode(string(data), &v); err != nil {
			continue
		}
		line, _, _ := strings.Cut(strings.TrimSpace(v.Study.Text), "\n")
		out = append(out, Info{name, v.Study.Title, line})
	}
	out = append(out, Info{"mesh-N", fmt.Sprintf("Generated mesh of N inverters, N from %d to %d, such as mesh-100", meshLeast, meshMost),
		"70 % forming the grid by three kinds of control, 30 % following, on short cables; 15 s with twelve events"})
	return out
}

// Source returns the file of a shipped or generated case, to be copied and
// changed.
func Source(name string) ([]byte, error) {
	if n, ok := meshSize(name); ok {
		return meshSource(n), nil
	}
	if !strings.ContainsAny(name, `/\`) {
		if data, err := shipped.ReadFile(path.Join("files", name+".toml")); err == nil {
			return data, nil
		}
	}
	return nil, fmt.Errorf("cases: no shipped case %q; %s", name, suggest(name, shippedNames()))
}

// readLimited reads a file that may be one byte too long, no more.
func readLimited(r io.Reader) ([]byte, error) { return io.ReadAll(io.LimitReader(r, MaxBytes+1)) }
