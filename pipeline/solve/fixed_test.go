package solve

import (
	"context"
	"testing"
)

// TestFixedSpacing has a quick look keep to the spacing and the iterations it
// was given, and stay within 4 dB of the search: the difference measured was
// 1 to 2 dB.
func TestFixedSpacing(t *testing.T) {
	s := newStation(24, 40, 40)
	p, truth := s.shot(t, movies(24, 40, 40)["packet"], 200, testSeed)
	full, err := Auto(context.Background(), p, Options{Workers: 2})
	if err != nil {
		t.Fatal(err)
	}
	o := Options{Workers: 2, Spacing: [3]float64{2, 2.5, 2.5}, MaxIter: 120}
	quick, err := Auto(context.Background(), p, o)
	if err != nil {
		t.Fatal(err)
	}
	a, b := psnr(full.X, truth), psnr(quick.X, truth)
	t.Logf("searched %v: %.1f dB in %d iterations; fixed: %.1f dB in %d", full.Spacing, a, full.Iterations, b, quick.Iterations)
	if quick.Spacing != o.Spacing {
		t.Errorf("spacing %v, asked for %v", quick.Spacing, o.Spacing)
	}
	if quick.Iterations > 160 {
		t.Errorf("%d iterations, want at most 40 + 120", quick.Iterations)
	}
	if b < a-4 {
		t.Errorf("%.1f dB, the search reaches %.1f", b, a)
	}
}
