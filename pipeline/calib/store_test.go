package calib

import (
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"
)

// small is a valid bundle that was never measured.
func small() *Bundle {
	arm := func(w, h int) Arm {
		a := Arm{W: w, H: h, Dark: make([]float32, w*h), Flat: ones(w * h), Bad: make([]bool, w*h), DarkFrames: 4,
			Gain: Quantity{2, 0.01, "pe/ADU", "by hand"}, ReadNoise: Quantity{3, 0.1, "pe", ""}, Saturation: Quantity{4000, 0, "ADU", ""},
			Linearity: Quantity{0, -1, "1", "not found"},
			BlurX:     Quantity{0.7, 0.01, "px", ""}, BlurY: Quantity{0.8, 0.01, "px", ""}, Floor: 0.01}
		a.OpticalX, a.OpticalY = a.BlurX, a.BlurY
		for i := range a.Dark {
			a.Dark[i] = 100 + float32(i%7)
		}
		a.Bad[3] = true
		return a
	}
	b := &Bundle{Station: "bay-a 'é'", Direction: "left", Created: time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC),
		Streak: arm(12, 30), Reference: arm(17, 15), Window: Window{1, 2, 9, 8}, Code: make([]float32, 72),
		Registration: [9]float64{1.1, 0.1, 2, -0.1, 1.1, 3, 1e-4, 0, 1}, RegistrationKind: "homography", RegistrationResidual: 0.01,
		Ratio: Quantity{0.8, 0.001, "1", ""}, First: 0, Frames: 10, Scale: Quantity{12.5, 0, "µm/px", "given"},
		Sweep: Sweep{Coef: []float64{5, 5}, Covariance: []float64{1e-4, 0, 0, 1e-4}, First: 0, Last: 8, Origin: "taken as 0 at 0 ps",
			Points: []SweepPoint{{0, 0, 0.01}, {8, 10, 0.01}}},
		Warnings: []string{"one", "two"}}
	for i := range b.Code {
		b.Code[i] = float32(i%2) * 0.9
	}
	return b
}

func TestSaveLoad(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "deep", "b1")
	b := small()
	b.report = []byte("<html>")
	if err := b.Save(dir); err != nil {
		t.Fatal(err)
	}
	got, err := Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	b.report = nil
	if !reflect.DeepEqual(got, b) {
		t.Errorf("loaded\n%+v\nsaved\n%+v", got, b)
	}
	if len(b.ID) != 64 {
		t.Errorf("identity %q is no SHA-256", b.ID)
	}
	if err := small().Save(dir); err == nil || !strings.Contains(err.Error(), "never changed") {
		t.Errorf("saving over a bundle: %v", err)
	}
	left, err := os.ReadDir(filepath.Dir(dir))
	if err != nil || len(left) != 1 {
		t.Errorf("the folder holds %v (%v), want the bundle alone", left, err)
	}
	again := small()
	if err := again.Save(filepath.Join(t.TempDir(), "b2")); err != nil || again.ID != b.ID {
		t.Errorf("the same contents got identities %s and %s (%v)", b.ID, again.ID, err)
	}
}

// TestLoadDamaged changes single files of a bundle.
func TestLoadDamaged(t *testing.T) {
	for _, c := range []struct {
		name, file, old, new, want string
	}{
		{"a number", tomlName, "frames = 10", "frames = 11", "changed or damaged"},
		{"an array", "code.npy", "", "", "changed or damaged"},
		{"unknown key", tomlName, "frames = 10", "frames = 10\nframe = 1", "unknown key"},
		{"later format", tomlName, "format = 1", "format = 9", "calibrate again"},
		{"no identity", tomlName, "id = ", "idd = ", "unknown key"},
		{"not TOML", tomlName, "[window]", "[window", "bundle.toml"},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := filepath.Join(t.TempDir(), "b")
			if err := small().Save(dir); err != nil {
				t.Fatal(err)
			}
			path := filepath.Join(dir, c.file)
			data, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			if c.old == "" {
				data[len(data)-1] ^= 1
			} else {
				data = []byte(strings.Replace(string(data), c.old, c.new, 1))
			}
			if err := os.WriteFile(path, data, 0o644); err != nil {
				t.Fatal(err)
			}
			if _, err := Load(dir); err == nil || !strings.Contains(err.Error(), c.want) || !strings.Contains(err.Error(), dir) {
				t.Errorf("error %v should hold %q and the folder", err, c.want)
			}
		})
	}
	if _, err := Load(t.TempDir()); err == nil || !strings.Contains(err.Error(), "holds no bundle.toml") {
		t.Errorf("an empty folder: %v", err)
	}
	dir := filepath.Join(t.TempDir(), "b")
	if err := small().Save(dir); err != nil {
		t.Fatal(err)
	}
	if err := os.Remove(filepath.Join(dir, "streak_flat.npy")); err != nil {
		t.Fatal(err)
	}
	if _, err := Load(dir); err == nil || !strings.Contains(err.Error(), "streak_flat.npy") {
		t.Errorf("a missing array: %v", err)
	}
}

// TestLineEndings: a text tool that changes line endings does not break it.
func TestLineEndings(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "b")
	if err := small().Save(dir); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, tomlName)
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, []byte(strings.ReplaceAll(string(data), "\n", "\r\n")), 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := Load(dir); err != nil {
		t.Error(err)
	}
}

