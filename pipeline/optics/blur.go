package optics

import (
	"math"

	"unsheard/pipeline/solve/row"
)

// Blur is a Gaussian point spread, continuous, in pixels of the plane it acts
// on.
type Blur struct {
	SigmaX, SigmaY float64 // px, 0 for none
}

// kernelTail is the mass that may be cut from either side of a kernel: far
// under the calibrated model-error floor of a percent.
const kernelTail = 1e-4

// kernel is a sampled point spread: dst[r] = Σ_j w[j]·src[r−lo−j].
type kernel struct {
	lo int
	w  []float32
}

// normal integrals: the n-th antiderivative of the Gaussian density of
// standard deviation s, vanishing at −∞. Differences of them are box
// convolutions of g_s.
func normal2(x, s float64) float64 {
	if s == 0 {
		return max(x, 0)
	}
	return x*cdf(x/s) + s*pdf(x/s)
}

func normal3(x, s float64) float64 {
	if s == 0 {
		return max(x, 0) * max(x, 0) / 2
	}
	return (x*x+s*s)/2*cdf(x/s) + s*x/2*pdf(x/s)
}

func cdf(x float64) float64 { return math.Erfc(-x/math.Sqrt2) / 2 }
func pdf(x float64) float64 { return math.Exp(-x*x/2) / math.Sqrt(2*math.Pi) }

// spread evaluates (3), or (4) for a smear of length l > 0, at x.
func spread(x, sigma, l float64) float64 {
	if l == 0 {
		return normal2(x+1, sigma) - 2*normal2(x, sigma) + normal2(x-1, sigma)
	}
	third := func(x float64) float64 {
		return normal3(x+1, sigma) - 2*normal3(x, sigma) + normal3(x-1, sigma)
	}
	return (third(x+l/2) - third(x-l/2)) / l
}

// newKernel samples (3) or (4), displaced by shift pixels, and cuts and
// normalises it.
func newKernel(sigma, smear, shift float64) kernel {
	reach := int(math.Ceil(6*sigma+smear/2+math.Abs(shift))) + 2
	w := make([]float64, 2*reach+1)
	var sum float64
	for j := range w {
		w[j] = max(spread(float64(j-reach)-shift, sigma, smear), 0)
		sum += w[j]
	}
	lo, hi := 0, len(w)
	for cut := 0.0; cut+w[lo] < kernelTail*sum; lo++ {
		cut += w[lo]
	}
	for cut := 0.0; cut+w[hi-1] < kernelTail*sum; hi-- {
		cut += w[hi-1]
	}
	w = w[lo:hi]
	sum = 0
	for _, v := range w {
		sum += v
	}
	k := kernel{lo: lo - reach, w: make([]float32, len(w))}
	for j, v := range w {
		k.w[j] = float32(v / sum)
	}
	return k
}

// flip returns the kernel of the adjoint.
func (k kernel) flip() kernel {
	n := len(k.w)
	f := kernel{lo: -(k.lo + n - 1), w: make([]float32, n)}
	for j, v := range k.w {
		f.w[n-1-j] = v
	}
	return f
}

// identity reports whether the kernel changes nothing.
func (k kernel) identity() bool { return len(k.w) == 1 && k.lo == 0 && k.w[0] == 1 }

// Spread is a blur of a rows×cols plane in two passes, along rows and then
// along columns, zeros outside; each pass may be done for a range of rows at a
// time, and from several goroutines.
type Spread struct {
	Rows, Cols int
	x, y       kernel
	lanes      row.Lanes
}

// Along does the pass along rows for rows lo ≤ r < hi of src. dst and src are
// whole planes that do not overlap.
func (s *Spread) Along(dst, src []float32, lo, hi int) {
	for r := lo; r < hi; r++ {
		out, in := dst[r*s.Cols:(r+1)*s.Cols], src[r*s.Cols:(r+1)*s.Cols]
		if s.x.identity() {
			copy(out, in)
		} else {
			s.x.convolve(out, in, s.lanes)
		}
	}
}

// Across does the pass along columns for rows lo ≤ r < hi of dst.
func (s *Spread) Across(dst, src []float32, lo, hi int) {
	for r := lo; r < hi; r++ {
		// Rows r−y.lo−j of src for the taps j that stay inside.
		first := max(0, r-s.y.lo-(s.Rows-1))
		end := min(len(s.y.w), r-s.y.lo+1)
		out := dst[r*s.Cols : (r+1)*s.Cols]
		if first >= end {
			clear(out)
			continue
		}
		s.lanes.FirSet(out, s.y.w[first:end], src, (r-s.y.lo-first)*s.Cols, -s.Cols)
	}
}

// Transpose returns the adjoint. Its passes may be taken in the same order,
// since they commute.
func (s *Spread) Transpose() Spread {
	return Spread{Rows: s.Rows, Cols: s.Cols, x: s.x.flip(), y: s.y.flip(), lanes: s.lanes}
}

// apply does both passes.
func (s *Spread) apply(dst, tmp, src []float32) {
	s.Along(tmp, src, 0, s.Rows)
	s.Across(dst, tmp, 0, s.Rows)
}

// convolve writes the convolution of a row, zeros outside. Every sample sums
// its taps in order; those near the ends have fewer.
func (k *kernel) convolve(dst, src []float32, lanes row.Lanes) {
	n := len(dst)
	lo := min(max(k.lo+len(k.w)-1, 0), n) // from here all taps stay inside,
	hi := min(max(n+k.lo, lo), n)         // up to here
	if lo < hi {
		lanes.FirSet(dst[lo:hi], k.w, src, lo-k.lo, -1)
	}
	k.end(dst, src, 0, lo, lanes)
	k.end(dst, src, hi, n, lanes)
}

// margin is the longest run of samples that end copies to have zeros around it.
const margin = 128

// end is convolve for the samples lo ≤ i < hi near an end. A sample beyond src
// is a 0 that adds nothing.
func (k *kernel) end(dst, src []float32, lo, hi int, lanes row.Lanes) {
	var padded [margin]float32
	reach := len(k.w) - 1
	if hi-lo+reach > margin {
		k.slowEnd(dst, src, lo, hi)
		return
	}
	if lo == hi {
		return
	}
	from := lo - k.lo - reach // sample of src that padded begins with
	if a, b := max(from, 0), min(hi-k.lo, len(src)); a < b {
		copy(padded[a-from:], src[a:b])
	}
	lanes.FirSet(dst[lo:hi], k.w, padded[:], reach, -1)
}

// slowEnd is end without the copy.
func (k *kernel) slowEnd(dst, src []float32, lo, hi int) {
	for i := lo; i < hi; i++ {
		var sum float32
		for j, w := range k.w {
			if q := i - k.lo - j; q >= 0 && q < len(src) {
				sum += float32(w * src[q])
			}
		}
		dst[i] = sum
	}
}
