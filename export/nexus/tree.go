package nexus

import (
	"fmt"
	"math"
	"strings"
	"unicode/utf8"
)

// Group is a node of the tree to write. The root group's Name is ignored.
type Group struct {
	Name   string
	Class  string // NX_class attribute, for example NXentry; empty: none
	Attrs  []Attr
	Data   []Dataset
	Groups []Group
}

// Attr is a named value on a group or dataset. Value is a string, []string,
// int, []int, float64 or []float64. One attribute holds less than 64 KiB.
type Attr struct {
	Name  string
	Value any
}

// Dataset is a named array or string.
//
// Value is one of
//
//	string                          Shape must be nil
//	float64, int                    a scalar; Shape must be nil
//	[]float32, []float64, []int64   row-major; Shape nil means one dimension
//	Source                          float32; Shape is required
type Dataset struct {
	Name  string
	Shape []int
	Attrs []Attr
	Value any

	// Bits is the number of mantissa bits kept of a float32 array, rounded
	// half to even. 0 keeps all 23. 10 bits mean a relative error below
	// 5e-4 and compress about twice as well.
	Bits int
}

// A Source yields a float32 array piece by piece. Region fills dst, row-major
// with sides count, with the values that begin at start; it is called from
// several goroutines at once.
type Source interface {
	Region(dst []float32, start, count []int) error
}

// maxMessage is the largest object header message: its size is a uint16.
const maxMessage = 1<<16 - 1

// maxRank is HDF5's largest number of dimensions.
const maxRank = 32

// maxDepth bounds the nesting of groups, written or read.
const maxDepth = 32

// normal checks the dataset and fills a nil Shape.
func (d *Dataset) normal() error {
	n := -1
	switch v := d.Value.(type) {
	case string, float64, int:
		if d.Shape != nil {
			return fmt.Errorf("dataset %q: a scalar has no shape", d.Name)
		}
		if s, ok := v.(string); ok {
			return checkText(s)
		}
		return nil
	case []float32:
		n = len(v)
	case []float64:
		n = len(v)
	case []int64:
		n = len(v)
	case Source:
	default:
		return fmt.Errorf("dataset %q: cannot write a %T", d.Name, d.Value)
	}
	if d.Shape == nil && n >= 0 {
		d.Shape = []int{n}
	}
	return d.checkShape(n)
}

// checkShape refuses sides below 1 or above a uint32, more elements than
// addressable, and a shape that does not fit n values (n < 0: unknown).
func (d *Dataset) checkShape(n int) error {
	if len(d.Shape) == 0 || len(d.Shape) > maxRank {
		return fmt.Errorf("dataset %q: %d dimensions, want 1 to %d", d.Name, len(d.Shape), maxRank)
	}
	total := int64(1)
	for _, s := range d.Shape {
		if s <= 0 || int64(s) > math.MaxUint32 || total > math.MaxInt64/16/int64(s) {
			return fmt.Errorf("dataset %q: shape %v", d.Name, d.Shape)
		}
		total *= int64(s)
	}
	if n >= 0 && total != int64(n) {
		return fmt.Errorf("dataset %q: %d values for shape %v", d.Name, n, d.Shape)
	}
	if d.Bits < 0 || d.Bits > 23 {
		return fmt.Errorf("dataset %q: %d mantissa bits, want 0 to 23", d.Name, d.Bits)
	}
	return nil
}

func checkText(s string) error {
	if !utf8.ValidString(s) || strings.ContainsRune(s, 0) {
		return fmt.Errorf("text %.40q: not UTF-8 or holds a zero byte", s)
	}
	return nil
}

func checkName(kind, s string) error {
	if s == "" || s == "." || strings.Contains(s, "/") && kind != "attribute" || len(s) > 1024 {
		return fmt.Errorf("%s name %.40q: want 1 to 1024 bytes without a slash", kind, s)
	}
	return checkText(s)
}

// check walks the tree and reports the first name or value that cannot be
// written; path is where g hangs.
func (g *Group) check(path string, depth int) error {
	if depth > maxDepth {
		return fmt.Errorf("group %s: deeper than %d", path, maxDepth)
	}
	seen := map[string]bool{}
	name := func(kind, s string) error {
		if seen[s] {
			return fmt.Errorf("group %s: two links named %q", path, s)
		}
		seen[s] = true
		return checkName(kind, s)
	}
	for i := range g.Data {
		if err := name("dataset", g.Data[i].Name); err != nil {
			return err
		}
		if err := g.Data[i].normal(); err != nil {
			return fmt.Errorf("group %s: %w", path, err)
		}
	}
	for i := range g.Groups {
		c := &g.Groups[i]
		if err := name("group", c.Name); err != nil {
			return err
		}
		if err := c.check(path+c.Name+"/", depth+1); err != nil {
			return err
		}
	}
	return nil
}

// attrs returns the group's attributes with its class first.
func (g *Group) attrs() []Attr {
	if g.Class == "" {
		return g.Attrs
	}
	return append([]Attr{{"NX_class", g.Class}}, g.Attrs...)
}
