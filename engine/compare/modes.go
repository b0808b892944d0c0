package compare

import (
	"fmt"
	"math/cmplx"
	"sort"

	"islet/engine"
	"islet/engine/modes"
)

// DefaultModes is the number of unknowns up to which [Run] matches modes unless
// told otherwise: the time for all modes grows with the cube of it.
const DefaultModes = 400

// Modes tells what a setting makes of the modes at the operating point.
type Modes struct {
	Failure   string // why there are none, "" if there are
	Stable    bool
	Rightmost string // the mode with the largest real part, in words
	// Shared is the number of modes that match one of the reference's, Differ
	// of how many of them the damping differs, and Only and Missing are those
	// without a partner here and in the reference; zero for the reference.
	Shared, Differ, Only, Missing int
	// Warnings are what must not be overlooked: another verdict on stability,
	// the slowest shared mode whose damping differs.
	Warnings []string
}

// modesOf analyses a setting at its operating point.
func modesOf(s Setting, o engine.Options) (*modes.Report, error) {
	o.Record, o.NoLedger = []string{}, true
	sim, err := s.Start(&o)
	if err != nil {
		return nil, err
	}
	l, err := sim.Linearise(&engine.LinearOptions{Inputs: []string{}, Outputs: []string{}})
	if err != nil {
		return nil, err
	}
	return modes.Analyse(l, nil)
}

// matchModes fills Modes of every result.
func (c *Comparison) matchModes(settings []Setting, o engine.Options) {
	var ref *modes.Report
	for i := range c.Results {
		r := &c.Results[i]
		rep, err := modesOf(settings[i], o)
		if err != nil {
			r.Modes = &Modes{Failure: err.Error()}
			if i == 0 {
				return // nothing to match with
			}
			continue
		}
		r.Modes = &Modes{Stable: rep.Stable}
		if m := rep.Rightmost(); m != nil {
			r.Modes.Rightmost = m.String()
		}
		if i == 0 {
			ref = rep
			continue
		}
		r.Modes.match(c.Results[0].Setting, ref, r.Setting, rep)
	}
}

func (m *Modes) match(nameA string, a *modes.Report, nameB string, b *modes.Report) {
	k := modes.Match(nameA, a, nameB, b, modes.MatchOptions{})
	m.Shared, m.Only, m.Missing = len(k.Pairs), len(k.OnlyB), len(k.OnlyA)
	if a.Stable != b.Stable {
		m.Warnings = append(m.Warnings, fmt.Sprintf("STABILITY DIFFERS: %s is %s, %s %s", nameA, verdictOf(a.Stable), nameB, verdictOf(b.Stable)))
	}
	var differ []modes.Pair
	for _, p := range k.Pairs {
		if p.Warning != "" {
			differ = append(differ, p)
		}
	}
	m.Differ = len(differ)
	if m.Differ == 0 {
		return
	}
	size := func(p modes.Pair) float64 { return cmplx.Abs(a.Modes[p.A-1].Value) }
	sort.SliceStable(differ, func(i, j int) bool { return size(differ[i]) < size(differ[j]) })
	p, q := &a.Modes[differ[0].A-1], &b.Modes[differ[0].B-1]
	m.Warnings = append(m.Warnings, fmt.Sprintf("the damping of %d of %d shared modes differs; the slowest of them: %.4g Hz at %.1f %% in %s, %.4g Hz at %.1f %% here",
		m.Differ, m.Shared, p.Frequency, 100*p.Damping, nameA, q.Frequency, 100*q.Damping))
}

// verdictOf words a verdict on stability.
func verdictOf(stable bool) string {
	if stable {
		return "stable"
	}
	return "UNSTABLE"
}

// writeModes prints the modes of every setting, if they were looked for.
func (c *Comparison) writeModes(p *printer) {
	if len(c.Results) == 0 || c.Results[0].Modes == nil {
		return
	}
	p.printf("\nmodes at the operating point, against those of %s\n", c.Results[0].Setting)
	wide := 0
	for _, r := range c.Results {
		wide = max(wide, len(r.Setting))
	}
	for _, r := range c.Results {
		m := r.Modes
		if m == nil {
			continue
		}
		if m.Failure != "" {
			p.printf("%-*s  no modes: %s\n", wide, r.Setting, brief(m.Failure))
			continue
		}
		p.printf("%-*s  %-8s  %s\n", wide, r.Setting, verdictOf(m.Stable), m.Rightmost)
		for _, w := range m.Warnings {
			p.printf("  WARNING: %s\n", w)
		}
	}
}
