package rig

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"golang.org/x/image/tiff"
)

// folders returns a campaign with three fresh folders.
func folders(t *testing.T) Campaign {
	dir := t.TempDir()
	return Campaign{Streak: filepath.Join(dir, "s"), Reference: filepath.Join(dir, "r"), Truth: filepath.Join(dir, "truth"),
		Start: time.Date(2026, 3, 4, 9, 0, 0, 0, time.UTC), Seed: 5}
}

// list returns the names in a folder, sorted.
func list(t *testing.T, dir string) []string {
	t.Helper()
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, e := range entries {
		names = append(names, e.Name())
	}
	return names
}

func TestCampaign(t *testing.T) {
	s := station(t, small)
	c := folders(t)
	c.Shots, c.Cubes, c.Jitter = 3, true, -1
	var records []Record
	if err := s.WriteCampaign(t.Context(), c, func(r Record) { records = append(records, r) }); err != nil {
		t.Fatal(err)
	}
	if got, want := list(t, c.Streak), []string{"S_20260304T090000.000000.tif", "S_20260304T090001.000000.tif", "S_20260304T090002.000000.tif"}; !slices.Equal(got, want) {
		t.Errorf("streak folder %v, want %v", got, want)
	}
	if got, want := list(t, c.Reference), []string{"R_20260304T090000.000000.tif", "R_20260304T090001.000000.tif", "R_20260304T090002.000000.tif"}; !slices.Equal(got, want) {
		t.Errorf("reference folder %v, want %v", got, want)
	}
	if got, want := list(t, c.Truth), []string{"code.npy", "shot_000001.json", "shot_000001.npy", "shot_000002.json", "shot_000002.npy", "shot_000003.json", "shot_000003.npy", "station.json"}; !slices.Equal(got, want) {
		t.Errorf("truth folder %v, want %v", got, want)
	}
	// A record makes its shot again, bit by bit.
	b, err := os.ReadFile(filepath.Join(c.Truth, "shot_000002.json"))
	if err != nil {
		t.Fatal(err)
	}
	var r Record
	if err := json.Unmarshal(b, &r); err != nil {
		t.Fatal(err)
	}
	if r.Scene != Scenes()[1] || r.Seed != records[1].Seed || len(r.Edges) != 9 || r.Summary.Total <= 0 {
		t.Errorf("record %+v", r)
	}
	im, _, truth := s.Shoot(scene(t, s, r.Scene, r.Seed), r.Seed)
	im.Taken = r.Time.UTC()
	got, err := os.ReadFile(filepath.Join(c.Streak, r.Streak))
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(got, im.tiff()) {
		t.Error("the record's seed makes another streak frame")
	}
	cube, err := os.ReadFile(filepath.Join(c.Truth, "shot_000002.npy"))
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(cube, npy(truth.Cube(r.Edges), 8, 24, 20)) {
		t.Error("the record's cube is another one")
	}
}

// TestFaults writes one shot with each fault and looks at the folders.
func TestFaults(t *testing.T) {
	s := station(t, small)
	for _, f := range Faults() {
		t.Run(string(f), func(t *testing.T) {
			c := folders(t)
			c.Shots, c.FaultRate, c.Faults, c.Jitter, c.Scenes = 1, 1, []Fault{f}, -1, []string{"fork"}
			c.Offset = 1500 * time.Microsecond
			var rec Record
			if err := s.WriteCampaign(t.Context(), c, func(r Record) { rec = r }); err != nil {
				t.Fatal(err)
			}
			if rec.Fault != f {
				t.Errorf("record says fault %q", rec.Fault)
			}
			wantS, wantR := []string{"S_20260304T090000.000000.tif"}, []string{"R_20260304T090000.001500.tif"}
			switch f {
			case NoStreak:
				wantS = nil
			case NoReference:
				wantR = nil
			case Duplicate:
				wantS = append(wantS, "S_20260304T090000.002000.tif")
			case Clock:
				wantR = []string{"R_20260304T090003.001500.tif"}
			}
			if got := list(t, c.Streak); !slices.Equal(got, wantS) {
				t.Errorf("streak folder %v, want %v", got, wantS)
			}
			if got := list(t, c.Reference); !slices.Equal(got, wantR) {
				t.Errorf("reference folder %v, want %v", got, wantR)
			}
			if f != NoStreak {
				checkSpoiled(t, s, f, filepath.Join(c.Streak, wantS[0]))
			}
		})
	}
}

// checkSpoiled decodes a streak file and compares what comes of it.
func checkSpoiled(t *testing.T, s *Station, f Fault, path string) {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	im, err := tiff.Decode(bytes.NewReader(b))
	switch f {
	case Truncated, Text:
		if err == nil {
			t.Error("the file can still be read")
		}
		return
	}
	if err != nil {
		t.Fatal(err)
	}
	h := s.streak.h
	if f == Shape {
		h -= 3
	}
	if im.Bounds().Dx() != s.streak.w || im.Bounds().Dy() != h {
		t.Errorf("frame %v, want %d×%d", im.Bounds(), s.streak.w, h)
	}
}

