package rig

import "math"

// Truth is what really happened in a shot. All numbers are of the light
// inside the window while the gate was open, photoelectrons as the streak arm
// counts them with the code open and a flat of 1.
type Truth struct {
	Scene Scene
	W, H  int

	// From and To limit the gate, ps; light outside is not part of the
	// truth.
	From, To float64
}

// Truth returns the truth of a scene before this station.
func (s *Station) Truth(c Scene) Truth {
	t := Truth{Scene: c, W: s.o.W, H: s.o.H}
	t.From, t.To = s.Gate()
	return t
}

// Three-point Gauss-Legendre rule on (-½, ½), exact for polynomials of degree
// 5 (Abramowitz & Stegun, Handbook of Mathematical Functions, table 25.4).
var (
	gaussAt = [3]float64{-0.3872983346207417, 0, 0.3872983346207417} // √(3/5)/2
	gaussBy = [3]float64{5.0 / 18, 8.0 / 18, 5.0 / 18}
)

// voxel integrates the scene over window pixel (x, y) and the time from a to
// b, cut into n parts.
func (c Scene) voxel(x, y int, a, b float64, n int) float64 {
	var sum float64
	dt := (b - a) / float64(n)
	for i := range n {
		mid := a + (float64(i)+0.5)*dt
		for k, u := range gaussAt {
			for j, v := range gaussAt {
				for l, w := range gaussAt {
					sum += gaussBy[k] * gaussBy[j] * gaussBy[l] * dt *
						c.Light(float64(x)+w, float64(y)+v, mid+u*dt)
				}
			}
		}
	}
	return sum
}

// Cube integrates the scene over every window pixel and the frames between
// the given edges (ps, rising): the exact cube, T·H·W values, index
// (k·H + y)·W + x. Time outside the gate counts as dark.
func (t Truth) Cube(edges []float64) []float32 {
	frames, n := max(len(edges)-1, 0), t.W*t.H
	out := make([]float32, frames*n)
	sum := make([]float64, n)
	for k := range frames {
		a, b := max(edges[k], t.From), min(edges[k+1], t.To)
		if a >= b {
			continue
		}
		clear(sum)
		const cut = 3 // parts per frame: quadrature of 9 times
		dt := (b - a) / cut
		for i := range cut {
			mid := a + (float64(i)+0.5)*dt
			for j, u := range gaussAt {
				t.add(sum, mid+u*dt, gaussBy[j]*dt)
			}
		}
		for i, v := range sum {
			out[k*n+i] = float32(v)
		}
	}
	return out
}

// add integrates the scene at one time over every window pixel.
func (t Truth) add(sum []float64, at, weight float64) {
	for _, p := range t.Scene.parts {
		f, b := p(at)
		if f == nil {
			continue
		}
		x0, x1 := pixels(b.x0, b.x1, t.W)
		y0, y1 := pixels(b.y0, b.y1, t.H)
		for y := y0; y < y1; y++ {
			for x := x0; x < x1; x++ {
				var v float64
				for j, dy := range gaussAt {
					for i, dx := range gaussAt {
						v += gaussBy[j] * gaussBy[i] * f(float64(x)+dx, float64(y)+dy)
					}
				}
				sum[y*t.W+x] += t.Scene.gain * weight * v
			}
		}
	}
}

// pixels returns the pixels 0..n-1 that touch the interval a to b.
func pixels(a, b float64, n int) (lo, hi int) {
	return int(min(max(math.Floor(a+0.5), 0), float64(n))), int(max(min(math.Floor(b+0.5)+1, float64(n)), 0))
}

// Frame returns the light per ps in every window pixel at time t (ps).
func (t Truth) Frame(at float64) []float64 {
	out := make([]float64, t.W*t.H)
	if t.From <= at && at <= t.To {
		t.add(out, at, 1)
	}
	return out
}

// Rate returns the light per ps in the whole window at time t (ps).
func (t Truth) Rate(at float64) float64 {
	var sum float64
	for _, v := range t.Frame(at) {
		sum += v
	}
	return sum
}

// Centroid returns the centre of the light at time t (ps), window px; NaN
// when it is dark.
func (t Truth) Centroid(at float64) (x, y float64) {
	var sum float64
	for i, v := range t.Frame(at) {
		sum += v
		x += v * float64(i%t.W)
		y += v * float64(i/t.W)
	}
	return x / sum, y / sum
}

// fine is the number of time steps of the light curve.
const fine = 256

// Curve samples the light per ps at evenly spaced times over the gate.
func (t Truth) Curve() (times, rate []float64) {
	times, rate = make([]float64, fine), make([]float64, fine)
	for i := range times {
		times[i] = t.From + (t.To-t.From)*(float64(i)+0.5)/fine
		rate[i] = t.Rate(times[i])
	}
	return times, rate
}

// Summary holds the numbers of the light curve.
type Summary struct {
	Total     float64 `json:"total_pe"`            // photoelectrons
	Brightest float64 `json:"brightest_pe_per_ps"` // highest rate
	PeakTime  float64 `json:"peak_time_ps"`
	FWHM      float64 `json:"fwhm_ps"` // between the outermost half heights; -1 when the gate cuts them
}

// Summary integrates the light curve.
func (t Truth) Summary() Summary {
	times, rate := t.Curve()
	var s Summary
	dt := times[1] - times[0]
	for i, v := range rate {
		s.Total += v * dt
		if v > s.Brightest {
			s.Brightest, s.PeakTime = v, times[i]
		}
	}
	s.FWHM = width(times, rate, s.Brightest/2)
	return s
}

// width returns the time between the outermost crossings of a level, by
// linear interpolation, or -1 if the curve is not below it at both ends.
func width(times, rate []float64, level float64) float64 {
	n := len(rate)
	if level <= 0 || rate[0] >= level || rate[n-1] >= level {
		return -1
	}
	cross := func(i, j int) float64 {
		return times[i] + (times[j]-times[i])*(level-rate[i])/(rate[j]-rate[i])
	}
	a, b := 0, n-1
	for rate[a+1] < level {
		a++
	}
	for rate[b-1] < level {
		b--
	}
	return cross(b, b-1) - cross(a, a+1)
}
