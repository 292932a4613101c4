package solve

import (
	"context"
	"testing"
)

// BenchmarkAuto is a whole reconstruction of 128×128×64 voxels on two cores.
func BenchmarkAuto(b *testing.B) {
	s := newStation(64, 128, 128)
	p, truth := s.shot(b, movies(s.t, s.h, s.w)["packet"], 200, 1)
	b.ResetTimer()
	for range b.N {
		r, err := Auto(context.Background(), p, Options{Workers: 2})
		if err != nil {
			b.Fatal(err)
		}
		b.ReportMetric(float64(r.Iterations), "iterations")
		b.ReportMetric(psnr(r.X, truth), "dB")
	}
}
