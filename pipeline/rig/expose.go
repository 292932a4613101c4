package rig

// sub is the number of cells per window pixel, in both directions, and of
// time steps per pixel of sweep.
const sub = 4

// plane is light on the fine grid: rows×cols cells, photoelectrons per cell.
// Cell (0, 0) has its upper left corner at (x0-0.5, y0-0.5) window pixels.
type plane struct {
	rows, cols int
	x0, y0     float64
	pe         []float64
}

func newPlane(rows, cols int, x0, y0 float64) plane {
	return plane{rows: rows, cols: cols, x0: x0, y0: y0, pe: make([]float64, rows*cols)}
}

// x and y return the centre of a column or row of cells, window px.
func (p plane) x(q int) float64 { return p.x0 - 0.5 + (float64(q)+0.5)/sub }
func (p plane) y(r int) float64 { return p.y0 - 0.5 + (float64(r)+0.5)/sub }

// gate is the interval of sweep displacement during which light is let in.
type gate struct{ from, to float64 }

// gate returns the station's own: T frames, the first centred at s = 0.
func (s *Station) gate() gate { return gate{-0.5, float64(s.o.T) - 0.5} }

// Gate returns the times (ps) between which the station lets light in.
func (s *Station) Gate() (from, to float64) {
	g := s.gate()
	return s.sweep.inverse(g.from), s.sweep.inverse(g.to)
}

// expose integrates the scene over the gate. It returns the light behind the
// code as it falls on the swept sensor plane, before blur, and the light of
// the whole field without code and sweep.
func (s *Station) expose(scene Scene, g gate, code []float64) (swept, still plane) {
	f := s.o.Field
	still = newPlane((s.o.H+2*f)*sub, (s.o.W+2*f)*sub, -float64(f), -float64(f))
	steps := int((g.to-g.from)*sub + 0.5)
	// Light of step j lands (j+½)/sub pixels beyond the gate's first.
	swept = newPlane(s.o.H*sub+steps-1, s.o.W*sub, 0, g.from+0.5/sub)
	step := newPlane(still.rows, still.cols, still.x0, still.y0)
	before := s.sweep.inverse(g.from)
	for j := range steps {
		after := s.sweep.inverse(g.from + float64(j+1)/sub)
		weight := (after - before) / (sub * sub)
		lit := scene.sample(step, s.sweep.inverse(g.from+(float64(j)+0.5)/sub), weight)
		s.land(swept, still, step, lit, code, j)
		before = after
	}
	return swept, still
}

// land moves the light of time step j, the cells within lit, into the two
// sums and clears it.
func (s *Station) land(swept, still, step plane, lit span2, code []float64, j int) {
	f, w := s.o.Field*sub, s.o.W*sub
	for r := lit.y0; r < lit.y1; r++ {
		inside := r >= f && r < f+s.o.H*sub
		for q := lit.x0; q < lit.x1; q++ {
			i := r*step.cols + q
			v := step.pe[i]
			step.pe[i] = 0
			still.pe[i] += v
			if !inside || q < f || q >= f+w || v == 0 {
				continue
			}
			swept.pe[(r-f+j)*w+q-f] += v * code[(r-f)*w+q-f]
		}
	}
}

// mask multiplies the part of a still plane inside the window with the code
// (nil: code removed) and drops the rest: what the streak arm lets through
// with the sweep off.
func (s *Station) mask(still plane, code []float64) plane {
	f := s.o.Field * sub
	p := newPlane(s.o.H*sub, s.o.W*sub, 0, 0)
	for r := range p.rows {
		for q := range p.cols {
			v := still.pe[(r+f)*still.cols+q+f]
			if code != nil {
				v *= code[r*p.cols+q]
			}
			p.pe[r*p.cols+q] = v
		}
	}
	return p
}

// project blurs a plane behind the code onto the streak sensor, displaced by
// dy px along the sweep, and adds it to dst. Each cell is spread as a
// Gaussian integrated over the pixels; its own extent is part of the width.
func (s *Station) project(dst []float64, p plane, dy, widen float64) {
	c := s.o.Streak
	ox := float64(s.o.WindowX) + s.o.NudgeX
	oy := float64(s.o.WindowY) + s.o.NudgeY + dy
	w, h := s.streak.w, s.streak.h
	mid := make([]float64, h*p.cols)
	var b band
	for r := range p.rows {
		b.fill(p.y(r)+oy, cellWidth(c.SigmaY*widen), h)
		for j, wy := range b.weight {
			row := mid[(b.first+j)*p.cols:]
			for q, v := range p.pe[r*p.cols : (r+1)*p.cols] {
				row[q] += wy * v
			}
		}
	}
	for q := range p.cols {
		b.fill(p.x(q)+ox, cellWidth(c.SigmaX*widen), w)
		for y := range h {
			v := mid[y*p.cols+q]
			if v == 0 {
				continue
			}
			row := dst[y*w+b.first:]
			for i, wx := range b.weight {
				row[i] += wx * v
			}
		}
	}
}
