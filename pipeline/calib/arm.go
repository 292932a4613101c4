package calib

import (
	"fmt"
	"math"
)

// ArmFit is how an arm was measured.
type ArmFit struct {
	Transfer  Transfer
	Defects   Defects
	FlatNoise float64 // relative noise left in the flat
	Warnings  []string
}

// measureArm makes dark, flat, bad pixels, gain, read noise and saturation of
// one arm. repeats lists further sets of frames of steady light, from which
// the gain is found if there are no flats.
func measureArm(l *loader, s *ArmSeries, repeats [][]string) (*Arm, *ArmFit, error) {
	dark, err := l.stack(s.Dark)
	if err != nil {
		return nil, nil, err
	}
	a := &Arm{W: dark.w, H: dark.h, DarkFrames: dark.n, Bad: make([]bool, dark.w*dark.h)}
	f := &ArmFit{}
	t := &f.Transfer
	ok := make([]bool, len(a.Bad))
	for i := range ok {
		ok[i] = finite(dark.mean.v[i])
	}
	if dark.n > 1 {
		t.DarkVar, t.SigmaDarkVar = darkVariance(dark, ok)
	} else {
		t.DarkVar = spatialVariance(dark.mean)
		t.SigmaDarkVar = t.DarkVar * 0.5 // a fixed pattern may well double it
	}
	hotPixels(dark, t.DarkVar, a.Bad, &f.Defects)
	for i := range ok {
		ok[i] = !a.Bad[i]
	}
	a.Dark = make([]float32, len(a.Bad))
	for i, v := range dark.mean.v {
		if finite(v) {
			a.Dark[i] = float32(v)
		}
	}
	if err := f.gain(l, s, a, dark.mean, ok, repeats); err != nil {
		return nil, nil, err
	}
	a.describe(f, dark.n)
	return a, f, nil
}

// gain measures all pairs, fits them and makes the flat.
func (f *ArmFit) gain(l *loader, s *ArmSeries, a *Arm, dark plane, ok []bool, repeats [][]string) error {
	t := &f.Transfer
	t.Source = "flat pairs"
	var again [][2]string
	for _, set := range repeats {
		for i := 0; i+1 < len(set); i += 2 {
			again = append(again, [2]string{set[i], set[i+1]})
		}
	}
	more, err := f.pairs(l, again, dark, ok, true)
	if err != nil {
		return err
	}
	if t.Levels, err = f.pairs(l, s.Flat, dark, ok, false); err != nil {
		return err
	}
	for i, e := range s.Exposure {
		t.Levels[i].Exposure = e
	}
	if len(t.Levels) == 0 {
		t.Source, t.Levels, more = "repeated frames of steady light", more, nil
	}
	if len(t.Levels) == 0 {
		t.K, t.SigmaK, t.Source = 1, 0, "assumed"
		t.Linearity = math.NaN()
		t.findSaturation(l.full, s.Saturation)
		f.warn("the %s arm has neither flats nor repeated frames: its gain is taken as 1 pe/ADU and every uncertainty that rests on photon noise means nothing", l.arm)
		a.Flat = ones(len(a.Bad))
		return nil
	}
	if err := t.fit(l.full, s.Saturation); err != nil {
		return fmt.Errorf("gain of the %s arm from %s: %w: expose flats between 5 %% and 70 %% of saturation", l.arm, t.Source, err)
	}
	if len(s.Flat) == 0 {
		a.Flat = ones(len(a.Bad))
		return nil
	}
	if len(more) > 0 {
		if err := t.join(more); err != nil {
			return fmt.Errorf("gain of the %s arm: %w", l.arm, err)
		}
		t.Source = "flat pairs and repeated frames"
	}
	return f.flat(l, a, dark)
}

func ones(n int) []float32 {
	v := make([]float32, n)
	for i := range v {
		v[i] = 1
	}
	return v
}

func (f *ArmFit) warn(format string, args ...any) {
	f.Warnings = append(f.Warnings, fmt.Sprintf(format, args...))
}

// pairs measures pairs of frames. Repeated frames light only part of the
// sensor, and one that cannot be used is no fault.
func (f *ArmFit) pairs(l *loader, pairs [][2]string, dark plane, ok []bool, repeat bool) (levels []Level, err error) {
	read := math.Sqrt(f.Transfer.DarkVar)
	for _, p := range pairs {
		y0, err := l.frame(p[0])
		if err != nil {
			return nil, err
		}
		y1, err := l.frame(p[1])
		if err != nil {
			return nil, err
		}
		use := append([]bool(nil), ok...)
		var limit float64
		if repeat {
			limit = brightHalf(y0.Pix, dark, ok)
		}
		for k := range use {
			v, w := float64(y0.Pix[k]), float64(y1.Pix[k])
			use[k] = use[k] && finite(v, w) && (!repeat || v+w-2*dark.v[k] > 2*limit)
		}
		level, err := pairLevel(y0.Pix, y1.Pix, dark, use, read)
		if err != nil && repeat {
			continue
		}
		if err != nil {
			return nil, fmt.Errorf("flat pair %q and %q of the %s arm: %w", p[0], p[1], l.arm, err)
		}
		level.files = p
		levels = append(levels, level)
	}
	return levels, nil
}

