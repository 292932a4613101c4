package calib

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"time"

	"github.com/pelletier/go-toml/v2"

	"unsheard/pipeline/frame"
)

// File names inside a bundle.
const (
	tomlName   = "bundle.toml"
	reportName = "report.html"
)

// bundleFormat is the version of the layout that Save writes.
const bundleFormat = 1

type bundleFile struct {
	Format     int       `toml:"format"`
	ID         string    `toml:"id"`
	Station    string    `toml:"station"`
	Direction  string    `toml:"direction"`
	Created    time.Time `toml:"created,omitzero"`
	ValidFrom  time.Time `toml:"valid_from,omitzero"`
	ValidUntil time.Time `toml:"valid_until,omitzero"`
	Frames     int       `toml:"frames"`
	First      float64   `toml:"first_px"`
	Warnings   []string  `toml:"warnings,multiline"`

	Window       Window           `toml:"window"`
	Registration registrationFile `toml:"registration"`
	Ratio        Quantity         `toml:"ratio"`
	Scale        Quantity         `toml:"scale"`
	Sweep        sweepFile        `toml:"sweep"`
	Streak       armFile          `toml:"streak"`
	Reference    armFile          `toml:"reference"`
}

type registrationFile struct {
	Kind     string    `toml:"kind"`
	Matrix   []float64 `toml:"matrix"`
	Residual float64   `toml:"residual_px"`
}

type sweepFile struct {
	Coef       []float64    `toml:"legendre_px"`
	Covariance []float64    `toml:"covariance_px2"`
	First      float64      `toml:"first_ps"`
	Last       float64      `toml:"last_ps"`
	Residual   float64      `toml:"residual_ps"`
	ResidualPx float64      `toml:"residual_px"`
	Origin     string       `toml:"origin"`
	OriginTime float64      `toml:"origin_ps"`
	Points     []SweepPoint `toml:"points"`
}

type armFile struct {
	W          int      `toml:"width"`
	H          int      `toml:"height"`
	DarkFrames int      `toml:"dark_frames"`
	Floor      float64  `toml:"model_error_floor"`
	Gain       Quantity `toml:"gain"`
	ReadNoise  Quantity `toml:"read_noise"`
	Saturation Quantity `toml:"saturation"`
	Linearity  Quantity `toml:"linearity"`
	BlurX      Quantity `toml:"blur_x"`
	BlurY      Quantity `toml:"blur_y"`
	OpticalX   Quantity `toml:"optical_blur_x"`
	OpticalY   Quantity `toml:"optical_blur_y"`
}

// idLine finds the line of bundle.toml that holds the identity, which cannot
// be part of what it is computed from.
var idLine = regexp.MustCompile(`(?m)^id = ['"][0-9a-f]*['"]\r?$`)

// Save writes the bundle as a new folder dir: into a temporary folder beside
// it, synced, then renamed. A bundle is never changed: a dir that holds
// anything is refused, see [Vacant]. It sets b.ID.
func (b *Bundle) Save(dir string) error {
	if err := b.Validate(); err != nil {
		return fmt.Errorf("save bundle %q: %w", dir, err)
	}
	if err := Vacant(dir); err != nil {
		return err
	}
	if err := os.MkdirAll(filepath.Dir(dir), 0o755); err != nil {
		return fmt.Errorf("save bundle %q: %w", dir, err)
	}
	tmp, err := os.MkdirTemp(filepath.Dir(dir), "."+filepath.Base(dir)+".new-")
	if err != nil {
		return fmt.Errorf("save bundle %q: %w", dir, err)
	}
	defer os.RemoveAll(tmp) // nothing is left of it after the rename
	if err := b.write(tmp); err != nil {
		return fmt.Errorf("save bundle %q: %w", dir, err)
	}
	if err := os.Chmod(tmp, 0o755); err != nil {
		return fmt.Errorf("save bundle %q: %w", dir, err)
	}
	// An empty folder in its place goes; one that has been filled meanwhile
	// stays, and the rename fails.
	if err := os.Remove(dir); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("save bundle %q: %w", dir, err)
	}
	if err := os.Rename(tmp, dir); err != nil {
		return fmt.Errorf("save bundle %q: %w", dir, err)
	}
	return nil
}

// Vacant returns an error if a bundle cannot be saved at dir because something
// is there. An empty folder is nothing.
func Vacant(dir string) error {
	entries, err := os.ReadDir(dir)
	switch {
	case errors.Is(err, fs.ErrNotExist), err == nil && len(entries) == 0:
		return nil
	case err != nil:
		return fmt.Errorf("save bundle: %w", err)
	}
	return fmt.Errorf("save bundle %q: it is already there and a bundle is never changed: choose another folder", dir)
}

