package measure

import (
	"fmt"
	"math"
	"slices"

	"unsheard/pipeline/cube"
)

const (
	// frameShare is the least light of a frame, against the brightest one,
	// for its centroid to be in the track.
	frameShare = 0.1
	// fitShare is the same for the speed. What a cube shows in dim frames is
	// drawn towards where the light is in the bright ones: with all frames
	// down to a tenth, the speed of simulated packets came out 2 to 4 % low,
	// with those above half the light 0 to 2 %.
	fitShare = 0.5
	// patchShare is the least 3×3 mean of a pixel, against the frame's
	// largest, to belong to the patch whose centroid is taken.
	patchShare = 0.4
	// borderShare is the most light a patch may have on the window's border
	// before the frame is left out as clipped.
	borderShare = 0.02
)

func (in *Input) motion(r *Report) {
	tr := track(in.Cube, in.transmission())
	if tr == nil {
		return
	}
	r.Track = tr
	if len(tr.Time) < stretch {
		r.note("fewer than three frames with an unclipped patch of light: no speed")
		return
	}
	f := tr.bright()
	a, b := straight(f)
	if b-a < len(f.Time) {
		r.note(fmt.Sprintf("the track bends or jumps: speed is that of its straight stretch from %.4g to %.4g ps", f.Time[a], f.Time[b-1]))
	}
	vx, sx := slope(f.Time[a:b], f.X[a:b], f.Light[a:b])
	vy, sy := slope(f.Time[a:b], f.Y[a:b], f.Light[a:b])
	v := math.Hypot(vx, vy)
	s := math.Max(sx, sy)
	if v > 0 {
		s = math.Hypot(vx/v*sx, vy/v*sy)
	}
	const how = "weighted straight line through the centroids of the bright frames; deviation from the scatter about it alone"
	r.set("velocity_x", vx, sx, "px/ps", how)
	r.set("velocity_y", vy, sy, "px/ps", how)
	r.set("speed", v, s, "px/ps", how)
	r.set("direction", math.Atan2(vy, vx)*180/math.Pi, ratio(s, v)*180/math.Pi, "deg",
		"angle from +x towards +y (down)")
	if c := in.Cube.Scale; c > 0 {
		const metres = 1e-6 / 1e-12 // µm/ps in m/s
		m := v * c * metres
		ms := metres * math.Hypot(s*c, v*in.ScaleSigma)
		r.set("speed_scene", m, ms, "m/s", how+", times the scale")
		r.set("speed_over_c", m/SpeedOfLight, ms/SpeedOfLight, "1", "speed_scene over c = 299 792 458 m/s (SI)")
	}
}

const (
	// bend is how far the centroids may scatter about a straight line, px rms.
	bend = 0.5
	// stretch is the least number of centroids of a straight stretch.
	stretch = 3
)

// straight returns the stretch a ≤ k < b of consecutive centroids that carries
// most light among those that scatter about a straight line by no more than
// bend; where none does, the one that scatters least. A packet that is thrown
// back by a wall has two of them.
func straight(tr *Track) (a, b int) {
	var most float64
	least := math.Inf(1)
	found := false
	for i := range tr.Time {
		for j := i + stretch; j <= len(tr.Time); j++ {
			var light float64
			for _, l := range tr.Light[i:j] {
				light += l
			}
			d := math.Hypot(scatter(tr.Time[i:j], tr.X[i:j], tr.Light[i:j]), scatter(tr.Time[i:j], tr.Y[i:j], tr.Light[i:j]))
			switch {
			case d <= bend && (!found || light > most):
				a, b, most, found = i, j, light, true
			case !found && d < least:
				a, b, least = i, j, d
			}
		}
	}
	return a, b
}

// scatter is the weighted rms distance of v from its straight line over t.
func scatter(t, v, g []float64) float64 {
	_, chi, _ := line(t, v, g)
	var sum float64
	for _, w := range g {
		sum += w
	}
	return math.Sqrt(chi / sum)
}

// bright returns the part of a track that the speed is fitted to: frames with
// at least fitShare of the most light, or all if those are too few.
func (tr *Track) bright() *Track {
	top := slices.Max(tr.Light)
	out := &Track{}
	for k, l := range tr.Light {
		if l >= fitShare*top {
			out.Time = append(out.Time, tr.Time[k])
			out.X, out.Y = append(out.X, tr.X[k]), append(out.Y, tr.Y[k])
			out.Light = append(out.Light, l)
		}
	}
	if len(out.Time) < stretch {
		return tr
	}
	return out
}

