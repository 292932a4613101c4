package config

import (
	"encoding"
	"fmt"
	"reflect"
	"strings"
)

var textual = reflect.TypeFor[encoding.TextUnmarshaler]()

// field is one key that a table may hold.
type field struct {
	name, example string
	typ           reflect.Type
}

// fields lists the keys of a table in the order of the struct.
func fields(table reflect.Type) []field {
	var out []field
	for i := range table.NumField() {
		f := table.Field(i)
		if name := f.Tag.Get("toml"); name != "" {
			out = append(out, field{name, f.Tag.Get("example"), f.Type})
		}
	}
	return out
}

func names(table reflect.Type) []string {
	var out []string
	for _, f := range fields(table) {
		out = append(out, f.name)
	}
	return out
}

func lookup(table reflect.Type, name string) (field, bool) {
	for _, f := range fields(table) {
		if f.name == name {
			return f, true
		}
	}
	return field{}, false
}

func isText(t reflect.Type) bool  { return reflect.PointerTo(t).Implements(textual) }
func isTable(t reflect.Type) bool { return t.Kind() == reflect.Struct && !isText(t) }
func isTables(t reflect.Type) bool {
	return t.Kind() == reflect.Slice && isTable(t.Elem())
}

// example is the correct value shown for a key given by its full name.
func example(key string) string {
	t := reflect.TypeFor[Config]()
	var f field
	for _, name := range strings.Split(bare(key), ".") {
		f, _ = lookup(t, name)
		t = f.typ
		if isTables(t) {
			t = t.Elem()
		}
	}
	return f.example
}

// kind names in plain words what a key must hold.
func kind(t reflect.Type) string {
	switch {
	case isTables(t):
		return "a list of tables"
	case isTable(t):
		return "a table"
	case isText(t), t.Kind() == reflect.String:
		return "text in quotes"
	case t.Kind() == reflect.Bool:
		return "true or false"
	case t.Kind() == reflect.Slice:
		return "a list in square brackets"
	}
	return "a whole number"
}

// homes lists the tables in which a key of this name is known.
func homes(name string) []string {
	var out []string
	var walk func(t reflect.Type, path string)
	walk = func(t reflect.Type, path string) {
		for _, f := range fields(t) {
			inner := strings.TrimPrefix(path+"."+f.name, ".")
			switch {
			case f.name == name && path != "" && !isTable(f.typ):
				out = append(out, header(path))
			case isTables(f.typ):
				walk(f.typ.Elem(), inner)
			case isTable(f.typ):
				walk(f.typ, inner)
			}
		}
	}
	walk(reflect.TypeFor[Config](), "")
	return out
}

// header writes a table's name the way the file does; indices are dropped.
func header(path string) string {
	path = bare(path)
	if path == "station" {
		return "[[station]]"
	}
	return "[" + path + "]"
}

// bare drops indices: "station[0].streak" becomes "station.streak".
func bare(path string) string {
	var b strings.Builder
	depth := 0
	for _, r := range path {
		switch {
		case r == '[':
			depth++
		case r == ']':
			depth--
		case depth == 0:
			b.WriteRune(r)
		}
	}
	return b.String()
}

// advise says what to write instead of an unknown key.
func advise(table reflect.Type, name string) string {
	if n := nearest(name, names(table)); n != "" {
		return fmt.Sprintf("did you mean %q?", n)
	}
	if h := homes(name); len(h) > 0 {
		return "it belongs in " + strings.Join(h, " or ")
	}
	return "known here: " + all(names(table))
}
