package expr

import "strings"

// Nearest returns the allowed name that a misspelt one was probably meant to be:
// the first of those with the fewest insertions, deletions, replacements and
// swaps of neighbours, upper and lower case being alike. It returns "" when even
// that takes more than a third of the letters.
//
// The distance is the optimal string alignment distance (Damerau 1964, CACM
// 7:171, restricted to one edit of a letter).
func Nearest(name string, allowed []string) string {
	want := []rune(strings.ToLower(name))
	best, least := "", 1+max(1, len(want)/3)
	for _, a := range allowed {
		have := []rune(strings.ToLower(a))
		if d := editDistance(want, have); d < least && d < max(len(want), len(have)) {
			best, least = a, d
		}
	}
	return best
}

func editDistance(a, b []rune) int {
	before, last, row := make([]int, len(b)+1), make([]int, len(b)+1), make([]int, len(b)+1)
	for j := range row {
		last[j] = j
	}
	for i := range a {
		row[0] = i + 1
		for j := range b {
			change := last[j]
			if a[i] != b[j] {
				change++
			}
			row[j+1] = min(change, last[j+1]+1, row[j]+1)
			if i > 0 && j > 0 && a[i] == b[j-1] && a[i-1] == b[j] {
				row[j+1] = min(row[j+1], before[j-1]+1)
			}
		}
		before, last, row = last, row, before
	}
	return last[len(b)]
}
