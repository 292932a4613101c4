package nexus

import (
	"bytes"
	"context"
	"encoding/base64"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"os/exec"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
)

// run executes an independent reader; a missing one is a failure.
func run(t *testing.T, apt, name string, args ...string) string {
	t.Helper()
	path, err := exec.LookPath(name)
	if err != nil {
		t.Fatalf("%s is needed: apt install %s", name, apt)
	}
	cmd := exec.Command(path, args...)
	var out, serr bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &serr
	if err := cmd.Run(); err != nil {
		t.Fatalf("%s %v: %v\n%s%s", name, args, err, out.String(), serr.String())
	}
	// Debian's Octave prints this line on every exit, with no file loaded too.
	const leaving = "error: ignoring const execution_exception& while preparing to exit"
	if strings.TrimSpace(strings.ReplaceAll(serr.String(), leaving, "")) != "" {
		t.Fatalf("%s %v complains: %s", name, args, serr.String())
	}
	return out.String()
}

// python is Debian's, where the apt packages live.
const python = "/usr/bin/python3"

// node is testdata/dump.py's view of an object.
type node struct {
	Attrs   map[string]any
	Links   map[string]node
	Shape   []int
	Type    string
	Chunks  []int
	Filters []any
	Text    string
	Cset    string
	Data    string
}

func dump(t *testing.T, paths ...string) []node {
	t.Helper()
	out := run(t, "python3-h5py", python, append([]string{"testdata/dump.py"}, paths...)...)
	lines := strings.Split(strings.TrimSpace(out), "\n")
	if len(lines) != len(paths) {
		t.Fatalf("%d lines for %d files", len(lines), len(paths))
	}
	nodes := make([]node, len(lines))
	for i, l := range lines {
		if err := json.Unmarshal([]byte(l), &nodes[i]); err != nil {
			t.Fatal(err)
		}
	}
	return nodes
}

// raw returns the little-endian bytes and the NumPy type of a value.
func raw(t *testing.T, v any) ([]byte, string) {
	t.Helper()
	var b bytes.Buffer
	typ := map[string]string{"[]float32": "<f4", "[]float64": "<f8", "[]int64": "<i8",
		"float64": "<f8", "int": "<i8"}[fmt.Sprintf("%T", v)]
	if n, ok := v.(int); ok {
		v = int64(n)
	}
	if err := binary.Write(&b, binary.LittleEndian, v); err != nil {
		t.Fatal(err)
	}
	return b.Bytes(), typ
}

// same compares a written group with what h5py read.
func same(t *testing.T, path string, g *Group, n node) {
	t.Helper()
	sameAttrs(t, path, g.attrs(), n.Attrs)
	if len(n.Links) != len(g.Groups)+len(g.Data) {
		t.Errorf("%s: %d links, want %d", path, len(n.Links), len(g.Groups)+len(g.Data))
	}
	for i := range g.Groups {
		c := &g.Groups[i]
		same(t, path+"/"+c.Name, c, n.Links[c.Name])
	}
	for i := range g.Data {
		d := &g.Data[i]
		sameData(t, path+"/"+d.Name, d, n.Links[d.Name])
	}
}

func sameAttrs(t *testing.T, path string, attrs []Attr, got map[string]any) {
	t.Helper()
	if len(got) != len(attrs) {
		t.Errorf("%s: %d attributes, want %d", path, len(got), len(attrs))
	}
	for _, a := range attrs {
		b, err := json.Marshal(a.Value)
		if err != nil {
			t.Fatal(err)
		}
		var want any
		if err := json.Unmarshal(b, &want); err != nil {
			t.Fatal(err)
		}
		if !reflect.DeepEqual(got[a.Name], want) {
			t.Errorf("%s@%s: got %v, want %v", path, a.Name, got[a.Name], want)
		}
	}
}

func sameData(t *testing.T, path string, d *Dataset, n node) {
	t.Helper()
	sameAttrs(t, path, d.Attrs, n.Attrs)
	if s, ok := d.Value.(string); ok {
		cset := "ascii"
		if !ascii(s) {
			cset = "utf-8"
		}
		if n.Text != s || n.Cset != cset {
			t.Errorf("%s: got %q in %s, want %q in %s", path, n.Text, n.Cset, s, cset)
		}
		return
	}
	b, typ := raw(t, d.Value)
	got, err := base64.StdEncoding.DecodeString(n.Data)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(got, b) || n.Type != typ || fmt.Sprint(n.Shape) != fmt.Sprint(d.Shape) {
		t.Errorf("%s: type %s shape %v differs from %s %v, or the bits do", path, n.Type, n.Shape, typ, d.Shape)
	}
}

// TestRandomTrees writes random trees and compares what h5py and the own
// reader read, bit by bit.
func TestRandomTrees(t *testing.T) {
	const seed = 20260101
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, 1))
	dir := t.TempDir()
	var roots []Group
	var paths []string
	for i := range 12 {
		g := randomGroup(r, "", 0)
		p := filepath.Join(dir, fmt.Sprintf("%d.h5", i))
		if err := WriteFile(context.Background(), p, g, Options{Workers: 1 + i%3}); err != nil {
			t.Fatal(err)
		}
		roots, paths = append(roots, g), append(paths, p)
	}
	for i, n := range dump(t, paths...) {
		same(t, fmt.Sprint(i), &roots[i], n)
		f, err := Open(paths[i])
		if err != nil {
			t.Fatal(err)
		}
		own(t, f, "", &roots[i])
		f.Close()
	}
}

// shapes are awkward on purpose: single elements, sides that chunks do not
// divide, one frame, one row, one column, and an index of more than one node.
var shapes = [][]int{{1, 1, 1}, {33, 5, 65}, {1, 40, 50}, {7, 1, 9}, {32, 32, 32}, {3, 200, 1},
	{1, 1, 5000}, {33, 33, 33}, {2, 700, 700}, {5, 5}, {1, 1}, {300, 500}, {2, 3, 4, 5}, {140, 140, 140}}

func TestShapes(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 7))
	g := Group{}
	for i, s := range shapes {
		n := int(elements(s))
		g.Data = append(g.Data, Dataset{Name: fmt.Sprintf("s%d", i), Shape: s, Value: values(r, n)})
	}
	p := filepath.Join(t.TempDir(), "shapes.h5")
	if err := WriteFile(context.Background(), p, g, Options{Workers: 3}); err != nil {
		t.Fatal(err)
	}
	n := dump(t, p)[0]
	same(t, "", &g, n)
	for i, s := range shapes {
		d := n.Links[fmt.Sprintf("s%d", i)]
		if fmt.Sprint(d.Chunks) != fmt.Sprint(chunkShape(s)) || fmt.Sprint(d.Filters) != "[true gzip]" {
			t.Errorf("shape %v: chunks %v filters %v", s, d.Chunks, d.Filters)
		}
	}
	for _, args := range [][]string{{"h5dump", "-H", "-p", p}, {"h5dump", "-d", "/s1", p}, {"h5ls", "-r", "-v", p}, {"h5stat", p}} {
		run(t, "hdf5-tools", args[0], args[1:]...)
	}
	q := p + ".repacked"
	run(t, "hdf5-tools", "h5repack", "-f", "NONE", p, q)
	run(t, "hdf5-tools", "h5diff", p, q)
	same(t, "repacked", &g, dump(t, q)[0])
}
