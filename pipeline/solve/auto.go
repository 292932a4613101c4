package solve

import (
	"context"
	"fmt"
	"math"
)

// Limits of the search for Lambda.
const (
	// lambdaLeast is the smallest weight tried: below it the scenes of the
	// tests are fitted to their noise at every light level.
	lambdaLeast = 0.1
	// lambdaStep divides Lambda from one try to the next.
	lambdaStep = 2
	// chiSigmas is how many standard deviations of χ² per pixel, √(2/N),
	// the target lies above 1.
	chiSigmas = 3
	// roughIter and roughTol bound the solve from which the first
	// variances are taken: light per pixel is right to a few per cent long
	// before the cube is.
	roughIter = 40
	roughTol  = 4
	// trialIter bounds a solve that asks what a smaller Lambda would do:
	// from the cube at hand χ² settles faster than the cube.
	trialIter = 80
)

// Auto minimises (3) with Lambda from the data and, for arms with a Noise,
// variances from the model instead of the noisy frame.
//
// Variances come from the smoothed frame first, then from the model's own
// answer after a rough solve and again after a full one; weights taken from
// single counts would favour pixels that by chance counted few.
//
// Light of the scene outside the window reaches reference pixels at its edge
// and is not modelled; those pixels get the square of as much as it may be
// added to their variance.
//
// Pixels that stand out of their neighbours further than the arm's blur allows
// for any scene (cosmic rays, new hot pixels) are masked first.
//
// Lambda starts at o.Lambda (default DefaultLambda), which is near the best on
// scenes of 20 to 2000 photoelectrons per voxel since Lambda is stated against
// the noise. The discrepancy principle then asks whether the residual can be
// noise: while χ² per usable pixel of both arms exceeds 1 + 3·√(2/N), the cube
// is smoother than the data allow and Lambda is halved, starting from the cube
// at hand. Lambda is not raised until χ² = 1, as the plain principle would:
// the cube follows part of the noise, so that even the best Lambda has χ² < 1,
// and χ² = 1 is known to smooth too much; on the scenes of the tests it loses
// up to 1 dB. If halving Lambda does not remove half of the excess, or the
// least Lambda still leaves one, then it is not smoothness but the model that
// keeps the cube from the data; fitting the data harder would only put the
// model's error into the cube (measured: 2 dB lost with a blur off by a third at 2000
// photoelectrons), and the result for the first Lambda is kept, with a note.
func Auto(ctx context.Context, p Problem, o Options) (*Result, error) {
	o = o.withDefaults()
	if err := p.check(); err != nil {
		return nil, err
	}
	e := newEngine(p.Model, o.Workers)
	e.s.set(p.Streak, p.StreakVar)
	e.r.set(p.Reference, p.ReferenceVar)
	light, spikes := e.firstWeights(&p)
	if e.s.used+e.r.used == 0 {
		return nil, ErrMasked
	}
	res := &Result{Lambda: o.Lambda, Alpha: o.Alpha, Sigma: typicalSigma(&e.s, &e.r), Status: Converged}
	if res.Spikes = spikes; spikes > 0 {
		res.Notes = append(res.Notes, fmt.Sprintf("%d pixels stand out of their neighbours as no light can and were left out", spikes))
	}
	if !light {
		res.Notes = append(res.Notes, "neither arm shows light above its read noise: the cube is dark")
		e.finish(res, &p)
		return res, nil
	}
	a := &auto{e: e, p: &p, res: res, o: o}
	a.search(ctx)
	e.finish(res, &p)
	return res, nil
}

// firstWeights sets variances from the smoothed frames, masks spikes and
// reports whether there is any light.
func (e *engine) firstWeights(p *Problem) (light bool, spikes int) {
	rows, cols := e.m.StreakShape()
	rr, rc := e.m.ReferenceShape()
	sharpS, sharpR := e.m.Sharpness()
	for _, v := range []struct {
		a          *arm
		n          *Noise
		rows, cols int
		sharp      [2]float64
	}{{&e.s, p.StreakNoise, rows, cols, sharpS}, {&e.r, p.ReferenceNoise, rr, rc, sharpR}} {
		mean, weight := make([]float32, v.rows*v.cols), make([]float32, v.rows*v.cols)
		smooth(mean, weight, v.a.data, v.a.vari, v.rows, v.cols)
		if v.a.lit(v.n, mean, weight) {
			light = true
		}
		if v.a == &e.r {
			v.a.setEdge(e.m.Coverage(), mean)
		}
		v.a.weigh(v.n, mean)
		spikes += v.a.spikes(v.cols, v.sharp)
	}
	return light, spikes
}

type auto struct {
	e   *engine
	p   *Problem
	res *Result
	o   Options
}

func (a *auto) search(ctx context.Context) {
	rough := a.o
	rough.MaxIter, rough.Tol = min(roughIter, a.o.MaxIter), roughTol*a.o.Tol
	solve := func(o Options) bool {
		a.res.Status = a.e.run(ctx, a.res, o)
		return a.res.Status != Cancelled
	}
	a.e.load(nil)
	if a.p.StreakNoise != nil || a.p.ReferenceNoise != nil {
		if !solve(rough) {
			return
		}
		a.reweigh()
		if !solve(a.o) {
			return
		}
		a.reweigh()
	}
	if !solve(a.o) {
		return
	}
	target := 1 + chiSigmas*math.Sqrt(2/float64(a.e.s.used+a.e.r.used))
	start, chi := a.res.Lambda, a.chi()
	if chi <= target {
		return
	}
	kept, status := make([]float32, a.e.t*a.e.h*a.e.w), a.res.Status
	a.e.store(kept)
	rough.MaxIter = min(trialIter, a.o.MaxIter)
	for l, old := start/lambdaStep, chi; l >= lambdaLeast; l /= lambdaStep {
		a.res.Lambda = l
		if !solve(rough) {
			return
		}
		now := a.chi()
		if now <= target {
			solve(a.o)
			return
		}
		if now-target > worthwhile*(old-target) {
			break
		}
		old = now
	}
	a.res.Lambda, a.res.Status = start, status
	a.e.load(kept)
	a.res.Notes = append(a.res.Notes, fmt.Sprintf("χ² per pixel is %.2f, and a smaller weight does not bring it to %.2f: the model does not describe the frames to within their noise", chi, target))
}

// worthwhile is the share of the excess of χ² that may be left after Lambda
// is halved for another halving to be tried.
const worthwhile = 0.5

func (a *auto) chi() float64 {
	return (a.e.s.chi2 + a.e.r.chi2) / float64(a.e.s.used+a.e.r.used)
}

// reweigh takes variances from the model's answer to the cube at hand.
func (a *auto) reweigh() {
	a.e.s.weigh(a.p.StreakNoise, a.e.s.now)
	a.e.r.weigh(a.p.ReferenceNoise, a.e.r.now)
	a.res.Sigma = typicalSigma(&a.e.s, &a.e.r)
}
