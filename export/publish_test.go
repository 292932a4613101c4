package export

import (
	"context"
	"encoding/json"
	"encoding/xml"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"unsheard/export/nexus"
)

// TestFolder reads everything that is published back, with other programs.
func TestFolder(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "S 7 µ漢.shot")
	r := pulse(12, 20, 31, "full", "b1")
	publishTo(t, dir, r, Options{Attempt: "3/1", Workers: 2})
	if got, want := listing(t, dir), "arrival.png contact.png cube.nxs light.svg log.jsonl metrics.json movie.png residual.png"; got != want {
		t.Errorf("the folder holds %s, want %s", got, want)
	}
	whole(t, dir)
	f, err := nexus.Open(filepath.Join(dir, fileCube))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	for k := range r.Cube.T {
		got, err := f.Frame("entry/data/counts", k)
		if err != nil || fmt.Sprint(got) != fmt.Sprint(r.Cube.Frame(k)) {
			t.Fatalf("frame %d differs (%v)", k, err)
		}
	}
	if got, err := f.Text("entry/start_time"); err != nil || got != "2026-06-11T10:15:02.250000Z" {
		t.Errorf("start time %q (%v)", got, err)
	}
	text, err := f.Text("entry/provenance/data")
	var note struct{ Note string }
	if err != nil || json.Unmarshal([]byte(text), &note) != nil || note.Note != "µ 漢 😀" {
		t.Errorf("provenance %q (%v)", text, err)
	}
	if b, err := os.ReadFile(filepath.Join(dir, fileLog)); err != nil || string(b) != string(r.Log) {
		t.Errorf("log %q (%v)", b, err)
	}
	pictures(t, dir, 12)
}

const pillow = `
import sys
from PIL import Image
for p in sys.argv[1:]:
    im = Image.open(p)
    n = getattr(im, "n_frames", 1)
    for k in range(n):
        im.seek(k)
        im.load()
    print(n, im.size[0] > 300 and im.size[1] > 200)
`

// pictures shows the pictures to pngcheck, ImageMagick and Pillow, and parses
// the SVG.
func pictures(t *testing.T, dir string, frames int) {
	t.Helper()
	var paths []string
	for _, name := range []string{fileContact, fileArrival, fileResidual, fileMovie} {
		p := filepath.Join(dir, name)
		paths = append(paths, p)
		run(t, "pngcheck", "pngcheck", "-q", p)
		run(t, "imagemagick", "identify", "-regard-warnings", p)
	}
	// Pillow counts the still image, which is none of the frames.
	want := fmt.Sprintf("1 True\n1 True\n1 True\n%d True\n", frames+1)
	if got := run(t, "python3-pil", python, append([]string{"-c", pillow}, paths...)...); got != want {
		t.Errorf("Pillow says %q, want %q", got, want)
	}
	b, err := os.ReadFile(filepath.Join(dir, fileLight))
	if err != nil {
		t.Fatal(err)
	}
	for d := xml.NewDecoder(strings.NewReader(string(b))); ; {
		if _, err := d.Token(); err == io.EOF {
			break
		} else if err != nil {
			t.Fatalf("%s: %v", fileLight, err)
		}
	}
	for _, want := range []string{"time (ps)", "light (photoelectrons/ps)", "FWHM", "peak", "bay-a"} {
		if !strings.Contains(string(b), want) {
			t.Errorf("%s does not say %q", fileLight, want)
		}
	}
}

const validator = `
import json, sys, jsonschema
schema = json.load(open(sys.argv[1]))
jsonschema.Draft202012Validator.check_schema(schema)
def strict(x):
    raise ValueError("not JSON: " + x)
for p in sys.argv[2:]:
    d = json.load(open(p), parse_constant=strict)
    jsonschema.Draft202012Validator(schema).validate(d)
    print(list(d))
for key in ("verdict", "quantities", "pass"):
    broken = dict(d); del broken[key]
    assert list(jsonschema.Draft202012Validator(schema).iter_errors(broken)), key
broken = json.loads(json.dumps(d)); broken["quantities"]["peak_time"].pop("unit")
assert list(jsonschema.Draft202012Validator(schema).iter_errors(broken))
`

