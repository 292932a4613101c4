package frame

import (
	"errors"
	"fmt"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"
)

// directive is one field of a pattern.
type directive struct {
	tight string // expression when another number may touch it
	loose string // expression when none does
	digit bool   // begins and ends with a digit
	open  bool   // any number of digits
}

// directives by name. The expressions take what strptime takes, in range.
var directives = map[string]directive{
	"%Y":     {tight: `\d{4}`, digit: true},
	"%y":     {tight: `\d{2}`, digit: true},
	"%m":     {tight: `0[1-9]|1[0-2]`, loose: `1[0-2]|0?[1-9]`, digit: true},
	"%b":     {tight: strings.Join(months, "|")},
	"%d":     {tight: `0[1-9]|[12]\d|3[01]`, loose: `[12]\d|3[01]|0?[1-9]`, digit: true},
	"%j":     {tight: `[0-2]\d\d|3[0-5]\d|36[0-6]`, loose: `3[0-5]\d|36[0-6]|[0-2]\d\d|\d\d?`, digit: true},
	"%H":     {tight: `[01]\d|2[0-3]`, loose: `1\d|2[0-3]|0?\d`, digit: true},
	"%M":     {tight: `[0-5]\d`, loose: `[0-5]?\d`, digit: true},
	"%S":     {tight: `[0-5]\d`, loose: `[0-5]?\d`, digit: true},
	"%f":     {tight: `\d{1,9}`, digit: true, open: true},
	"%s":     {tight: `\d{1,11}`, digit: true, open: true},
	"%z":     {tight: `Z|[+-]\d\d(?::?[0-5]\d)?`, digit: true},
	"{shot}": {tight: `\d{1,18}`, digit: true, open: true},
	"{*}":    {tight: `.*?`},
}

var months = []string{"jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec"}

const known = "%Y %y %m %b %d %j %H %M %S %f %z %s %% {shot} {*}"

// pattern is a compiled file name pattern.
type pattern struct {
	expr  *regexp.Regexp
	group []string // name of each group, from 1
}

// piece is a directive, or else literal text.
type piece struct{ name, text string }

