package frame

import (
	"encoding/binary"
	"encoding/json"
	"errors"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// list is what testdata/make.py says about the files it made.
type list struct {
	Cases []struct {
		File string
		W, H int
		Full float64
	}
	Refused []struct{ File, Word string }
}

// checkFiles compares every file of a folder made by testdata/make.py with
// what the script says it holds, bit for bit.
func checkFiles(t *testing.T, dir string) {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(dir, "list.json"))
	if err != nil {
		t.Fatal(err)
	}
	var l list
	if err := json.Unmarshal(b, &l); err != nil {
		t.Fatal(err)
	}
	if len(l.Cases) == 0 {
		t.Fatal("no files to check")
	}
	for _, c := range l.Cases {
		path := filepath.Join(dir, c.File)
		f, err := Read(path, Limits{})
		if err != nil {
			t.Error(err)
			continue
		}
		w, h, err := Shape(path, Limits{})
		if err != nil || w != c.W || h != c.H || f.W != c.W || f.H != c.H {
			t.Errorf("%s: sides %d×%d, Shape %d×%d (%v), want %d×%d", c.File, f.W, f.H, w, h, err, c.W, c.H)
			continue
		}
		if f.FullScale != c.Full {
			t.Errorf("%s: full scale %g, want %g", c.File, f.FullScale, c.Full)
		}
		want, err := os.ReadFile(path + ".want")
		if err != nil {
			t.Fatal(err)
		}
		comparePixels(t, c.File, f, want)
	}
	for _, c := range l.Refused {
		_, err := Read(filepath.Join(dir, c.File), Limits{})
		if !errors.Is(err, ErrFormat) && !errors.Is(err, ErrEmpty) {
			t.Errorf("%s: error %v, want ErrFormat or ErrEmpty", c.File, err)
		} else if !strings.Contains(err.Error(), c.Word) || !strings.Contains(err.Error(), c.File) {
			t.Errorf("%s: error %q does not name the file and %q", c.File, err, c.Word)
		}
	}
}

func comparePixels(t *testing.T, name string, f *Frame, want []byte) {
	t.Helper()
	if len(want) != 4*len(f.Pix) {
		t.Errorf("%s: %d pixels, want %d", name, len(f.Pix), len(want)/4)
		return
	}
	odd := 0
	for i, v := range f.Pix {
		u := math.Float32frombits(binary.LittleEndian.Uint32(want[4*i:]))
		if u-u != 0 {
			odd++
		}
		if math.Float32bits(u) != math.Float32bits(v) && !(u != u && v != v) {
			t.Errorf("%s (%s): pixel %d,%d is %v, want %v", name, f.Format, i%f.W, i/f.W, v, u)
			return
		}
	}
	if odd != f.NonFinite {
		t.Errorf("%s: %d values not finite, want %d", name, f.NonFinite, odd)
	}
}

// TestFiles reads the files in testdata/files; testdata/ORIGIN.md tells their
// writers.
func TestFiles(t *testing.T) { checkFiles(t, filepath.Join("testdata", "files")) }
