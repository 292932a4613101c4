package web

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// near is a time of day, with its day when that is not today.
func near(t, now time.Time) string {
	if t.YearDay() == now.YearDay() && t.Year() == now.Year() {
		return t.Format("15:04:05")
	}
	return t.Format("2 Jan 15:04")
}

// stamp is a time with its day.
func stamp(t time.Time) string { return t.Format("2006-01-02 15:04:05") }

// age is a duration for people: two parts at most, none below a second.
func age(d time.Duration) string {
	d = max(d, 0)
	switch {
	case d < time.Minute:
		return fmt.Sprintf("%d s", int(d.Seconds()))
	case d < 10*time.Minute:
		return two(d, time.Minute, "min", time.Second, "s")
	case d < time.Hour:
		return fmt.Sprintf("%d min", int(d.Minutes()))
	case d < 24*time.Hour:
		return two(d, time.Hour, "h", time.Minute, "min")
	}
	return two(d, 24*time.Hour, "d", time.Hour, "h")
}

func two(d, big time.Duration, bigName string, small time.Duration, smallName string) string {
	s := fmt.Sprintf("%d %s", d/big, bigName)
	if rest := d % big / small; rest > 0 {
		s += fmt.Sprintf(" %d %s", rest, smallName)
	}
	return s
}

// took is a working time or a gap: three digits, fit for milliseconds.
func took(d time.Duration) string {
	switch a := d.Abs(); {
	case a == 0:
		return "0 s"
	case a < time.Millisecond:
		return fmt.Sprintf("%.3g µs", float64(d)/1e3)
	case a < time.Second:
		return fmt.Sprintf("%.3g ms", float64(d)/1e6)
	case a < time.Minute:
		return fmt.Sprintf("%.3g s", d.Seconds())
	}
	return age(d)
}

// size is a file size in powers of 1000, as IEC 80000-13 reserves kB and MB
// for.
func size(n int64) string {
	f := float64(n)
	for _, unit := range []string{"B", "kB", "MB", "GB"} {
		if f < 999.5 {
			return fmt.Sprintf("%.3g %s", f, unit)
		}
		f /= 1000
	}
	return fmt.Sprintf("%.4g TB", f)
}

// figure is a measured number as it is printed.
type figure struct{ Value, Sigma, Power, Unit string }

// number rounds a value to its standard deviation, which keeps two digits
// (JCGM 100:2008, 7.2.6). Without a known deviation four digits are shown.
func number(q Quantity) figure {
	f := figure{Unit: q.Unit}
	if math.IsNaN(q.Value) || math.IsInf(q.Value, 0) {
		return figure{Value: "—"}
	}
	known := q.Sigma > 0 && !math.IsInf(q.Sigma, 0)
	lead := math.Abs(q.Value)
	if known {
		lead = max(lead, q.Sigma)
	}
	if lead != 0 && (lead >= 1e6 || lead < 1e-3) {
		e := int(math.Floor(math.Log10(lead)))
		scale := math.Pow10(-e)
		q.Value *= scale
		q.Sigma *= scale
		f.Power = superscript(e)
	}
	if !known {
		f.Value = minus(strconv.FormatFloat(rounded(q.Value, 4), 'f', -1, 64))
		return f
	}
	digits := places(q.Sigma)
	f.Value = minus(fixed(q.Value, digits))
	f.Sigma = fixed(q.Sigma, digits)
	return f
}

// places is the number of decimals that keeps two digits of sigma; negative
// rounds left of the point.
func places(sigma float64) int {
	e := int(math.Floor(math.Log10(sigma)))
	if sigma/math.Pow10(e) >= 9.95 { // 0.0996 is 0.10, not 0.100
		e++
	}
	return 1 - e
}

func fixed(v float64, digits int) string {
	if digits < 0 {
		p := math.Pow10(-digits)
		v, digits = math.Round(v/p)*p, 0
	}
	s := strconv.FormatFloat(v, 'f', digits, 64)
	if strings.Trim(s, "-0.") == "" {
		s = strings.TrimPrefix(s, "-") // no minus zero
	}
	return s
}

func rounded(v float64, digits int) float64 {
	r, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', digits, 64), 64)
	return r
}

func minus(s string) string { return strings.Replace(s, "-", "−", 1) }

func superscript(e int) string {
	digits := strings.NewReplacer("-", "⁻", "0", "⁰", "1", "¹", "2", "²", "3", "³", "4", "⁴",
		"5", "⁵", "6", "⁶", "7", "⁷", "8", "⁸", "9", "⁹")
	return "× 10" + digits.Replace(strconv.Itoa(e))
}

// String is the number as one text.
func (f figure) String() string {
	s := f.Value
	if f.Sigma != "" {
		s += " ± " + f.Sigma
		if f.Power != "" {
			s = "(" + s + ")"
		}
	}
	for _, t := range []string{f.Power, f.Unit} {
		if t != "" {
			s += " " + t
		}
	}
	return s
}
