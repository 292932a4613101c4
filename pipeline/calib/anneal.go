package calib

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/mat"
)

// pool is the state in which single elements are turned over. It works on
//
//	J = tr(G E F Eᵀ) − 2 tr(Eᵀ B),   G = PᵀP, F = QᵀQ, B = PᵀDQ
//
// the squared residual but for a constant, and keeps half its gradient.
type pool struct {
	b      *elements
	g, f   mat.Dense
	grad   mat.Dense
	ny, nx int
	ry, rx int

	holes []hole   // masked pixels, whose part of J is taken off again
	near  [][]look // by element: how it shows in holes
}

// hole is a masked pixel; r is the model less what stands in D there.
type hole struct{ r float64 }

// look is the brightness of an element in a hole.
type look struct {
	hole int
	a    float64
}

func (b *elements) pool(p, q *mat.Dense) *pool {
	var pd, bb, t mat.Dense
	s := &pool{b: b}
	s.g.Mul(p.T(), p)
	s.f.Mul(q.T(), q)
	pd.Mul(p.T(), b.d)
	bb.Mul(&pd, q)
	full := mat.DenseCopyOf(b.e)
	full.Apply(func(_, _ int, v float64) float64 { return b.lo + (b.hi-b.lo)*v }, full)
	t.Mul(&s.g, full)
	s.grad.Mul(&t, &s.f)
	s.grad.Sub(&s.grad, &bb)
	s.ny, s.nx = b.e.Dims()
	s.ry, s.rx = bandwidth(&s.g), bandwidth(&s.f)
	t.Reset()
	t.Mul(p, full)
	s.near = make([][]look, s.ny*s.nx)
	_, cols := b.d.Dims()
	for k, ok := range b.mask {
		if y, x := k/cols, k%cols; !ok && b.rows[y] && b.cols[x] {
			s.dig(y, x, mat.Dot(t.RowView(y), q.RowView(x))-b.d.At(y, x), p, q)
		}
	}
	return s
}

// dig adds a hole.
func (s *pool) dig(y, x int, r float64, p, q *mat.Dense) {
	seen := false
	for i := range s.ny {
		for j := 0; j < s.nx && p.At(y, i) != 0; j++ {
			if a := p.At(y, i) * q.At(x, j); a != 0 {
				s.near[i*s.nx+j] = append(s.near[i*s.nx+j], look{len(s.holes), a})
				seen = true
			}
		}
	}
	if seen {
		s.holes = append(s.holes, hole{r})
	}
}

// step is the change of an element's value if it is turned over.
func (s *pool) step(i, j int) float64 {
	if s.b.e.At(i, j) > 0.5 {
		return s.b.lo - s.b.hi
	}
	return s.b.hi - s.b.lo
}

// one is the change of J if element (i, j) is turned over.
func (s *pool) one(i, j int) float64 {
	d := s.step(i, j)
	c := 2*d*s.grad.At(i, j) + d*d*s.g.At(i, i)*s.f.At(j, j)
	for _, l := range s.near[i*s.nx+j] {
		c -= 2*d*l.a*s.holes[l.hole].r + d*d*l.a*l.a
	}
	return c
}

// cross is the part of the change of J that two elements turned over together
// add to what each does alone.
func (s *pool) cross(i, j, k, l int) float64 {
	both := s.g.At(i, k) * s.f.At(j, l)
	for _, a := range s.near[i*s.nx+j] {
		for _, b := range s.near[k*s.nx+l] {
			if a.hole == b.hole {
				both -= a.a * b.a
			}
		}
	}
	return 2 * s.step(i, j) * s.step(k, l) * both
}

// group is the change of J if the elements of a shape at (i, j) are turned
// over; ok is false where the shape leaves the grid.
func (s *pool) group(shape [][2]int, i, j int) (c float64, ok bool) {
	for n, o := range shape {
		k, l := i+o[0], j+o[1]
		if k >= s.ny || l < 0 || l >= s.nx {
			return 0, false
		}
		c += s.one(k, l)
		for _, p := range shape[:n] {
			c += s.cross(k, l, i+p[0], j+p[1])
		}
	}
	return c, true
}