// TestOpticalFaults: what each fault does to the expected light.
func TestOpticalFaults(t *testing.T) {
	s := station(t, nil)
	c := scene(t, s, "fork", 2)
	a, b, truth := s.Expected(c, None)
	look := func(f Fault) ([]float64, []float64, Truth) { return s.Expected(c, f) }

	x, y, tr := look(Dim)
	near(t, "dim streak", sum(x)/sum(a), 0.02, 1e-9)
	near(t, "dim reference", sum(y)/sum(b), 0.02, 1e-9)
	near(t, "dim truth", tr.Rate(5)/truth.Rate(5), 0.02, 1e-9)

	x, _, tr = look(Saturated)
	if top := slices.Max(x); top < 2*s.streak.full() {
		t.Errorf("saturated: brightest pixel %g pe, the sensor holds %g", top, s.streak.full())
	}
	near(t, "saturated truth", tr.Rate(5)/truth.Rate(5), sum(x)/sum(a), 1e-9*sum(x)/sum(a))

	x, y, _ = look(Blurred)
	near(t, "blurred keeps the light", sum(x), sum(a), 1e-3*sum(a))
	_, _, v0, _ := moments(b, s.reference.w)
	_, _, v1, _ := moments(y, s.reference.w)
	near(t, "blurred variance", v1-v0, 8*0.8*0.8, 0.05) // (3σ)² - σ²

	x, y, _ = look(Shifted)
	if !slices.Equal(y, b) {
		t.Error("a shifted code changes the reference frame")
	}
	var diff float64
	for i := range x {
		diff += max(x[i]-a[i], a[i]-x[i])
	}
	if diff < 0.2*sum(a) {
		t.Errorf("a shifted code moves only %.1f %% of the light", 100*diff/sum(a))
	}

	x, y, tr = look(Outside)
	near(t, "the truth knows nothing of light outside", tr.Rate(5), truth.Rate(5), 1e-9*truth.Rate(5))
	if sum(y) < 1.02*sum(b) || sum(x) < 1.02*sum(a) {
		t.Error("no light was added outside the span")
	}
	w := s.streak.w
	first := (s.o.WindowY + s.o.H + s.o.T + 3) * w // below all light of the span
	if late := sum(x[first:]); late > 0.01*sum(x) || sum(a[first:]) > 1e-6*sum(a) {
		t.Errorf("light of the span ends late: %g and %g", late, sum(a[first:]))
	}
}

func TestCampaignValidate(t *testing.T) {
	s := station(t, small)
	for _, c := range []struct {
		name   string
		change func(*Campaign)
		want   string
	}{
		{"folder", func(c *Campaign) { c.Streak = "" }, "both drop folders"},
		{"truth", func(c *Campaign) { c.Truth = c.Reference }, "is a drop folder"},
		{"rate", func(c *Campaign) { c.FaultRate = 1.5 }, "fault rate 1.5"},
		{"name", func(c *Campaign) { c.StreakName = "%Q" }, "field %Q"},
		{"fault", func(c *Campaign) { c.Faults = []Fault{"flood"} }, `no fault "flood"`},
		{"scene", func(c *Campaign) { c.Scenes, c.Shots = []string{"basin", "volcano"}, 1 }, `no scene "volcano"`},
	} {
		t.Run(c.name, func(t *testing.T) {
			k := folders(t)
			c.change(&k)
			err := s.WriteCampaign(t.Context(), k, nil)
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got %v, want an error with %q", err, c.want)
			}
			if _, err := os.Stat(k.Truth); err == nil && k.Truth != k.Reference {
				t.Error("a refused campaign made folders")
			}
		})
	}
}

// TestPace runs on a false clock: shots come when they are due, a late
// partner between later shots, and the end of the context stops the rest.
func TestPace(t *testing.T) {
	s := station(t, small)
	c := folders(t)
	c.Start, c.Every, c.Shots = time.Time{}, 2*time.Second, 4
	c.FaultRate, c.Faults, c.Truth = 1, []Fault{Late}, ""
	synctest.Test(t, func(t *testing.T) {
		begun := time.Now()
		var out []time.Duration
		var partners []int
		err := s.WriteCampaign(t.Context(), c, func(Record) {
			out = append(out, time.Since(begun))
			partners = append(partners, len(list(t, c.Reference)))
		})
		if err != nil {
			t.Fatal(err)
		}
		if want := []time.Duration{0, 2 * time.Second, 4 * time.Second, 6 * time.Second}; !slices.Equal(out, want) {
			t.Errorf("shots at %v, want %v", out, want)
		}
		if want := []int{0, 0, 1, 2}; !slices.Equal(partners, want) { // each 3 s after its shot
			t.Errorf("late partners there: %v, want %v", partners, want)
		}
		if got := time.Since(begun); got != 9*time.Second {
			t.Errorf("the last partner came after %v, want 9s", got)
		}
		if n := len(list(t, c.Reference)); n != 4 {
			t.Errorf("%d reference frames, want 4", n)
		}
	})
	c = folders(t)
	c.Every = 2 * time.Second // without end
	synctest.Test(t, func(t *testing.T) {
		ctx, cancel := context.WithTimeout(t.Context(), 5*time.Second)
		defer cancel()
		if err := s.WriteCampaign(ctx, c, nil); !errors.Is(err, context.DeadlineExceeded) {
			t.Errorf("got %v, want the context's error", err)
		}
		if n := len(list(t, c.Streak)); n != 3 {
			t.Errorf("%d shots in 5 s, want 3", n)
		}
	})
}

// TestGrow: a slow camera's file grows under its final name.
func TestGrow(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.tif")
	data := ramp(30, 20).tiff()
	synctest.Test(t, func(t *testing.T) {
		done := make(chan error, 1)
		go func() { done <- grow(t.Context(), path, data, 8*time.Second) }()
		time.Sleep(3500 * time.Millisecond)
		synctest.Wait()
		b, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		if want := len(data) * 4 / 8; len(b) != want {
			t.Errorf("after 3.5 of 8 s the file has %d bytes, want %d", len(b), want)
		}
		if err := <-done; err != nil {
			t.Fatal(err)
		}
	})
	b, err := os.ReadFile(path)
	if err != nil || !bytes.Equal(b, data) {
		t.Errorf("the grown file differs (%v)", err)
	}
}
