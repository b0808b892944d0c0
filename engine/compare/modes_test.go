package compare_test

import (
	"bytes"
	"context"
	"encoding/json"
	"strings"
	"testing"

	"islet/engine/compare"
)

// The heater's mode is -1/T, T = 10 ms; its reduction has the network's pair
// -(0.1 + 10)/1e-3 ± j 100 pi alone, which both share: closed forms.
func TestModesOfSettings(t *testing.T) {
	run := func(most int) *compare.Comparison {
		c, err := compare.Run(context.Background(), []compare.Setting{setting("full", 0.01), setting("reduced", 0)},
			compare.Options{Until: 0.2, Repetitions: 1, Modes: most})
		if err != nil {
			t.Fatal(err)
		}
		return c
	}
	c := run(0)
	full, reduced := c.Results[0].Modes, c.Results[1].Modes
	if full == nil || reduced == nil || !full.Stable || !reduced.Stable {
		t.Fatalf("modes: %+v, %+v", full, reduced)
	}
	if !strings.Contains(full.Rightmost, "-100 1/s") || !strings.Contains(reduced.Rightmost, "-10100 ± j314.159 1/s") {
		t.Errorf("rightmost: %q, %q", full.Rightmost, reduced.Rightmost)
	}
	if reduced.Shared != 1 || reduced.Missing != 1 || reduced.Only != 0 || reduced.Differ != 0 || len(reduced.Warnings) != 0 {
		t.Errorf("match: %+v", reduced)
	}
	if !strings.Contains(c.Text(), "modes at the operating point, against those of full") {
		t.Errorf("text lacks the modes:\n%s", c.Text())
	}
	var b bytes.Buffer
	var doc struct {
		Results []struct {
			Modes *struct{ Stable bool }
		}
	}
	if err := c.WriteJSON(&b); err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b.Bytes(), &doc); err != nil || doc.Results[1].Modes == nil || !doc.Results[1].Modes.Stable {
		t.Errorf("JSON: %v\n%s", err, &b)
	}
	for _, most := range []int{-1, 2} { // none, and fewer than there are unknowns
		if c := run(most); c.Results[0].Modes != nil || strings.Contains(c.Text(), "modes at the operating point") {
			t.Errorf("Modes = %d: they are there", most)
		}
	}
}