// track returns the centroids of all frames with enough light, or nil if there
// is no light.
func track(c *cube.Cube, transmission float64) *Track {
	sums := make([]float64, c.T)
	var peak float64
	for k := range sums {
		sums[k] = c.Sum(k)
		peak = math.Max(peak, sums[k])
	}
	if peak <= 0 {
		return nil
	}
	tr := &Track{}
	mean := make([]float32, c.H*c.W)
	for k := range sums {
		if sums[k] < frameShare*peak {
			continue
		}
		p, ok := centroid(c.Frame(k), mean, c.H, c.W)
		if !ok {
			continue
		}
		n := p.light * transmission
		u := c.Pitch()
		tr.Time = append(tr.Time, c.Time[k])
		tr.X = append(tr.X, (p.x+0.5)*u-0.5)
		tr.Y = append(tr.Y, (p.y+0.5)*u-0.5)
		tr.SigmaX = append(tr.SigmaX, u*p.dx/math.Sqrt(n))
		tr.SigmaY = append(tr.SigmaY, u*p.dy/math.Sqrt(n))
		tr.Light = append(tr.Light, p.light)
	}
	return tr
}

// patch is the light of a frame's bright part: its centroid, deviation along
// the axes, and sum.
type patch struct{ x, y, dx, dy, light float64 }

// centroid measures the bright patch of a plane of h rows and w columns; mean
// is scratch of the same length. ok is false when the patch touches the border.
func centroid(v, mean []float32, h, w int) (p patch, ok bool) {
	top := box3(mean, v, h, w)
	var border, xx, yy float64
	for y := range h {
		for x := range w {
			if mean[y*w+x] < patchShare*top {
				continue
			}
			l, fx, fy := float64(v[y*w+x]), float64(x), float64(y)
			p.light += l
			p.x += l * fx
			p.y += l * fy
			xx += l * fx * fx
			yy += l * fy * fy
			if (w > 2 && (x == 0 || x == w-1)) || (h > 2 && (y == 0 || y == h-1)) {
				border += l
			}
		}
	}
	if p.light <= 0 || border > borderShare*p.light {
		return p, false
	}
	p.x /= p.light
	p.y /= p.light
	p.dx = math.Sqrt(math.Max(0, xx/p.light-p.x*p.x))
	p.dy = math.Sqrt(math.Max(0, yy/p.light-p.y*p.y))
	return p, true
}

// box3 writes the 3×3 mean of v to dst, shrinking the box at the border, and
// returns its maximum.
func box3(dst, v []float32, h, w int) (top float32) {
	for y := range h {
		for x := range w {
			var s float32
			n := 0
			for j := max(0, y-1); j <= min(h-1, y+1); j++ {
				for i := max(0, x-1); i <= min(w-1, x+1); i++ {
					s += v[j*w+i]
					n++
				}
			}
			m := s / float32(n)
			dst[y*w+x] = m
			top = max(top, m)
		}
	}
	return top
}

// slope fits v = a + b·t with weights g and returns b and its deviation from
// the scatter, √(χ²/(n−2))·√(1/Σg(t−t̄)²). It needs three points.
func slope(t, v, g []float64) (b, sigma float64) {
	b, chi, stt := line(t, v, g)
	return b, math.Sqrt(chi / float64(len(t)-2) / stt)
}

// line fits v = a + b·t with weights g and returns b, χ² = Σg(v−a−b·t)² and
// Σg(t−t̄)².
func line(t, v, g []float64) (b, chi, stt float64) {
	var sg, st, sv float64
	for k := range t {
		sg += g[k]
		st += g[k] * t[k]
		sv += g[k] * v[k]
	}
	tm, vm := st/sg, sv/sg
	var stv float64
	for k := range t {
		stt += g[k] * (t[k] - tm) * (t[k] - tm)
		stv += g[k] * (t[k] - tm) * (v[k] - vm)
	}
	b = stv / stt
	for k := range t {
		d := v[k] - vm - b*(t[k]-tm)
		chi += g[k] * d * d
	}
	return b, chi, stt
}
