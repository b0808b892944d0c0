package cases

import (
	"fmt"
	"strings"
)

// distance is the Damerau-Levenshtein distance in its restricted form (optimal
// string alignment): insertions, deletions, substitutions and swaps of
// neighbours, case ignored. Source: G. Navarro, A guided tour to approximate
// string matching, ACM Computing Surveys 33(1), 2001 (from memory).
func distance(a, b string) int {
	a, b = strings.ToLower(a), strings.ToLower(b)
	last := make([]int, len(b)+1)
	row := make([]int, len(b)+1)
	next := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := range len(a) {
		next[0] = i + 1
		for j := range len(b) {
			d := row[j]
			if a[i] != b[j] {
				d++
			}
			d = min(d, row[j+1]+1, next[j]+1)
			if i > 0 && j > 0 && a[i] == b[j-1] && a[i-1] == b[j] {
				d = min(d, last[j-1]+1)
			}
			next[j+1] = d
		}
		last, row, next = row, next, last
	}
	return row[len(b)]
}

// nearest finds the known name closest to one, if any is close: within a third
// of its length, or two, and not all of it. A name that begins another counts as
// close. Of very many names only the first are looked at.
func nearest(name string, known []string) (string, bool) {
	best, at := "", max(2, len(name)/3)+1
	if len(name) > MaxName {
		return "", false
	}
	known = known[:min(len(known), mostCompared)]
	for _, k := range known {
		if d := distance(name, k); d < at && d < max(len(name), len(k)) {
			best, at = k, d
		}
	}
	if best == "" && len(name) >= 3 {
		for _, k := range known {
			if strings.HasPrefix(strings.ToLower(k), strings.ToLower(name)) {
				return k, true
			}
		}
	}
	return best, best != ""
}

// mostCompared bounds the work of looking for a near name.
const mostCompared = 1000

// suggest ends a message about an unknown name.
func suggest(name string, known []string) string {
	k, _ := nearest(name, known)
	return hint(k, known)
}

// hint is suggest for what nearest has found, "" for nothing.
func hint(near string, known []string) string {
	if near != "" {
		return fmt.Sprintf("did you mean %s?", near)
	}
	if len(known) == 0 {
		return "there are none"
	}
	return "there are " + list(known)
}

// list writes names with commas, a dozen at most.
func list(names []string) string {
	const most = 12
	if len(names) > most {
		return fmt.Sprintf("%s and %d more", strings.Join(names[:most], ", "), len(names)-most)
	}
	return strings.Join(names, ", ")
}
