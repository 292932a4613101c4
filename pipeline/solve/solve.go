package solve

import (
	"context"
	"errors"
	"fmt"
	"math"

	"unsheard/pipeline/optics"
)

// Problem is one shot: what both arms counted, and how well.
type Problem struct {
	Model *optics.Model

	// Streak is the measured streak frame on the model's padded plane,
	// photoelectrons; Reference the measured reference frame on the view's
	// rectangle. A value that is not finite is masked.
	Streak, Reference []float32

	// StreakVar and ReferenceVar are the variances, photoelectrons². A
	// pixel whose variance is not positive or not finite is masked.
	StreakVar, ReferenceVar []float32

	// StreakNoise and ReferenceNoise say how the variance depends on the
	// light, which lets Auto take it from the model instead of the noisy
	// frame. Nil: StreakVar and ReferenceVar are kept as they are (and
	// then say only what is masked, where Noise is given).
	StreakNoise, ReferenceNoise *Noise
}

// Noise is an arm's variance as a function of the light e it should count:
// Read + Gain·e + (Floor·e)².
type Noise struct {
	// Read is the variance without light, photoelectrons²: read noise and
	// the uncertainty of the dark frame. One per pixel.
	Read []float32

	// Gain is the variance per photoelectron: 1/flat, since the frame was
	// divided by the flat. Nil means 1 everywhere.
	Gain []float32

	// Floor is the model error as a fraction of the light. 0 switches it
	// off.
	Floor float64
}

// Status says why a solve ended.
type Status string

// The reasons.
const (
	Converged Status = "converged" // the numbers have stopped moving
	Limit     Status = "limit"     // MaxIter came first
	Cancelled Status = "cancelled" // the context ended; X is the last iterate
)

// Options controls a solve. The zero value is what the station uses.
type Options struct {
	// Lambda is the weight of total variation for a cube in units of its
	// Sigma, so dimensionless. Solve: negative means 0, 0 means
	// DefaultLambda. Auto finds it; should it fall back to voxels, this is
	// the start of its search there.
	Lambda float64

	// Alpha is the weight of change in time against change in space,
	// pixel per frame. Default 0.15. Negative switches change in time off.
	Alpha float64

	// MaxIter bounds the iterations of one solve. Default 600.
	MaxIter int

	// Tol is the relative change per iteration at which a solve has
	// converged, see the package comment. Default 3e-4. Negative: run
	// MaxIter iterations.
	Tol float64

	// Spacing, if not zero, fixes the knots of Auto's splines along time, y
	// and x, so that nothing is searched for: the weight of total variation
	// is the weak one, and the answer is never the voxels' own. For a quick
	// look.
	Spacing [3]float64

	// Workers is the number of goroutines. Default 1. It changes no bit of
	// the result.
	Workers int

	// Recorder is told of progress. Nil: nobody.
	Recorder Recorder
}

// Defaults.
const (
	DefaultLambda = 0.4
	DefaultAlpha  = 0.15
)

// Recorder follows a solve. It is called from the goroutine that called
// Solve or Auto.
type Recorder interface {
	Record(Progress)
}

// Progress is the state after some iterations.
type Progress struct {
	Solve     int     // 0-based number of the solve within Auto
	Iteration int     // within the solve
	Lambda    float64 // of the solve
	Change    float64 // relative change of the cube per iteration
	Streak    float64 // reduced χ² of each arm
	Reference float64
}

// Result is a reconstruction.
type Result struct {
	X      []float32 // T·H·W, photoelectrons per window pixel and frame
	Status Status

	Iterations    int // of all solves
	Lambda, Alpha float64

	// Spacing is the distance of the splines' knots in time (frames), y and
	// x (pixels); 0 if the cube is the voxels' own.
	Spacing [3]float64

	// Sigma is the typical standard deviation of a lit pixel,
	// photoelectrons, that Lambda is stated against: the weight in
	// equation (3) is Lambda/Sigma.
	Sigma float64

	// Chi2Streak and Chi2Reference are χ² per usable pixel, and Chi2 that of
	// both arms together; UsedStreak and UsedReference count the usable
	// pixels.
	Chi2Streak, Chi2Reference, Chi2 float64
	UsedStreak, UsedReference       int

	// StreakModel and ReferenceModel are E(x) and R(x), photoelectrons.
	StreakModel, ReferenceModel []float32

	// StreakVar and ReferenceVar are the variances of the last solve, −1
	// where masked.
	StreakVar, ReferenceVar []float32

	// NotFinite counts pixels masked because their value was not finite.
	NotFinite int

	// Spikes counts pixels that Auto masked since no light can look so.
	Spikes int

	Trajectory []Progress // every CheckEvery iterations
	Notes      []string   // what the user should know, plain sentences
}

