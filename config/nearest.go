package config

import "strings"

// nearest returns the candidate that a misspelt word most likely meant.
func nearest(word string, candidates []string) (string, bool) {
	if len(word) > 64 {
		return "", false
	}
	word = strings.ToLower(word)
	best, bestDistance := "", (len(word)-1)/4+2
	for _, c := range candidates {
		if d := distance(word, strings.ToLower(c)); d < bestDistance {
			best, bestDistance = c, d
		}
	}
	return best, best != ""
}

// distance is the least number of letters to insert, delete, replace or swap
// with their neighbour that turns a into b (optimal string alignment).
func distance(a, b string) int {
	before := make([]int, len(b)+1)
	row := make([]int, len(b)+1)
	next := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := 1; i <= len(a); i++ {
		next[0] = i
		for j := 1; j <= len(b); j++ {
			cost := 1
			if a[i-1] == b[j-1] {
				cost = 0
			}
			next[j] = min(row[j]+1, next[j-1]+1, row[j-1]+cost)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				next[j] = min(next[j], before[j-2]+1)
			}
		}
		before, row, next = row, next, before
	}
	return row[len(b)]
}
