package rig

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"slices"
	"strings"
	"time"
)

// Campaign says how a simulated campaign is written to drop folders.
type Campaign struct {
	// Streak and Reference are the drop folders, Truth the folder for what
	// really happened; it must not be one of them. "" writes no truth.
	// Missing folders are made.
	Streak, Reference, Truth string

	// StreakName and ReferenceName are file name patterns as Name fills
	// them. Default S_%Y%m%dT%H%M%S.%f.tif and R_%Y%m%dT%H%M%S.%f.tif.
	StreakName, ReferenceName string

	// Shots is the number of shots; 0 goes on until the context ends.
	Shots int

	// Every is the time between shots. 0 writes as fast as possible and
	// puts Step (default 1 s) between the stamps instead.
	Every, Step time.Duration

	// Start is the time of the first shot; zero: now.
	Start time.Time

	// First is the number of the first shot, default 1.
	First int64

	// Scenes are the scenes shot in turn; empty: all of them.
	Scenes []string

	// FaultRate is the part of shots with a fault, 0 to 1, Faults those to
	// choose from; empty: all of them.
	FaultRate float64
	Faults    []Fault

	// Seed fixes scenes, noise, faults and stamps.
	Seed uint64

	// Slow lets a file grow under its final name for that long; 0 writes a
	// temporary name and renames it.
	Slow time.Duration

	// Offset is how much the reference computer's clock is ahead, Jitter
	// the largest random difference of the two stamps (default 1 ms; below
	// 0: none).
	Offset, Jitter time.Duration

	// LateBy is the delay of a late partner, default 3 s; without pauses
	// between shots it comes after the last shot. Jump is the error of the
	// stamp under fault Clock, default 3 s.
	LateBy, Jump time.Duration

	// Cubes also writes the true cube of every shot as a NumPy file.
	Cubes bool
}

func (c Campaign) withDefaults() Campaign {
	set := func(p *string, v string) {
		if *p == "" {
			*p = v
		}
	}
	set(&c.StreakName, "S_%Y%m%dT%H%M%S.%f.tif")
	set(&c.ReferenceName, "R_%Y%m%dT%H%M%S.%f.tif")
	for p, v := range map[*time.Duration]time.Duration{&c.Step: time.Second, &c.Jitter: time.Millisecond,
		&c.LateBy: 3 * time.Second, &c.Jump: 3 * time.Second} {
		if *p == 0 {
			*p = v
		}
	}
	if c.First == 0 {
		c.First = 1
	}
	if len(c.Scenes) == 0 {
		c.Scenes = Scenes()
	}
	if len(c.Faults) == 0 {
		c.Faults = Faults()
	}
	return c
}

// Validate lists every fault of the campaign.
func (c Campaign) Validate() error {
	var bad []error
	if c.Streak == "" || c.Reference == "" {
		bad = append(bad, errors.New("both drop folders must be named"))
	}
	if c.Truth != "" && (c.Truth == c.Streak || c.Truth == c.Reference) {
		bad = append(bad, fmt.Errorf("truth folder %q is a drop folder", c.Truth))
	}
	if !(c.FaultRate >= 0 && c.FaultRate <= 1) {
		bad = append(bad, fmt.Errorf("fault rate %g: want 0 to 1", c.FaultRate))
	}
	if c.Shots < 0 || c.Every < 0 || c.Slow < 0 {
		bad = append(bad, fmt.Errorf("shots %d, every %v, slow %v: must not be negative", c.Shots, c.Every, c.Slow))
	}
	d := c.withDefaults()
	for _, n := range []string{d.StreakName, d.ReferenceName} {
		if _, err := Name(n, time.Time{}, 0); err != nil {
			bad = append(bad, err)
		}
	}
	for _, n := range c.Scenes {
		if !slices.Contains(Scenes(), n) {
			bad = append(bad, fmt.Errorf("no scene %q: there are %s", n, strings.Join(Scenes(), ", ")))
		}
	}
	for _, f := range c.Faults {
		if !slices.Contains(Faults(), f) {
			bad = append(bad, fmt.Errorf("no fault %q: there are %v", f, Faults()))
		}
	}
	if err := errors.Join(bad...); err != nil {
		return fmt.Errorf("simulated campaign: %w", err)
	}
	return nil
}

// WriteCampaign shoots a campaign into the drop folders as two cameras would,
// until all shots are written or the context ends, and returns the context's
// error in that case. seen, if not nil, is called after each shot's files (but
// for a late partner) are in place.
func (s *Station) WriteCampaign(ctx context.Context, c Campaign, seen func(Record)) error {
	if err := c.Validate(); err != nil {
		return err
	}
	r := &run{s: s, c: c.withDefaults()}
	if err := r.prepare(); err != nil {
		return fmt.Errorf("simulated campaign: %w", err)
	}
	for i := int64(0); c.Shots == 0 || i < int64(c.Shots); i++ {
		if err := r.shot(ctx, i, seen); err != nil {
			return fmt.Errorf("simulated campaign, shot %d: %w", r.c.First+i, err)
		}
	}
	return r.finish(ctx)
}

