package calib

import (
	"bytes"
	"encoding/base64"
	"fmt"
	"html/template"
	stdimage "image"
	"image/color"
	"image/png"
	"math"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/palette/moreland"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgsvg"
)

// inline is a PNG picture as a data URL.
func inline(im stdimage.Image) template.URL {
	var b bytes.Buffer
	if err := png.Encode(&b, im); err != nil {
		return ""
	}
	return template.URL("data:image/png;base64," + base64.StdEncoding.EncodeToString(b.Bytes()))
}

// grey draws a plane between two values, enlarged by whole pixels to at least
// 256 and reduced to at most 1024 pixels.
func grey(p plane, lo, hi float64) stdimage.Image {
	colors := moreland.ExtendedBlackBody()
	colors.SetMin(0)
	colors.SetMax(1)
	return paint(p, func(i int) color.Color {
		v := (p.v[i] - lo) / (hi - lo)
		if math.IsNaN(v) {
			return color.RGBA{80, 80, 120, 255}
		}
		c, err := colors.At(max(0, min(1, v)))
		if err != nil {
			return color.Black
		}
		return c
	})
}

// paint makes a picture from a function of the pixel index.
func paint(p plane, at func(i int) color.Color) stdimage.Image {
	up, down := 1, 1
	for max(p.w, p.h)*up < 256 {
		up++
	}
	for max(p.w, p.h)/down > 1024 {
		down++
	}
	im := stdimage.NewRGBA(stdimage.Rect(0, 0, p.w*up/down, p.h*up/down))
	for y := range im.Rect.Dy() {
		for x := range im.Rect.Dx() {
			im.Set(x, y, at(y*down/up*p.w+x*down/up))
		}
	}
	return im
}

// overlay shows one plane in orange and the other in blue: where they agree
// the picture is grey.
func overlay(a, b plane) stdimage.Image {
	la, ha := limits(a)
	lb, hb := limits(b)
	to := func(v, lo, hi float64) float64 { return 255 * max(0, min(1, (v-lo)/(hi-lo))) }
	return paint(a, func(i int) color.Color {
		p, q := to(a.v[i], la, ha), to(b.v[i], lb, hb)
		return color.RGBA{uint8(p), uint8((p + q) / 2), uint8(q), 255}
	})
}

// limits are the 0.5 % and 99.5 % quantiles of the finite values.
func limits(p plane) (lo, hi float64) {
	var v []float64
	for _, x := range p.v {
		if finite(x) {
			v = append(v, x)
		}
	}
	if len(v) == 0 {
		return 0, 1
	}
	lo, hi = quantile(v, 0.005), quantile(v, 0.995)
	if hi <= lo {
		hi = lo + 1
	}
	return lo, hi
}

// svg draws a plot.
func svg(p *plot.Plot) template.HTML {
	c := vgsvg.New(15*vg.Centimeter, 9*vg.Centimeter)
	p.Draw(draw.New(c))
	var b bytes.Buffer
	if _, err := c.WriteTo(&b); err != nil {
		return ""
	}
	// The XML declaration has no place inside HTML.
	if i := bytes.Index(b.Bytes(), []byte("<svg")); i > 0 {
		b.Next(i)
	}
	return template.HTML(b.String())
}

// points and line are the two marks all plots are made of.
func points(p *plot.Plot, xy plotter.XYs, c color.Color, name string) {
	s, err := plotter.NewScatter(xy)
	if err != nil || len(xy) == 0 {
		return
	}
	s.Color, s.Radius, s.Shape = c, vg.Points(3), draw.CircleGlyph{}
	p.Add(s)
	p.Legend.Add(name, s)
}

func line(p *plot.Plot, xy plotter.XYs, c color.Color, name string) {
	l, err := plotter.NewLine(xy)
	if err != nil || len(xy) == 0 {
		return
	}
	l.Color = c
	p.Add(l)
	p.Legend.Add(name, l)
}

var (
	ink    = color.RGBA{30, 30, 30, 255}
	orange = color.RGBA{200, 90, 0, 255}
	blue   = color.RGBA{0, 90, 170, 255}
)

// transferPlot is the photon transfer curve.
func transferPlot(t *Transfer) template.HTML {
	p := plot.New()
	p.X.Label.Text, p.Y.Label.Text = "mean, dark taken off (ADU)", "temporal variance (ADU²)"
	var used, not plotter.XYs
	top := 0.0
	for _, l := range t.Levels {
		if l.Used {
			used = append(used, plotter.XY{X: l.Mean, Y: l.Var})
		} else {
			not = append(not, plotter.XY{X: l.Mean, Y: l.Var})
		}
		top = max(top, l.Mean)
	}
	if top == 0 {
		return ""
	}
	line(p, plotter.XYs{{X: 0, Y: t.DarkVar}, {X: top, Y: t.DarkVar + t.K*top}}, ink, "fit")
	points(p, used, blue, "used")
	points(p, not, orange, "left out")
	p.Legend.Top, p.Legend.Left = true, true
	return svg(p)
}

// sweepPlot is the curve, residualPlot what the delays leave.
func sweepPlot(s *Sweep) template.HTML {
	p := plot.New()
	p.X.Label.Text, p.Y.Label.Text = "time (ps)", "displacement (px)"
	var curve, at plotter.XYs
	for i := range 201 {
		t := s.First + (s.Last-s.First)*float64(i)/200
		curve = append(curve, plotter.XY{X: t, Y: s.At(t)})
	}
	for _, q := range s.Points {
		at = append(at, plotter.XY{X: q.PS, Y: q.Px})
	}
	line(p, curve, ink, fmt.Sprintf("degree %d", len(s.Coef)-1))
	points(p, at, blue, "delays")
	p.Legend.Top, p.Legend.Left = true, true
	return svg(p)
}

func residualPlot(s *Sweep) template.HTML {
	p := plot.New()
	p.X.Label.Text, p.Y.Label.Text = "time (ps)", "measured − curve (px)"
	var at, up, low plotter.XYs
	for _, q := range s.Points {
		at = append(at, plotter.XY{X: q.PS, Y: q.Px - s.At(q.PS)})
	}
	for i := range 101 {
		t := s.First + (s.Last-s.First)*float64(i)/100
		up = append(up, plotter.XY{X: t, Y: s.Sigma(t)})
		low = append(low, plotter.XY{X: t, Y: -s.Sigma(t)})
	}
	line(p, up, orange, "± 1 σ of the curve")
	line(p, low, orange, "")
	points(p, at, blue, "delays")
	p.Legend.Top = true
	return svg(p)
}
