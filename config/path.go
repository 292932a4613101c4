package config

import (
	"fmt"
	"path/filepath"
	"regexp"
	"runtime"
	"strings"
	"unicode"
)

var (
	drive     = regexp.MustCompile(`^[A-Za-z]:[\\/]`)
	driveOnly = regexp.MustCompile(`^[A-Za-z]:([^\\/]|$)`)
)

// isShare says whether a path is a Windows network path.
func isShare(p string) bool { return strings.HasPrefix(p, `\\`) || strings.HasPrefix(p, "//") }

// resolve makes every path absolute. A Windows path is left alone on other
// systems, so that a file can be checked away from its PC.
func (c *Config) resolve(base string) {
	paths := []*string{&c.Campaign.State, &c.Results.Folder, &c.Log.File}
	for i := range c.Station {
		s := &c.Station[i]
		paths = append(paths, &s.Bundle, &s.Streak.Folder, &s.Reference.Folder)
	}
	for _, p := range paths {
		*p = absolute(base, *p)
	}
}

// absolute resolves one path; an empty or refused one stays as it is, so
// that the message can quote it.
func absolute(base, p string) string {
	if p == "" || fault(p) != "" {
		return p
	}
	if runtime.GOOS != "windows" && (drive.MatchString(p) || strings.HasPrefix(p, `\\`)) {
		return p
	}
	if filepath.IsAbs(p) {
		return filepath.Clean(p)
	}
	return filepath.Join(base, p)
}

// fault says what is wrong with how a path is written, or "".
func fault(p string) string {
	for _, r := range p {
		if name, ok := escapes[r]; ok {
			return fmt.Sprintf(`holds a %s, which "\%c" in double quotes stands for`, name.word, name.letter)
		}
		if unicode.IsControl(r) {
			return fmt.Sprintf("holds the control character %U", r)
		}
	}
	switch {
	case strings.TrimSpace(p) != p:
		return "begins or ends with a space"
	case driveOnly.MatchString(p):
		return "names a drive but no folder from its root"
	case strings.HasPrefix(p, `\`) && !strings.HasPrefix(p, `\\`):
		return "begins with a single backslash"
	case runtime.GOOS == "windows" && strings.HasPrefix(p, "/") && !strings.HasPrefix(p, "//"):
		return "names no drive"
	case strings.HasPrefix(p, "~"):
		return `begins with "~", which is not expanded`
	}
	return ""
}

// escapes are the characters into which a Windows path in double quotes can
// turn without any error.
var escapes = map[rune]struct {
	word   string
	letter rune
}{
	'\t': {"tab", 't'}, '\n': {"line break", 'n'}, '\r': {"carriage return", 'r'},
	'\b': {"backspace", 'b'}, '\f': {"form feed", 'f'}, 0x1b: {"escape character", 'e'},
}

// same says whether two resolved paths name one folder as far as their
// spelling tells.
func same(a, b string) bool {
	if runtime.GOOS == "windows" || drive.MatchString(a) || strings.HasPrefix(a, `\\`) {
		return strings.EqualFold(slashed(a), slashed(b))
	}
	return a == b
}

func slashed(p string) string {
	return strings.TrimRight(strings.ReplaceAll(p, `\`, "/"), "/")
}

// reaches says whether a watch on folder a, depth levels deep, sees b.
func reaches(a, b string, depth int) bool {
	for range depth + 1 {
		if same(a, b) {
			return true
		}
		cut := strings.LastIndexAny(b, `/\`)
		if cut <= 0 {
			return false
		}
		b = b[:cut]
	}
	return false
}
