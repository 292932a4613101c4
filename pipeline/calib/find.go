package calib

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"time"
)

// Find returns the bundle to use for a shot taken at the given time: dir
// itself if it is a bundle valid then, else the newest of the bundles
// directly inside dir that is. Newest means latest ValidFrom, then latest
// Created, then the last name. A zero time means now is not asked for: every
// bundle counts as valid.
func Find(dir string, at time.Time) (string, error) {
	if _, err := os.Stat(filepath.Join(dir, tomlName)); err == nil {
		b, err := peek(dir)
		if err != nil {
			return "", err
		}
		if !b.ValidAt(at) {
			return "", fmt.Errorf("find bundle: %q is valid %s, not at %s: calibrate again or name another bundle",
				dir, b.validity(), at.UTC().Format(time.RFC3339))
		}
		return dir, nil
	}
	entries, err := os.ReadDir(dir)
	if err != nil {
		return "", fmt.Errorf("find bundle: %w", err)
	}
	var best *Bundle
	var found string
	var faults, others []string
	for _, e := range entries {
		sub := filepath.Join(dir, e.Name())
		if strings.HasPrefix(e.Name(), ".") {
			continue
		}
		if _, err := os.Stat(filepath.Join(sub, tomlName)); err != nil {
			continue
		}
		b, err := peek(sub)
		switch {
		case err != nil:
			faults = append(faults, err.Error())
		case !b.ValidAt(at):
			others = append(others, fmt.Sprintf("%s is valid %s", e.Name(), b.validity()))
		case best == nil || !b.olderThan(best):
			best, found = b, sub
		}
	}
	if best == nil {
		when := ""
		if !at.IsZero() {
			when = " valid at " + at.UTC().Format(time.RFC3339)
		}
		return "", fmt.Errorf("find bundle: none%s in %q%s: calibrate the station first", when, dir, listed(append(others, faults...)))
	}
	return found, nil
}

func listed(s []string) string {
	if len(s) == 0 {
		return " (there is no bundle in it)"
	}
	return " (" + strings.Join(s, "; ") + ")"
}

func (b *Bundle) olderThan(c *Bundle) bool {
	if !b.ValidFrom.Equal(c.ValidFrom) {
		return b.ValidFrom.Before(c.ValidFrom)
	}
	return b.Created.Before(c.Created)
}

// ValidAt reports whether the bundle may be used for a shot taken at t; the
// zero time is always inside.
func (b *Bundle) ValidAt(t time.Time) bool {
	if t.IsZero() {
		return true
	}
	return !t.Before(b.ValidFrom) && (b.ValidUntil.IsZero() || t.Before(b.ValidUntil))
}

func (b *Bundle) validity() string {
	s := "from the beginning"
	if !b.ValidFrom.IsZero() {
		s = "from " + b.ValidFrom.UTC().Format(time.RFC3339)
	}
	if !b.ValidUntil.IsZero() {
		s += " until " + b.ValidUntil.UTC().Format(time.RFC3339)
	}
	return s
}

// peek reads bundle.toml alone.
func peek(dir string) (*Bundle, error) {
	path := filepath.Join(dir, tomlName)
	text, err := readText(path)
	if err != nil {
		return nil, fmt.Errorf("find bundle: %w", err)
	}
	b, _, err := parse(text)
	if err != nil {
		return nil, fmt.Errorf("find bundle: %s: %w", path, err)
	}
	return b, nil
}