// TestSchema validates metrics.json with python3-jsonschema, which must also
// refuse broken ones.
func TestSchema(t *testing.T) {
	top := t.TempDir()
	full := pulse(4, 4, 4, "full", "b1")
	bare1 := pulse(4, 4, 4, quick, "")
	bare1.Report.Curves, bare1.Report.Track, bare1.Report.Notes, bare1.Provenance = nil, nil, nil, nil
	bare1.Report.Verdict.Reasons, bare1.Frames, bare1.Station, bare1.Log = nil, nil, "", nil
	schema := filepath.Join(top, "schema.json")
	if err := os.WriteFile(schema, Schema(), 0o666); err != nil {
		t.Fatal(err)
	}
	args := []string{"-c", validator, schema}
	for i, r := range []Result{bare1, full} {
		dir := filepath.Join(top, fmt.Sprint(i))
		publishTo(t, dir, r, Options{})
		args = append(args, filepath.Join(dir, fileMetrics))
	}
	got := strings.Split(strings.TrimSpace(run(t, "python3-jsonschema", python, args...)), "\n")
	want := "['$schema', 'shot', 'station', 'pass', 'bundle', 'verdict', 'quantities', 'curves', 'track', 'notes', 'files', 'provenance']"
	if len(got) != 2 || got[0] != want || got[1] != want {
		t.Errorf("keys %v, want %s", got, want)
	}
}

// TestRead: what was not finite comes back as NaN, the rest as it was.
func TestRead(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "a.shot")
	r := pulse(6, 5, 4, "full", "b1")
	publishTo(t, dir, r, Options{parts: bare})
	s, err := Read(dir)
	if err != nil {
		t.Fatal(err)
	}
	q := s.Report.Quantities
	if got, want := q["peak_time"], r.Report.Quantities["peak_time"]; got.Value != want.Value || *got.Sigma != *want.Sigma || got.Unit != "ps" {
		t.Errorf("peak_time %v, want %v", got, want)
	}
	if !math.IsNaN(q["odd"].Value) || !math.IsNaN(s.Report.Track.X[1]) || q["peak_light"].Sigma != nil {
		t.Errorf("odd values %v %v", q["odd"], s.Report.Track.X)
	}
	if s.Pass != "full" || s.Bundle != "b1" || s.Shot != r.Shot || len(s.Report.Verdict.Reasons) != 1 {
		t.Errorf("%+v", s)
	}
	if fmt.Sprint(s.Report.Curves["light"]) != fmt.Sprint(r.Report.Curves["light"]) {
		t.Error("the light curve differs")
	}
}

// TestSameMetrics: the same result gives the same bytes.
func TestSameMetrics(t *testing.T) {
	var first []byte
	for i := range 3 {
		dir := filepath.Join(t.TempDir(), fmt.Sprint(i))
		publishTo(t, dir, pulse(6, 5, 4, "full", "b1"), Options{Workers: i + 1})
		b, err := os.ReadFile(filepath.Join(dir, fileMetrics))
		if err != nil {
			t.Fatal(err)
		}
		if first == nil {
			first = b
		}
		if string(b) != string(first) { // checksums of every file included
			t.Errorf("run %d differs", i)
		}
	}
}

func TestVerify(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "a.shot")
	publishTo(t, dir, pulse(6, 5, 4, "full", "b1"), Options{})
	p := filepath.Join(dir, fileCube)
	b, err := os.ReadFile(p)
	if err != nil {
		t.Fatal(err)
	}
	b[200] ^= 1 // within the first chunk, after title and time
	if err := os.WriteFile(p, b, 0o666); err != nil {
		t.Fatal(err)
	}
	if err := os.Remove(filepath.Join(dir, fileLog)); err != nil {
		t.Fatal(err)
	}
	faults, err := Verify(dir)
	if err != nil || len(faults) != 3 || !strings.Contains(faults[0], "changed") ||
		faults[1] != "log.jsonl: missing" || !strings.Contains(faults[2], "damaged") {
		t.Errorf("%q %v", faults, err)
	}
	if _, err := Verify(t.TempDir()); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("empty folder: %v", err)
	}
}

