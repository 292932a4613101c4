package export

import (
	"bytes"
	"fmt"
	"image/color"
	"io"
	"math"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgsvg"

	"unsheard/pipeline/measure"
)

var (
	lineColour = color.RGBA{0x1f, 0x4e, 0x8c, 0xff}
	bandColour = color.RGBA{0xc4, 0xd6, 0xec, 0xff}
	markColour = color.RGBA{0xb0, 0x3a, 0x1e, 0xff}
)

// lightCurve is the report's light curve, or, where the report has none, the
// cube's own: light per frame over its length.
func lightCurve(r *Result) measure.Curve {
	if c, ok := r.Report.Curves["light"]; ok && len(c.Time) > 0 && len(c.Time) == len(c.Value) {
		return c
	}
	q := r.Cube
	c := measure.Curve{Name: "light", TimeUnit: "ps", Unit: "photoelectrons/ps", Time: q.Time}
	for k := range q.T {
		c.Value = append(c.Value, q.Sum(k)/q.Duration(k))
	}
	return c
}

// light draws the light curve with its band of one deviation, and marks peak
// and full width at half maximum where they were measured.
func light(w io.Writer, r *Result) error {
	c := lightCurve(r)
	div, word := large(top(c))
	p := plot.New()
	style(p, div)
	p.Title.Text = title(r)
	p.X.Label.Text = "time (" + c.TimeUnit + ")"
	p.Y.Label.Text = "light (" + word + c.Unit + ")"
	grid := plotter.NewGrid()
	grid.Vertical.Color, grid.Horizontal.Color = color.Gray{0xe0}, color.Gray{0xe0}
	p.Add(grid)
	pts := points(c)
	if band := bandOf(c); band != nil {
		p.Add(band)
	}
	line, err := plotter.NewLine(pts)
	if err != nil {
		return fmt.Errorf("light curve: %w", err)
	}
	line.Color, line.Width = lineColour, vg.Points(1.8)
	p.Add(line)
	if len(pts) <= 60 {
		dots, err := plotter.NewScatter(pts)
		if err != nil {
			return fmt.Errorf("light curve: %w", err)
		}
		dots.GlyphStyle = draw.GlyphStyle{Color: lineColour, Radius: vg.Points(2.5), Shape: draw.CircleGlyph{}}
		p.Add(dots)
	}
	limits(p)
	if err := mark(p, r, c); err != nil {
		return err
	}
	cv := vgsvg.New(20*vg.Centimeter, 12*vg.Centimeter)
	area := draw.Crop(draw.New(cv), vg.Points(6), -vg.Points(16), vg.Points(6), -vg.Points(8))
	p.Draw(area)
	var b bytes.Buffer
	if _, err := cv.WriteTo(&b); err != nil {
		return err
	}
	_, err = w.Write(b.Bytes())
	return err
}

// limits starts the light at 0, leaves room for the peak's label, and keeps
// both axes from vanishing.
func limits(p *plot.Plot) {
	p.Y.Min = min(0, p.Y.Min)
	p.Y.Max += 0.14 * (p.Y.Max - p.Y.Min)
	if !(p.Y.Max > p.Y.Min) {
		p.Y.Max = p.Y.Min + 1
	}
	if !(p.X.Max > p.X.Min) {
		p.X.Min, p.X.Max = p.X.Min-1, p.X.Max+1
	}
}

// style sets fonts and ticks; the labels of the upright axis are divided.
func style(p *plot.Plot, div float64) {
	sans := func(t *text.Style, size float64) {
		t.Font = font.Font{Typeface: "Liberation", Variant: "Sans", Size: vg.Points(size)}
	}
	sans(&p.Title.TextStyle, 14)
	p.Title.Padding = vg.Points(8)
	for _, a := range []*plot.Axis{&p.X, &p.Y} {
		sans(&a.Label.TextStyle, 13)
		sans(&a.Tick.Label, 11)
		a.Label.Padding = vg.Points(4)
		a.Padding = 0
	}
	p.X.Tick.Marker, p.Y.Tick.Marker = marker(1), marker(div)
	p.BackgroundColor = color.White
}

// marker sets round ticks, labelled with their value divided.
func marker(div float64) plot.Ticker {
	return plot.TickerFunc(func(lo, hi float64) (out []plot.Tick) {
		at, label := ticks(lo/div, hi/div)
		for i := range at {
			out = append(out, plot.Tick{Value: at[i] * div, Label: label[i]})
		}
		return out
	})
}

// points leaves out values that are not finite.
func points(c measure.Curve) plotter.XYs {
	var out plotter.XYs
	for i, v := range c.Value {
		if finite(v) && finite(c.Time[i]) {
			out = append(out, plotter.XY{X: c.Time[i], Y: v})
		}
	}
	return out
}

func finite(f float64) bool { return !math.IsNaN(f) && !math.IsInf(f, 0) }

// bandOf is the area of one deviation around the curve, nil if unknown.
func bandOf(c measure.Curve) plot.Plotter {
	if len(c.Sigma) != len(c.Value) {
		return nil
	}
	var up, down plotter.XYs
	for i, v := range c.Value {
		if s := c.Sigma[i]; finite(v) && finite(s) && finite(c.Time[i]) {
			up = append(up, plotter.XY{X: c.Time[i], Y: v + s})
			down = append(down, plotter.XY{X: c.Time[i], Y: v - s})
		}
	}
	for i := len(down) - 1; i >= 0; i-- {
		up = append(up, down[i])
	}
	if len(up) < 4 {
		return nil
	}
	band, err := plotter.NewPolygon(up)
	if err != nil {
		return nil
	}
	band.Color, band.LineStyle.Width = bandColour, 0
	return band
}
