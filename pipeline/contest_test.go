package pipeline_test

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"testing"
	"time"

	"unsheard/pipeline"
	"unsheard/pipeline/calib"
	"unsheard/pipeline/frame"
	"unsheard/pipeline/rig"
)

// bench is a calibrated simulated station.
type bench struct {
	station *rig.Station
	dir     string // of everything that is written
	bundle  string
}

func newBench(t *testing.T, o rig.Options) *bench {
	t.Helper()
	st, err := rig.New(o)
	if err != nil {
		t.Fatal(err)
	}
	b := &bench{station: st, dir: t.TempDir()}
	b.bundle = filepath.Join(b.dir, "bundle")
	series := filepath.Join(b.dir, "series")
	if err := st.WriteSeries(series); err != nil {
		t.Fatal(err)
	}
	s, err := calib.ReadSeries(filepath.Join(series, "series.toml"))
	if err != nil {
		t.Fatal(err)
	}
	made, _, err := calib.Calibrate(context.Background(), s, calib.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if err := made.Save(b.bundle); err != nil {
		t.Fatal(err)
	}
	return b
}

// contest is one shot as testdata/peers.py reads it: names of .npy files in the
// job's folder, and true numbers of the station.
type contest struct {
	ID    string  `json:"id"` // hash of all that the peers see
	Scene string  `json:"scene"`
	Light float64 `json:"light"`

	Truth         string     `json:"truth"` // on the frames of whole displacements
	Streak        string     `json:"streak"`
	StreakGood    string     `json:"streak_good"`
	Reference     string     `json:"reference"`
	ReferenceGood string     `json:"reference_good"`
	Code          string     `json:"code"`
	Blur          [2]float64 `json:"blur"` // y, x, px
	Homography    [9]float64 `json:"homography"`
	Ratio         float64    `json:"ratio"`

	Ours      string  `json:"ours"`
	OursTruth string  `json:"ours_truth"` // on our cube's own frames
	seconds   float64 // of ours
	psnr      float64 // of ours, by Go
}

// shoot films a scene, reconstructs it from the files and dumps everything.
func (b *bench) shoot(t *testing.T, scene string, light float64, seed uint64) contest {
	t.Helper()
	o := b.station.Options()
	sc, err := b.station.Scene(scene, seed)
	if err != nil {
		t.Fatal(err)
	}
	streak, reference, truth := b.station.Shoot(sc.Scaled(light/o.Peak), seed+1000)
	c := contest{Scene: scene, Light: light, Blur: [2]float64{o.Streak.SigmaY, o.Streak.SigmaX},
		Homography: b.station.Registration(), Ratio: o.Ratio}
	name := fmt.Sprintf("%s_%g", scene, light)
	npy := func(what string, data []float32, shape ...int) string {
		return b.dump(t, name+"_"+what+".npy", data, shape...)
	}

	files := [2]string{filepath.Join(b.dir, name+"_streak.tif"), filepath.Join(b.dir, name+"_reference.tif")}
	for i, im := range []rig.Image{streak, reference} {
		if err := b.station.Save(im, files[i]); err != nil {
			t.Fatal(err)
		}
	}
	begin := time.Now()
	r, err := pipeline.Run(context.Background(), pipeline.Job{Shot: name, Streak: files[0], Reference: files[1],
		Bundle: b.bundle, Workers: 2}, nil)
	if err != nil {
		t.Fatal(err)
	}
	c.seconds = time.Since(begin).Seconds()
	want := truth.Cube(r.Cube.Edges)
	c.psnr = psnr(r.Cube.Data, want)
	c.Ours = npy("ours", r.Cube.Data, r.Cube.T, r.Cube.H, r.Cube.W)
	c.OursTruth = npy("ours_truth", want, r.Cube.T, r.Cube.H, r.Cube.W)

	c.Truth = npy("truth", truth.Cube(b.station.Edges()), o.T, o.H, o.W)
	rows := o.H + o.T - 1
	pe, good := physical(b.station.Streak(), streak)
	w := b.station.Streak().W
	c.Streak = npy("streak", part(pe, w, o.WindowX, o.WindowY, o.W, rows), rows, o.W)
	c.StreakGood = npy("streak_good", part(good, w, o.WindowX, o.WindowY, o.W, rows), rows, o.W)
	pe, good = physical(b.station.Reference(), reference)
	c.Reference = npy("reference", pe, reference.H, reference.W)
	c.ReferenceGood = npy("reference_good", good, reference.H, reference.W)
	c.Code = b.dump(t, "code.npy", b.station.Code(), o.H, o.W)
	c.ID = b.identity(t, c)
	return c
}

func (b *bench) dump(t *testing.T, name string, data []float32, shape ...int) string {
	t.Helper()
	var buf bytes.Buffer
	if err := frame.WriteNPY(&buf, shape, data); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(b.dir, name), buf.Bytes(), 0o644); err != nil {
		t.Fatal(err)
	}
	return name
}

// identity is a hash of what the peers see and of the peers themselves.
func (b *bench) identity(t *testing.T, c contest) string {
	t.Helper()
	h := sha256.New()
	for _, path := range []string{peersScript, filepath.Join(b.dir, c.Truth), filepath.Join(b.dir, c.Streak), filepath.Join(b.dir, c.Reference)} {
		data, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		h.Write(data)
	}
	return hex.EncodeToString(h.Sum(nil)[:8])
}

// physical turns codes into photoelectrons with the camera's true numbers;
// good is 0 at hot and dead pixels. The station's sweep must go down, so that
// raw and turned frame are the same.
func physical(c rig.Camera, im rig.Image) (pe, good []float32) {
	pe, good = make([]float32, len(im.Pix)), make([]float32, len(im.Pix))
	for i, v := range im.Pix {
		if c.Hot[i] || c.Dead[i] {
			continue
		}
		pe[i] = float32(((float64(v)-c.Offset[i])*c.Gain - c.Dark) / c.Flat[i])
		good[i] = 1
	}
	return pe, good
}

// part cuts a rectangle of w×h pixels at (x, y) out of an image of width stride.
func part(pix []float32, stride, x, y, w, h int) []float32 {
	out := make([]float32, 0, w*h)
	for r := range h {
		at := (y+r)*stride + x
		out = append(out, pix[at:at+w]...)
	}
	return out
}

// psnr is the peak signal to noise ratio in dB over a cube, with the peak of
// the truth.
func psnr(got, truth []float32) float64 {
	var sum, top float64
	for i, v := range truth {
		d := float64(got[i]) - float64(v)
		sum += d * d
		top = max(top, float64(v))
	}
	return 10 * math.Log10(top*top*float64(len(truth))/sum)
}
