package export

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

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
