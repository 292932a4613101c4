package nexus

import (
	"context"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"
)

// sparse is a cube of more than 4 GiB that exists nowhere: one value in 64
// differs from zero.
type sparse struct{}

func (sparse) at(k, y, x int) float32 {
	if n := uint32(k*73856093 ^ y*19349663 ^ x*83492791); n%64 == 0 {
		return float32(n % 10007)
	}
	return 0
}

func (s sparse) Region(dst []float32, start, count []int) error {
	i := 0
	for k := range count[0] {
		for y := range count[1] {
			for x := range count[2] {
				dst[i] = s.at(start[0]+k, start[1]+y, start[2]+x)
				i++
			}
		}
	}
	return nil
}

const largeScript = `
import sys, h5py, numpy as np
d = h5py.File(sys.argv[1], "r")["counts"]
T, H, W = d.shape
y, x = np.meshgrid(np.arange(H, dtype=np.int64), np.arange(W, dtype=np.int64), indexing="ij")
for k in [0, 1, 31, 32, T // 2, T - 2, T - 1]:
    n = ((k * 73856093) ^ (y * 19349663) ^ (x * 83492791)).astype(np.uint32)
    want = np.where(n % 64 == 0, n % 10007, 0).astype(np.float32)
    assert np.array_equal(d[k], want), k
print(d.shape, d.size * 4 > 2**32)
`

// TestLarge streams 4.3 GB. It takes a while and 150 MB of
// disk, so it runs only with UNSHEARD_LARGE=1 in the environment.
func TestLarge(t *testing.T) {
	if os.Getenv("UNSHEARD_LARGE") != "1" {
		t.Skip("set UNSHEARD_LARGE=1 to stream a cube of more than 4 GiB")
	}
	shape := []int{1030, 1024, 1024}
	p := filepath.Join(t.TempDir(), "large.h5")
	g := Group{Data: []Dataset{{Name: "counts", Shape: shape, Value: sparse{}}}}
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	if err := WriteFile(context.Background(), p, g, Options{}); err != nil {
		t.Fatal(err)
	}
	runtime.ReadMemStats(&after)
	// Heap taken from the system: chunks in flight and 16 to 40 bytes for
	// each of 33,792 chunks, with room for garbage; the cube has 4320 MB.
	if grown := int64(after.HeapSys) - int64(before.HeapSys); grown > 128<<20 {
		t.Errorf("the heap grew by %d MB", grown>>20)
	}
	st, err := os.Stat(p)
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("%d MB on the disk, heap %d MB", st.Size()>>20, after.HeapSys>>20)
	if got := strings.TrimSpace(run(t, "python3-h5py", python, "-c", largeScript, p)); got != "(1030, 1024, 1024) True" {
		t.Errorf("h5py says %s", got)
	}
	f, err := Open(p)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	got, err := f.Frame("counts", 1029)
	if err != nil {
		t.Fatal(err)
	}
	for i, v := range got {
		if want := (sparse{}).at(1029, i/1024, i%1024); v != want {
			t.Fatalf("pixel %d: %g, want %g", i, v, want)
		}
	}
}
