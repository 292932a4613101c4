package watch

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"testing"
	"time"

	"go.uber.org/goleak"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// patience bounds every wait; it only passes when a test fails.
const patience = 30 * time.Second

// rig is a running watcher under test.
type rig struct {
	t    *testing.T
	w    *Watcher
	out  chan File
	stop func()
}

func fast(folder string) Options {
	return Options{Folder: folder, Station: "bay-a", Arm: "streak", Quiet: 50 * time.Millisecond,
		Longest: time.Minute, Rescan: 200 * time.Millisecond, Depth: 2}
}

// start runs a watcher until the test ends or stop is called.
func start(t *testing.T, o Options, change ...func(*Watcher)) *rig {
	t.Helper()
	w, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range change {
		c(w)
	}
	ctx, cancel := context.WithCancel(t.Context())
	r := &rig{t: t, w: w, out: make(chan File)}
	done := make(chan error, 1)
	go func() { done <- w.Run(ctx, r.out) }()
	stopped := false
	r.stop = func() {
		t.Helper()
		if stopped {
			return
		}
		stopped = true
		cancel()
		select {
		case err := <-done:
			if err != nil {
				t.Errorf("Run: %v", err)
			}
		case <-time.After(patience):
			t.Error("Run did not return")
		}
	}
	t.Cleanup(r.stop)
	return r
}

// next is the next file given.
func (r *rig) next() File {
	r.t.Helper()
	select {
	case f := <-r.out:
		return f
	case <-time.After(patience):
		r.t.Fatalf("no file; state %+v", r.w.State())
		return File{}
	}
}

// want checks the next file.
func (r *rig) want(rel string, size int64) {
	r.t.Helper()
	if f := r.next(); f.Rel != rel || f.Size != size || f.Path != filepath.Join(r.w.o.Folder, filepath.FromSlash(rel)) {
		r.t.Errorf("got %+v, want %s with %d bytes", f, rel, size)
	}
}

// until waits for a state.
func (r *rig) until(what string, ok func(State) bool) {
	r.t.Helper()
	for end := time.Now().Add(patience); !ok(r.w.State()); {
		if time.Now().After(end) {
			r.t.Fatalf("never %s: %+v", what, r.w.State())
		}
		runtime.Gosched()
		time.Sleep(time.Millisecond)
	}
}

// scans waits until the folder was listed completely, begun after now.
func (r *rig) scans() {
	r.t.Helper()
	now := time.Now()
	r.until("listed", func(s State) bool { return s.LastScan.Add(-s.ScanTime).After(now) })
}

func write(t *testing.T, path string, size int) {
	t.Helper()
	if err := os.WriteFile(path, make([]byte, size), 0o600); err != nil {
		t.Fatal(err)
	}
}

func mkdir(t *testing.T, path ...string) string {
	t.Helper()
	dir := filepath.Join(path...)
	if err := os.MkdirAll(dir, 0o700); err != nil {
		t.Fatal(err)
	}
	return dir
}

func TestThereBeforeAndAfter(t *testing.T) {
	dir := t.TempDir()
	write(t, filepath.Join(dir, "a.tif"), 10)
	r := start(t, fast(dir))
	r.want("a.tif", 10)
	write(t, filepath.Join(dir, "b.tif"), 20)
	r.want("b.tif", 20)
}

func TestGrowing(t *testing.T) {
	dir := t.TempDir()
	r := start(t, fast(dir))
	const parts, size = 30, 1000
	go func() {
		f, err := os.Create(filepath.Join(dir, "a.tif"))
		if err != nil {
			t.Error(err)
			return
		}
		defer f.Close()
		for range parts {
			if _, err := f.Write(make([]byte, size)); err != nil {
				t.Error(err)
			}
			time.Sleep(10 * time.Millisecond) // pace of the writer; nothing depends on it
		}
	}()
	// A loaded machine may stretch a pause beyond Quiet, so earlier
	// contents are allowed, but each once and in order.
	last := int64(0)
	for last < parts*size {
		f := r.next()
		if f.Size <= last {
			t.Fatalf("%d bytes after %d", f.Size, last)
		}
		last = f.Size
	}
}

