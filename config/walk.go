package config

import (
	"encoding"
	"fmt"
	"reflect"
	"strings"

	"github.com/pelletier/go-toml/v2/unstable"
)

// document is the file with the place of every key in it.
type document struct {
	file string
	data []byte
	keys map[string]int // full name -> byte offset of its last part
}

// has says whether the file gives a key or table.
func (d *document) has(key string) bool {
	if d == nil {
		return false
	}
	_, ok := d.keys[key]
	return ok
}

// near is the offset of a key or of the innermost table around it that the
// file gives.
func (d *document) near(key string) int {
	for key != "" {
		if at, ok := d.keys[key]; ok {
			return at
		}
		cut := strings.LastIndexAny(key, ".[")
		if cut < 0 {
			break
		}
		key = key[:cut]
	}
	return 0
}

// walker compares a document that is known to be TOML with the shape of
// Config, records where every key stands and notes what does not fit.
type walker struct {
	doc   *document
	p     unstable.Parser
	list  *list
	count map[string]int // elements seen so far of each list of tables
}

// walk fills doc.keys and returns the mistakes of shape.
func walk(doc *document) *list {
	w := &walker{doc: doc, list: &list{doc: doc}, count: map[string]int{}}
	root := cursor{typ: reflect.TypeFor[Config]()}
	here := root
	w.p.Reset(doc.data)
	for w.p.NextExpression() {
		node := w.p.Expression()
		switch node.Kind {
		case unstable.Table, unstable.ArrayTable:
			here = w.table(root, node)
		case unstable.KeyValue:
			w.pair(here, node)
		}
	}
	return w.list
}

// cursor is a table in the document and its type; without a type, the table
// is unknown and what is in it is not looked at.
type cursor struct {
	path string
	typ  reflect.Type
}

func (c cursor) join(name string) string {
	return strings.TrimPrefix(c.path+"."+name, ".")
}

// enter goes one key down from a table. The last part of a [[header]]
// begins a new element.
func (w *walker) enter(c cursor, key *unstable.Node, begin bool) (cursor, field) {
	name, at := string(key.Data), int(key.Raw.Offset)
	f, ok := lookup(c.typ, name)
	if !ok {
		what := fmt.Sprintf("unknown key %q", name)
		if c.path != "" {
			what += " in " + header(c.path)
		}
		w.list.at(at, c.join(name), what, advise(c.typ, name))
		return cursor{}, field{}
	}
	path := c.join(name)
	if isTables(f.typ) {
		if begin {
			w.count[path]++
		}
		w.note(path, at)
		path = fmt.Sprintf("%s[%d]", path, max(0, w.count[path]-1))
	}
	w.note(path, at)
	return cursor{path, f.typ}, f
}

// note records the first place of a key.
func (w *walker) note(path string, at int) {
	if _, ok := w.doc.keys[path]; !ok {
		w.doc.keys[path] = at
	}
}

// table follows a [header] or [[header]].
func (w *walker) table(c cursor, node *unstable.Node) cursor {
	double := node.Kind == unstable.ArrayTable
	for it := node.Key(); it.Next(); {
		key := it.Node()
		next, f := w.enter(c, key, double && it.IsLast())
		switch {
		case next.typ == nil:
			return cursor{}
		case isTables(f.typ) && it.IsLast() && !double:
			w.list.at(int(key.Raw.Offset), next.path, fmt.Sprintf("[%s] in single brackets", f.name),
				fmt.Sprintf("there can be several, so write [[%s]]", f.name))
			w.count[bare(next.path)]++
			return cursor{next.path, f.typ.Elem()}
		case isTables(f.typ) && w.count[bare(next.path)] == 0:
			w.list.at(int(key.Raw.Offset), next.path, fmt.Sprintf("%s comes before any [[%s]]", headerText(node), f.name),
				fmt.Sprintf("begin with [[%s]] and put this below it", f.name))
			return cursor{}
		case isTables(f.typ):
			next.typ = f.typ.Elem()
		case !isTable(f.typ):
			w.list.at(int(key.Raw.Offset), next.path, fmt.Sprintf("%q is not a table", f.name),
				fmt.Sprintf("write %s = %s below %s", f.name, f.example, header(c.path)))
			return cursor{}
		case double && it.IsLast():
			name := bare(next.path)
			w.list.at(int(key.Raw.Offset), next.path, fmt.Sprintf("[[%s]] in double brackets", name),
				fmt.Sprintf("there is only one, so write [%s]", name))
			return cursor{}
		}
		c = next
	}
	return c
}

