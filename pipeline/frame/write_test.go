package frame

import (
	"bytes"
	"errors"
	"slices"
	"testing"
	"time"
)

func TestWriteTIFF(t *testing.T) {
	pix := []uint16{0, 1, 256, 65535, 12345, 54321}
	at := time.Date(2031, 5, 6, 7, 8, 9, 10, time.UTC)
	for _, when := range []time.Time{{}, at} {
		var b bytes.Buffer
		if err := WriteTIFFAt(&b, 3, 2, pix, when); err != nil {
			t.Fatal(err)
		}
		f, err := decodeBytes(b.Bytes(), Limits{})
		if err != nil {
			t.Fatal(err)
		}
		if want := []float32{0, 1, 256, 65535, 12345, 54321}; f.W != 3 || f.H != 2 || !slices.Equal(f.Pix, want) {
			t.Errorf("%d×%d %v", f.W, f.H, f.Pix)
		}
		if !f.Taken.Equal(when) {
			t.Errorf("taken at %v, want %v", f.Taken, when)
		}
	}
	for _, c := range [][2]int{{0, 0}, {-1, -6}, {3, 3}, {6, 0}} {
		if err := WriteTIFF(&bytes.Buffer{}, c[0], c[1], pix); err == nil {
			t.Errorf("%d×%d pixels of 6 values: no error", c[0], c[1])
		}
	}
	full := errors.New("disk full")
	if err := WriteTIFF(failWriter{full}, 3, 2, pix); !errors.Is(err, full) {
		t.Errorf("error %v, want %v", err, full)
	}
	if err := WriteNPY(failWriter{full}, []int{1}, []float32{1}); !errors.Is(err, full) {
		t.Errorf("error %v, want %v", err, full)
	}
}

type failWriter struct{ err error }

func (w failWriter) Write([]byte) (int, error) { return 0, w.err }

func TestNPY(t *testing.T) {
	for _, shape := range [][]int{{}, {6}, {2, 3}, {3, 1, 2}, {1, 2, 3, 1}} {
		data := []float32{1, 2, 3, 4, 5, 6}
		if len(shape) == 0 {
			data = data[:1]
		}
		var b bytes.Buffer
		if err := WriteNPY(&b, shape, data); err != nil {
			t.Fatal(err)
		}
		s, d, err := ReadNPY(bytes.NewReader(b.Bytes()), int64(b.Len()), Limits{})
		if err != nil || !slices.Equal(s, shape) || !slices.Equal(d, data) {
			t.Errorf("%v %v became %v %v (%v)", shape, data, s, d, err)
		}
	}
	for _, shape := range [][]int{{5}, {0}, {-6}, {-2, -3}, {1 << 40, 1 << 40}} {
		if err := WriteNPY(&bytes.Buffer{}, shape, make([]float32, 6)); err == nil {
			t.Errorf("shape %v of 6 values: no error", shape)
		}
	}
	var b bytes.Buffer
	if err := WriteNPY(&b, []int{1, 1, 1, 1, 1}, []float32{1}); err != nil {
		t.Fatal(err)
	}
	if _, _, err := ReadNPY(bytes.NewReader(b.Bytes()), int64(b.Len()), Limits{}); !errors.Is(err, ErrFormat) {
		t.Errorf("five axes: error %v, want ErrFormat", err)
	}
	png := samples(t)["pil-u2.png"]
	if _, _, err := ReadNPY(bytes.NewReader(png), int64(len(png)), Limits{}); !errors.Is(err, ErrFormat) {
		t.Errorf("a PNG file: error %v, want ErrFormat", err)
	}
}

// TestWalk compares the Fortran order walk with the index formula.
func TestWalk(t *testing.T) {
	shape := []int{2, 3, 4}
	w := newWalk(shape)
	for k := range 4 {
		for j := range 3 {
			for i := range 2 {
				if want := (i*3+j)*4 + k; w.at != want {
					t.Fatalf("at %d,%d,%d: %d, want %d", i, j, k, w.at, want)
				}
				w.step()
			}
		}
	}
}
