package nexus

import (
	"fmt"
	"math"
	"reflect"
	"testing"
)

// own compares a written tree with what this package's reader reads.
func own(t *testing.T, f *File, path string, g *Group) {
	t.Helper()
	join := func(name string) string {
		if path == "" {
			return name
		}
		return path + "/" + name
	}
	ownAttrs(t, f, path, g.attrs())
	for i := range g.Groups {
		own(t, f, join(g.Groups[i].Name), &g.Groups[i])
	}
	for i := range g.Data {
		d := &g.Data[i]
		p := join(d.Name)
		ownAttrs(t, f, p, d.Attrs)
		if s, err := f.Shape(p); err != nil || fmt.Sprint(s) != fmt.Sprint(d.Shape) {
			t.Errorf("%s: shape %v, want %v (%v)", p, s, d.Shape, err)
		}
		switch v := d.Value.(type) {
		case string:
			if got, err := f.Text(p); err != nil || got != v {
				t.Errorf("%s: %q, want %q (%v)", p, got, v, err)
			}
		case []float32:
			got, err := f.All(p)
			if err != nil || !bitEqual(got, v) {
				t.Errorf("%s: differs (%v)", p, err)
			}
		case []float64:
			got, err := f.Float64(p)
			if err != nil || !reflect.DeepEqual(got, v) {
				t.Errorf("%s: differs (%v)", p, err)
			}
		}
	}
}

func ownAttrs(t *testing.T, f *File, path string, attrs []Attr) {
	t.Helper()
	for _, a := range attrs {
		got, err := f.Attr(path, a.Name)
		if err != nil || !reflect.DeepEqual(got, a.Value) {
			t.Errorf("%s@%s: %v, want %v (%v)", path, a.Name, got, a.Value, err)
		}
	}
}

func bitEqual(a, b []float32) bool {
	if len(a) != len(b) {
		return false
	}
	for i := range a {
		if math.Float32bits(a[i]) != math.Float32bits(b[i]) {
			return false
		}
	}
	return true
}
