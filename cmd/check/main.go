// Command check runs what a change must pass before it is committed: gofmt,
// go vet, staticcheck (pinned), and the tests. It prints what fails and exits
// with 1.
package main

import (
	"fmt"
	"os"
	"os/exec"
	"strings"
)

// staticcheckVersion pins the linter; it is run, not installed.
const staticcheckVersion = "v0.8.2"

func main() {
	failed := false
	fail := func(format string, a ...any) {
		failed = true
		fmt.Printf(format+"\n", a...)
	}
	out, err := exec.Command("gofmt", "-l", ".").CombinedOutput()
	if err != nil || len(out) > 0 {
		fail("gofmt: %s", strings.TrimSpace(string(out)))
	}
	for _, c := range [][]string{
		{"go", "vet", "./..."},
		{"go", "run", "honnef.co/go/tools/cmd/staticcheck@" + staticcheckVersion, "./..."},
		{"go", "test", "./..."},
	} {
		fmt.Println(strings.Join(c, " "))
		cmd := exec.Command(c[0], c[1:]...)
		cmd.Stdout, cmd.Stderr = os.Stdout, os.Stderr
		if err := cmd.Run(); err != nil {
			fail("%s: %v", strings.Join(c, " "), err)
		}
	}
	if failed {
		os.Exit(1)
	}
}
