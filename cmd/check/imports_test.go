package main

import (
	"encoding/json"
	"os/exec"
	"strings"
	"testing"
)

// TestImportsRunOneWay guards the direction of imports:
//
//	cmd, bench -> cases -> devices -> solvers
//	              cases -> engine  -> solvers
//
// and who may use which library.
func TestImportsRunOneWay(t *testing.T) {
	allowed := map[string][]string{ // folder -> folders it may import
		"solvers": {"solvers"},
		"devices": {"devices", "solvers"},
		"engine":  {"engine", "solvers"},
		"cases":   {"cases", "devices", "engine", "solvers"},
		"cmd":     {"cmd", "cases", "devices", "engine", "solvers"},
		"bench":   {"bench", "cases", "devices", "engine", "solvers"},
	}
	libraries := map[string][]string{ // library -> folders that may import it
		"gonum.org/v1/gonum":         {"solvers", "devices", "engine", "bench", "cmd"},
		"gonum.org/v1/plot":          {"engine", "bench"},
		"golang.org/x/sys/cpu":       {"solvers"},
		"github.com/BurntSushi/toml": {"cases"},
		"github.com/sirupsen/logrus": {"cmd"},
	}
	cmd := exec.Command("go", "list", "-json=ImportPath,Imports,TestImports,XTestImports", "islet/...")
	out, err := cmd.Output()
	if err != nil {
		t.Fatal(err)
	}
	seen := 0
	for dec := json.NewDecoder(strings.NewReader(string(out))); dec.More(); {
		var p struct {
			ImportPath                         string
			Imports, TestImports, XTestImports []string
		}
		if err := dec.Decode(&p); err != nil {
			t.Fatal(err)
		}
		from := folder(p.ImportPath)
		may, ok := allowed[from]
		if !ok {
			t.Errorf("package %s lies in a folder that is not foreseen", p.ImportPath)
			continue
		}
		seen++
		check := func(imports []string, may []string) {
			for _, i := range imports {
				if strings.HasPrefix(i, "islet/") {
					if !contains(may, folder(i)) {
						t.Errorf("%s imports %s", p.ImportPath, i)
					}
					continue
				}
				if !strings.Contains(strings.Split(i, "/")[0], ".") || i == "C" {
					continue // standard library
				}
				known := false
				for lib, who := range libraries {
					if i == lib || strings.HasPrefix(i, lib+"/") {
						known = true
						if !contains(who, from) {
							t.Errorf("%s imports %s, which is for %v", p.ImportPath, i, who)
						}
					}
				}
				if !known {
					t.Errorf("%s imports %s, which DEVELOPERS.md doesn't name", p.ImportPath, i)
				}
			}
		}
		check(p.Imports, may)
		check(p.TestImports, may)
		check(p.XTestImports, may)
	}
	if seen < 6 {
		t.Errorf("only %d packages seen", seen)
	}
}

func folder(path string) string {
	return strings.Split(strings.TrimPrefix(path, "islet/"), "/")[0]
}

func contains(list []string, s string) bool {
	for _, x := range list {
		if x == s {
			return true
		}
	}
	return false
}