func (b *Bundle) write(dir string) error {
	arrays, err := b.encodeArrays()
	if err != nil {
		return err
	}
	text, err := toml.Marshal(b.file())
	if err != nil {
		return fmt.Errorf("encode %s: %w", tomlName, err)
	}
	id := identity(text, arrays)
	for i, a := range arrays {
		if err := writeFile(filepath.Join(dir, arrayNames[i]), a); err != nil {
			return err
		}
	}
	text = idLine.ReplaceAll(text, []byte("id = '"+id+"'"))
	if b.report != nil {
		if err := writeFile(filepath.Join(dir, reportName), b.report); err != nil {
			return err
		}
	}
	if err := writeFile(filepath.Join(dir, tomlName), text); err != nil {
		return err
	}
	b.ID = id
	return nil
}

func writeFile(path string, data []byte) error {
	f, err := os.Create(path)
	if err != nil {
		return err
	}
	_, err = f.Write(data)
	return errors.Join(err, f.Sync(), f.Close())
}

// identity is the SHA-256 over bundle.toml with an empty id and the arrays,
// each preceded by its length.
func identity(text []byte, arrays [][]byte) string {
	h := sha256.New()
	text = bytes.ReplaceAll(idLine.ReplaceAll(text, []byte("id = ''")), []byte("\r\n"), []byte("\n"))
	for _, a := range append([][]byte{text}, arrays...) {
		fmt.Fprintf(h, "%d\n", len(a))
		h.Write(a)
	}
	return hex.EncodeToString(h.Sum(nil))
}

// arrayNames lists the array files in the order in which they enter the
// identity.
var arrayNames = []string{
	"streak_dark.npy", "streak_flat.npy", "streak_bad.npy",
	"reference_dark.npy", "reference_flat.npy", "reference_bad.npy",
	"code.npy",
}

func (b *Bundle) encodeArrays() ([][]byte, error) {
	s, r := &b.Streak, &b.Reference
	shapes := [][]int{{s.H, s.W}, {s.H, s.W}, {s.H, s.W}, {r.H, r.W}, {r.H, r.W}, {r.H, r.W}, {b.Window.H, b.Window.W}}
	data := [][]float32{s.Dark, s.Flat, flags(s.Bad), r.Dark, r.Flat, flags(r.Bad), b.Code}
	out := make([][]byte, len(data))
	for i := range data {
		var buf bytes.Buffer
		if err := frame.WriteNPY(&buf, shapes[i], data[i]); err != nil {
			return nil, fmt.Errorf("encode %s: %w", arrayNames[i], err)
		}
		out[i] = buf.Bytes()
	}
	return out, nil
}

func flags(b []bool) []float32 {
	f := make([]float32, len(b))
	for i, bad := range b {
		if bad {
			f[i] = 1
		}
	}
	return f
}

func (b *Bundle) file() *bundleFile {
	f := &bundleFile{
		Format: bundleFormat, Station: b.Station, Direction: b.Direction,
		Frames: b.Frames, First: b.First, Warnings: b.Warnings, Window: b.Window,
		Registration: registrationFile{b.RegistrationKind, b.Registration[:], b.RegistrationResidual},
		Ratio:        b.Ratio, Scale: b.Scale,
		Sweep:  sweepFile(b.Sweep),
		Streak: b.Streak.file(), Reference: b.Reference.file(),
	}
	if !b.Created.IsZero() {
		f.Created = b.Created.UTC()
	}
	if !b.ValidFrom.IsZero() {
		f.ValidFrom = b.ValidFrom.UTC()
	}
	if !b.ValidUntil.IsZero() {
		f.ValidUntil = b.ValidUntil.UTC()
	}
	return f
}

func (a *Arm) file() armFile {
	return armFile{a.W, a.H, a.DarkFrames, a.Floor, a.Gain, a.ReadNoise, a.Saturation, a.Linearity,
		a.BlurX, a.BlurY, a.OpticalX, a.OpticalY}
}

// Load reads the bundle in dir and checks its shapes and its identity.
func Load(dir string) (*Bundle, error) {
	b, err := load(dir)
	if err != nil {
		return nil, fmt.Errorf("load bundle %q: %w", dir, err)
	}
	return b, nil
}

// maxTOML bounds bundle.toml and a series file: they are a few kilobytes.
const maxTOML = 4 << 20