// run is one campaign being written.
type run struct {
	s     *Station
	c     Campaign
	begun time.Time // our clock at the first shot
	late  []delivery
}

// delivery is a file that is still to come.
type delivery struct {
	due    time.Time
	folder string
	name   string
	data   []byte
}

func (r *run) prepare() error {
	for _, d := range []string{r.c.Streak, r.c.Reference, r.c.Truth} {
		if d == "" {
			continue
		}
		if err := os.MkdirAll(d, 0o755); err != nil {
			return err
		}
	}
	r.begun = time.Now()
	if r.c.Start.IsZero() {
		r.c.Start = r.begun
	}
	if r.c.Truth == "" {
		return nil
	}
	return r.s.writeKnown(r.c.Truth)
}

// shot makes shot i and delivers its files when its time has come.
func (r *run) shot(ctx context.Context, i int64, seen func(Record)) error {
	rng := rand.New(rand.NewPCG(r.c.Seed+uint64(i)*0x9e3779b97f4a7c15, streamCampaign))
	rec := Record{Shot: r.c.First + i, Scene: r.c.Scenes[int(i)%len(r.c.Scenes)], Seed: rng.Uint64()}
	if rng.Float64() < r.c.FaultRate {
		rec.Fault = r.c.Faults[rng.IntN(len(r.c.Faults))]
	}
	pause := r.c.Every
	if pause == 0 {
		pause = r.c.Step
	}
	rec.Time = r.c.Start.Add(time.Duration(i) * pause)
	jitter := time.Duration(float64(r.c.Jitter) * (2*rng.Float64() - 1))
	if r.c.Jitter < 0 {
		jitter = 0
	}
	files, truth, err := r.film(&rec, jitter)
	if err != nil {
		return err
	}
	if err := r.wait(ctx, r.begun.Add(time.Duration(i)*r.c.Every)); err != nil {
		return err
	}
	if r.c.Truth != "" {
		if err := r.s.writeRecord(r.c.Truth, rec, truth, r.c.Cubes); err != nil {
			return err
		}
	}
	for _, f := range files {
		if !f.due.IsZero() {
			f.due = time.Now().Add(r.c.LateBy)
			r.late = append(r.late, f)
			continue
		}
		if err := r.deliver(ctx, f); err != nil {
			return err
		}
	}
	if seen != nil {
		seen(rec)
	}
	return nil
}

// film shoots the scene of a record and makes its files.
func (r *run) film(rec *Record, jitter time.Duration) ([]delivery, Truth, error) {
	scene, err := r.s.Scene(rec.Scene, rec.Seed)
	if err != nil {
		return nil, Truth{}, err
	}
	a, b, truth := r.s.ShootFault(scene, rec.Seed, rec.Fault)
	rec.Facts, rec.Edges, rec.Summary = scene.Facts, r.s.Edges(), truth.Summary()
	a.Taken, b.Taken = rec.Time.UTC(), rec.Time.Add(r.c.Offset+jitter).UTC()
	if rec.Fault == Clock {
		b.Taken = b.Taken.Add(r.c.Jump)
	}
	if rec.Streak, err = Name(r.c.StreakName, a.Taken, rec.Shot); err != nil {
		return nil, truth, err
	}
	if rec.Reference, err = Name(r.c.ReferenceName, b.Taken, rec.Shot); err != nil {
		return nil, truth, err
	}
	streak := delivery{folder: r.c.Streak, name: rec.Streak, data: spoil(a, rec.Fault)}
	reference := delivery{folder: r.c.Reference, name: rec.Reference, data: b.tiff()}
	files := []delivery{streak, reference}
	switch rec.Fault {
	case NoReference:
		files, rec.Reference = files[:1], ""
	case NoStreak:
		files, rec.Streak = files[1:], ""
	case Late:
		files[1].due = rec.Time // set anew when the streak frame is out
	case Duplicate:
		again := streak
		if again.name, err = Name(r.c.StreakName, a.Taken.Add(2*time.Millisecond), rec.Shot); err != nil {
			return nil, truth, err
		}
		if again.name == streak.name {
			again.name = "again_" + again.name // the pattern carries no time
		}
		rec.Again = again.name
		files = append(files, again)
	}
	return files, truth, nil
}

// spoil encodes the streak frame with the faults of files.
func spoil(im Image, f Fault) []byte {
	switch f {
	case Truncated:
		b := im.tiff()
		return b[:len(b)/2]
	case Shape:
		im.H -= 3
		im.Pix = im.Pix[:im.W*im.H]
	case Text:
		return []byte("Acquisition aborted: trigger not ready\r\n")
	}
	return im.tiff()
}
