package config

import (
	"errors"
	"fmt"
	"sort"
	"unicode/utf8"
)

// Mistake is one thing wrong in a configuration.
type Mistake struct {
	// File is the configuration file as it was named by the caller, Line
	// and Column the place in it, from 1. Line is 0 for a Config that was
	// not read from a file; Key then says where.
	File         string
	Line, Column int

	// Key is the full name of the key, like "station[0].streak.folder".
	Key string

	// What is wrong, and what to write Instead.
	What, Instead string
}

// Error implements error.
func (m *Mistake) Error() string {
	if m.Line == 0 {
		return fmt.Sprintf("%s: %s: %s", m.Key, m.What, m.Instead)
	}
	return fmt.Sprintf("%s:%d:%d: %s: %s", m.File, m.Line, m.Column, m.What, m.Instead)
}

// list gathers mistakes and knows the document they were made in.
type list struct {
	doc   *document
	found []*Mistake
}

// add notes a mistake at a key. A key that is not in the document is placed
// at the nearest table around it.
func (l *list) add(key, what, instead string) {
	m := &Mistake{Key: key, What: what, Instead: instead}
	if l.doc != nil {
		l.place(m, l.doc.near(key))
	}
	l.found = append(l.found, m)
}

// at notes a mistake at a byte offset.
func (l *list) at(offset int, key, what, instead string) {
	m := &Mistake{Key: key, What: what, Instead: instead}
	l.place(m, offset)
	l.found = append(l.found, m)
}

func (l *list) place(m *Mistake, offset int) {
	m.File = l.doc.file
	m.Line, m.Column = position(l.doc.data, offset)
}

// err joins the mistakes in the order of the document.
func (l *list) err() error {
	sort.SliceStable(l.found, func(i, j int) bool {
		a, b := l.found[i], l.found[j]
		return a.Line < b.Line || a.Line == b.Line && a.Column < b.Column
	})
	errs := make([]error, len(l.found))
	for i, m := range l.found {
		errs[i] = m
	}
	return errors.Join(errs...)
}

// position turns a byte offset into a line and a column, both from 1, the
// column in characters.
func position(data []byte, offset int) (line, column int) {
	line = 1
	start := 0
	for i := 0; i < offset && i < len(data); i++ {
		if data[i] == '\n' {
			line++
			start = i + 1
		}
	}
	return line, utf8.RuneCount(data[start:min(offset, len(data))]) + 1
}
