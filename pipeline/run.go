package pipeline

import (
	"context"
	"fmt"
	"math"
	"strings"
	"time"

	"unsheard/pipeline/calib"
	"unsheard/pipeline/measure"
	"unsheard/pipeline/solve"
)

// Event is one stage of a job, for the log.
type Event struct {
	Time    time.Time `json:"time"`
	Stage   string    `json:"stage"`
	Seconds float64   `json:"seconds"`
	Detail  string    `json:"detail,omitempty"`
}

// Seconds is the time the whole job took.
func (r *Result) Seconds() float64 {
	var s float64
	for _, v := range r.Provenance.Stages {
		s += v
	}
	return s
}

// shot is a job on its way.
type shot struct {
	job  Job
	prov Provenance
	seen func(Event)

	bundle                *calib.Bundle
	station               *station
	streakFrame, refFrame *calib.Corrected
	streak, ref           *plane
	solved                *solve.Result
	result                *Result
}

// Run does one job. seen, if not nil, is told of every stage as it ends. It
// returns the context's error if that ends first.
func Run(ctx context.Context, job Job, seen func(Event)) (*Result, error) {
	if err := job.fill(); err != nil {
		return nil, err
	}
	if seen == nil {
		seen = func(Event) {}
	}
	s := &shot{job: job, prov: newProvenance(&job), seen: seen}
	for _, st := range []struct {
		name string
		do   func(context.Context) (string, error)
	}{{"bundle", s.load}, {"read", s.read}, {"reconstruct", s.reconstruct}, {"measure", s.measure}} {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		began := time.Now()
		detail, err := st.do(ctx)
		if err != nil {
			return nil, err
		}
		took := time.Since(began).Seconds()
		s.prov.Stages[st.name] = took
		seen(Event{Time: time.Now().UTC(), Stage: st.name, Seconds: took, Detail: detail})
	}
	s.result.Provenance = s.prov
	return s.result, nil
}

func (s *shot) load(context.Context) (string, error) {
	b, err := calib.Load(s.job.Bundle)
	if err != nil {
		return "", err
	}
	s.bundle = b
	s.prov.BundleID, s.prov.BundleFolder = b.ID, s.job.Bundle
	s.station, err = newStation(b, s.job.Coarse, true)
	return fmt.Sprintf("bundle %.12s", b.ID), err
}

func (s *shot) read(context.Context) (string, error) {
	raw, src, err := read(s.job.Streak, s.job.Limits)
	if err != nil {
		return "", err
	}
	s.prov.Streak = src
	turned, err := raw.Turn(s.bundle.Direction)
	if err != nil {
		return "", err
	}
	if s.streakFrame, err = correct(&s.bundle.Streak, "streak", s.job.Streak, turned); err != nil {
		return "", err
	}
	if raw, src, err = read(s.job.Reference, s.job.Limits); err != nil {
		return "", err
	}
	s.prov.Reference = src
	if s.refFrame, err = correct(&s.bundle.Reference, "reference", s.job.Reference, raw); err != nil {
		return "", err
	}
	s.cut()
	return fmt.Sprintf("%d + %d bytes", s.prov.Streak.Bytes, s.prov.Reference.Bytes), nil
}

// reconstruct solves with guard frames first. Where they took up light that the
// frames do not need them for, it solves again without: an event that begins
// sharply with the span must not lose light to the frames before it.
func (s *shot) reconstruct(ctx context.Context) (string, error) {
	if err := s.solve(ctx); err != nil {
		return "", err
	}
	if s.job.Pass == Quick {
		return fmt.Sprintf("%s after %d iterations", s.solved.Status, s.solved.Iterations), nil
	}
	if _, outside := s.station.cube(s.solved.X); outside > suspicious && s.station.lead > 0 {
		if err := s.withoutGuards(ctx); err != nil {
			return "", err
		}
	}
	r := s.solved
	return fmt.Sprintf("%s after %d iterations, lambda %.3g", r.Status, r.Iterations, r.Lambda), nil
}

// suspicious is the share of light in the guard frames from which on it is
// asked whether they are needed.
const suspicious = 0.005