// ErrMasked is returned when no pixel of either arm may be used.
var ErrMasked = errors.New("solve: every pixel of both arms is masked: nothing to reconstruct from")

func (o Options) withDefaults() Options {
	if o.Lambda == 0 {
		o.Lambda = DefaultLambda
	}
	if o.Alpha == 0 {
		o.Alpha = DefaultAlpha
	}
	o.Lambda, o.Alpha = max(o.Lambda, 0), max(o.Alpha, 0)
	if o.MaxIter <= 0 {
		o.MaxIter = 600
	}
	if o.Tol == 0 {
		o.Tol = 3e-4
	}
	return o
}

// check panics on a slice that does not fit and reports what the laboratory
// got wrong.
func (p *Problem) check() error {
	rows, cols := p.Model.StreakShape()
	rr, rc := p.Model.ReferenceShape()
	for _, a := range []struct {
		n          int
		data, vari []float32
		noise      *Noise
	}{{rows * cols, p.Streak, p.StreakVar, p.StreakNoise}, {rr * rc, p.Reference, p.ReferenceVar, p.ReferenceNoise}} {
		if len(a.data) != a.n || len(a.vari) != a.n {
			panic(optics.ErrShape)
		}
		if a.noise == nil {
			continue
		}
		if len(a.noise.Read) != a.n || a.noise.Gain != nil && len(a.noise.Gain) != a.n {
			panic(optics.ErrShape)
		}
		if !(a.noise.Floor >= 0 && a.noise.Floor < 1) {
			return fmt.Errorf("solve: model-error floor is %g, must be a fraction of the light from 0 to 1", a.noise.Floor)
		}
	}
	return nil
}

// Solve minimises (3) with the weights of p and a fixed Lambda, from x0 (nil:
// from the dark). Lambda is stated against Sigma; see Result.
func Solve(ctx context.Context, p Problem, x0 []float32, o Options) (*Result, error) {
	o = o.withDefaults()
	if err := p.check(); err != nil {
		return nil, err
	}
	e := newEngine(p.Model, o.Workers)
	e.s.set(p.Streak, p.StreakVar)
	e.r.set(p.Reference, p.ReferenceVar)
	if e.s.used+e.r.used == 0 {
		return nil, ErrMasked
	}
	if x0 != nil && len(x0) != e.t*e.h*e.w {
		panic(optics.ErrShape)
	}
	e.load(x0)
	res := &Result{Lambda: o.Lambda, Alpha: o.Alpha, Sigma: typicalSigma(&e.s, &e.r)}
	res.Status = e.run(ctx, e, res, o)
	e.finish(e, res, &p)
	return res, nil
}

// loop is a primal-dual loop on a core.
type loop interface {
	// steps sets the step sizes, the weight of total variation, 1 over
	// photoelectrons, and that of its change in time.
	steps(gamma, typical, weight, alpha float64)
	// iterate does one iteration; with count it also returns Σ|v − x|, Σ v
	// and Σ v² of the primal step v.
	iterate(count bool) (dx, total, square float64)
	// store writes the cube.
	store(x []float32)
}

