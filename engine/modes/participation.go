package modes

import (
	"sort"

	"islet/engine"
)

// Participation factors: with w the left and v the right eigenvector of a
// mode, p_k = w_k v_k is both the part of state k in the mode and of the mode
// in state k, and the derivative of the eigenvalue with respect to A_kk; they
// sum to one over the states. Reports give |p_k| over the sum of all.
//
// Source: I. J. Perez-Arriaga, G. C. Verghese, F. C. Schweppe, "Selective
// modal analysis with applications to electric power systems", IEEE Trans.
// Power Apparatus and Systems PAS-101(9), 3117-3134, 1982.

// shares sums participation by a property of the states, largest first; less
// than 1e-4 is left out.
func (rep *Report) shares(p []float64, of func(*engine.LinearUnknown) string) []Share {
	t := newTally()
	for i, v := range p {
		t.add(of(&rep.States[i]), v)
	}
	return t.largest()
}

// tally sums by name, in order of appearance.
type tally struct {
	at   map[string]int
	list []Share
}

func newTally() *tally { return &tally{at: make(map[string]int)} }

func (t *tally) add(name string, v float64) {
	if name == "" {
		name = "(none)"
	}
	k, ok := t.at[name]
	if !ok {
		k = len(t.list)
		t.at[name] = k
		t.list = append(t.list, Share{Name: name})
	}
	t.list[k].Value += v
}

func (t *tally) largest() []Share {
	l := t.list
	sort.SliceStable(l, func(i, j int) bool { return l[i].Value > l[j].Value })
	n := len(l)
	for n > 0 && l[n-1].Value < 1e-4 {
		n--
	}
	return l[:n]
}

// Participants returns the states with the largest participation in a mode: at
// most the given number, and none below the least share.
func (rep *Report) Participants(m *Mode, most int, least float64) []Share {
	var list []Share
	for i, p := range m.Participation {
		if p >= least {
			list = append(list, Share{rep.States[i].Name, p})
		}
	}
	sort.SliceStable(list, func(i, j int) bool { return list[i].Value > list[j].Value })
	return list[:min(most, len(list))]
}