// TestLateQuick: a quick look that comes late does not replace the full
// result of its bundle, but that of another bundle it does, which is kept.
func TestLateQuick(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "a.shot")
	o := Options{parts: bare}
	publishTo(t, dir, pulse(3, 3, 3, "full", "a"), o)
	publishTo(t, dir, pulse(3, 3, 3, quick, "a"), o)
	if got := whole(t, dir); got.pass != "full" {
		t.Errorf("%v is in place", got)
	}
	publishTo(t, dir, pulse(3, 3, 3, quick, "b"), o)
	publishTo(t, dir, pulse(3, 3, 3, "full", "b"), o)
	if got := whole(t, dir); got != (identity{"full", "b"}) {
		t.Errorf("%v is in place", got)
	}
	if got := listing(t, filepath.Join(dir, versions)); got != "001-a" {
		t.Errorf("versions: %s", got)
	}
}

// TestPlace: nothing but a result folder is ever replaced.
func TestPlace(t *testing.T) {
	top := t.TempDir()
	file := filepath.Join(top, "S_1.tif")
	other := filepath.Join(top, "photos")
	taken := filepath.Join(top, "taken.shot")
	link := filepath.Join(top, "link.shot")
	empty := filepath.Join(top, "empty")
	r := pulse(3, 3, 3, "full", "a")
	publishTo(t, taken, r, Options{parts: bare})
	for _, err := range []error{os.WriteFile(file, []byte("raw"), 0o666), os.MkdirAll(filepath.Join(other, "x"), 0o777),
		os.Symlink(taken, link), os.Mkdir(empty, 0o777), os.WriteFile(filepath.Join(taken, "S_2.tif"), []byte("raw"), 0o666)} {
		if err != nil {
			t.Fatal(err)
		}
	}
	r.Provenance = json.RawMessage(fmt.Sprintf(`{"streak":{"path":%q}}`, filepath.Join(taken, "S_2.tif")))
	for _, dir := range []string{file, other, taken, link, "/", filepath.Join(top, ".hidden"), filepath.Join(top, strings.Repeat("x", 220))} {
		if err := Publish(context.Background(), dir, r, Options{parts: bare}); !errors.Is(err, ErrPlace) || Retryable(err) {
			t.Errorf("%s: %v", dir, err)
		}
	}
	for _, p := range []string{file, filepath.Join(taken, "S_2.tif")} {
		if b, err := os.ReadFile(p); err != nil || string(b) != "raw" {
			t.Errorf("%s: %q %v", p, b, err)
		}
	}
	publishTo(t, empty, pulse(3, 3, 3, "full", "a"), Options{parts: bare})
	whole(t, empty)
	err := Publish(context.Background(), filepath.Join(top, "no", "a.shot"), pulse(3, 3, 3, "full", "a"), Options{parts: bare})
	if !errors.Is(err, fs.ErrNotExist) || !Retryable(err) {
		t.Errorf("missing parent: %v", err)
	}
}

func TestBadName(t *testing.T) {
	for _, c := range []struct {
		base, system string
		ok           bool
	}{{"S_1.shot", "windows", true}, {"aux.tif.shot", "windows", false}, {"a:b.shot", "windows", false}, {"nul", "windows", false},
		{"a ", "windows", false}, {"aux.shot", "linux", true}, {"..", "linux", false}, {"console.shot", "windows", true}} {
		if got := badName(c.base, c.system); (got == "") != c.ok {
			t.Errorf("%q on %s: %q", c.base, c.system, got)
		}
	}
}