// run iterates until the stopping rule holds.
func (e *core) run(ctx context.Context, l loop, res *Result, o Options) Status {
	l.steps(e.gamma(res.Sigma), res.Sigma, res.Lambda/res.Sigma, o.Alpha)
	number := 0
	if n := len(res.Trajectory); n > 0 {
		number = res.Trajectory[n-1].Solve + 1
	}
	var old Progress
	calm := 0
	for it := 1; it <= o.MaxIter; it++ {
		if ctx.Err() != nil {
			return Cancelled
		}
		count := it%CheckEvery == 0 || it == o.MaxIter
		dx, total, square := l.iterate(count)
		res.Iterations++
		if !count {
			continue
		}
		now := Progress{Solve: number, Iteration: it, Lambda: res.Lambda, Change: dx / max(total, 1),
			Streak: e.s.chi2 / max(1, float64(e.s.used)), Reference: e.r.chi2 / max(1, float64(e.r.used))}
		if e.light = square / max(total, 1); it == tuneAt || it == 3*tuneAt {
			l.steps(e.gamma(res.Sigma), res.Sigma, res.Lambda/res.Sigma, o.Alpha)
		}
		res.Trajectory = append(res.Trajectory, now)
		if o.Recorder != nil {
			o.Recorder.Record(now)
		}
		still := now.Change < o.Tol && math.Abs(now.Streak-old.Streak) < CheckEvery*o.Tol*now.Streak &&
			math.Abs(now.Reference-old.Reference) < CheckEvery*o.Tol*max(now.Reference, 1e-3)
		if old = now; !still {
			calm = 0
		} else if calm++; calm >= 2 {
			return Converged
		}
	}
	return Limit
}

// gamma is the step ratio: γ should be near |x|/|y|, the size of the cube over
// that of its duals (Chambolle & Pock 2011, sect. 3). A lit voxel holds about
// e.light, and duals are of order 1/sigma. Before anything is known sigma
// stands for the light.
func (e *core) gamma(sigma float64) float64 {
	if e.light <= 0 {
		return sigma * sigma
	}
	return stepRatio * sigma * min(max(e.light, sigma/10), 100*sigma)
}

// stepRatio is the constant of γ, tuned on the scenes of the tests at 20 to
// 2000 photoelectrons: 0.3 to 3 differ by less than a factor 2 in iterations.
const stepRatio = 1.5

// tuneAt is the iteration after which γ is set from the light found so far;
// again at three times it. Both are multiples of CheckEvery.
const tuneAt = 30

// CheckEvery is the number of iterations between two looks at the change.
const CheckEvery = 10

func (e *core) finish(l loop, res *Result, p *Problem) {
	res.X = make([]float32, e.t*e.h*e.w)
	l.store(res.X)
	res.StreakModel, res.ReferenceModel = make([]float32, len(e.s.data)), make([]float32, len(e.r.data))
	e.m.Forward(res.StreakModel, res.ReferenceModel, res.X)
	cs, cr := e.s.chi(res.StreakModel), e.r.chi(res.ReferenceModel)
	res.UsedStreak, res.UsedReference = e.s.used, e.r.used
	res.Chi2Streak, res.Chi2Reference = cs/max(1, float64(e.s.used)), cr/max(1, float64(e.r.used))
	res.Chi2 = (cs + cr) / float64(e.s.used+e.r.used)
	res.StreakVar, res.ReferenceVar = append([]float32(nil), e.s.vari...), append([]float32(nil), e.r.vari...)
	res.NotFinite = notFinite(p.Streak) + notFinite(p.Reference)
	if res.NotFinite > 0 {
		res.Notes = append(res.Notes, fmt.Sprintf("%d pixels are not finite and were left out", res.NotFinite))
	}
}

// chi returns Σ(model − data)²/vari over the usable pixels.
func (a *arm) chi(model []float32) float64 {
	var s float64
	for j, v := range a.vari {
		if v > 0 {
			d := float64(model[j] - a.data[j])
			s += d * d / float64(v)
		}
	}
	return s
}

func notFinite(x []float32) (n int) {
	for _, v := range x {
		if f := float64(v); math.IsNaN(f) || math.IsInf(f, 0) {
			n++
		}
	}
	return n
}

// typicalSigma is the light-weighted rms standard deviation of the usable
// pixels; in a frame without light the plain one.
func typicalSigma(arms ...*arm) float64 {
	var sv, se, v0, n float64
	for _, a := range arms {
		for j, v := range a.vari {
			if v > 0 {
				e := max(float64(a.data[j]), 0)
				sv += float64(e * float64(v))
				se += e
				v0 += float64(v)
				n++
			}
		}
	}
	if sv > 0 {
		return math.Sqrt(sv / se)
	}
	return math.Sqrt(v0 / n)
}
