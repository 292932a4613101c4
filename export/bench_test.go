package export

import (
	"context"
	"io"
	"path/filepath"
	"testing"

	"unsheard/export/nexus"
)

// BenchmarkParts times every file of a folder for a cube of 64×128×256.
func BenchmarkParts(b *testing.B) {
	r := pulse(64, 128, 256, "full", "a")
	o := Options{}
	o.fill()
	for _, p := range parts(&r, origin{}, &o) {
		b.Run(p.name, func(b *testing.B) {
			b.ReportAllocs()
			b.SetBytes(int64(4 * len(r.Cube.Data)))
			for b.Loop() {
				if err := p.write(context.Background(), &discarded{}); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}

// BenchmarkFrame times reading one frame back.
func BenchmarkFrame(b *testing.B) {
	r := pulse(64, 128, 256, "full", "a")
	dir := filepath.Join(b.TempDir(), "a.shot")
	if err := Publish(context.Background(), dir, r, Options{parts: bare}); err != nil {
		b.Fatal(err)
	}
	f, err := nexus.Open(filepath.Join(dir, fileCube))
	if err != nil {
		b.Fatal(err)
	}
	defer f.Close()
	b.ReportAllocs()
	b.SetBytes(4 * 128 * 256)
	for b.Loop() {
		if _, err := f.Frame("entry/data/counts", 31); err != nil {
			b.Fatal(err)
		}
	}
}

type discarded struct{ at int64 }

func (d *discarded) Write(b []byte) (int, error) { d.at += int64(len(b)); return len(b), nil }

func (d *discarded) Seek(off int64, whence int) (int64, error) {
	if whence == io.SeekStart {
		d.at = off
	}
	return d.at, nil
}
