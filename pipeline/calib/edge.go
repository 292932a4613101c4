package calib

import (
	"math"
)

// edgeReach is how far from a side its spread is fitted, px.
const edgeReach = 8

// edgeBand is the number of lines averaged into one profile: a side of the
// window may be tilted against the pixels by 1/80 before the average widens
// by 0.03 px.
const edgeBand = 8

// maxBlur bounds the blur that is searched, px.
const maxBlur = 4.0

// edgeFit is a blur found from opposite sides of the window.
type edgeFit struct {
	sigma, err float64 // px
	chi2       float64 // per degree of freedom
	each       [2]float64
	side       [2]float64 // where the sides lie against whole pixels, px, inwards
	ok         bool
}

// band is one profile across a side; d counts pixels from the nominal side,
// positive inside.
type band struct{ d, v, w []float64 }

// fitEdges finds the blur along x (or y) from the spread of the window's two
// sides in the open frames: a step seen through the blur and the pixel,
// edgeSpread. The idea is the edge method of ISO 12233 for the spatial
// frequency response, with the shape of the blur given.
func fitEdges(open image, w Window, alongX bool) edgeFit {
	var sides [2][]band
	for i := range sides {
		sides[i] = bands(open, w, alongX, i == 1)
	}
	f := edgeFit{sigma: math.NaN()}
	all := append(append([]band(nil), sides[0]...), sides[1]...)
	points := 0
	for _, b := range all {
		points += len(b.d)
	}
	dof := points - 4*len(all) - 1
	if dof < 4 {
		return f
	}
	cost := func(bs []band) func(float64) float64 {
		return func(s float64) (sum float64) {
			for _, b := range bs {
				sum += b.cost(s)
			}
			return sum
		}
	}
	total := cost(all)
	s, c := minimise(total, 0.02, maxBlur, 1e-4)
	f.sigma, f.chi2 = s, c/float64(dof)
	f.err = curvatureSigma(total, s, 0.05*max(s, 0.2)) * math.Sqrt(max(1, f.chi2))
	for i, bs := range sides {
		if len(bs) > 0 {
			f.each[i], _ = minimise(cost(bs), 0.02, maxBlur, 1e-3)
			for _, b := range bs {
				f.side[i] += b.place(s) / float64(len(bs))
			}
		}
	}
	f.ok = finite(f.sigma, f.err) && f.sigma < 0.95*maxBlur
	return f
}

// bands averages the lines across one side, away from the corners.
func bands(open image, w Window, alongX, far bool) (out []band) {
	length, start := w.H, w.Y
	size, along, sensor := w.W, w.X, open.w
	if !alongX {
		length, start, size, along, sensor = w.W, w.X, w.H, w.Y, open.h
	}
	reach := min(edgeReach, size/2)
	skip := min(4, length/4)
	for a := start + skip; a < start+length-skip; a += edgeBand {
		b := min(a+edgeBand, start+length-skip)
		if b-a < edgeBand/2 && len(out) > 0 {
			break
		}
		var p band
		for d := -reach; d < reach; d++ {
			i := along + d // near side: pixel `along` is the first inside
			if far {
				i = along + size - 1 - d
			}
			if i < 0 || i >= sensor {
				continue
			}
			if v, vari, n := open.line(i, a, b, alongX); n > 0 {
				p.d = append(p.d, float64(d)+0.5)
				p.v = append(p.v, v)
				p.w = append(p.w, 1/vari)
			}
		}
		if len(p.d) >= reach+2 {
			out = append(out, p)
		}
	}
	return out
}

// line averages column (row) i over the rows (columns) a to b.
func (im image) line(i, a, b int, alongX bool) (v, vari float64, n int) {
	for j := a; j < b; j++ {
		k := i*im.w + j
		if alongX {
			k = j*im.w + i
		}
		if im.ok[k] {
			v += im.v[k]
			vari += im.vari[k] + flatDoubt*flatDoubt*im.v[k]*im.v[k]
			n++
		}
	}
	if n == 0 {
		return 0, 0, 0
	}
	m := float64(n)
	return v / m, vari / (m * m), n
}

// flatDoubt is the error of the flat that a fit allows for beside the noise,
// relative.
const flatDoubt = 0.002

// cost is χ² of the profile for a blur σ, with the step's place, height,
// slope inside and the level outside fitted.
func (b *band) cost(sigma float64) float64 {
	_, c := b.fit(sigma)
	return c
}

// place is where the step lies.
func (b *band) place(sigma float64) float64 {
	p, _ := b.fit(sigma)
	return p
}

func (b *band) fit(sigma float64) (place, cost float64) {
	return minimise(func(pos float64) float64 {
		eq := newNormal(3)
		for i, d := range b.d {
			e := edgeSpread(d-pos, sigma)
			eq.add([]float64{e, e * (d - pos) / edgeReach, 1}, b.v[i], b.w[i])
		}
		c, _, ok := eq.solve()
		if !ok {
			return math.Inf(1)
		}
		return eq.chi2(c)
	}, -1, 1, 1e-4)
}
