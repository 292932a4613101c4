package export

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"
)

var errKilled = errors.New("killed")

// faulty is a disk whose nth operation fails. A crash makes every later
// operation fail, too: the process is gone.
type faulty struct {
	mu    sync.Mutex // guards n
	n     int        // operations so far
	at    int        // the one that fails, from 1; 0: none
	crash bool
	err   error
}

func (f *faulty) step() error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.n++; f.n == f.at || f.crash && f.at > 0 && f.n > f.at {
		return f.err
	}
	return nil
}

func (f *faulty) disk() *disk {
	return &disk{
		mkdir: func(p string) error {
			if err := f.step(); err != nil {
				return &os.PathError{Op: "mkdir", Path: p, Err: err}
			}
			return realDisk.mkdir(p)
		},
		create: func(p string) (file, error) {
			if err := f.step(); err != nil {
				return nil, &os.PathError{Op: "open", Path: p, Err: err}
			}
			r, err := realDisk.create(p)
			return &faultyFile{r, f}, err
		},
		rename: func(a, b string) error {
			if err := f.step(); err != nil {
				return &os.LinkError{Op: "rename", Old: a, New: b, Err: err}
			}
			return realDisk.rename(a, b)
		},
		removeAll: func(p string) error {
			if err := f.step(); err != nil {
				// A removal that is cut short has removed something already.
				_ = os.Remove(filepath.Join(p, fileMetrics))
				return &os.PathError{Op: "remove", Path: p, Err: err}
			}
			return realDisk.removeAll(p)
		},
		syncDir: func(string) error { return f.step() },
	}
}

type faultyFile struct {
	file
	f *faulty
}

func (w *faultyFile) Write(b []byte) (int, error) {
	if err := w.f.step(); err != nil {
		n, _ := w.file.Write(b[:len(b)/2])
		return n, err
	}
	return w.file.Write(b)
}

func (w *faultyFile) Sync() error { return w.f.step() }

// bare leaves the pictures out.
func bare(r *Result, from origin, o *Options) []part {
	var out []part
	for _, p := range parts(r, from, o) {
		if p.name == fileCube || p.name == fileLog {
			out = append(out, p)
		}
	}
	return out
}

// situation is what stands at the place before the publication under test.
type situation struct {
	name    string
	before  []Result // published one after another
	new     Result
	shelved []string // versions afterwards, as pass/bundle
}

func situations() []situation {
	q, a, b := pulse(3, 4, 5, quick, "aaa"), pulse(3, 4, 5, "full", "aaa"), pulse(3, 4, 5, "full", "bbb")
	c := pulse(3, 4, 5, "full", "ccc")
	return []situation{
		{"first", nil, a, nil},
		{"quick to full", []Result{q}, a, nil},
		{"same again", []Result{a}, a, nil},
		{"other bundle", []Result{a}, b, []string{"full/aaa"}},
		{"third bundle", []Result{a, b}, c, []string{"full/aaa", "full/bbb"}},
		{"same again with versions", []Result{a, b}, b, []string{"full/aaa"}},
	}
}