// compile reads a pattern and refuses one that could not give a stamp.
func compile(spec string) (*pattern, error) {
	if spec == "" {
		return nil, fmt.Errorf(`it is empty: give a pattern such as "S_%%Y%%m%%dT%%H%%M%%S.%%f.tif", or "tag", "sidecar" or "mtime"`)
	}
	if len(spec) > 255 {
		return nil, errors.New("it is longer than a file name can be")
	}
	if strings.ContainsAny(spec, `/\`) {
		return nil, errors.New("it names a folder: a pattern is for the file name alone")
	}
	list, err := split(spec)
	if err != nil {
		return nil, err
	}
	if err := complete(list); err != nil {
		return nil, err
	}
	p := &pattern{group: []string{""}}
	var b strings.Builder
	b.WriteString(`(?is)^`)
	for i := range list {
		e, err := expression(list, i)
		if err != nil {
			return nil, err
		}
		if list[i].name != "" {
			e = "(" + e + ")"
			p.group = append(p.group, list[i].name)
		}
		b.WriteString(e)
	}
	p.expr, err = regexp.Compile(b.String() + `$`)
	if err != nil {
		return nil, fmt.Errorf("it cannot be read: %w", err)
	}
	return p, nil
}

// split cuts a pattern into pieces.
func split(spec string) ([]piece, error) {
	var list []piece
	for rest := spec; rest != ""; {
		n := 1
		switch at := len(spec) - len(rest) + 1; {
		case strings.HasPrefix(rest, "%%"):
			list, rest = append(list, piece{text: "%"}), rest[2:]
			continue
		case rest[0] == '%':
			if n = min(2, len(rest)); directives[rest[:n]].tight == "" {
				return nil, fmt.Errorf("%q at character %d is no directive; there are %s", head(rest, 2), at, known)
			}
		case rest[0] == '{':
			if n = strings.IndexByte(rest, '}') + 1; directives[rest[:n]].tight == "" {
				return nil, fmt.Errorf("%q at character %d is no field; there are {shot} for the shot number and {*} for anything", head(rest, n), at)
			}
		default:
			if n = strings.IndexAny(rest, "%{"); n < 0 {
				n = len(rest)
			}
			list, rest = append(list, piece{text: rest[:n]}), rest[n:]
			continue
		}
		name := rest[:n]
		if name != "{*}" && slices.Contains(list, piece{name: name}) {
			return nil, fmt.Errorf("%s comes twice", name)
		}
		list, rest = append(list, piece{name: name}), rest[n:]
	}
	return list, nil
}

// head is the first n characters of s, or all if n is 0.
func head(s string, n int) string {
	if r := []rune(s); n > 0 && len(r) > n {
		return string(r[:n])
	}
	return s
}

// expression is the regular expression of piece i.
func expression(list []piece, i int) (string, error) {
	p := list[i]
	if p.name == "" {
		return regexp.QuoteMeta(p.text), nil
	}
	d := directives[p.name]
	before := i > 0 && touches(list[i-1], false)
	after := i+1 < len(list) && touches(list[i+1], true)
	anything := func(k int) bool { return k >= 0 && k < len(list) && list[k].name == "{*}" }
	switch {
	case d.open && after:
		return "", fmt.Errorf("%s has any number of digits and a number follows at once: put something between them", p.name)
	case p.name == "{*}" && anything(i+1):
		return "", errors.New("{*} follows {*}: one is enough")
	case d.loose == "" || before || after || anything(i-1) || anything(i+1):
		return d.tight, nil
	}
	return d.loose, nil
}

// touches reports whether a piece begins (or ends) with a digit.
func touches(p piece, begin bool) bool {
	if p.name != "" {
		return directives[p.name].digit && !(begin && p.name == "%z")
	}
	c := p.text[len(p.text)-1]
	if begin {
		c = p.text[0]
	}
	return c >= '0' && c <= '9'
}

// match returns what each directive takes of name, or nil.
func (p *pattern) match(name string) map[string]string {
	at := p.expr.FindStringSubmatchIndex(name)
	if at == nil {
		return nil
	}
	got := make(map[string]string, len(p.group))
	for i, g := range p.group[1:] {
		from, to := at[2*i+2], at[2*i+3]
		if directives[g].open && to < len(name) && name[to] >= '0' && name[to] <= '9' {
			return nil // more digits than the field can hold
		}
		got[g] = name[from:to]
	}
	return got
}

// stamp reads the stamp from a name.
func (p *pattern) stamp(st *Stamp, name string, loc *time.Location) error {
	got := p.match(name)
	if got == nil {
		return fault(ErrStamp, "its name does not match the pattern")
	}
	num := func(key string) int { n, _ := strconv.Atoi(got[key]); return n }
	if s, ok := got["{shot}"]; ok {
		n, err := strconv.ParseInt(s, 10, 64)
		if err != nil {
			return fault(ErrStamp, "shot number %q is out of range", s)
		}
		st.Shot, st.HasShot = n, true
	}
	ns, _ := fraction(got["%f"])
	if s, ok := got["%s"]; ok {
		n, err := strconv.ParseInt(s, 10, 64)
		if err != nil {
			return fault(ErrStamp, "%q seconds are out of range", s)
		}
		st.Time = time.Unix(n, int64(ns)).In(loc)
		return nil
	}
	if z, ok := got["%z"]; ok {
		loc = zone(z)
	}
	y, m, d := calendar(got)
	t, ok := date(y, m, d, num("%H"), num("%M"), num("%S"), ns, loc)
	if _, timed := got["%H"]; !ok && (timed || y != 0) {
		return fault(ErrStamp, "its name gives year %d, month %d, day %d, which is no date", y, m, d)
	} else if timed {
		st.Time = t
	}
	return nil
}

// calendar reads year, month and day; all 0 if the pattern has no date. A
// date that does not exist is left for the caller to refuse.
func calendar(got map[string]string) (y, m, d int) {
	num := func(key string) int { n, _ := strconv.Atoi(got[key]); return n }
	y = num("%Y")
	if s, ok := got["%y"]; ok {
		y = 2000 + num("%y")
		if s >= "69" { // POSIX strptime
			y -= 100
		}
	}
	m, d = num("%m"), num("%d")
	if s, ok := got["%b"]; ok {
		m = slices.Index(months, strings.ToLower(s)) + 1
	}
	if _, ok := got["%j"]; ok {
		t := time.Date(y, 1, num("%j"), 0, 0, 0, 0, time.UTC)
		if t.Year() != y {
			return y, 0, 0
		}
		m, d = int(t.Month()), t.Day()
	}
	return y, m, d
}

// zone reads Z, +hh, +hhmm or +hh:mm.
func zone(s string) *time.Location {
	if strings.EqualFold(s, "Z") {
		return time.UTC
	}
	digits := strings.ReplaceAll(s[1:], ":", "")
	sec := 0
	for i, unit := range []int{3600, 60} {
		if len(digits) >= 2*i+2 {
			n, _ := strconv.Atoi(digits[2*i : 2*i+2])
			sec += n * unit
		}
	}
	if s[0] == '-' {
		sec = -sec
	}
	return time.FixedZone(s, sec)
}
