package solve

import (
	"context"
	"fmt"
	"math"
)

// Auto writes the cube as non-negative cubic B-splines and chooses their
// spacing, the weight of total variation of their coefficients and, for arms
// with a Noise, the variances from the data. See the package comment.
func Auto(ctx context.Context, p Problem, o Options) (*Result, error) {
	o = o.withDefaults()
	if err := p.check(); err != nil {
		return nil, err
	}
	c := newCore(p.Model, o.Workers)
	c.s.set(p.Streak, p.StreakVar)
	c.r.set(p.Reference, p.ReferenceVar)
	light, spikes := c.firstWeights(&p)
	if c.s.used+c.r.used == 0 {
		return nil, ErrMasked
	}
	res := &Result{Alpha: o.Alpha, Sigma: typicalSigma(&c.s, &c.r), Status: Converged}
	if res.Spikes = spikes; spikes > 0 {
		res.Notes = append(res.Notes, fmt.Sprintf("%d pixels stand out of their neighbours as no light can and were left out", spikes))
	}
	a := &auto{c: c, p: &p, res: res, o: o}
	if !light {
		res.Notes = append(res.Notes, "neither arm shows light above its read noise: the cube is dark")
		c.finish(c.sieve(rungs[0].spacing()), res, &p)
		return res, nil
	}
	c.finish(a.search(ctx), res, &p)
	return res, nil
}

// firstWeights sets variances from the smoothed frames, masks spikes and
// reports whether there is any light.
func (e *core) firstWeights(p *Problem) (light bool, spikes int) {
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

// auto is the state of the search for spacing and weight.
type auto struct {
	c     *core
	p     *Problem
	res   *Result
	o     Options
	at    *sieve // of the last trial
	tried []trial
}

// reweigh takes variances from the model's answer to the cube at hand.
func (a *auto) reweigh() {
	a.c.s.weigh(a.p.StreakNoise, a.c.s.now)
	a.c.r.weigh(a.p.ReferenceNoise, a.c.r.now)
	a.res.Sigma = typicalSigma(&a.c.s, &a.c.r)
}

// chi is χ² per usable pixel.
func (a *auto) chi() float64 {
	return (a.c.s.chi2 + a.c.r.chi2) / float64(a.c.s.used+a.c.r.used)
}

// target is the χ² per pixel that noise may reach.
func (a *auto) target() float64 {
	return 1 + chiSigmas*math.Sqrt(2/float64(a.c.s.used+a.c.r.used))
}
