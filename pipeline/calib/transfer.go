package calib

import (
	"fmt"
	"math"
)

// Level is one exposure of the photon transfer.
type Level struct {
	Mean     float64 // ADU, dark taken off
	Var      float64 // ADU², temporal
	Sigma    float64 // ADU², of Var
	Exposure float64 // 0 if not known
	Used     bool    // in the fit of the gain
	Note     string  // why not
	Repeat   bool    // not a flat pair but repeated frames of steady light

	files [2]string
	raw   float64 // ADU, 99.9 % quantile as recorded
	mean  float64 // ADU, as recorded
	part  float64 // relative standard deviation of Var, of Gaussian noise whose variance goes with the light
	full  bool    // many pixels stand at the top
}

// Transfer is the photon transfer of one arm: EMVA Standard 1288 Release 4.0
// Linear, the photon transfer method,
//
//	σ_y² − σ_y.dark² = K (μ_y − μ_y.dark)
//
// with σ_y² half the variance of the difference of two frames of equal
// exposure, and K the slope of the regression through the origin over 0 to
// 70 % of saturation. Here each level is weighted by 1/variance of its σ_y²,
// and the second frame is first scaled to the mean of the first, so that
// light that flickers adds no variance.
type Transfer struct {
	Levels []Level

	K, SigmaK      float64 // ADU per pe
	DarkVar        float64 // ADU², quantisation included
	SigmaDarkVar   float64 // ADU²
	Saturation     float64 // ADU as recorded; 0 if not known
	SaturationNote string
	Linearity      float64 // mean relative deviation; NaN if not known
	LinearityMax   float64
	Source         string // flat pairs or repeated frames
}

// Limits of the standard: the gain is fitted up to 70 % of saturation, the
// linearity between 5 % and 95 % of it.
const (
	gainUpTo      = 0.7
	linearFrom    = 0.05
	linearUpTo    = 0.95
	brighter      = 0.5  // read noises by which a flat must be brighter than the dark frames
	flickerLimit  = 0.2  // largest relative difference within a pair
	outlier       = 8    // robust standard deviations beyond which a difference is no noise
	plateauShare  = 0.1  // part of the pixels at the top that makes a plateau
	plateauRise   = 1.5  // … times those just below
	plateauWidth  = 1e-3 // width of the top, relative; at least 6 read noises
	collapse      = 0.5  // variance over expected variance that marks a saturated level
	saturationGap = 4    // read noises below the plateau where saturation is set
)

// pairLevel measures one pair: y0, y1 as recorded, dark the mean dark frame,
// ok the pixels to use.
func pairLevel(y0, y1 []float32, dark plane, ok []bool, read float64) (Level, error) {
	var m0, m1 float64
	n := 0
	raw := make([]float64, 0, len(y0))
	for i, good := range ok {
		if good {
			m0 += float64(y0[i]) - dark.v[i]
			m1 += float64(y1[i]) - dark.v[i]
			raw = append(raw, float64(y0[i]))
			n++
		}
	}
	if n < 64 {
		return Level{}, fmt.Errorf("only %d pixels can be used", n)
	}
	m0, m1 = m0/float64(n), m1/float64(n)
	l := Level{Mean: (m0 + m1) / 2}
	for _, v := range raw {
		l.mean += v / float64(n)
	}
	l.raw = quantile(raw, 0.999)
	l.full = plateauAt(raw, l.raw, read)
	if !(m0 > brighter*read && m1 > brighter*read) {
		return l, fmt.Errorf("the frames are %.2g ADU brighter than the dark frames: check that the light was on", l.Mean)
	}
	if math.Abs(m0-m1) > flickerLimit*l.Mean {
		return l, fmt.Errorf("the two frames differ by %.0f %%: a pair needs equal exposures", 100*math.Abs(m0-m1)/l.Mean)
	}
	c0, c1 := l.Mean/m0, l.Mean/m1
	d := make([]float64, 0, n)
	var light, light2 float64
	for i, good := range ok {
		if good {
			a, b := c0*(float64(y0[i])-dark.v[i]), c1*(float64(y1[i])-dark.v[i])
			d = append(d, a-b)
			v := max((a+b)/2, 0)
			light += v
			light2 += v * v
		}
	}
	if l.Var, l.Sigma = halfVariance(d); l.Var == 0 && !l.full {
		return l, fmt.Errorf("the two frames are the same picture: a pair needs two exposures")
	}
	// The variance of a variance from the light alone: taking it from the
	// differences would give more weight to levels that came out low.
	l.part = math.Sqrt(2*light2) / light
	return l, nil
}

