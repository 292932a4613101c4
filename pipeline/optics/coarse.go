package optics

import "fmt"

// Coarse returns the geometry on a grid n times coarser in x, y and time, for
// a quick look. A coarse voxel holds the light of n×n×n fine ones; the last
// ones may reach beyond the fine cube, where the code is taken as dark.
//
// Frames of both arms must be binned to match, see [Bin]: the fine padded
// streak plane from row and column StreakPad − n·(coarse StreakPad), the whole
// reference sensor frame from its corner. The sweep still moves one (binned)
// pixel per frame. The middle of a coarse frame lies (n−1)/2 fine pixels after
// the middle of its first fine frame; Shift carries that, in binned pixels.
//
// For a scene and a code that are even over coarse pixels and frames the
// coarse model equals the binned fine one exactly. The approximation is that
// light within a coarse voxel is taken as even although scene and code vary
// inside it: the code is averaged over n×n, and code elements smaller than n
// pixels wash out.
func (g Geometry) Coarse(n int) (Geometry, error) {
	if n < 1 {
		return Geometry{}, fmt.Errorf("coarse grid: factor %d must be at least 1", n)
	}
	if g.Step == 0 {
		g.Step = 1
	}
	if n == 1 {
		return g, nil
	}
	c := g
	c.T, c.H, c.W = (g.T+n-1)/n, (g.H+n-1)/n, (g.W+n-1)/n
	c.Code = make([]float32, c.H*c.W)
	for y := range g.H {
		for i := range g.W {
			c.Code[y/n*c.W+i/n] += g.Code[y*g.W+i] / float32(n*n)
		}
	}
	c.StreakPad = g.StreakPad / n
	c.Shift = (g.Shift + float64(g.Step)*float64(n-1)/2) / float64(n)
	c.StreakBlur = Blur{SigmaX: g.StreakBlur.SigmaX / float64(n), SigmaY: g.StreakBlur.SigmaY / float64(n)}
	c.ReferenceBlur = Blur{SigmaX: g.ReferenceBlur.SigmaX / float64(n), SigmaY: g.ReferenceBlur.SigmaY / float64(n)}
	v := g.View
	if v.fwd.start == nil {
		v = Identity(g.W, g.H)
	}
	var err error
	c.View, err = v.coarse(n)
	return c, err
}

// coarse composes the view with binning by n on both of its ends.
func (v *View) coarse(n int) (View, error) {
	s, o := float64(n), float64(n-1)/2
	// window fine = s·coarse + o; sensor coarse = (fine − o)/s.
	h := mul3([9]float64{1 / s, 0, -o / s, 0, 1 / s, -o / s, 0, 0, 1}, mul3(v.hom, [9]float64{s, 0, o, 0, s, o, 0, 0, 1}))
	return NewView(h, (v.w+n-1)/n, (v.h+n-1)/n, (v.refW+n-1)/n, (v.refH+n-1)/n, (v.margin+n-1)/n)
}

func mul3(a, b [9]float64) (c [9]float64) {
	for r := range 3 {
		for q := range 3 {
			c[3*r+q] = a[3*r]*b[q] + a[3*r+1]*b[3+q] + a[3*r+2]*b[6+q]
		}
	}
	return c
}

// Bin sums n×n blocks of a w-wide frame into dst, cols wide, starting at
// pixel (x0, y0) of the frame. A pixel with a variance that is not positive is
// masked. A block that leaves the frame or of which half the pixels or more are
// masked is masked (variance −1); in any other the mean of the good pixels
// stands for all. It panics if a length does not fit.
func Bin(dst, dstVar, src, srcVar []float32, w, x0, y0, n, cols int) {
	if len(dst) != len(dstVar) || len(src) != len(srcVar) || cols <= 0 || w <= 0 || len(dst)%cols != 0 || len(src)%w != 0 {
		panic(ErrShape)
	}
	h := len(src) / w
	for j := range dst {
		var sum, vari float64
		good, whole := 0, true
		for b := range n {
			for a := range n {
				x, y := x0+j%cols*n+a, y0+j/cols*n+b
				if x < 0 || y < 0 || x >= w || y >= h {
					whole = false
					continue
				}
				if v := srcVar[y*w+x]; v > 0 {
					sum += float64(src[y*w+x])
					vari += float64(v)
					good++
				}
			}
		}
		dst[j], dstVar[j] = 0, -1
		if whole && 2*good > n*n {
			f := float64(n*n) / float64(good)
			dst[j], dstVar[j] = float32(sum*f), float32(vari*f*f)
		}
	}
}
