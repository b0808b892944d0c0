package bench

import (
	"encoding/csv"
	"math"
	"math/cmplx"
	"os"
	"strconv"
	"testing"

	"islet/cases"
	"islet/engine/modes"
)

// Eigenvalues of shipped cases against LAPACK's: the matrices that islet modes
// --export writes were given to scipy.linalg.eigvals (SciPy 1.10.1 of Debian
// bookworm, LAPACK's dgeev); see testdata/SOURCES.md for the commands. Two QR
// algorithms leave rounding times the matrix's size times the eigenvalue's
// condition between them.
func TestEigenvaluesAgainstLAPACK(t *testing.T) {
	f, err := os.Open("../testdata/lapack-eigenvalues.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	theirs := make(map[string][]complex128)
	for _, r := range rows[1:] {
		re, err1 := strconv.ParseFloat(r[1], 64)
		im, err2 := strconv.ParseFloat(r[2], 64)
		if err1 != nil || err2 != nil {
			t.Fatalf("row %v", r)
		}
		theirs[r[0]] = append(theirs[r[0]], complex(re, im))
	}
	if len(theirs) != 5 {
		t.Errorf("%d cases", len(theirs))
	}
	for name, list := range theirs {
		c, err := cases.Open(name)
		if err != nil {
			t.Fatal(err)
		}
		m, err := c.Start(nil)
		if err != nil {
			t.Fatal(err)
		}
		l, err := m.Linearise(nil)
		if err != nil {
			t.Fatal(err)
		}
		r, err := modes.Analyse(l, nil)
		if err != nil {
			t.Fatal(err)
		}
		if len(list) != len(r.Modes) {
			t.Errorf("%s: %d modes, LAPACK finds %d", name, len(r.Modes), len(list))
		}
		taken := make([]bool, len(list))
		worst := 0.0
		for i := range r.Modes {
			mode := &r.Modes[i]
			best, at := math.Inf(1), -1
			for k, z := range list {
				if d := cmplx.Abs(z - mode.Value); !taken[k] && d < best {
					best, at = d, k
				}
			}
			if at < 0 {
				t.Errorf("%s: %s has no partner", name, mode)
				continue
			}
			taken[at] = true
			allowed := 1e-9 * (1 + mode.Condition) * (1 + cmplx.Abs(mode.Value))
			if mode.Zero {
				allowed = 1e-5 // exactly zero here, to rounding there
			}
			if best > allowed {
				t.Errorf("%s: %s, LAPACK has %.12g, %.3g off, allowed %.3g", name, mode, list[at], best, allowed)
			}
			worst = math.Max(worst, best/(1+cmplx.Abs(mode.Value)))
		}
		t.Logf("%s: %d modes within %.2g of LAPACK's, relative", name, len(r.Modes), worst)
	}
}