// plateauAt reports whether sorted values pile up at their top: many of them
// there, and more than just below, where the tail of a distribution holds
// more the lower it gets.
func plateauAt(sorted []float64, top, read float64) bool {
	width := max(plateauWidth*math.Abs(top), 6*read)
	at, below := 0, 0
	for i := len(sorted) - 1; i >= 0 && sorted[i] >= top-2*width; i-- {
		if sorted[i] >= top-width {
			at++
		} else {
			below++
		}
	}
	return float64(at) >= plateauShare*float64(len(sorted)) && float64(at) > plateauRise*float64(below)
}

// halfVariance is half the variance of differences and its uncertainty,
// outliers left out.
func halfVariance(d []float64) (v, sigma float64) {
	_, s := spread(d)
	var sum, sq, q4 float64
	n := 0.0
	for _, x := range d {
		if s == 0 || math.Abs(x) < outlier*s {
			sum += x
			n++
		}
	}
	mean := sum / n
	for _, x := range d {
		if s == 0 || math.Abs(x) < outlier*s {
			e := (x - mean) * (x - mean)
			sq += e
			q4 += e * e
		}
	}
	v = sq / (n - 1)
	// Variance of a sample variance: (μ₄ − σ⁴)/n, Kendall & Stuart, vol. 1.
	return v / 2, math.Sqrt(max(q4/n-v*v, 0)/n) / 2
}

// photonTransfer fits gain and saturation to measured levels.
func (t *Transfer) fit(full float64, byHand float64) error {
	t.findSaturation(full, byHand)
	return t.regress()
}

// regress fits the gain to the levels without a note.
func (t *Transfer) regress() error {
	base := t.DarkVar
	for range 10 { // the gain decides which levels are linear, and they the gain
		var num, den float64
		for i := range t.Levels {
			l := &t.Levels[i]
			if l.Used = l.Note == ""; !l.Used {
				continue
			}
			if t.K > 0 {
				l.Sigma = l.part * (t.K*l.Mean + base)
			}
			w := 1 / (l.Sigma*l.Sigma + t.SigmaDarkVar*t.SigmaDarkVar)
			num += w * l.Mean * (l.Var - base)
			den += w * l.Mean * l.Mean
		}
		if den == 0 {
			break
		}
		was := t.K
		t.K, t.SigmaK = num/den, 1/math.Sqrt(den)
		if !t.reject() && math.Abs(t.K-was) < 1e-6*t.K {
			break
		}
	}
	if !(t.K > 0) || !finite(t.K) {
		return fmt.Errorf("no level can be used for the gain%s", t.notes())
	}
	t.scatter()
	t.linearity()
	return nil
}

// join adds levels from repeated frames that agree with the flats. Light that
// changes its shape from frame to frame adds variance and is so left out.
func (t *Transfer) join(more []Level) error {
	for _, l := range more {
		off := math.Abs(l.Var - t.DarkVar - t.K*l.Mean)
		switch l.Repeat = true; {
		case l.full || t.Saturation > 0 && l.mean > gainUpTo*t.Saturation:
			l.Note = "above 70 % of saturation"
		case off > joinSigma*math.Hypot(l.Sigma, t.SigmaK*l.Mean):
			l.Note = "disagrees with the flats: the light was not steady"
		}
		t.Levels = append(t.Levels, l)
	}
	return t.regress()
}

// joinSigma is how far repeated frames may lie off the line of the flats,
// standard deviations.
const joinSigma = 3.5

func (t *Transfer) notes() string {
	s := ""
	for i, l := range t.Levels {
		s += fmt.Sprintf("; level %d (%.0f ADU): %s", i+1, l.Mean, l.Note)
	}
	return s
}

// reject leaves out levels whose variance has collapsed. It reports whether
// anything changed.
func (t *Transfer) reject() (changed bool) {
	for i := range t.Levels {
		l := &t.Levels[i]
		want := t.K*l.Mean + t.DarkVar
		if l.Used && t.K > 0 && l.Var < collapse*want && l.Mean > 2*t.lowest() {
			l.Note, changed = "its variance is far below the line: saturated", true
		}
	}
	return changed
}

