package solve

import (
	"context"
	"fmt"
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
	// roughTol is the tolerance of a solve that only asks.
	roughTol = 4
	// shortIter bounds a solve that asks what a smaller Lambda would do:
	// from the cube at hand χ² settles faster than the cube.
	shortIter = 80
	// worthwhile is the share of the excess of χ² that may be left after
	// Lambda is halved for another halving to be tried.
	worthwhile = 0.5
)

// voxels is the answer when no spacing describes the frames: equation (3) on
// voxels, with Lambda by the discrepancy principle.
//
// Lambda starts at DefaultLambda, which is near the best on scenes of 20 to
// 2000 photoelectrons per voxel since Lambda is stated against the noise.
// While χ² per usable pixel of both arms exceeds 1 + 3·√(2/N), the cube is
// smoother than the data allow and Lambda is halved, starting from the cube
// at hand. If halving does not remove half of the excess, or the least Lambda
// still leaves one, then it is not smoothness but the model that keeps the
// cube from the data; fitting the data harder would only put the model's
// error into the cube, and the result for the first Lambda is kept, with a
// note.
func (a *auto) voxels(ctx context.Context) *engine {
	e := a.c.voxels()
	solve := func(o Options) bool {
		a.res.Status = a.c.run(ctx, e, a.res, o)
		return a.res.Status != Cancelled
	}
	a.res.Lambda, a.res.Spacing = a.o.Lambda, [3]float64{}
	e.load(nil)
	if !solve(a.o) {
		return e
	}
	target, start, chi := a.target(), a.res.Lambda, a.chi()
	if chi <= target {
		return e
	}
	kept, status := make([]float32, a.c.t*a.c.h*a.c.w), a.res.Status
	e.store(kept)
	short := a.o
	short.MaxIter, short.Tol = min(shortIter, a.o.MaxIter), roughTol*a.o.Tol
	for l, old := start/lambdaStep, chi; l >= lambdaLeast; l /= lambdaStep {
		a.res.Lambda = l
		if !solve(short) {
			return e
		}
		now := a.chi()
		if now <= target {
			solve(a.o)
			return e
		}
		if now-target > worthwhile*(old-target) {
			break
		}
		old = now
	}
	a.res.Lambda, a.res.Status = start, status
	e.load(kept)
	a.res.Notes = append(a.res.Notes, fmt.Sprintf("χ² per pixel is %.2f, and a smaller weight does not bring it to %.2f: the model does not describe the frames to within their noise", chi, target))
	return e
}