// withoutGuards keeps the solution without guard frames if it explains the
// frames as well: to within three deviations of the reduced chi-square, √(2/N).
func (s *shot) withoutGuards(ctx context.Context) error {
	guarded := *s
	var err error
	if s.station, err = newStation(s.bundle, s.job.Coarse, false); err != nil {
		return err
	}
	s.cut()
	if err := s.solve(ctx); err != nil {
		return err
	}
	n := float64(s.solved.UsedStreak + s.solved.UsedReference)
	if s.solved.Chi2 > guarded.solved.Chi2+3*math.Sqrt(2/n) {
		s.station, s.streak, s.ref, s.solved = guarded.station, guarded.streak, guarded.ref, guarded.solved
	}
	return nil
}

func (s *shot) solve(ctx context.Context) error {
	p := solve.Problem{Model: s.station.model,
		Streak: s.streak.pe, StreakVar: s.streak.vari, Reference: s.ref.pe, ReferenceVar: s.ref.vari,
		StreakNoise:    &solve.Noise{Read: s.streak.readVar, Gain: s.streak.slope, Floor: s.bundle.Streak.Floor},
		ReferenceNoise: &solve.Noise{Read: s.ref.readVar, Gain: s.ref.slope, Floor: s.bundle.Reference.Floor}}
	o := solve.Options{Workers: s.job.Workers}
	if s.job.Pass == Quick {
		o.Spacing, o.MaxIter = quickSpacing, quickIter
	}
	res, err := solve.Auto(ctx, p, o)
	if err != nil {
		return fmt.Errorf("shot %s: %w", s.job.Shot, err)
	}
	if res.Status == solve.Cancelled {
		return context.Cause(ctx)
	}
	s.solved = res
	return nil
}

// A quick look searches for nothing: its splines have knots a little wider than
// its pixels, and it stops early.
var quickSpacing = [3]float64{1, 1.5, 1.5}

const quickIter = 120

// cut cuts the planes of the model out of the corrected frames.
func (s *shot) cut() {
	s.streak = s.station.streak(s.streakFrame)
	s.ref = s.station.reference(s.refFrame)
}

func (s *shot) measure(context.Context) (string, error) {
	c, outside := s.station.cube(s.solved.X)
	r := s.solved
	method := "non-negative cubic B-splines, total variation; spacing and weight by hold-out; preconditioned primal-dual"
	if r.Spacing == ([3]float64{}) {
		method = "non-negative voxels, total variation; weight by discrepancy; preconditioned primal-dual"
	}
	s.prov.Solver = Solver{Method: method,
		Status: string(r.Status), Iterations: r.Iterations, Lambda: r.Lambda, Alpha: r.Alpha, Spacing: r.Spacing,
		Misfit: r.Chi2Streak, MisfitOther: r.Chi2Reference, Note: strings.Join(r.Notes, "; "),
		GuardFrames: s.station.lead, OutsideShare: outside}
	light, sigma := s.station.expected(s.refFrame)
	in := measure.Input{Cube: c,
		Streak:    s.streak.arm("streak", r.StreakModel, r.Chi2Streak),
		Reference: s.ref.arm("reference", r.ReferenceModel, r.Chi2Reference),
		Expected:  light, ExpectedSigma: sigma, Transmission: s.transmission(),
		ScaleSigma: s.bundle.Scale.Sigma, OutsideSpan: outside,
		Fit:   measure.Fit{Converged: r.Status == solve.Converged, Iterations: r.Iterations, Lambda: r.Lambda, Alpha: r.Alpha},
		Quick: s.job.Pass == Quick, Extra: s.job.Extra}
	rep, err := measure.Measure(in)
	if err != nil {
		return "", err
	}
	rep.Notes = append(rep.Notes, r.Notes...)
	s.result = &Result{Cube: c, Report: rep, Planes: []Plane{
		s.streak.shown("streak", r.StreakModel, r.StreakVar),
		s.ref.shown("reference", r.ReferenceModel, r.ReferenceVar)}}
	return rep.Verdict.Grade, nil
}

func (p *plane) shown(arm string, model, vari []float32) Plane {
	return Plane{Arm: arm, X: p.x, Y: p.y, W: p.w, H: p.h, Measured: p.pe, Model: model, Variance: vari}
}

// transmission is the mean of the code.
func (s *shot) transmission() float64 {
	var sum float64
	for _, c := range s.bundle.Code {
		sum += float64(c)
	}
	return sum / float64(len(s.bundle.Code))
}
