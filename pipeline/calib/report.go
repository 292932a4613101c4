package calib

import (
	"bytes"
	_ "embed"
	"fmt"
	"html/template"
	"math"
)

//go:embed report.html
var reportText string

var reportPage = template.Must(template.New("report").Funcs(template.FuncMap{
	"q": func(q Quantity) string {
		switch {
		case q.Sigma < 0:
			return "not found"
		case q.Sigma == 0:
			return fmt.Sprintf("%.5g %s", q.Value, q.Unit)
		}
		return q.String()
	},
	"percent": func(v float64) string { return fmt.Sprintf("%.2g %%", 100*v) },
	"round": func(v float64) string {
		if math.IsNaN(v) {
			return "–"
		}
		return fmt.Sprintf("%.4g", v)
	},
	"transfer": func(t Transfer) template.HTML { return transferPlot(&t) },
	"sweep":    func(s Sweep) template.HTML { return sweepPlot(&s) },
	"residual": func(s Sweep) template.HTML { return residualPlot(&s) },
	"picture": func(p plane) template.URL {
		lo, hi := limits(p)
		return inline(grey(p, lo, hi))
	},
	"unit":    func(p plane) template.URL { return inline(grey(p, 0, 1)) },
	"overlay": func(a, b plane) template.URL { return inline(overlay(a, b)) },
}).Parse(reportText))

// reportData is what the page shows. Planes cross into the template as
// values, so that it needs no access to unexported fields.
type reportData struct {
	B                    *Bundle
	R                    *Report
	Arms                 []armData
	Measured, Code       plane
	Target, Brought      plane
	Difference           plane
	Spots                plane
	Rate, RateEnd, Total float64
}

type armData struct {
	Name       string
	Arm        *Arm
	Fit        *ArmFit
	Dark, Flat plane
}

// HTML returns the page that goes with the bundle: one file, pictures inside,
// no script.
func (r *Report) HTML(b *Bundle) ([]byte, error) {
	d := reportData{B: b, R: r, Measured: r.Code.measured, Code: r.Code.code,
		Target: r.Register.s, Brought: r.Register.r, Spots: r.Sweep.Spots}
	d.Difference = newPlane(d.Target.w, d.Target.h)
	for i := range d.Difference.v {
		d.Difference.v[i] = d.Target.v[i] - d.Brought.v[i]
	}
	d.Arms = []armData{
		{"Streak arm", &b.Streak, r.Streak, wide(b.Streak.W, b.Streak.H, b.Streak.Dark), wide(b.Streak.W, b.Streak.H, b.Streak.Flat)},
		{"Reference arm", &b.Reference, r.Reference, wide(b.Reference.W, b.Reference.H, b.Reference.Dark), wide(b.Reference.W, b.Reference.H, b.Reference.Flat)},
	}
	d.Rate, d.RateEnd = b.Sweep.Rate(b.Sweep.First), b.Sweep.Rate(b.Sweep.Last)
	d.Total = b.Sweep.At(b.Sweep.Last) - b.Sweep.At(b.Sweep.First)
	var out bytes.Buffer
	if err := reportPage.Execute(&out, d); err != nil {
		return nil, fmt.Errorf("write calibration report: %w", err)
	}
	return out.Bytes(), nil
}

func wide(w, h int, v []float32) plane {
	p := newPlane(w, h)
	for i, x := range v {
		p.v[i] = float64(x)
	}
	return p
}
