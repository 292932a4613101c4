package config

import "strings"

// nearest is the known word closest to an unknown one, or "" if none is
// close enough to be a slip of the fingers.
func nearest(word string, known []string) string {
	best, found := 1+max(2, len(word)/3), ""
	for _, k := range known {
		d := distance(strings.ToLower(word), k)
		if d < best && d < len(k) {
			best, found = d, k
		}
	}
	return found
}

// distance is the number of letters to insert, delete, replace or swap with
// their neighbour to turn a into b (the restricted Damerau-Levenshtein
// distance, by the usual table).
func distance(a, b string) int {
	table := make([][]int, len(a)+1)
	for i := range table {
		table[i] = make([]int, len(b)+1)
		table[i][0] = i
	}
	for j := range table[0] {
		table[0][j] = j
	}
	for i := 1; i <= len(a); i++ {
		for j := 1; j <= len(b); j++ {
			cost := 1
			if a[i-1] == b[j-1] {
				cost = 0
			}
			d := min(table[i-1][j]+1, table[i][j-1]+1, table[i-1][j-1]+cost)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				d = min(d, table[i-2][j-2]+1)
			}
			table[i][j] = d
		}
	}
	return table[len(a)][len(b)]
}

// all writes words as a list for a message.
func all(words []string) string { return strings.Join(words, ", ") }
