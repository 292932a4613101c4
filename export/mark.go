package export

import (
	"fmt"
	"math"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"

	"unsheard/pipeline/measure"
)

// mark draws the peak and the width, each with its value beside it.
func mark(p *plot.Plot, r *Result, c measure.Curve) error {
	q := r.Report.Quantities
	peak, okPeak := q["peak_time"]
	height, okHeight := q["peak_light"]
	if !okPeak || !okHeight || !finite(peak.Value) || !finite(height.Value) {
		return nil
	}
	if err := dashed(p, peak.Value, p.Y.Min, peak.Value, height.Value); err != nil {
		return err
	}
	labels := plotter.XYLabels{XYs: plotter.XYs{{X: peak.Value, Y: height.Value}},
		Labels: []string{"peak " + quantityText(peak)}}
	if width, ok := q["fwhm"]; ok {
		if a, b, ok := halfway(c, height.Value/2); ok {
			if err := dashed(p, a, height.Value/2, b, height.Value/2); err != nil {
				return err
			}
			labels.XYs = append(labels.XYs, plotter.XY{X: b, Y: height.Value / 2})
			labels.Labels = append(labels.Labels, "FWHM "+quantityText(width))
		}
	}
	l, err := plotter.NewLabels(labels)
	if err != nil {
		return fmt.Errorf("light curve: %w", err)
	}
	place(p, l, c)
	p.Add(l)
	return nil
}

// place puts the peak's text above the band and the width's beside the curve
// where there is room, else within it.
func place(p *plot.Plot, l *plotter.Labels, c measure.Curve) {
	along := func(i int) float64 { return (l.XYs[i].X - p.X.Min) / (p.X.Max - p.X.Min) }
	for i := range l.TextStyle {
		t := &l.TextStyle[i]
		t.Font = font.Font{Typeface: "Liberation", Variant: "Sans", Size: vg.Points(12)}
		t.Color = markColour
		t.XAlign, t.YAlign = text.XCenter, text.YBottom
	}
	l.XYs[0].Y = top(c)
	l.Offset = vg.Point{Y: vg.Points(4)}
	switch f := along(0); {
	case f > 0.75:
		l.TextStyle[0].XAlign = text.XRight
	case f < 0.25:
		l.TextStyle[0].XAlign = text.XLeft
	}
	if len(l.XYs) < 2 {
		return
	}
	a, _, _ := halfway(c, l.XYs[1].Y)
	wide := p.X.Max - p.X.Min
	t := &l.TextStyle[1]
	switch t.XAlign = text.XRight; {
	case along(1) < 0.65: // right of the curve
		t.XAlign = text.XLeft
		l.XYs[1].X += 0.03 * wide
	case (a-p.X.Min)/wide > 0.35: // left of it
		l.XYs[1].X = a - 0.03*wide
	default: // within
		l.XYs[1].X -= 0.06 * wide
	}
}

// top is the highest point of the curve's band.
func top(c measure.Curve) float64 {
	hi := math.Inf(-1)
	for i, v := range c.Value {
		if len(c.Sigma) == len(c.Value) && finite(c.Sigma[i]) {
			v += c.Sigma[i]
		}
		if finite(v) {
			hi = max(hi, v)
		}
	}
	return hi
}

func dashed(p *plot.Plot, x0, y0, x1, y1 float64) error {
	l, err := plotter.NewLine(plotter.XYs{{X: x0, Y: y0}, {X: x1, Y: y1}})
	if err != nil {
		return fmt.Errorf("light curve: %w", err)
	}
	l.Color, l.Width = markColour, vg.Points(1.2)
	l.Dashes = []vg.Length{vg.Points(5), vg.Points(3)}
	p.Add(l)
	return nil
}

// halfway returns where the curve crosses level around its highest value,
// interpolated linearly.
func halfway(c measure.Curve, level float64) (a, b float64, ok bool) {
	top := 0
	for i, v := range c.Value {
		if v > c.Value[top] {
			top = i
		}
	}
	cross := func(step int) (float64, bool) {
		for i := top; i+step >= 0 && i+step < len(c.Value); i += step {
			u, v := c.Value[i], c.Value[i+step]
			if u >= level && v < level {
				return c.Time[i] + (c.Time[i+step]-c.Time[i])*(u-level)/(u-v), true
			}
		}
		return 0, false
	}
	a, okA := cross(-1)
	b, okB := cross(1)
	return a, b, okA && okB
}

// quantityText writes value and deviation with the decimals that the
// deviation's first two digits need.
func quantityText(q measure.Quantity) string {
	if q.Sigma == nil || !finite(*q.Sigma) || *q.Sigma <= 0 {
		return fmt.Sprintf("%.4g %s", q.Value, q.Unit)
	}
	digits := min(6, max(0, 1-int(math.Floor(math.Log10(*q.Sigma)))))
	return fmt.Sprintf("%s ± %.*f %s", format(q.Value, digits), digits, *q.Sigma, q.Unit)
}
