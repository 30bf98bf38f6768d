package claim

import "strings"

// Nearest is the word nearest to one that was read, by the number of letters to change; empty
// where none is near.
func Nearest(word string, words []string) string {
	best, least := "", 1+max(1, len([]rune(word))/3)
	for _, w := range words {
		if d := distance([]rune(strings.ToLower(word)), []rune(strings.ToLower(w))); d < least {
			best, least = w, d
		}
	}
	return best
}

// distance is Damerau and Levenshtein's: letters to change, add, leave out, or swap with the
// next one.
func distance(a, b []rune) int {
	rows := make([][]int, len(a)+1)
	for i := range rows {
		rows[i] = make([]int, len(b)+1)
		rows[i][0] = i
	}
	for j := range rows[0] {
		rows[0][j] = j
	}
	for i := 1; i <= len(a); i++ {
		for j := 1; j <= len(b); j++ {
			change := rows[i-1][j-1]
			if a[i-1] != b[j-1] {
				change++
			}
			rows[i][j] = min(change, rows[i-1][j]+1, rows[i][j-1]+1)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				rows[i][j] = min(rows[i][j], rows[i-2][j-2]+1)
			}
		}
	}
	return rows[len(a)][len(b)]
}