func TestValidate(t *testing.T) {
	for name, spoil := range map[string]func(*Bundle){
		"window off the sensor": func(b *Bundle) { b.Window.X = 4 },
		"code too short":        func(b *Bundle) { b.Code = b.Code[1:] },
		"code above 1":          func(b *Bundle) { b.Code[5] = 1.5 },
		"code not a number":     func(b *Bundle) { b.Code[5] = float32(math.NaN()) },
		"no gain":               func(b *Bundle) { b.Reference.Gain.Value = 0 },
		"gain not a number":     func(b *Bundle) { b.Streak.Gain.Value = math.NaN() },
		"flat of 0":             func(b *Bundle) { b.Streak.Flat[9] = 0 },
		"short dark":            func(b *Bundle) { b.Streak.Dark = b.Streak.Dark[1:] },
		"registration":          func(b *Bundle) { b.Registration[2] = math.Inf(1) },
		"ratio":                 func(b *Bundle) { b.Ratio.Value = -1 },
		"sweep falls":           func(b *Bundle) { b.Sweep.Coef[1] = -5 },
		"sweep turns":           func(b *Bundle) { b.Sweep.Coef = []float64{5, 5, 4} },
		"no span":               func(b *Bundle) { b.Sweep.Last = 0 },
		"first not whole":       func(b *Bundle) { b.First = 0.5 },
		"no frames":             func(b *Bundle) { b.Frames = 0 },
		"huge sensor":           func(b *Bundle) { b.Streak.W = 1 << 40 },
	} {
		b := small()
		spoil(b)
		if err := b.Validate(); err == nil {
			t.Errorf("%s: was accepted", name)
		}
		if err := b.Save(filepath.Join(t.TempDir(), "b")); err == nil {
			t.Errorf("%s: was saved", name)
		}
	}
	if err := small().Validate(); err != nil {
		t.Error(err)
	}
}

func TestFind(t *testing.T) {
	day := func(d int) time.Time { return time.Date(2026, 3, d, 0, 0, 0, 0, time.UTC) }
	dir := t.TempDir()
	for _, c := range []struct {
		name        string
		from, until time.Time
		made        time.Time
	}{
		{"always", time.Time{}, time.Time{}, day(1)},
		{"morning", day(5), day(10), day(5)},
		{"better", day(5), day(10), day(6)},
		{"later", day(8), time.Time{}, day(4)},
	} {
		b := small()
		b.ValidFrom, b.ValidUntil, b.Created = c.from, c.until, c.made
		if err := b.Save(filepath.Join(dir, c.name)); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.MkdirAll(filepath.Join(dir, "broken"), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "broken", tomlName), []byte("?"), 0o644); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		at   time.Time
		want string
	}{{day(2), "always"}, {day(5), "better"}, {day(7), "better"}, {day(8), "later"}, {day(20), "later"}, {time.Time{}, "later"}} {
		got, err := Find(dir, c.at)
		if err != nil || filepath.Base(got) != c.want {
			t.Errorf("at %v: %q (%v), want %q", c.at, got, err, c.want)
		}
	}
	morning := filepath.Join(dir, "morning")
	if got, err := Find(morning, day(6)); err != nil || got != morning {
		t.Errorf("a bundle itself: %q, %v", got, err)
	}
	if _, err := Find(morning, day(11)); err == nil || !strings.Contains(err.Error(), "until 2026-03-10") {
		t.Errorf("a bundle out of date: %v", err)
	}
	if _, err := Find(t.TempDir(), day(1)); err == nil || !strings.Contains(err.Error(), "no bundle") {
		t.Errorf("an empty folder: %v", err)
	}
	if _, err := Find(filepath.Join(dir, "broken"), day(1)); err == nil || !strings.Contains(err.Error(), "bundle.toml") {
		t.Errorf("a broken bundle: %v", err)
	}
}

// FuzzLoad feeds bundle.toml: no panic, and what is accepted survives a round
// trip.
func FuzzLoad(f *testing.F) {
	dir := filepath.Join(f.TempDir(), "b")
	if err := small().Save(dir); err != nil {
		f.Fatal(err)
	}
	text, err := os.ReadFile(filepath.Join(dir, tomlName))
	if err != nil {
		f.Fatal(err)
	}
	f.Add(string(text))
	f.Add("format = 1\nid = ''\n[registration]\nmatrix = [1,0,0,0,1,0,0,0,1]\n")
	f.Fuzz(func(t *testing.T, text string) {
		b, file, err := parse([]byte(text))
		if err != nil {
			return
		}
		_ = b.Validate()
		_ = b.decodeArrays(make([][]byte, len(arrayNames)))
		if file.Format != bundleFormat {
			t.Errorf("accepted format %d", file.Format)
		}
	})
}

// TestVacant saves into an empty folder, as people make it, and refuses any
// other.
func TestVacant(t *testing.T) {
	dir := t.TempDir()
	if err := Vacant(dir); err != nil {
		t.Errorf("an empty folder: %v", err)
	}
	if err := Vacant(filepath.Join(dir, "none")); err != nil {
		t.Errorf("no folder: %v", err)
	}
	if err := os.WriteFile(filepath.Join(dir, "note"), nil, 0o644); err != nil {
		t.Fatal(err)
	}
	if err := Vacant(dir); err == nil {
		t.Error("a folder with a file counts as vacant")
	}
	if err := Vacant(filepath.Join(dir, "note")); err == nil {
		t.Error("a file counts as vacant")
	}
}
