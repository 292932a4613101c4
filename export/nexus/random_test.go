package nexus

import (
	"fmt"
	"math"
	"math/rand/v2"
)

// values returns n random float32 bit patterns with zeros, both signs of
// zero, infinities, NaN and denormals among them.
func values(r *rand.Rand, n int) []float32 {
	v := make([]float32, n)
	odd := []float32{0, float32(math.Copysign(0, -1)), float32(math.Inf(1)), float32(math.NaN()), 1e-44}
	for i := range v {
		switch r.IntN(4) {
		case 0:
			v[i] = odd[r.IntN(len(odd))]
		case 1:
			v[i] = math.Float32frombits(r.Uint32())
		default:
			v[i] = float32(r.IntN(1000))
		}
	}
	return v
}

// text returns a short random string, sometimes empty, sometimes beyond ASCII.
func text(r *rand.Rand) string {
	alphabet := []rune("abc XYZ-09µé漢😀\"\\")
	s := make([]rune, r.IntN(12))
	for i := range s {
		s[i] = alphabet[r.IntN(len(alphabet))]
	}
	return string(s)
}

func randomAttrs(r *rand.Rand) []Attr {
	var out []Attr
	for i := range r.IntN(14) {
		var v any
		switch r.IntN(6) {
		case 0:
			v = text(r)
		case 1:
			v = []string{text(r), text(r)}
		case 2:
			v = r.IntN(1000) - 500
		case 3:
			v = []int{r.IntN(9), -r.IntN(9), 7}
		case 4:
			v = r.NormFloat64()
		default:
			v = []float64{r.NormFloat64()}
		}
		out = append(out, Attr{fmt.Sprintf("a%d %s", i, text(r)), v})
	}
	return out
}

func randomData(r *rand.Rand, name string) Dataset {
	d := Dataset{Name: name, Attrs: randomAttrs(r)}
	n := 1
	for range 1 + r.IntN(4) {
		s := 1 + r.IntN(40)
		if n*s > 1<<16 {
			s = 1
		}
		d.Shape = append(d.Shape, s)
		n *= s
	}
	switch r.IntN(6) {
	case 0:
		d.Shape, d.Value = nil, text(r)
	case 1:
		v := make([]float64, n)
		for i := range v {
			v[i] = r.NormFloat64()
		}
		d.Value = v
	case 2:
		v := make([]int64, n)
		for i := range v {
			v[i] = int64(r.Uint64())
		}
		d.Value = v
	case 3:
		d.Shape, d.Value = nil, []any{1.5, -3}[r.IntN(2)]
	default:
		d.Value = values(r, n)
	}
	return d
}

func randomGroup(r *rand.Rand, name string, depth int) Group {
	g := Group{Name: name, Attrs: randomAttrs(r)}
	for i := range r.IntN(11) {
		g.Data = append(g.Data, randomData(r, fmt.Sprintf("d%d%s", i, text(r))))
	}
	if depth < 4 {
		for i := range r.IntN(4) {
			g.Groups = append(g.Groups, randomGroup(r, fmt.Sprintf("g%d%s", i, text(r)), depth+1))
		}
	}
	return g
}
