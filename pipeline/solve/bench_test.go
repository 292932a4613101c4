package solve

import (
	"fmt"
	"math/rand/v2"
	"testing"

	"unsheard/pipeline/optics"
)

func benchProblem(b *testing.B, t, h, w int) Problem {
	rng := rand.New(rand.NewPCG(testSeed, 1))
	code := make([]float32, h*w)
	for j := range code {
		code[j] = float32(rng.IntN(2))
	}
	const turn, grow = 0.01, 1.02 // a view as of a real station
	view, err := optics.NewView([9]float64{grow, -turn, 3.3, turn, grow, 2.6, 0, 0, 1}, w, h, w+16, h+16, 4)
	if err != nil {
		b.Fatal(err)
	}
	m, err := optics.NewModel(optics.Geometry{T: t, H: h, W: w, Code: code, StreakBlur: optics.Blur{SigmaX: 1, SigmaY: 1}, StreakPad: 4, View: view, ReferenceBlur: optics.Blur{SigmaX: 1, SigmaY: 1}})
	if err != nil {
		b.Fatal(err)
	}
	x := make([]float32, t*h*w)
	for j := range x {
		k, y, i := j/(h*w), j/w%h, j%w
		d := float64((y-h/2)*(y-h/2)) + float64((i-w*k/t)*(i-w*k/t))
		x[j] = float32(200 * gauss(d, float64(w)/12))
	}
	rows, cols := m.StreakShape()
	p := Problem{Model: m, Streak: make([]float32, rows*cols)}
	rr, rc := m.ReferenceShape()
	p.Reference = make([]float32, rr*rc)
	m.Forward(p.Streak, p.Reference, x)
	p.StreakVar, p.ReferenceVar = constant(rows*cols, 100), constant(rr*rc, 100)
	return p
}

// BenchmarkIteration reports ns per voxel and iteration.
func BenchmarkIteration(b *testing.B) {
	for _, s := range [][3]int{{32, 64, 64}, {64, 128, 64}, {128, 256, 128}} {
		for _, workers := range []int{1, 2} {
			b.Run(fmt.Sprintf("%dx%dx%d/workers=%d", s[1], s[2], s[0], workers), func(b *testing.B) {
				e := prepared(b, benchProblem(b, s[0], s[1], s[2]), workers, .4)
				for range 5 {
					e.iterate(false)
				}
				n := s[0] * s[1] * s[2]
				b.SetBytes(int64(32 * n))
				b.ReportAllocs()
				b.ResetTimer()
				for range b.N {
					e.iterate(false)
				}
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(n), "ns/voxel")
			})
		}
	}
}

// BenchmarkCopy is the machine's copy bandwidth for the bytes that an
// iteration must read and write, 16 each per voxel.
func BenchmarkCopy(b *testing.B) {
	for _, n := range []int{32 * 64 * 64, 64 * 128 * 64, 128 * 256 * 128} {
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			src, dst := make([]byte, 16*n), make([]byte, 16*n)
			b.SetBytes(int64(32 * n))
			for range b.N {
				copy(dst, src)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(n), "ns/voxel")
		})
	}
}
