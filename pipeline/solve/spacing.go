package solve

import (
	"context"
	"fmt"
)

// rung is a spacing of knots: in time, frames, and in space, pixels.
type rung struct{ t, s float64 }

func (r rung) spacing() [3]float64 { return [3]float64{r.t, r.s, r.s} }

// rungs are walked from the coarsest to the finest, each starting from the
// cube of the one before: what the frames do not tell stays as smooth as it
// was.
var rungs = []rung{{3, 4.5}, {2.5, 3.5}, {2, 3}, {1.5, 2.5}, {1.5, 2}, {1.25, 1.5}, {1, 1}}

// timings are the spacings in time tried beside that of a rung.
var timings = []float64{1, 1.25, 1.5, 2, 2.5, 3, 3.5, 4.5}

const (
	// weak is the weight of total variation with which spacings are
	// compared; faint and strong are tried for the spacing chosen.
	faint  = 0.01
	weak   = 0.03
	strong = 0.1
	// trialIter bounds a trial.
	trialIter = 80
	// rising is how much more than the least a rung must miss for finer ones
	// not to be tried, once the frames are described at all.
	rising = 1.02
	// slack is how much more than the least, in χ² per pixel, a smoother cube
	// may miss, at least; see allowed.
	slack = 0.01
	// better is how much less another timing or weight must miss.
	better = 0.997
	// misfit is the χ² per pixel, hidden or not, from which on the frames are
	// not described; it is worth a note.
	misfit = 1.2
)

// trial is what a spacing and a weight gave.
type trial struct {
	rung
	lambda float64
	miss   float64 // χ² per hidden pixel
	from   *sieve  // where it started
	at     *sieve  // its cube
}

// search chooses spacing and weight and solves with them.
func (a *auto) search(ctx context.Context) loop {
	if a.o.Spacing != [3]float64{} {
		return a.fixed(ctx)
	}
	rough := a.o
	rough.MaxIter, rough.Tol = min(trialIter, a.o.MaxIter), roughTol*a.o.Tol
	a.at = a.c.sieve(rungs[3].spacing())
	a.at.begin(nil)
	for range 2 {
		if !a.run(ctx, weak, rough) {
			return a.at
		}
		a.reweigh()
	}
	best, ok := a.choose(ctx, rough)
	if !ok {
		return a.at
	}
	a.move(best.at, best.rung)
	for range 2 {
		if !a.run(ctx, best.lambda, a.o) {
			return a.at
		}
		if a.p.StreakNoise == nil && a.p.ReferenceNoise == nil {
			break
		}
		a.reweigh()
	}
	chi := a.chi()
	if best.s == rungs[len(rungs)-1].s && chi > a.target() {
		a.res.Notes = append(a.res.Notes, fmt.Sprintf("χ² per pixel is %.2f with the finest splines: the cube is the voxels' own", chi))
		return a.voxels(ctx)
	}
	if chi > misfit {
		a.res.Notes = append(a.res.Notes, fmt.Sprintf("χ² per pixel is %.2f: the model does not describe the frames to within their noise", chi))
	}
	return a.at
}

// fixed solves with the spacing that was asked for.
func (a *auto) fixed(ctx context.Context) loop {
	rough := a.o
	rough.MaxIter, rough.Tol = min(trialIter, a.o.MaxIter)/2, roughTol*a.o.Tol
	a.at = a.c.sieve(a.o.Spacing)
	a.at.begin(nil)
	if a.p.StreakNoise != nil || a.p.ReferenceNoise != nil {
		if !a.run(ctx, weak, rough) {
			return a.at
		}
		a.reweigh()
	}
	a.run(ctx, weak, a.o)
	return a.at
}

// choose hides pixels and looks for the spacing and weight that predict them.
func (a *auto) choose(ctx context.Context, o Options) (best trial, ok bool) {
	hs, hr := a.c.s.hide(), a.c.r.hide()
	defer func() {
		a.c.s.show(hs)
		a.c.r.show(hr)
	}()
	hidden := max(1, float64(len(hs.at)+len(hr.at)))
	try := func(from *sieve, r rung, lambda float64) bool {
		a.move(from, r)
		if !a.run(ctx, lambda, o) {
			return false
		}
		a.tried = append(a.tried, trial{r, lambda, (a.c.s.miss(hs) + a.c.r.miss(hr)) / hidden, from, a.at})
		return true
	}
	least := 0.
	var from *sieve
	for j, r := range rungs {
		if !try(from, r, weak) {
			return best, false
		}
		from = a.at
		miss := a.tried[j].miss
		if j == 0 || miss < least {
			least = miss
		} else if miss > least*rising && least < misfit {
			break
		}
	}
	limit := allowed(least)
	for _, t := range a.tried {
		if best = t; t.miss <= limit {
			break
		}
	}
	for j, t := range timings {
		if t != best.t {
			continue
		}
		for _, k := range []int{j - 1, j + 1} {
			if k >= 0 && k < len(timings) && a.c.t > 1 && !try(best.from, rung{timings[k], best.s}, weak) {
				return best, false
			}
		}
		break
	}
	best = a.improve(best)
	for _, l := range []float64{faint, strong} {
		if !try(best.from, best.rung, l) {
			return best, false
		}
	}
	return a.improve(best), true
}

// allowed is how much a smoother cube may miss. Hidden pixels of a good model miss
// by a little over 1, and half that excess more is well spent. A large excess is
// the model's own error, which finer splines fit first and wrongly; then a cube
// may miss by twice as much.
func allowed(least float64) float64 {
	e := least - 1
	return least + max(slack, e*min(max(3*e, 0.5), 1))
}

// improve returns the last two trials' better one if it is better than b.
func (a *auto) improve(b trial) trial {
	limit := b.miss * better
	for _, t := range a.tried[max(0, len(a.tried)-2):] {
		if t.s == b.s && t.miss < limit {
			b, limit = t, t.miss
		}
	}
	return b
}

// move sets the spacing and starts from a cube.
func (a *auto) move(from *sieve, r rung) {
	if from == nil || from.spacing != r.spacing() {
		a.at = a.c.sieve(r.spacing())
	} else {
		a.at = from
	}
	clear(a.c.s.dual) // duals of a spacing that does not fit are far off
	clear(a.c.r.dual)
	a.at.begin(from)
}

// run solves with the spacing at hand.
func (a *auto) run(ctx context.Context, lambda float64, o Options) bool {
	a.res.Lambda, a.res.Spacing = lambda, a.at.spacing
	a.res.Status = a.c.run(ctx, a.at, a.res, o)
	return a.res.Status != Cancelled
}