// TestReadOnly: a folder that cannot be written to is an error of the system,
// and nothing changes. Root may write everywhere: there only the disk's own
// refusal is tried.
func TestReadOnly(t *testing.T) {
	top := t.TempDir()
	dir := filepath.Join(top, "a.shot")
	publishTo(t, dir, pulse(3, 3, 3, "full", "a"), Options{parts: bare})
	denied := &disk{mkdir: func(p string) error { return &fs.PathError{Op: "mkdir", Path: p, Err: syscall.EROFS} },
		create: realDisk.create, rename: realDisk.rename, removeAll: realDisk.removeAll, syncDir: realDisk.syncDir}
	err := Publish(context.Background(), dir, pulse(3, 3, 3, "full", "b"), Options{parts: bare, disk: denied})
	if !errors.Is(err, syscall.EROFS) || !Retryable(err) {
		t.Errorf("read-only disk: %v", err)
	}
	if os.Geteuid() > 0 {
		if err := os.Chmod(top, 0o555); err != nil {
			t.Fatal(err)
		}
		defer os.Chmod(top, 0o777)
		err := Publish(context.Background(), dir, pulse(3, 3, 3, "full", "b"), Options{parts: bare})
		if !errors.Is(err, fs.ErrPermission) || !Retryable(err) {
			t.Errorf("no permission: %v", err)
		}
	}
	if got := whole(t, dir); got.bundle != "a" || listing(t, top) != "a.shot" {
		t.Errorf("%v in place, %s beside", got, listing(t, top))
	}
}

func TestContent(t *testing.T) {
	for name, change := range map[string]func(*Result){
		"no cube":    func(r *Result) { r.Cube = nil },
		"no report":  func(r *Result) { r.Report = nil },
		"no pass":    func(r *Result) { r.Pass = "" },
		"NaN":        func(r *Result) { r.Cube.Data[0] = float32(math.NaN()) },
		"frame":      func(r *Result) { r.Frames[0].Model = r.Frames[0].Model[1:] },
		"provenance": func(r *Result) { r.Provenance = json.RawMessage(`[1]`) },
	} {
		r := pulse(3, 3, 3, "full", "a")
		change(&r)
		dir := filepath.Join(t.TempDir(), "a.shot")
		if err := Publish(context.Background(), dir, r, Options{}); !errors.Is(err, ErrContent) || Retryable(err) {
			t.Errorf("%s: %v", name, err)
		}
		if exists(dir) {
			t.Errorf("%s: published", name)
		}
	}
}

func TestCancelled(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	top := t.TempDir()
	err := Publish(ctx, filepath.Join(top, "a.shot"), pulse(3, 3, 3, "full", "a"), Options{})
	if !errors.Is(err, context.Canceled) || !Retryable(err) || listing(t, top) != "" {
		t.Errorf("%v; left: %s", err, listing(t, top))
	}
}

// TestAtOnce publishes to one place from many goroutines: one whole result is
// in place at the end, nothing else.
func TestAtOnce(t *testing.T) {
	top := t.TempDir()
	dir := filepath.Join(top, "a.shot")
	var wg sync.WaitGroup
	for i := range 8 {
		wg.Go(func() {
			r := pulse(3, 3, 3, "full", "same")
			o := Options{parts: bare, disk: (&faulty{}).disk(), Attempt: fmt.Sprint(i)}
			// Losing the race for the place is an error to try again on.
			if err := Publish(context.Background(), dir, r, o); err != nil && !Retryable(err) {
				t.Error(err)
			}
		})
	}
	wg.Wait()
	if _, err := Sweep(context.Background(), top, SweepOptions{Older: -1}); err != nil {
		t.Error(err)
	}
	whole(t, dir)
	if got := listing(t, top); got != "a.shot" {
		t.Errorf("left: %s", got)
	}
}