func (s *pool) turnGroup(shape [][2]int, i, j int) {
	for _, o := range shape {
		s.turn(i+o[0], j+o[1])
	}
}

func (s *pool) turn(i, j int) {
	d := s.step(i, j)
	s.b.e.Set(i, j, 1-s.b.e.At(i, j))
	for _, l := range s.near[i*s.nx+j] {
		s.holes[l.hole].r += d * l.a
	}
	for k := max(0, i-s.ry); k <= min(s.ny-1, i+s.ry); k++ {
		for l := max(0, j-s.rx); l <= min(s.nx-1, j+s.rx); l++ {
			s.grad.Set(k, l, s.grad.At(k, l)+d*s.g.At(k, i)*s.f.At(j, l))
		}
	}
}

// shapes are the groups of elements turned over together: those that the blur
// hardly tells from none when open and closed alternate in them.
var shapes = [][][2]int{
	{{0, 0}},
	{{0, 0}, {0, 1}}, {{0, 0}, {1, 0}}, {{0, 0}, {1, 1}}, {{0, 0}, {1, -1}},
	{{0, 0}, {0, 2}}, {{0, 0}, {2, 0}},
	{{0, 0}, {0, 1}, {0, 2}}, {{0, 0}, {1, 0}, {2, 0}},
	{{0, 0}, {0, 1}, {1, 0}, {1, 1}},
}

// flip turns over what lowers J until nothing does. It returns the number of
// changes.
func (b *elements) flip(p, q *mat.Dense) (turned int) {
	s := b.pool(p, q)
	for range 30 {
		was := turned
		for i := range s.ny {
			for j := range s.nx {
				for _, shape := range shapes {
					if c, ok := s.group(shape, i, j); ok && c < -1e-12 {
						s.turnGroup(shape, i, j)
						turned++
						break
					}
				}
			}
		}
		if turned == was {
			break
		}
	}
	return turned
}

// Anneal goes over all elements this often: many times over few, less often
// over many.
const (
	coolMost  = 400
	coolLeast = 60
	coolWork  = 2e6 // elements looked at
)

// hotParts are the temperatures from which annealing begins, parts of what one
// element costs: all anew, then nearby.
var hotParts = []float64{0.1, 0.003}

// anneal leaves the local minimum in which flip got stuck: S. Kirkpatrick, C.
// D. Gelatt, M. P. Vecchi, Optimization by simulated annealing, Science 220
// (1983) 671–680, with the fixed seed of this line. It cools down to the
// temperature of the noise.
func (b *elements) anneal(p, q *mat.Dense, part float64) {
	rng := rand.New(rand.NewPCG(1, 2))
	s := b.pool(p, q)
	d := b.hi - b.lo
	cold := 2 * max(b.noise, 1e-6*b.signal)
	hot := max(part*d*d*s.g.At(s.ny/2, s.ny/2)*s.f.At(s.nx/2, s.nx/2), 4*cold)
	sweeps := max(coolLeast, min(coolMost, coolWork/(s.ny*s.nx)))
	for n := range sweeps {
		if n%10 == 9 {
			b.fitLevels(p, q)
			s = b.pool(p, q)
		}
		t := hot * math.Pow(cold/hot, float64(n)/float64(sweeps-1))
		for range s.ny * s.nx {
			i, j := rng.IntN(s.ny), rng.IntN(s.nx)
			shape := shapes[0]
			if rng.IntN(2) == 0 {
				shape = shapes[rng.IntN(len(shapes))]
			}
			if c, ok := s.group(shape, i, j); ok && (c < 0 || rng.Float64() < math.Exp(-c/t)) {
				s.turnGroup(shape, i, j)
			}
		}
	}
}

// bandwidth is how far from the diagonal a symmetric matrix matters.
func bandwidth(m *mat.Dense) int {
	n, _ := m.Dims()
	top := 0.0
	for i := range n {
		top = max(top, m.At(i, i))
	}
	r := 0
	for i := range n {
		for j := i + r + 1; j < n; j++ {
			if math.Abs(m.At(i, j)) > 1e-6*top {
				r = j - i
			}
		}
	}
	return r
}
