package config

import (
	"fmt"
	"slices"
	"strings"
)

// last is the key's own name: "folder" of "station[0].streak.folder".
func last(key string) string { return key[strings.LastIndexByte(key, '.')+1:] }

// path checks how a path is written.
func path(l *list, key, p string, required bool) {
	switch f := fault(p); {
	case p == "" && required:
		l.add(key, last(key)+" is missing", fmt.Sprintf("write for example %s = %s", last(key), example(key)))
	case strings.HasPrefix(f, "holds a "):
		l.add(key, fmt.Sprintf("%s = %q %s", last(key), p, f), `write Windows paths in single quotes, like 'D:\drop\streak'`)
	case f != "":
		l.add(key, fmt.Sprintf("%s = '%s' %s", last(key), p, f), `write the full path, like 'D:\drop\streak' or '\\server\share\streak'`)
	}
}

// span checks that a time lies in a range, limits included.
func span(l *list, key string, d, least, most Duration) {
	switch {
	case d <= 0 && least > 0:
		l.add(key, fmt.Sprintf("%s = %q is not above zero", last(key), d), fmt.Sprintf("write a time up to %s", most))
	case d < least || d > most:
		l.add(key, fmt.Sprintf("%s = %q is out of range", last(key), d), fmt.Sprintf("write a time from %s to %s", least, most))
	}
}

// count checks that a number lies in a range, limits included.
func count(l *list, key string, n, least, most int) {
	if n < least || n > most {
		l.add(key, fmt.Sprintf("%s = %d is out of range", last(key), n), fmt.Sprintf("write a whole number from %d to %d", least, most))
	}
}

// oneOf checks that a word is one of those known.
func oneOf(l *list, key, word string, known []string) {
	if slices.Contains(known, word) {
		return
	}
	l.add(key, fmt.Sprintf("%s: unknown value %q", last(key), word), "known: "+all(known))
}