// headerText is a [header] as the file writes it, dots and all.
func headerText(node *unstable.Node) string {
	var parts []string
	for it := node.Key(); it.Next(); {
		parts = append(parts, string(it.Node().Data))
	}
	return "[" + strings.Join(parts, ".") + "]"
}

// pair follows a key = value, whose key may be dotted.
func (w *walker) pair(c cursor, node *unstable.Node) {
	if c.typ == nil {
		return
	}
	for it := node.Key(); it.Next(); {
		next, f := w.enter(c, it.Node(), false)
		if next.typ == nil {
			return
		}
		at := int(it.Node().Raw.Offset)
		if it.IsLast() {
			w.value(next.path, f, at, node.Value())
			return
		}
		if !isTable(f.typ) {
			w.wrong(at, next.path, f, "is used as a table")
			return
		}
		c = next
	}
}

// value checks one value against the type of its key.
func (w *walker) value(path string, f field, at int, v *unstable.Node) {
	switch {
	case isTables(f.typ) && v.Kind == unstable.Array:
		w.tables(path, f, at, v)
	case isTable(f.typ) && v.Kind == unstable.InlineTable:
		w.inline(cursor{path, f.typ}, v)
	case isText(f.typ) && v.Kind == unstable.String:
		target := reflect.New(f.typ).Interface().(encoding.TextUnmarshaler)
		if err := target.UnmarshalText(v.Data); err != nil {
			w.list.at(at, path, fmt.Sprintf("%s = %q: %v", f.name, v.Data, err),
				fmt.Sprintf("write for example %s = %s", f.name, f.example))
		}
	case f.typ.Kind() == reflect.Slice && !isTables(f.typ) && v.Kind == unstable.Array:
		for it := v.Children(); it.Next(); {
			if k := it.Node().Kind; k != unstable.String && k != unstable.Comment {
				w.wrong(at, path, f, "holds "+spoken(k))
			}
		}
	case !fits(f.typ, v.Kind):
		w.wrong(at, path, f, "is "+spoken(v.Kind))
	}
}

// tables follows a list of inline tables.
func (w *walker) tables(path string, f field, at int, v *unstable.Node) {
	base := strings.TrimSuffix(path, "[0]")
	i := 0
	for it := v.Children(); it.Next(); {
		switch it.Node().Kind {
		case unstable.Comment:
		case unstable.InlineTable:
			inner := fmt.Sprintf("%s[%d]", base, i)
			w.note(inner, at)
			w.inline(cursor{inner, f.typ.Elem()}, it.Node())
			i++
		default:
			w.wrong(at, path, f, "holds "+spoken(it.Node().Kind))
			i++
		}
	}
}

func (w *walker) inline(c cursor, v *unstable.Node) {
	for it := v.Children(); it.Next(); {
		if it.Node().Kind == unstable.KeyValue {
			w.pair(c, it.Node())
		}
	}
}

// wrong notes a value of the wrong type.
func (w *walker) wrong(at int, path string, f field, is string) {
	example := fmt.Sprintf("for example %s = %s", f.name, f.example)
	if isTable(f.typ) {
		example = "begin it with " + header(path)
	}
	if isTables(f.typ) {
		example = fmt.Sprintf("begin each with [[%s]]", f.name)
	}
	w.list.at(at, path, fmt.Sprintf("%s %s", f.name, is), fmt.Sprintf("write %s, %s", kind(f.typ), example))
}

// fits says whether a plain value can be stored.
func fits(t reflect.Type, k unstable.Kind) bool {
	switch {
	case isText(t):
		return k == unstable.String
	case t.Kind() == reflect.String:
		return k == unstable.String
	case t.Kind() == reflect.Bool:
		return k == unstable.Bool
	case t.Kind() == reflect.Int:
		return k == unstable.Integer
	}
	return false
}

// spoken names a TOML value in plain words.
func spoken(k unstable.Kind) string {
	switch k {
	case unstable.String:
		return "text"
	case unstable.Integer:
		return "a whole number"
	case unstable.Float:
		return "a number with a decimal point"
	case unstable.Bool:
		return "true or false"
	case unstable.Array:
		return "a list"
	case unstable.InlineTable:
		return "a table"
	}
	return "a date or time"
}
