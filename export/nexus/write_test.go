package nexus

import (
	"bytes"
	"context"
	"errors"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"unsheard/pipeline/cube"
)

// memory is a file in memory; it fails after limit bytes if limit > 0.
type memory struct {
	b     []byte
	at    int64
	limit int64
}

func (m *memory) Write(p []byte) (int, error) {
	end := m.at + int64(len(p))
	if m.limit > 0 && end > m.limit {
		return 0, syscall.ENOSPC
	}
	if end > int64(len(m.b)) {
		m.b = append(m.b, make([]byte, end-int64(len(m.b)))...)
	}
	copy(m.b[m.at:], p)
	m.at = end
	return len(p), nil
}

func (m *memory) Seek(off int64, whence int) (int64, error) {
	m.at = off
	if whence == io.SeekEnd {
		m.at += int64(len(m.b))
	}
	return m.at, nil
}

func encode(t testing.TB, s Shot, workers int) []byte {
	t.Helper()
	var m memory
	if err := WriteShot(context.Background(), &m, s, Options{Workers: workers}); err != nil {
		t.Fatal(err)
	}
	return m.b
}

// TestSameBytes: the file does not depend on the number of workers.
func TestSameBytes(t *testing.T) {
	s := Shot{Title: "a", Cube: demo(t, 70, 40, 90, true)}
	one := encode(t, s, 1)
	for _, n := range []int{2, 5} {
		if !bytes.Equal(one, encode(t, s, n)) {
			t.Errorf("%d workers give other bytes than one", n)
		}
	}
}

func TestRegions(t *testing.T) {
	c := demo(t, 70, 40, 90, false)
	b := encode(t, Shot{Cube: c}, 2)
	f, err := NewFile(bytes.NewReader(b), int64(len(b)))
	if err != nil {
		t.Fatal(err)
	}
	for k := range c.T {
		got, err := f.Frame("entry/data/counts", k)
		if err != nil || !bitEqual(got, c.Frame(k)) {
			t.Fatalf("frame %d differs (%v)", k, err)
		}
	}
	trace, err := f.Region("entry/data/counts", []int{3, 39, 64}, []int{60, 1, 2})
	if err != nil {
		t.Fatal(err)
	}
	for i, v := range trace {
		if want := c.At(3+i/2, 39, 64+i%2); v != want {
			t.Errorf("trace %d: %g, want %g", i, v, want)
		}
	}
	for _, bad := range [][2][]int{{{-1, 0, 0}, {1, 1, 1}}, {{0, 0, 0}, {71, 1, 1}}, {{70, 0, 0}, {1, 1, 1}},
		{{0, 0}, {1, 1}}, {{0, 0, 0}, {0, 1, 1}}, {{1, 0, 0}, {math.MaxInt, 1, 1}}} {
		if _, err := f.Region("entry/data/counts", bad[0], bad[1]); err == nil {
			t.Errorf("region %v was read", bad)
		}
	}
	if _, err := f.Frame("entry/data/none", 0); !errors.Is(err, ErrNone) {
		t.Errorf("missing dataset: %v", err)
	}
}

func TestRefused(t *testing.T) {
	long := strings.Repeat("x", 70000)
	values := make([]float64, 9000) // 72 kB
	for name, g := range map[string]Group{
		"shape":           {Data: []Dataset{{Name: "a", Shape: []int{2, 2}, Value: make([]float32, 5)}}},
		"zero side":       {Data: []Dataset{{Name: "a", Shape: []int{0, 2}, Value: []float32{}}}},
		"empty":           {Data: []Dataset{{Name: "a", Value: []float64{}}}},
		"type":            {Data: []Dataset{{Name: "a", Value: []string{"x"}}}},
		"twice":           {Data: []Dataset{{Name: "a", Value: 1}}, Groups: []Group{{Name: "a"}}},
		"slash":           {Groups: []Group{{Name: "a/b"}}},
		"no name":         {Groups: []Group{{}}},
		"zero byte":       {Data: []Dataset{{Name: "a", Value: "x\x00y"}}},
		"not UTF-8":       {Attrs: []Attr{{"a", "\xff"}}},
		"empty list":      {Attrs: []Attr{{"a", []string{}}}},
		"same attribute":  {Attrs: []Attr{{"a", 1}, {"a", 2}}},
		"large attribute": {Attrs: []Attr{{"a", values}}},
		"bits":            {Data: []Dataset{{Name: "a", Value: []float32{1}, Bits: 24}}},
		"long name":       {Groups: []Group{{Name: long}}},
		"no value":        {Data: []Dataset{{Name: "a"}}},
	} {
		if err := Write(context.Background(), &memory{}, g, Options{}); err == nil {
			t.Errorf("%s: written", name)
		}
	}
	if err := Write(context.Background(), &memory{}, Group{Attrs: []Attr{{"a", long}}}, Options{}); err != nil {
		t.Errorf("a long string lies in the heap and may be written: %v", err)
	}
}

