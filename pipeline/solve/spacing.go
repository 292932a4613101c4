package solve

import (
	"context"
	"fmt"
)

// rung is a spacing of knots: in time, frames, and in space, pixels.
type rung struct{ t, s float64 }

func (r rung) spacing() [3]float64 { return [3]float64{r.t, r.s, r.s} }

// volume is the number of voxels per coefficient.
func (r rung) volume() float64 { return r.t * r.s * r.s }

// rungs are tried from the coarsest to the finest.
var rungs = []rung{{3, 4.5}, {2.5, 3.5}, {2, 3}, {1.5, 2.5}, {1.5, 2}, {1, 1.5}, {1, 1}}

// timings are the spacings in time tried beside that of a rung.
var timings = []float64{1, 1.25, 1.5, 2, 2.5, 3, 3.5, 4.5}

// weights of total variation that are tried.
var weights = []float64{0, weak, 0.1}

const (
	// weak is the weight with which spacings are compared.
	weak = 0.03
	// trialIter bounds a trial.
	trialIter = 80
)

// trial is what a spacing and a weight gave.
type trial struct {
	rung
	lambda float64
	miss   float64 // χ² of the hidden pixels
	fit    float64 // larger χ² per pixel of the two arms
}

// search chooses spacing and weight and solves with them.
func (a *auto) search(ctx context.Context) loop {
	start := rung{1.5, 2.5}
	a.at = a.c.sieve(start.spacing())
	a.at.begin(nil)
	rough := a.o
	rough.MaxIter, rough.Tol = min(trialIter, a.o.MaxIter), roughTol*a.o.Tol
	for range 2 {
		if !a.run(ctx, weak, rough) {
			return a.at
		}
		a.reweigh()
	}
	hs, hr := a.c.s.hide(), a.c.r.hide()
	try := func(r rung, lambda float64) bool {
		for _, t := range a.tried {
			if t.rung == r && t.lambda == lambda {
				return true
			}
		}
		a.move(r)
		if !a.run(ctx, lambda, rough) {
			return false
		}
		t := trial{rung: r, lambda: lambda, miss: a.c.s.miss(hs) + a.c.r.miss(hr)}
		t.fit = max(a.c.s.chi2/max(1, float64(a.c.s.used)), a.c.r.chi2/max(1, float64(a.c.r.used)))
		a.tried = append(a.tried, t)
		return true
	}
	ok := a.descend(try)
	best := a.best()
	a.c.s.show(hs)
	a.c.r.show(hr)
	if !ok {
		return a.at
	}
	a.move(best.rung)
	if !a.run(ctx, best.lambda, a.o) {
		return a.at
	}
	a.reweigh()
	a.run(ctx, best.lambda, a.o)
	if a.res.Status == Cancelled {
		return a.at
	}
	if best.rung == rungs[len(rungs)-1] && a.chi() > a.target() {
		a.res.Notes = append(a.res.Notes, fmt.Sprintf("χ² per pixel is %.2f with the finest splines: the cube is the voxels' own", a.chi()))
		return a.voxels(ctx)
	}
	if chi := a.chi(); chi > misfit {
		a.res.Notes = append(a.res.Notes, fmt.Sprintf("χ² per pixel is %.2f: the model does not describe the frames to within their noise", chi))
	}
	return a.at
}

// misfit is the χ² per pixel that is worth a note.
const misfit = 1.2

// descend tries rungs from the coarsest on until finer ones predict hidden
// pixels worse, then other timings, then weights.
func (a *auto) descend(try func(rung, float64) bool) bool {
	worse := 0
	for _, r := range rungs {
		if !try(r, weak) {
			return false
		}
		if last := a.tried[len(a.tried)-1]; last.miss > a.least()*(1+tolerance) {
			if worse++; worse >= 2 && a.tried[0].miss > a.least()*(1+tolerance) {
				break
			}
		} else {
			worse = 0
		}
	}
	b := a.best()
	for j, t := range timings {
		if t == b.t {
			if j > 0 && !try(rung{timings[j-1], b.s}, weak) {
				return false
			}
			if j+1 < len(timings) && !try(rung{timings[j+1], b.s}, weak) {
				return false
			}
		}
	}
	b = a.best()
	for _, l := range weights {
		if !try(b.rung, l) {
			return false
		}
	}
	return true
}

// tolerance is how much more than the least a smoother cube may miss.
const tolerance = 0.03

func (a *auto) least() float64 {
	least := a.tried[0].miss
	for _, t := range a.tried {
		least = min(least, t.miss)
	}
	return least
}

// best is the smoothest trial that misses little more than the least, and of
// one spacing the weight that misses least.
func (a *auto) best() trial {
	limit := a.least() * (1 + tolerance)
	var b trial
	for _, t := range a.tried {
		if t.miss <= limit && (t.volume() > b.volume() || t.rung == b.rung && t.miss < b.miss) {
			b = t
		}
	}
	return b
}

// move changes the spacing.
func (a *auto) move(r rung) {
	old := a.at
	if h := r.spacing(); a.at.spacing != h {
		a.at = a.c.sieve(h)
	}
	clear(a.c.s.dual) // duals of a spacing that does not fit are far off
	clear(a.c.r.dual)
	a.at.begin(old)
}

// run solves with the spacing at hand.
func (a *auto) run(ctx context.Context, lambda float64, o Options) bool {
	a.res.Lambda, a.res.Spacing = lambda, a.at.spacing
	a.res.Status = a.c.run(ctx, a.at, a.res, o)
	return a.res.Status != Cancelled
}