func readText(path string) ([]byte, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, err
	}
	if info.Size() > maxTOML {
		return nil, fmt.Errorf("%s is %d bytes long, more than %d: it is not the text file it should be", path, info.Size(), maxTOML)
	}
	return os.ReadFile(path)
}

func load(dir string) (*Bundle, error) {
	text, err := readText(filepath.Join(dir, tomlName))
	if errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("it holds no %s: %w", tomlName, err)
	}
	if err != nil {
		return nil, err
	}
	b, f, err := parse(text)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", filepath.Join(dir, tomlName), err)
	}
	arrays := make([][]byte, len(arrayNames))
	for i, name := range arrayNames {
		if arrays[i], err = os.ReadFile(filepath.Join(dir, name)); err != nil {
			return nil, fmt.Errorf("read array: %w", err)
		}
	}
	if id := identity(text, arrays); id != f.ID {
		return nil, fmt.Errorf("its contents give the identity %.12s but %s says %.12s: it was changed or damaged after it was made; restore it from a copy or calibrate again",
			id, tomlName, f.ID)
	}
	if err := b.decodeArrays(arrays); err != nil {
		return nil, err
	}
	return b, b.Validate()
}

// parse reads bundle.toml, without the arrays.
func parse(text []byte) (*Bundle, *bundleFile, error) {
	var f bundleFile
	if err := decode(text, &f); err != nil {
		return nil, nil, err
	}
	switch {
	case f.Format != bundleFormat:
		return nil, nil, fmt.Errorf("format %d, this program reads %d: calibrate again", f.Format, bundleFormat)
	case len(f.Registration.Matrix) != 9:
		return nil, nil, fmt.Errorf("registration.matrix has %d values, expected 9", len(f.Registration.Matrix))
	case len(idLine.FindAll(text, 2)) != 1:
		return nil, nil, errors.New("expected one line id = '...'")
	}
	b := &Bundle{
		Station: f.Station, ID: f.ID, Direction: f.Direction,
		Created: f.Created, ValidFrom: f.ValidFrom, ValidUntil: f.ValidUntil,
		Frames: f.Frames, First: f.First, Warnings: f.Warnings, Window: f.Window,
		Registration:     [9]float64(f.Registration.Matrix),
		RegistrationKind: f.Registration.Kind, RegistrationResidual: f.Registration.Residual,
		Ratio: f.Ratio, Scale: f.Scale,
		Sweep:  Sweep(f.Sweep),
		Streak: f.Streak.arm(), Reference: f.Reference.arm(),
	}
	return b, &f, nil
}

func (f armFile) arm() Arm {
	return Arm{W: f.W, H: f.H, DarkFrames: f.DarkFrames, Floor: f.Floor, Gain: f.Gain, ReadNoise: f.ReadNoise,
		Saturation: f.Saturation, Linearity: f.Linearity,
		BlurX: f.BlurX, BlurY: f.BlurY, OpticalX: f.OpticalX, OpticalY: f.OpticalY}
}

func (b *Bundle) decodeArrays(files [][]byte) error {
	var bad [2][]float32
	s, r := &b.Streak, &b.Reference
	to := []*[]float32{&s.Dark, &s.Flat, &bad[0], &r.Dark, &r.Flat, &bad[1], &b.Code}
	w := []int{s.W, s.W, s.W, r.W, r.W, r.W, b.Window.W}
	h := []int{s.H, s.H, s.H, r.H, r.H, r.H, b.Window.H}
	for i, data := range files {
		shape, v, err := frame.ReadNPY(bytes.NewReader(data), int64(len(data)), frame.Limits{})
		if err != nil {
			return fmt.Errorf("read array %s: %w", arrayNames[i], err)
		}
		if len(shape) != 2 || shape[0] != h[i] || shape[1] != w[i] {
			return fmt.Errorf("array %s has shape %v, %s says [%d %d]", arrayNames[i], shape, tomlName, h[i], w[i])
		}
		*to[i] = v
	}
	for i, a := range []*Arm{s, r} {
		a.Bad = make([]bool, len(bad[i]))
		for j, v := range bad[i] {
			a.Bad[j] = v != 0 || math.IsNaN(float64(v))
		}
	}
	return nil
}

// decode is strict TOML: unknown keys are refused with line and column.
func decode(text []byte, into any) error {
	d := toml.NewDecoder(bytes.NewReader(text))
	d.DisallowUnknownFields()
	return located(d.Decode(into))
}