// TestFull: a full disk at any size ends with ENOSPC and leaves no file.
func TestFull(t *testing.T) {
	s := Shot{Title: "a", Cube: demo(t, 40, 40, 40, true)}
	size := int64(len(encode(t, s, 2)))
	for limit := int64(1); limit < size; limit += size/7 + 1 {
		if err := WriteShot(context.Background(), &memory{limit: limit}, s, Options{}); !errors.Is(err, syscall.ENOSPC) {
			t.Errorf("limit %d of %d: %v", limit, size, err)
		}
	}
}

// broken is a source that fails at one chunk.
type broken struct{ err error }

func (b broken) Region(dst []float32, start, _ []int) error {
	if start[0] >= 64 {
		return b.err
	}
	return nil
}

func TestSourceFails(t *testing.T) {
	want := errors.New("sensor unplugged")
	p := filepath.Join(t.TempDir(), "a.h5")
	g := Group{Data: []Dataset{{Name: "a", Shape: []int{200, 64, 64}, Value: broken{want}}}}
	if err := WriteFile(context.Background(), p, g, Options{Workers: 3}); !errors.Is(err, want) {
		t.Errorf("got %v", err)
	}
	if _, err := os.Stat(p); !os.IsNotExist(err) {
		t.Errorf("the broken file stayed: %v", err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	g.Data[0].Value = broken{nil}
	if err := WriteFile(ctx, p, g, Options{}); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

func TestChunkShape(t *testing.T) {
	for _, c := range []struct{ shape, want []int }{
		{[]int{350, 512, 512}, []int{32, 32, 32}},
		{[]int{1, 1, 1}, []int{1, 1, 1}},
		{[]int{1, 512, 512}, []int{1, 128, 256}},
		{[]int{20, 30, 31}, []int{20, 30, 31}},
	} {
		got := chunkShape(c.shape)
		if elements(got) > chunkElements {
			t.Errorf("%v: chunk %v is too large", c.shape, got)
		}
		if elements(got) != elements(c.want) {
			t.Errorf("%v: chunk %v, want like %v", c.shape, got, c.want)
		}
	}
}

// TestRoundBits: 10 bits mean a relative error of at most 2^-11 for normal
// numbers (half a unit in the last place kept), and odd values pass.
func TestRoundBits(t *testing.T) {
	for i := uint32(0); i < 1<<16; i++ {
		u := i<<16 | i*40503&0xffff
		v := math.Float32frombits(u)
		got := math.Float32frombits(roundBits(u, 10))
		switch f := math.Abs(float64(v)); {
		case v != v:
			if got == got {
				t.Fatalf("NaN became %g", got)
			}
		case math.IsInf(float64(v), 0):
			if got != v {
				t.Fatalf("%g became %g", v, got)
			}
		case f > math.MaxFloat32*(1-math.Pow(2, -11)): // rounds down, not to infinity
			if math.IsInf(float64(got), 0) {
				t.Fatalf("%g became infinite", v)
			}
		case f >= 0x1p-126 && math.Abs(float64(got)-float64(v)) > f*0x1p-11:
			t.Fatalf("%g became %g", v, got)
		}
	}
}

// TestChecksum checks lookup3 against the values its author publishes in
// lookup3.c, driver5: hashlittle("", 0, 0) = deadbeef and
// hashlittle("Four score and seven years ago", 30, 0) = 17770551.
func TestChecksum(t *testing.T) {
	if got := checksum(nil); got != 0xdeadbeef {
		t.Errorf("empty: %08x", got)
	}
	if got := checksum([]byte("Four score and seven years ago")); got != 0x17770551 {
		t.Errorf("driver5: %08x", got)
	}
}

func TestASCII(t *testing.T) {
	if got := ASCII("{\"µ\":\"😀a\"}"); got != `{"\u00b5":"\ud83d\ude00a"}` {
		t.Error(got)
	}
}

func TestShotRefused(t *testing.T) {
	c := cube.New(2, 2, 2)
	if _, err := (&Shot{Cube: c}).Tree(); err == nil {
		t.Error("a cube without times was laid out")
	}
	s := Shot{Cube: demo(t, 2, 2, 2, false), Frames: []Frame{{Arm: "streak", W: 3, H: 3, Data: make([]float32, 8)}}}
	if _, err := s.Tree(); err == nil || !strings.Contains(err.Error(), "streak frame 3×3") {
		t.Errorf("wrong frame: %v", err)
	}
}