// prepare publishes what was before and lays a stranger's file beside it.
func prepare(t *testing.T, s situation) (dir string) {
	t.Helper()
	dir = filepath.Join(t.TempDir(), "S 1 µ漢.shot")
	for _, r := range s.before {
		publishTo(t, dir, r, Options{disk: (&faulty{}).disk(), parts: bare})
	}
	if len(s.before) > 0 {
		if err := os.WriteFile(filepath.Join(dir, "my notes.txt"), []byte("keep"), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

// finished checks the end of a publication: the new result in place, the old
// ones on the shelf, the stranger's file kept, nothing hidden left.
func finished(t *testing.T, s situation, dir string) {
	t.Helper()
	if got := whole(t, dir); got != (identity{s.new.Pass, s.new.Bundle}) {
		t.Fatalf("%v is in place", got)
	}
	if got := listing(t, filepath.Dir(dir)); got != filepath.Base(dir) {
		t.Fatalf("beside it: %s", got)
	}
	var shelved []string
	list, err := os.ReadDir(filepath.Join(dir, versions))
	if err != nil && !os.IsNotExist(err) {
		t.Fatal(err)
	}
	for _, e := range list {
		id := whole(t, filepath.Join(dir, versions, e.Name()))
		shelved = append(shelved, id.pass+"/"+id.bundle)
		if !strings.HasSuffix(e.Name(), "-"+id.bundle) {
			t.Errorf("version %s holds bundle %s", e.Name(), id.bundle)
		}
	}
	if fmt.Sprint(shelved) != fmt.Sprint(s.shelved) {
		t.Fatalf("on the shelf: %v, want %v", shelved, s.shelved)
	}
	if len(s.before) > 0 {
		if b, err := os.ReadFile(filepath.Join(dir, "my notes.txt")); err != nil || string(b) != "keep" {
			t.Fatalf("the stranger's file: %q %v", b, err)
		}
	}
}

// operations counts the disk operations of the publication.
func operations(t *testing.T, s situation) int {
	t.Helper()
	f := &faulty{}
	dir := prepare(t, s)
	publishTo(t, dir, s.new, Options{disk: f.disk(), parts: bare})
	finished(t, s, dir)
	return f.n
}

// TestCrash kills the process at every operation of every situation. Before
// any sweep the place holds a whole result or both wait whole under hidden
// names; after the sweep a whole result is in place; publishing again ends as
// if nothing had happened.
func TestCrash(t *testing.T) {
	for _, s := range situations() {
		t.Run(s.name, func(t *testing.T) {
			for at, n := 1, operations(t, s); at <= n; at++ {
				dir := prepare(t, s)
				f := &faulty{at: at, crash: true, err: errKilled}
				err := Publish(context.Background(), dir, s.new, Options{disk: f.disk(), parts: bare})
				afterFault(t, s, dir, at, err)
			}
		})
	}
}

// afterFault checks what a fault left, sweeps, checks, and publishes again.
func afterFault(t *testing.T, s situation, dir string, at int, err error) {
	t.Helper()
	had := len(s.before) > 0
	if exists(dir) {
		whole(t, dir)
	} else if had && !strings.Contains(listing(t, filepath.Dir(dir)), endPrevious) {
		t.Fatalf("operation %d: the old result is gone", at)
	}
	if err == nil && whole(t, dir) != (identity{s.new.Pass, s.new.Bundle}) {
		t.Fatalf("operation %d: no error, yet the new result is not in place", at)
	}
	if _, err := Sweep(context.Background(), filepath.Dir(dir), SweepOptions{Older: -1}); err != nil {
		t.Fatalf("operation %d: %v", at, err)
	}
	if had {
		whole(t, dir)
	}
	if got := listing(t, filepath.Dir(dir)); got != filepath.Base(dir) && got != "" {
		t.Fatalf("operation %d: after the sweep: %s", at, got)
	}
	publishTo(t, dir, s.new, Options{disk: (&faulty{}).disk(), parts: bare})
	finished(t, s, dir)
}

// TestOneFault lets one operation fail and the process live on: the caller
// learns the system's reason, and a whole result is in place at once.
func TestOneFault(t *testing.T) {
	for _, s := range situations() {
		t.Run(s.name, func(t *testing.T) {
			for at, n := 1, operations(t, s); at <= n; at++ {
				dir := prepare(t, s)
				var warned error
				f := &faulty{at: at, err: syscall.ENOSPC}
				err := Publish(context.Background(), dir, s.new,
					Options{disk: f.disk(), parts: bare, Warn: func(err error) { warned = err }})
				if err == nil {
					err = warned
				}
				if !errors.Is(err, syscall.ENOSPC) || !Retryable(err) {
					t.Fatalf("operation %d: error %v", at, err)
				}
				if len(s.before) > 0 && !exists(dir) {
					t.Fatalf("operation %d: nothing in place", at)
				}
				afterFault(t, s, dir, at, err)
			}
		})
	}
}

// TestCrashInSweep kills the sweep, too, at every operation.
func TestCrashInSweep(t *testing.T) {
	s := situations()[4]
	total := operations(t, s)
	for at := total - 12; at <= total; at++ {
		for second := 1; second < 12; second++ {
			dir := prepare(t, s)
			f := &faulty{at: at, crash: true, err: errKilled}
			err := Publish(context.Background(), dir, s.new, Options{disk: f.disk(), parts: bare})
			f = &faulty{at: second, crash: true, err: errKilled}
			_, _ = Sweep(context.Background(), filepath.Dir(dir), SweepOptions{Older: -1, disk: f.disk()})
			afterFault(t, s, dir, at*100+second, err)
		}
	}
}
