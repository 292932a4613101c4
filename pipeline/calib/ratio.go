package calib

import (
	"fmt"
	"math"
)

// ratioAgree is how far the throughput ratio of the even light and that of
// the target may differ before it is warned about, relative.
const ratioAgree = 0.03

// flux compares the light of both arms over the inner part of the window:
// reference photoelectrons at h(x, y) times the Jacobian of h, over streak
// photoelectrons at (x, y). s is on the window, r on the reference sensor.
func flux(s, r image, h [9]float64, inset int) (ratio, sigma float64, n int) {
	rp := r.plane.clone()
	heal(rp, r.ok)
	sp := newSpline(rp)
	var sum, light, sq float64
	det := h[0]*(h[4]*h[8]-h[5]*h[7]) - h[1]*(h[3]*h[8]-h[5]*h[6]) + h[2]*(h[3]*h[7]-h[4]*h[6])
	var each []float64
	for y := inset; y < s.h-inset; y++ {
		for x := inset; x < s.w-inset; x++ {
			i := y*s.w + x
			u, v := apply(h, float64(x), float64(y))
			if !s.ok[i] || u < 2 || v < 2 || u > float64(r.w-3) || v > float64(r.h-3) || !r.ok[int(v+0.5)*r.w+int(u+0.5)] {
				continue
			}
			d := h[6]*float64(x) + h[7]*float64(y) + h[8]
			q, _, _ := sp.at(u, v)
			q *= math.Abs(det / (d * d * d))
			sum += q
			light += s.v[i]
			each = append(each, q/s.v[i])
			n++
		}
	}
	if n == 0 || !(light > 0) {
		return math.NaN(), math.NaN(), 0
	}
	ratio = sum / light
	for _, e := range each {
		sq += (e - ratio) * (e - ratio)
	}
	return ratio, math.Sqrt(sq) / float64(n), n
}

// drift is the relative standard deviation of the mean of the frames of a
// stack, from how their totals scatter.
func drift(s *stack, dark float64) float64 {
	if s.n < 2 {
		return 0
	}
	var mean, sq float64
	for _, v := range s.sums {
		mean += (v - dark) / float64(s.n)
	}
	for _, v := range s.sums {
		sq += (v - dark - mean) * (v - dark - mean)
	}
	return math.Sqrt(sq/float64(s.n-1)/float64(s.n)) / mean
}

// findRatio gives the throughput ratio a: even light if there is any, else the
// target.
func findRatio(even, target Quantity) (Quantity, []string, error) {
	if !(even.Value > 0) {
		if !(target.Value > 0) || math.IsInf(target.Value, 0) {
			return even, nil, fmt.Errorf("the throughput ratio cannot be found: the arms share no light inside the window")
		}
		return target, nil, nil
	}
	if d := target.Value/even.Value - 1; math.Abs(d) > ratioAgree {
		return even, []string{fmt.Sprintf("the throughput ratio is %.4g by the even light but %.4g by the target (%+.1f %%): check that both arms were exposed together; the even light is believed",
			even.Value, target.Value, 100*d)}, nil
	}
	return even, nil, nil
}

// keysSix is the six-point cubic convolution kernel of R. Keys, IEEE Trans.
// ASSP 29 (1981) 1153–1160, by which package optics interpolates.
func keysSix(s float64) float64 {
	s = math.Abs(s)
	switch {
	case s < 1:
		return (4.0/3*s-7.0/3)*s*s + 1
	case s < 2:
		return ((-7.0/12*s+3)*s-59.0/12)*s + 2.5
	case s < 3:
		return ((1.0/12*s-2.0/3)*s+1.75)*s - 1.5
	}
	return 0
}

// keysResponse is the transfer of keysSix at ν cycles per sample.
func keysResponse(nu float64) float64 {
	const step = 1.0 / 64
	sum := keysSix(0) / 2
	for s := step; s < 3; s += step {
		sum += keysSix(s) * math.Cos(2*math.Pi*nu*s)
	}
	return 2 * sum * step
}

func sinc(x float64) float64 {
	if x == 0 {
		return 1
	}
	return math.Sin(math.Pi*x) / (math.Pi * x)
}

// modelBlur turns the blur σ of the optics into the one with which the
// forward model of package optics comes closest to what the reference camera
// records. Its kernel tri ∗ g_σ is right for a scene that is constant over
// pixels; the scene brought over from the window is interpolated, and
// smoother, so that the kernel's own box would blur once too often. r is the
// side of a reference pixel in window pixels. Compared are the transfer
// functions between the window's pixel means and the reference pixels, with
// the weight 1/ν² of natural scenes (D. J. Field, J. Opt. Soc. Am. A 4, 1987,
// 2379–2394).
func modelBlur(sigma, r float64) float64 {
	const steps = 60
	type point struct{ nu, view, want, weight float64 }
	var at []point
	for i := range steps {
		nu := 0.5 * (float64(i) + 0.5) / steps // cycles per reference px
		w := nu / r                            // cycles per window px
		if w >= 0.5 {
			break
		}
		view := keysResponse(w)
		if r > 1 {
			view *= sinc(w * math.Sqrt(r*r-1))
		}
		want := math.Exp(-2*math.Pi*math.Pi*sigma*sigma*nu*nu) * sinc(nu) / sinc(w)
		at = append(at, point{nu, view, want, sinc(w) * sinc(w) / math.Pow(nu*nu+0.02*0.02, 1.5)})
	}
	best, _ := minimise(func(s float64) (c float64) {
		k := pixelKernel(s)
		for _, p := range at {
			var t float64
			for j, v := range k {
				t += v * math.Cos(2*math.Pi*p.nu*float64(j-len(k)/2))
			}
			c += p.weight * (t*p.view - p.want) * (t*p.view - p.want)
		}
		return c
	}, 0, sigma+0.5, 1e-4)
	if best < 1e-3 {
		return 0
	}
	return best
}