func (t *Transfer) lowest() float64 {
	m := math.Inf(1)
	for _, l := range t.Levels {
		m = min(m, l.Mean)
	}
	return m
}

// scatter widens SigmaK if the levels disagree by more than their own
// uncertainty (Birge's ratio).
func (t *Transfer) scatter() {
	var chi2 float64
	n := 0
	for _, l := range t.Levels {
		if l.Used {
			r := (l.Var - t.DarkVar - t.K*l.Mean) / math.Hypot(l.Sigma, t.SigmaDarkVar)
			chi2 += r * r
			n++
		}
	}
	if n > 1 {
		t.SigmaK *= math.Sqrt(max(1, chi2/float64(n-1)))
	}
}

// findSaturation finds the plateau of the codes and marks the levels beyond
// the limits of the fit.
func (t *Transfer) findSaturation(full, byHand float64) {
	read := math.Sqrt(t.DarkVar)
	plateau := math.Inf(1)
	peak := 0
	for i, l := range t.Levels {
		if l.full {
			plateau = min(plateau, l.raw)
		}
		if l.Var > t.Levels[peak].Var {
			peak = i
		}
	}
	switch {
	case byHand > 0:
		t.Saturation, t.SaturationNote = byHand, "set by hand in the series"
	case !math.IsInf(plateau, 1):
		t.Saturation = plateau - saturationGap*read
		t.SaturationNote = fmt.Sprintf("codes stand still at %.0f ADU in the brightest flat", plateau)
	case full > 0:
		t.Saturation = full
		t.SaturationNote = "largest code of the file format; no flat reached saturation"
	default:
		t.SaturationNote = "floating-point frames and no flat reached saturation: not known"
	}
	// The standard's saturation point is the maximum of the variance.
	limit := math.Inf(1)
	if t.Saturation > 0 {
		limit = gainUpTo * t.Saturation
	}
	if math.IsInf(plateau, 1) && byHand == 0 && peak < len(t.Levels)-1 && t.Levels[peak+1].Var < collapse*t.Levels[peak].Var {
		limit = min(limit, max(gainUpTo*t.Levels[peak].mean, t.Levels[0].mean))
	}
	for i := range t.Levels {
		l := &t.Levels[i]
		switch {
		case l.Note != "":
		case l.full && !math.IsInf(plateau, 1):
			l.Note = "saturated"
		case l.mean > limit:
			l.Note = "above 70 % of saturation"
		}
	}
	t.keepOne()
}

// keepOne takes the darkest unsaturated level back in if the limit of 70 %
// left none.
func (t *Transfer) keepOne() {
	best := -1
	for i, l := range t.Levels {
		if l.Note == "" {
			return
		}
		if l.Note == "above 70 % of saturation" && (best < 0 || l.Mean < t.Levels[best].Mean) {
			best = i
		}
	}
	if best >= 0 {
		t.Levels[best].Note = ""
	}
}

// linearity is the standard's: the line a₀ + a₁H that minimises the relative
// deviations Σ ((y − a₀ − a₁H)/y)² over 5 % to 95 % of saturation, and the
// mean and largest of their magnitudes.
func (t *Transfer) linearity() {
	t.Linearity, t.LinearityMax = math.NaN(), math.NaN()
	var sw, swh, swhh, swy, swhy float64
	n := 0
	in := func(l Level) bool {
		top := t.Saturation
		return l.Exposure > 0 && !l.full && !l.Repeat && (top <= 0 || l.Mean >= linearFrom*top && l.raw <= linearUpTo*top)
	}
	for _, l := range t.Levels {
		if in(l) {
			w := 1 / (l.Mean * l.Mean)
			sw += w
			swh += w * l.Exposure
			swhh += w * l.Exposure * l.Exposure
			swy += w * l.Mean
			swhy += w * l.Exposure * l.Mean
			n++
		}
	}
	det := sw*swhh - swh*swh
	if n < 3 || !(det > 0) {
		return
	}
	a0 := (swhh*swy - swh*swhy) / det
	a1 := (sw*swhy - swh*swy) / det
	var sum, top float64
	for _, l := range t.Levels {
		if in(l) {
			d := math.Abs(l.Mean-a0-a1*l.Exposure) / math.Abs(a0+a1*l.Exposure)
			sum += d
			top = max(top, d)
		}
	}
	t.Linearity, t.LinearityMax = sum/float64(n), top
}
