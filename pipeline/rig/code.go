package rig

import (
	"math"
	"math/rand/v2"
)

// spare is the number of code elements made beyond each edge of the window,
// so that a shifted code still covers it.
const spare = 6

// pattern is the random binary code.
type pattern struct {
	rows, cols int
	open       []bool
}

func newPattern(o Options) pattern {
	rng := rand.New(rand.NewPCG(o.Seed, streamCode))
	p := pattern{
		rows: int(math.Ceil(float64(o.H)/o.Pitch)) + 2*spare,
		cols: int(math.Ceil(float64(o.W)/o.Pitch)) + 2*spare,
	}
	p.open = make([]bool, p.rows*p.cols)
	for i := range p.open {
		p.open[i] = rng.Uint64()&1 == 1
	}
	return p
}

// share is the part of a cell's side that one code element covers.
type share struct {
	element int
	part    float64
}

// cover splits n cells of side h, the first starting at -0.5 window pixels,
// into shares of elements of the given pitch, shifted by d px.
func cover(n int, h, pitch, d float64, elements int) [][]share {
	out := make([][]share, n)
	for i := range out {
		a := float64(i)*h - d
		b := a + h
		for e := int(math.Floor(a / pitch)); float64(e)*pitch < b; e++ {
			w := (math.Min(b, float64(e+1)*pitch) - math.Max(a, float64(e)*pitch)) / h
			if w > 0 {
				out[i] = append(out[i], share{min(max(e+spare, 0), elements-1), w})
			}
		}
	}
	return out
}

// transmission returns the code on the fine grid (rows×cols cells of the
// window, exact area averages), moved by (dx, dy) px from where it was built.
func (s *Station) transmission(dx, dy float64) []float64 {
	o, p := s.o, s.pattern
	ys := cover(o.H*sub, 1.0/sub, o.Pitch, o.CodeY+dy, p.rows)
	xs := cover(o.W*sub, 1.0/sub, o.Pitch, o.CodeX+dx, p.cols)
	t := make([]float64, len(ys)*len(xs))
	for y, sy := range ys {
		for x, sx := range xs {
			var open float64
			for _, a := range sy {
				for _, b := range sx {
					if p.open[a.element*p.cols+b.element] {
						open += a.part * b.part
					}
				}
			}
			t[y*len(xs)+x] = o.Low + (o.High-o.Low)*open
		}
	}
	return t
}

// Code returns the transmission averaged over every window pixel (H·W,
// row-major, turned frame).
func (s *Station) Code() []float32 {
	fine := s.transmission(0, 0)
	out := make([]float32, s.o.H*s.o.W)
	for y := range s.o.H {
		for x := range s.o.W {
			var sum float64
			for b := range sub {
				for a := range sub {
					sum += fine[(y*sub+b)*s.o.W*sub+x*sub+a]
				}
			}
			out[y*s.o.W+x] = float32(sum / (sub * sub))
		}
	}
	return out
}
