package devices

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// VectorGroup is the connection of a transformer's two windings and its clock
// number, as on the nameplate: "Dyn11".
type VectorGroup struct {
	// HV is the high-voltage winding, 'Y' or 'D'; LV the low-voltage one,
	// 'y', 'd' or 'z'.
	HV, LV byte
	// HVNeutral and LVNeutral tell whether the neutral is brought out.
	HVNeutral, LVNeutral bool
	// Clock is how far the low-voltage side's positive sequence lags, in
	// twelfths of a turn, 0 to 11.
	Clock int
}

// ParseVectorGroup reads a vector group such as "Yy0", "Dyn11" or "YNd1": the
// high-voltage winding in capitals, the low-voltage winding in small letters,
// N or n for a neutral brought out, and the clock number. Stars with stars and
// deltas with deltas have even numbers, mixed connections odd ones (a zigzag
// counts as a delta). Source of the notation: IEC 60076-1.
func ParseVectorGroup(s string) (VectorGroup, error) {
	fail := func(why string) (VectorGroup, error) {
		return VectorGroup{}, fmt.Errorf("devices: vector group %q: %s: want one like Yy0, Dyn11, YNd1", s, why)
	}
	var g VectorGroup
	rest := s
	next := func(letters string) (c byte, ok bool) {
		if rest == "" || !strings.Contains(letters, rest[:1]) {
			return 0, false
		}
		c, rest = rest[0], rest[1:]
		return c, true
	}
	var ok bool
	if g.HV, ok = next("YD"); !ok {
		return fail("no high-voltage winding Y or D")
	}
	_, g.HVNeutral = next("N")
	if g.LV, ok = next("ydz"); !ok {
		return fail("no low-voltage winding y, d or z")
	}
	_, g.LVNeutral = next("n")
	if g.HV == 'D' && g.HVNeutral || g.LV == 'd' && g.LVNeutral {
		return fail("a delta has no neutral")
	}
	clock, err := strconv.ParseUint(rest, 10, 8)
	if err != nil || clock > 11 {
		return fail("no clock number from 0 to 11")
	}
	g.Clock = int(clock)
	// A star's phases are at the terminals' angle, a delta's or zigzag's at
	// 30 degrees from it.
	mixed := (g.HV == 'D') != (g.LV != 'y')
	if mixed != (g.Clock%2 == 1) {
		return fail(fmt.Sprintf("clock number %d can't come from these windings", g.Clock))
	}
	return g, nil
}

// String returns the group as on the nameplate.
func (g VectorGroup) String() string {
	n := func(neutral bool, letter string) string {
		if neutral {
			return letter
		}
		return ""
	}
	return string(g.HV) + n(g.HVNeutral, "N") + string(g.LV) + n(g.LVNeutral, "n") + strconv.Itoa(g.Clock)
}

// MarshalText is String.
func (g VectorGroup) MarshalText() ([]byte, error) { return []byte(g.String()), nil }

// UnmarshalText is [ParseVectorGroup].
func (g *VectorGroup) UnmarshalText(text []byte) error {
	parsed, err := ParseVectorGroup(string(text))
	if err == nil {
		*g = parsed
	}
	return err
}

// Lag returns by how much the low-voltage side's positive sequence lags, rad:
// 30 degrees times the clock number, so that Dyn11 leads by 30 degrees.
func (g VectorGroup) Lag() float64 { return float64(g.Clock) * math.Pi / 6 }