// TestSweepSpares: what may be in use stays, and so does what is not ours.
func TestSweepSpares(t *testing.T) {
	top := t.TempDir()
	now := time.Date(2026, 6, 11, 12, 0, 0, 0, time.UTC)
	clock := func() time.Time { return now }
	name := func(age time.Duration, attempt, end string) string {
		o := Options{Attempt: attempt, now: func() time.Time { return now.Add(-age) }}
		return ".a.b.shot." + token(&o) + end
	}
	young, old, dead := name(time.Hour, "x", endPartial), name(48*time.Hour, "", endPartial), name(time.Minute, "Dead-7", endReady)
	for _, n := range []string{young, old, dead, ".partial", ".git", ".a.shot.partial", ".x.1.partial"} {
		if err := os.MkdirAll(filepath.Join(top, n, "sub"), 0o777); err != nil {
			t.Fatal(err)
		}
	}
	got, err := Sweep(context.Background(), top, SweepOptions{now: clock, Dead: func(n string) bool { return strings.Contains(n, "dead7") }})
	if err != nil || got != (Swept{Removed: 2, Spared: 1}) {
		t.Errorf("%+v %v", got, err)
	}
	for _, n := range []string{young, ".partial", ".git", ".a.shot.partial", ".x.1.partial"} {
		if !exists(filepath.Join(top, n)) {
			t.Errorf("%s is gone", n)
		}
	}
	if l, ok := parseLeftover(young); !ok || l.base != "a.b.shot" || !l.began.Equal(now.Add(-time.Hour)) {
		t.Errorf("%+v %v", l, ok)
	}
}

func TestPassing(t *testing.T) {
	for _, c := range []struct {
		err    error
		system string
		want   bool
	}{{syscall.Errno(32), "windows", true}, {fs.ErrPermission, "windows", true}, {fs.ErrPermission, "linux", false},
		{syscall.Errno(112), "windows", false}} {
		if got := passing(c.err, c.system); got != c.want {
			t.Errorf("%v on %s: %v", c.err, c.system, got)
		}
	}
}

// TestRestore: an old result without a successor goes back into place.
func TestRestore(t *testing.T) {
	top := t.TempDir()
	dir := filepath.Join(top, "a.shot")
	publishTo(t, dir, pulse(3, 3, 3, "full", "a"), Options{parts: bare})
	o := Options{}
	o.fill()
	if err := os.Rename(dir, newSwap(dir, &o).previous); err != nil {
		t.Fatal(err)
	}
	got, err := Sweep(context.Background(), top, SweepOptions{Older: -1})
	if err != nil || got != (Swept{Finished: 1}) {
		t.Errorf("%+v %v", got, err)
	}
	whole(t, dir)
}

func TestTicks(t *testing.T) {
	for _, c := range []struct {
		lo, hi float64
		want   string
	}{{0, 38.6, "[0 10 20 30]"}, {-4, 4, "[−4 −2 0 2 4]"}, {0, 1, "[0.0 0.2 0.4 0.6 0.8 1.0]"},
		{-0.003, 0.0041, "[−0.003 −0.002 −0.001 0.000 0.001 0.002 0.003 0.004]"}, {12000, 52000, "[20000 30000 40000 50000]"}, {0, 0.07, "[0.00 0.01 0.02 0.03 0.04 0.05 0.06 0.07]"}} {
		if _, got := ticks(c.lo, c.hi); fmt.Sprint(got) != c.want {
			t.Errorf("%g to %g: %v, want %s", c.lo, c.hi, got, c.want)
		}
	}
}

// TestCeiling: one hot value in ten thousand does not set the scale, and the
// scale is within the bin width of 1 % above the value it stands for.
func TestCeiling(t *testing.T) {
	c := pulse(1, 100, 100, "full", "a").Cube
	for i := range c.Data {
		c.Data[i] = 1 + float32(i)/10000
	}
	c.Data[0] = 1e6
	hi, clipped := ceiling(c, []int{0})
	if !clipped || hi < 1.99 || hi > 2.02 {
		t.Errorf("top %g, clipped %v", hi, clipped)
	}
	clear(c.Data)
	if hi, clipped := ceiling(c, []int{0}); hi != 1 || clipped {
		t.Errorf("dark: %g %v", hi, clipped)
	}
}

// TestArrivals: two flashes at known times.
func TestArrivals(t *testing.T) {
	c := pulse(5, 1, 3, "full", "a").Cube
	clear(c.Data)
	c.Frame(1)[0], c.Frame(3)[0], c.Frame(4)[1] = 1, 1, 0.5
	p := arrivals(c)
	if want := float32((c.Time[1] + c.Time[3]) / 2); p.v[0] != want || p.v[1] != float32(c.Time[4]) || p.v[2] == p.v[2] {
		t.Errorf("%v, want %g %g NaN", p.v, want, c.Time[4])
	}
}
