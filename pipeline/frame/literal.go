package frame

import (
	"strconv"
	"strings"
)

// parse reads the header of an NPY file: a Python dictionary such as
//
//	{'descr': '<f4', 'fortran_order': False, 'shape': (3, 4), }
//
// of exactly these three keys in any order.
func (a *array) parse(text string) error {
	l := &literal{rest: text}
	bad := func() error { return fault(ErrFormat, "its NPY header cannot be read: %.80q", text) }
	seen := map[string]bool{}
	if !l.take("{") {
		return bad()
	}
	for !l.take("}") {
		key, ok := l.quoted()
		if !ok || seen[key] || !l.take(":") {
			return bad()
		}
		seen[key] = true
		switch key {
		case "descr":
			kind, isText := l.quoted()
			if a.sample, ok = npySample(kind); !ok || !isText {
				return fault(ErrFormat, "its NPY values are %.40q; read are u1 to u8, i1 to i8, f4 and f8", kind)
			}
		case "fortran_order":
			a.fortran = l.take("True")
			ok = a.fortran || l.take("False")
		case "shape":
			a.shape, ok = l.tuple()
		default:
			ok = false
		}
		if !ok || !l.take(",") && !strings.HasPrefix(l.space(), "}") {
			return bad()
		}
	}
	if l.space() != "" || len(seen) != 3 {
		return bad()
	}
	if len(a.shape) > maxAxes {
		return fault(ErrFormat, "its NPY array has %d axes, read are %d", len(a.shape), maxAxes)
	}
	return nil
}

// npySample reads an array protocol type string such as <u2.
func npySample(s string) (sample, bool) {
	if len(s) != 3 || !strings.Contains("<>|", s[:1]) {
		return sample{}, false
	}
	k := sample{s[1], 8 * int(s[2]-'0'), s[0] == '>'}
	switch s[1:] {
	case "u1", "i1":
		return k, true
	case "u2", "u4", "u8", "i2", "i4", "i8", "f4", "f8":
		return k, s[0] != '|'
	}
	return sample{}, false
}

// literal reads pieces of a Python literal.
type literal struct{ rest string }

func (l *literal) space() string {
	l.rest = strings.TrimLeft(l.rest, " \t\r\n")
	return l.rest
}

func (l *literal) take(token string) (ok bool) {
	l.rest, ok = strings.CutPrefix(l.space(), token)
	return ok
}

func (l *literal) quoted() (string, bool) {
	for _, q := range []string{"'", `"`} {
		if l.take(q) {
			s, rest, ok := strings.Cut(l.rest, q)
			l.rest = rest
			return s, ok
		}
	}
	return "", false
}

// tuple reads (), (3,), (3, 4) and so on.
func (l *literal) tuple() ([]int, bool) {
	shape := []int{}
	if !l.take("(") {
		return nil, false
	}
	for !l.take(")") {
		s := l.space()
		n := len(s) - len(strings.TrimLeft(s, "0123456789"))
		v, err := strconv.Atoi(s[:n])
		if err != nil {
			return nil, false
		}
		shape, l.rest = append(shape, v), s[n:]
		l.take("L") // Python 2 wrote long integers so
		if !l.take(",") && (!strings.HasPrefix(l.space(), ")") || len(shape) == 1) {
			return nil, false
		}
	}
	return shape, true
}
