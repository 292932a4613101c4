package nexus

import (
	"bytes"
	"context"
	"encoding/base64"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os/exec"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"unsheard/pipeline/cube"
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

// values returns n random float32 bit patterns with zeros, both signs of
// zero, infinities, NaN and denormals among them.
func values(r *rand.Rand, n int) []float32 {
	v := make([]float32, n)
	odd := []float32{0, float32(math.Copysign(0, -1)), float32(math.Inf(1)), float32(math.NaN()), 1e-44}
	for i := range v {
		switch r.IntN(4) {
		case 0:
			v[i] = odd[r.IntN(len(odd))]
		case 1:
			v[i] = math.Float32frombits(r.Uint32())
		default:
			v[i] = float32(r.IntN(1000))
		}
	}
	return v
}

// text returns a short random string, sometimes empty, sometimes beyond ASCII.
func text(r *rand.Rand) string {
	alphabet := []rune("abc XYZ-09µé漢😀\"\\")
	s := make([]rune, r.IntN(12))
	for i := range s {
		s[i] = alphabet[r.IntN(len(alphabet))]
	}
	return string(s)
}

func randomAttrs(r *rand.Rand) []Attr {
	var out []Attr
	for i := range r.IntN(14) {
		var v any
		switch r.IntN(6) {
		case 0:
			v = text(r)
		case 1:
			v = []string{text(r), text(r)}
		case 2:
			v = r.IntN(1000) - 500
		case 3:
			v = []int{r.IntN(9), -r.IntN(9), 7}
		case 4:
			v = r.NormFloat64()
		default:
			v = []float64{r.NormFloat64()}
		}
		out = append(out, Attr{fmt.Sprintf("a%d %s", i, text(r)), v})
	}
	return out
}

func randomData(r *rand.Rand, name string) Dataset {
	d := Dataset{Name: name, Attrs: randomAttrs(r)}
	n := 1
	for range 1 + r.IntN(4) {
		s := 1 + r.IntN(40)
		if n*s > 1<<16 {
			s = 1
		}
		d.Shape = append(d.Shape, s)
		n *= s
	}
	switch r.IntN(6) {
	case 0:
		d.Shape, d.Value = nil, text(r)
	case 1:
		v := make([]float64, n)
		for i := range v {
			v[i] = r.NormFloat64()
		}
		d.Value = v
	case 2:
		v := make([]int64, n)
		for i := range v {
			v[i] = int64(r.Uint64())
		}
		d.Value = v
	case 3:
		d.Shape, d.Value = nil, []any{1.5, -3}[r.IntN(2)]
	default:
		d.Value = values(r, n)
	}
	return d
}

func randomGroup(r *rand.Rand, name string, depth int) Group {
	g := Group{Name: name, Attrs: randomAttrs(r)}
	for i := range r.IntN(11) {
		g.Data = append(g.Data, randomData(r, fmt.Sprintf("d%d%s", i, text(r))))
	}
	if depth < 4 {
		for i := range r.IntN(4) {
			g.Groups = append(g.Groups, randomGroup(r, fmt.Sprintf("g%d%s", i, text(r)), depth+1))
		}
	}
	return g
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

// demo is a small shot whose every value differs.
func demo(t *testing.T, tt, h, w int, spread bool) *cube.Cube {
	t.Helper()
	c := cube.New(tt, h, w)
	for k := range c.Edges {
		c.Edges[k] = 3*float64(k) + 0.01*float64(k*k)
	}
	for k := range c.Time {
		c.Time[k] = (c.Edges[k] + c.Edges[k+1]) / 2
	}
	for i := range c.Data {
		c.Data[i] = float32(i) / 7
	}
	if spread {
		c.Errors = make([]float32, len(c.Data))
		for i := range c.Errors {
			c.Errors[i] = float32(math.Sqrt(float64(c.Data[i])))
		}
	}
	c.Scale = 12.5
	return c
}

const silxScript = `
import json, sys, h5py
from silx.io.nxdata import get_default, NXdata
for p in sys.argv[1:]:
    f = h5py.File(p, "r")
    assert f.attrs["default"] == "entry" and f.attrs["NX_class"] == "NXroot"
    d = get_default(f)
    assert d is not None and d.is_valid, p
    n = NXdata(f["entry/data"])
    assert n.is_valid and not n.issues, n.issues
    print(json.dumps([n.signal_dataset_name, list(n.axes_names), list(n.axes_dataset_names),
        [len(a) for a in n.axes], n.errors is not None, n.title, n.signal.attrs["units"]]))
    def classes(name, o):
        if isinstance(o, h5py.Group):
            assert "NX_class" in o.attrs, name
    f.visititems(classes)
`

func TestShotInSilx(t *testing.T) {
	for _, c := range []struct {
		t, h, w int
		spread  bool
	}{{33, 5, 65, true}, {1, 4, 4, false}, {2, 2, 2, false}, {1, 1, 1, false}} {
		s := Shot{Title: "Schuß 7 — bay-a", Cube: demo(t, c.t, c.h, c.w, c.spread), Program: "unsheard", Version: "0",
			Note: "lambda = 0.5", Provenance: []byte(`{"a":"µ😀"}`),
			Frames: []Frame{{Arm: "streak", W: 3, H: 2, Data: make([]float32, 6)}}}
		root, err := s.Tree()
		if err != nil {
			t.Fatal(err)
		}
		p := filepath.Join(t.TempDir(), "cube.nxs")
		if err := WriteFile(context.Background(), p, root, Options{}); err != nil {
			t.Fatal(err)
		}
		got := strings.TrimSpace(run(t, "python3-silx", python, "-c", silxScript, p))
		for _, part := range []string{`["counts", `, `["time", "y", "x"]`,
			"frame centre (ps)", fmt.Sprintf("[%d, %d, %d], %v", c.t, c.h, c.w, c.spread), `"counts"]`} {
			if !strings.Contains(got, part) {
				t.Errorf("%v: silx says %s, want %s", c, got, part)
			}
		}
		same(t, "", &root, dump(t, p)[0])
		octave(t, p, &s)
	}
}

// octave loads the file and prints single values by index.
func octave(t *testing.T, p string, s *Shot) {
	t.Helper()
	c := s.Cube
	out := run(t, "octave", "octave", "--quiet", "--no-gui", "--eval", fmt.Sprintf(
		`d = load('%s'); c = d.entry.data.counts; printf('%%d ', size(c)); printf('%%.9g ', c(end), c(1), d.entry.data.time(1)); printf('%%s', d.entry.provenance.data);`, p))
	var want strings.Builder // Octave lists sides fastest first, dropping trailing 1
	dims := []int{c.W, c.H, c.T}
	for len(dims) > 2 && dims[len(dims)-1] == 1 {
		dims = dims[:len(dims)-1]
	}
	for _, d := range dims {
		fmt.Fprintf(&want, "%d ", d)
	}
	fmt.Fprintf(&want, "%.9g %.9g %.9g ", c.Data[len(c.Data)-1], c.Data[0], c.Time[0])
	want.WriteString(ASCII(string(s.Provenance)))
	if out != want.String() {
		t.Errorf("octave says %q, want %q", out, want.String())
	}
}
