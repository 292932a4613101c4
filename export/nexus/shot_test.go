package nexus

import (
	"context"
	"fmt"
	"math"
	"path/filepath"
	"strings"
	"testing"

	"unsheard/pipeline/cube"
)

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
