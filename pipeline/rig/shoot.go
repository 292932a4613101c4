package rig

import (
	"math/rand/v2"
	"slices"
)

// Fault is something that goes wrong with a shot. The optical faults are part
// of the light; the others happen to the files and are made by WriteCampaign.
type Fault string

// The faults.
const (
	None      Fault = ""
	Saturated Fault = "saturated" // light so strong that the streak sensor fills up
	Blurred   Fault = "blurred"   // both arms out of focus
	Shifted   Fault = "shifted"   // the code was knocked by 1.5 and 0.7 px
	Dim       Fault = "dim"       // a fiftieth of the light
	Outside   Fault = "outside"   // more light while the sweep is beyond the window's span

	NoReference Fault = "no-reference" // the reference frame never comes
	NoStreak    Fault = "no-streak"    // the streak frame never comes
	Truncated   Fault = "truncated"    // the streak file ends early
	Shape       Fault = "shape"        // the streak frame has the wrong size
	Text        Fault = "text"         // the streak file holds text
	Duplicate   Fault = "duplicate"    // the streak frame comes twice, under two names
	Late        Fault = "late"         // the reference frame comes much later
	Clock       Fault = "clock"        // the reference clock jumped
)

// Faults lists all faults.
func Faults() []Fault {
	return []Fault{Saturated, Blurred, Shifted, Dim, Outside,
		NoReference, NoStreak, Truncated, Shape, Text, Duplicate, Late, Clock}
}

// Shoot films the scene once. The frames come in the raw orientation of their
// sensors; seed fixes the noise.
func (s *Station) Shoot(scene Scene, seed uint64) (streak, reference Image, truth Truth) {
	return s.ShootFault(scene, seed, None)
}

// ShootFault films the scene with an optical fault; the faults of files change
// nothing here.
func (s *Station) ShootFault(scene Scene, seed uint64, f Fault) (streak, reference Image, truth Truth) {
	e, r, truth := s.Expected(scene, f)
	rng := rand.New(rand.NewPCG(seed, streamShot))
	streak = s.streak.capture(e, rng).raw(s.o.Direction)
	reference = s.reference.capture(r, rng)
	return streak, reference, truth
}

// beyond is how far outside the span the light of fault Outside falls, px.
const beyond = 8

// Expected returns the light that falls on both sensors, photoelectrons per
// pixel at a flat of 1, without dark signal and noise; the streak frame in
// the turned frame, row-major.
func (s *Station) Expected(scene Scene, f Fault) (streak, reference []float64, truth Truth) {
	g, code, widen := s.gate(), s.code, 1.0
	switch f {
	case Dim:
		scene = scene.Scaled(1.0 / 50)
	case Blurred:
		widen = 3
	case Shifted:
		code = s.transmission(1.5, 0.7)
	case Outside:
		g.to += beyond
	}
	truth = s.Truth(scene)
	if f == Outside {
		scene = s.afterglow(scene)
	}
	swept, still := s.expose(scene, g, code)
	streak, reference = s.streak.blank(), s.reference.blank()
	s.project(streak, swept, 0, widen)
	s.splat(reference, still, s.o.Ratio, widen)
	if f == Saturated {
		k := max(1, 2.5*s.streak.full()/max(slices.Max(streak), 1))
		truth = s.Truth(scene.Scaled(k))
		for i := range streak {
			streak[i] *= k
		}
		for i := range reference {
			reference[i] *= k
		}
	}
	return streak, reference, truth
}

// afterglow adds a late spot, as bright as the scene's brightest voxel, that
// shines while the sweep is 2 to 6 pixels beyond the gate.
func (s *Station) afterglow(c Scene) Scene {
	g := s.gate()
	from, to := s.sweep.inverse(g.to+2), s.sweep.inverse(g.to+6)
	level := s.brightest(c) * s.sweep.rate(from) / c.gain
	w, h := float64(s.o.W), float64(s.o.H)
	return c.with(func(t float64) (func(x, y float64) float64, box) {
		if t < from || t > to {
			return nil, box{}
		}
		return blob(0.4*w, 0.6*h, 0.1*w, 0.1*h, level)
	})
}