func TestPausedWriter(t *testing.T) {
	dir := t.TempDir()
	r := start(t, fast(dir))
	f, err := os.Create(filepath.Join(dir, "a.tif"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	for i := int64(1); i <= 3; i++ {
		if _, err := f.Write(make([]byte, 100)); err != nil {
			t.Fatal(err)
		}
		r.want("a.tif", i*100)
	}
}

func TestRenamedIntoPlace(t *testing.T) {
	dir := t.TempDir()
	r := start(t, fast(dir))
	tmp := filepath.Join(dir, "a.tif.part")
	write(t, tmp, 10)
	r.scans()
	if err := os.Rename(tmp, filepath.Join(dir, "a.tif")); err != nil {
		t.Fatal(err)
	}
	r.want("a.tif", 10)
}

func TestReplaced(t *testing.T) {
	for name, change := range map[string]func(*Watcher){
		"with notifications": func(*Watcher) {},
		"without":            deafen,
	} {
		t.Run(name, func(t *testing.T) {
			dir := t.TempDir()
			r := start(t, fast(dir), change)
			path := filepath.Join(dir, "a.tif")
			write(t, path, 10)
			r.want("a.tif", 10)
			write(t, path+".tmp", 11)
			if err := os.Rename(path+".tmp", path); err != nil {
				t.Fatal(err)
			}
			r.want("a.tif", 11)
		})
	}
}

// deafen takes the notifications away, as on a share.
func deafen(w *Watcher) {
	w.hear = func() (*ears, error) { return nil, errors.New("no instances left") }
}

func TestPolling(t *testing.T) {
	dir := t.TempDir()
	r := start(t, fast(dir), deafen)
	r.scans()
	if s := r.w.State(); !s.Polling || s.Condition != OK {
		t.Errorf("state %+v", s)
	}
	write(t, filepath.Join(mkdir(t, dir, "x", "y"), "a.tif"), 10)
	r.want("x/y/a.tif", 10)
}

func TestDeletedBeforeSettling(t *testing.T) {
	dir := t.TempDir()
	o := fast(dir)
	o.Quiet = 2 * time.Second
	r := start(t, o)
	write(t, filepath.Join(dir, "a.tif"), 10)
	r.until("followed", func(s State) bool { return s.Unsettled == 1 })
	if err := os.Remove(filepath.Join(dir, "a.tif")); err != nil {
		t.Fatal(err)
	}
	r.until("forgotten", func(s State) bool { return s.Unsettled == 0 })
	write(t, filepath.Join(dir, "b.tif"), 20)
	r.want("b.tif", 20)
}

func TestEmpty(t *testing.T) {
	dir := t.TempDir()
	o := fast(dir)
	o.Longest = 300 * time.Millisecond
	r := start(t, o)
	begun := time.Now()
	write(t, filepath.Join(dir, "a.tif"), 0)
	r.want("a.tif", 0)
	if d := time.Since(begun); d < o.Longest {
		t.Errorf("given after %v, before %v", d, o.Longest)
	}
}

func TestSubFolders(t *testing.T) {
	dir := t.TempDir()
	o := fast(dir)
	o.Rescan = time.Hour // notifications must do
	r := start(t, o)
	r.scans()
	write(t, filepath.Join(mkdir(t, dir, "one"), "a.tif"), 1)
	r.want("one/a.tif", 1)
	write(t, filepath.Join(mkdir(t, dir, "one", "two"), "b.tif"), 2)
	r.want("one/two/b.tif", 2)
	write(t, filepath.Join(mkdir(t, dir, "one", "two", "three"), "deep.tif"), 3)
	write(t, filepath.Join(mkdir(t, dir, "one", "a.shot"), "cube.tif"), 3)
	write(t, filepath.Join(mkdir(t, dir, ".hidden"), "c.tif"), 3)
	write(t, filepath.Join(dir, "one", "last.tif"), 4)
	r.want("one/last.tif", 4)
}

func TestLinksAreNotFollowed(t *testing.T) {
	out := t.TempDir()
	write(t, filepath.Join(out, "secret.tif"), 9)
	dir := t.TempDir()
	if err := os.Symlink(filepath.Join(out, "secret.tif"), filepath.Join(dir, "a.tif")); err != nil {
		if runtime.GOOS == "windows" {
			t.Logf("links need a privilege there: %v", err)
			return
		}
		t.Fatal(err)
	}
	if err := os.Symlink(out, filepath.Join(dir, "sub")); err != nil {
		t.Fatal(err)
	}
	r := start(t, fast(dir))
	r.scans()
	write(t, filepath.Join(dir, "b.tif"), 2)
	r.want("b.tif", 2)
	disk, err := openRoot(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer disk.Close()
	if _, err := disk.Lstat("sub/secret.tif"); err == nil {
		t.Error("a link led out of the folder")
	}
	if err := disk.ReadDir("sub", func(fs.DirEntry) {}); err == nil {
		t.Error("a link led out of the folder")
	}
}

// TestExchangedFolder opens another folder than the one that os.Root sees,
// as after an exchange between two calls.
func TestExchangedFolder(t *testing.T) {
	here, there := t.TempDir(), t.TempDir()
	disk, err := openRoot(here)
	if err != nil {
		t.Fatal(err)
	}
	defer disk.Close()
	for dir, ok := range map[string]bool{here: true, there: false} {
		f, err := os.Open(dir)
		if err != nil {
			t.Fatal(err)
		}
		defer f.Close()
		if err := disk.(root).inside(f, "."); (err == nil) != ok {
			t.Errorf("%s: %v", dir, err)
		}
	}
}

func TestAccept(t *testing.T) {
	dir := t.TempDir()
	o := fast(dir)
	o.Accept = func(rel string) bool { return filepath.Ext(rel) == ".tif" }
	r := start(t, o)
	write(t, filepath.Join(dir, "a.txt"), 1)
	r.scans()
	write(t, filepath.Join(dir, "b.tif"), 2)
	r.want("b.tif", 2)
	r.scans()
	if n := r.w.State().Files; n != 1 {
		t.Errorf("%d files, want 1", n)
	}
}

func TestVanishingFolder(t *testing.T) {
	dir := mkdir(t, t.TempDir(), "drop")
	old := filepath.Join(dir, "a.tif")
	stamp := time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC)
	drop := func() {
		write(t, old, 10)
		if err := os.Chtimes(old, stamp, stamp); err != nil {
			t.Fatal(err)
		}
	}
	drop()
	r := start(t, fast(dir))
	r.want("a.tif", 10)
	if err := os.RemoveAll(dir); err != nil {
		t.Fatal(err)
	}
	r.until("missing", func(s State) bool { return s.Condition == Missing })
	if s := r.w.State(); s.Err == nil || s.Since.IsZero() {
		t.Errorf("state %+v", s)
	}
	aside := mkdir(t, filepath.Dir(dir), "aside")
	dir, old = aside, filepath.Join(aside, "a.tif")
	drop() // back in one step, so that the old file is never seen half made
	if err := os.Rename(aside, r.w.o.Folder); err != nil {
		t.Fatal(err)
	}
	r.until("back", func(s State) bool { return s.Condition == OK && s.Err == nil })
	r.scans()
	write(t, filepath.Join(r.w.o.Folder, "b.tif"), 20)
	r.want("b.tif", 20) // and not a.tif again
}

func TestMissingAtStart(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "later")
	r := start(t, fast(dir))
	r.until("missing", func(s State) bool { return s.Condition == Missing })
	write(t, filepath.Join(mkdir(t, dir), "a.tif"), 10)
	r.want("a.tif", 10)
}

func TestNotAFolder(t *testing.T) {
	path := filepath.Join(t.TempDir(), "file")
	write(t, path, 1)
	r := start(t, fast(path))
	r.until("failing", func(s State) bool { return s.Condition == Failing && s.Err != nil })
}

func TestBurst(t *testing.T) {
	const n = 5000
	dir := t.TempDir()
	r := start(t, fast(dir))
	go func() {
		for i := range n {
			if err := os.WriteFile(filepath.Join(dir, fmt.Sprintf("%05d.tif", i)), make([]byte, 1+i), 0o600); err != nil {
				t.Error(err)
			}
		}
	}()
	seen := map[string]bool{}
	for len(seen) < n {
		f := r.next()
		if seen[f.Rel] {
			t.Fatalf("%s twice", f.Rel)
		}
		seen[f.Rel] = true
		if want := fmt.Sprintf("%05d.tif", f.Size-1); f.Rel != want {
			t.Fatalf("%s has %d bytes", f.Rel, f.Size)
		}
	}
	r.scans()
	write(t, filepath.Join(dir, "last.tif"), 1)
	r.want("last.tif", 1)
}

func TestRestart(t *testing.T) {
	dir := t.TempDir()
	ledger := map[string]File{}
	r := start(t, fast(dir))
	for i := range 5 {
		write(t, filepath.Join(dir, fmt.Sprintf("%d.tif", i)), 10)
	}
	for range 5 {
		f := r.next()
		ledger[f.Rel] = f
	}
	r.stop()
	write(t, filepath.Join(dir, "0.tif"), 11) // replaced while nobody looked
	write(t, filepath.Join(dir, "5.tif"), 12)
	o := fast(dir)
	o.Known = func(rel string) (int64, time.Time, bool) {
		f, ok := ledger[rel]
		return f.Size, f.ModTime.Truncate(time.Microsecond), ok
	}
	r = start(t, o)
	got := []string{r.next().Rel, r.next().Rel}
	slices.Sort(got)
	if !slices.Equal(got, []string{"0.tif", "5.tif"}) {
		t.Errorf("given %v", got)
	}
	r.scans()
	write(t, filepath.Join(dir, "6.tif"), 13)
	r.want("6.tif", 13)
}
