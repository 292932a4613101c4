package calib

import "math"

// illumination is the even light inside the window, without the blur of its
// sides: a polynomial of total degree 0 to 4, chosen by the Bayesian
// information criterion (G. Schwarz, Ann. Stat. 6, 1978, 461–464) on the
// pixels further than margin from the sides, plus the smoothed rest where
// that is more than noise.
func illumination(open image, margin int) plane {
	w, h := open.w, open.h
	var in []int
	for y := min(margin, h/3); y < h-min(margin, h/3); y++ {
		for x := min(margin, w/3); x < w-min(margin, w/3); x++ {
			if i := y*w + x; open.ok[i] {
				in = append(in, i)
			}
		}
	}
	row := func(i, degree int) []float64 {
		return terms(2*float64(i%w)/float64(max(w-1, 1))-1, 2*float64(i/w)/float64(max(h-1, 1))-1, degree)
	}
	best, bestBIC := []float64(nil), math.Inf(1)
	bestDegree := 0
	for degree := 0; degree <= 4; degree++ {
		k := (degree + 1) * (degree + 2) / 2
		if len(in) < 10*k {
			break
		}
		eq := newNormal(k)
		for _, i := range in {
			eq.add(row(i, degree), open.v[i], 1/open.vari[i])
		}
		c, _, ok := eq.solve()
		if !ok {
			break
		}
		if bic := eq.chi2(c) + float64(k)*math.Log(float64(len(in))); bic < bestBIC {
			best, bestBIC, bestDegree = c, bic, degree
		}
	}
	l := newPlane(w, h)
	for i := range l.v {
		l.v[i] = dot(row(i, bestDegree), best)
	}
	addRest(l, open, in)
	return l
}

// unevenLeast is the unevenness beyond the polynomial, relative rms, that is
// taken for light rather than noise of the flat.
const unevenLeast = 0.004

func addRest(l plane, open image, in []int) {
	ok := make([]bool, len(l.v))
	rest := newPlane(l.w, l.h)
	var excess, level float64
	for _, i := range in {
		ok[i] = true
		rest.v[i] = open.v[i] - l.v[i]
		excess += rest.v[i]*rest.v[i] - open.vari[i]
		level += l.v[i]
	}
	n := float64(len(in))
	if level /= n; excess/n < (unevenLeast*level)*(unevenLeast*level) {
		return
	}
	soft, weight := smooth(rest, ok, 2)
	for i := range l.v {
		if weight.v[i] > 0.05 {
			l.v[i] += soft.v[i]
		}
	}
}

// terms lists the products of Legendre polynomials in x and y up to a total
// degree.
func terms(x, y float64, degree int) []float64 {
	n := degree + 1
	px, py, d := make([]float64, n), make([]float64, n), make([]float64, n)
	legendre(px, d, x)
	legendre(py, d, y)
	var t []float64
	for j := range n {
		for i := 0; i+j <= degree; i++ {
			t = append(t, px[i]*py[j])
		}
	}
	return t
}