// brightHalf is half of the bright end of a frame, dark taken off.
func brightHalf(pix []float32, dark plane, ok []bool) float64 {
	v := make([]float64, 0, len(pix))
	for i, p := range pix {
		if ok[i] && finite(float64(p)) {
			v = append(v, float64(p)-dark.v[i])
		}
	}
	return quantile(v, 0.98) / 2
}

// flat sums the pairs that are not saturated.
func (f *ArmFit) flat(l *loader, a *Arm, dark plane) error {
	t := &f.Transfer
	sum := newPlane(a.W, a.H)
	n := 0
	for _, v := range t.Levels {
		if v.Repeat || v.full || t.Saturation > 0 && v.raw > linearUpTo*t.Saturation || v.Var < collapse*(t.K*v.Mean+t.DarkVar) && !v.Used {
			continue
		}
		for _, name := range v.files {
			y, err := l.frame(name)
			if err != nil {
				return err
			}
			for i, p := range y.Pix {
				sum.v[i] += float64(p) - dark.v[i]
			}
			n++
		}
	}
	if n == 0 {
		return fmt.Errorf("every flat of the %s arm is saturated (the first is %q): expose flats below 70 %% of saturation", l.arm, t.Levels[0].files[0])
	}
	a.Flat, f.FlatNoise = flatField(sum, a.Bad, n, 1/t.K, &f.Defects)
	if share := float64(f.Defects.Unlit) / float64(len(a.Bad)); share > 0.01 {
		f.warn("the flats of the %s arm light only %.0f %% of the sensor: elsewhere the response is taken as 1", l.arm, 100*(1-share))
	}
	if f.FlatNoise > 0.01 {
		f.warn("the flat of the %s arm is uncertain by %.1f %% per pixel: take more or brighter flats", l.arm, 100*f.FlatNoise)
	}
	return nil
}

// describe turns the photon transfer into the arm's quantities.
func (a *Arm) describe(f *ArmFit, darks int) {
	t := &f.Transfer
	g := 1 / t.K
	n := 0
	for _, l := range t.Levels {
		if l.Used {
			n++
		}
	}
	a.Gain = Quantity{g, t.SigmaK / t.K * g, "pe/ADU",
		fmt.Sprintf("photon transfer (EMVA 1288 R4 linear), %d of %d levels from %s", n, len(t.Levels), t.Source)}
	if t.Source == "assumed" {
		a.Gain.Method = "assumed: the series allows no photon transfer"
	}
	read := math.Sqrt(t.DarkVar)
	method := fmt.Sprintf("temporal variance of %d dark frames, quantisation included", darks)
	if darks == 1 {
		method = "differences of neighbours in the only dark frame: an upper limit"
	}
	rel := t.SigmaK / t.K
	if t.DarkVar > 0 {
		rel = math.Hypot(rel, t.SigmaDarkVar/t.DarkVar/2)
	}
	a.ReadNoise = Quantity{read * g, read * g * rel, "pe", method}
	a.Saturation = Quantity{t.Saturation, 0, "ADU", t.SaturationNote}
	a.Linearity = Quantity{t.Linearity, 0, "1", "mean relative deviation from a straight line, 5 % to 95 % of saturation (EMVA 1288 R4 linear)"}
	if math.IsNaN(t.Linearity) {
		a.Linearity = Quantity{0, -1, "1", "not found: the series gives no exposures for three levels between 5 % and 95 % of saturation"}
	}
	f.usual(a)
}

// usual warns about what is possible but rarely right.
func (f *ArmFit) usual(a *Arm) {
	t := &f.Transfer
	used := 0
	for _, l := range t.Levels {
		if l.Used {
			used++
		}
	}
	if used == 1 {
		f.warn("the gain rests on one level: a bend of the response would go unseen")
	}
	if t.SigmaK > 0.05*t.K {
		f.warn("the gain is uncertain by %.0f %%: take more flat pairs", 100*t.SigmaK/t.K)
	}
	bad := 0
	for _, b := range a.Bad {
		if b {
			bad++
		}
	}
	if share := float64(bad) / float64(len(a.Bad)); share > 0.02 {
		f.warn("%.1f %% of the pixels are marked bad: check dark and flat frames", 100*share)
	}
	if t.Saturation > 0 && t.SaturationNote != "set by hand in the series" && len(t.Levels) > 0 {
		top := 0.0
		for _, l := range t.Levels {
			top = max(top, l.raw)
		}
		if top < 0.3*t.Saturation {
			f.warn("no flat comes near saturation, which is taken as %.0f ADU, the largest code of the file format: if the camera has fewer bits, write saturation = its largest code", t.Saturation)
		}
	}
}
