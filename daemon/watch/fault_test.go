package watch

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/fsnotify/fsnotify"
	"github.com/prometheus/client_golang/prometheus"
	"go.uber.org/zap"
	"go.uber.org/zap/zaptest/observer"
)

// share is a disk that can hang or fail.
type share struct {
	tree
	hang chan struct{} // nil: answers; else every call waits for its close
	fail string        // this sub-folder cannot be listed

	asked, listings *atomic.Int32 // calls, if set
}

func (s *share) wait() {
	if s.hang != nil {
		<-s.hang
	}
}

func (s *share) Lstat(rel string) (fs.FileInfo, error) {
	s.wait()
	if s.asked != nil {
		s.asked.Add(1)
	}
	return s.tree.Lstat(rel)
}

func (s *share) ReadDir(dir string, each func(fs.DirEntry)) error {
	s.wait()
	if s.listings != nil {
		s.listings.Add(1)
	}
	if s.fail != "" && dir == s.fail {
		return fs.ErrPermission
	}
	return s.tree.ReadDir(dir, each)
}

func TestHungShare(t *testing.T) {
	dir := t.TempDir()
	o := fast(dir)
	o.Stuck = 100 * time.Millisecond
	var hang atomic.Pointer[chan struct{}]
	var opened atomic.Int32
	var none chan struct{}
	hang.Store(&none)
	r := start(t, o, func(w *Watcher) {
		w.open = func(folder string) (tree, error) {
			opened.Add(1)
			disk, err := openRoot(folder)
			return &share{tree: disk, hang: *hang.Load()}, err
		}
	})
	r.scans()
	gate := make(chan struct{})
	hang.Store(&gate)
	r.until("stuck", func(s State) bool { return s.Condition == Stuck && s.Err != nil })
	tasks := opened.Load()
	write(t, filepath.Join(dir, "a.tif"), 10)
	time.Sleep(3 * o.Rescan) // time enough for further tasks, if there were any
	if n := opened.Load(); n != tasks {
		t.Errorf("%d tasks begun while one was stuck", n-tasks)
	}
	hang.Store(&none)
	close(gate)
	r.want("a.tif", 10)
	r.until("ok", func(s State) bool { return s.Condition == OK && s.Err == nil })
}

// TestMissingFolderIsLeftInPeace has notifications and unsettled files while
// the folder cannot be opened: they must not keep the disk busy.
func TestMissingFolderIsLeftInPeace(t *testing.T) {
	dir := t.TempDir()
	write(t, filepath.Join(dir, "a.tif"), 0) // empty: stays unsettled
	var opened atomic.Int32
	var gone atomic.Bool
	o := fast(dir)
	o.Rescan = time.Hour
	r := start(t, o, func(w *Watcher) {
		w.open = func(folder string) (tree, error) {
			opened.Add(1)
			if gone.Load() {
				return nil, fs.ErrNotExist
			}
			return openRoot(folder)
		}
	})
	r.until("followed", func(s State) bool { return s.Unsettled == 1 })
	gone.Store(true)
	write(t, filepath.Join(dir, "b.tif"), 10)
	r.until("missing", func(s State) bool { return s.Condition == Missing })
	before := opened.Load()
	time.Sleep(2 * firstRetry)
	if n := opened.Load() - before; n > 3 {
		t.Errorf("the folder was tried %d times in %v", n, 2*firstRetry)
	}
	gone.Store(false)
	r.want("b.tif", 10)
}

// TestSettledFilesAreNotAskedFor counts questions about sizes: with every
// file known, only the trickle is left.
func TestSettledFilesAreNotAskedFor(t *testing.T) {
	const n = 3 * trickle
	dir := t.TempDir()
	for i := range n {
		write(t, filepath.Join(dir, fmt.Sprintf("%d.tif", i)), 1)
	}
	o := fast(dir)
	var recalled atomic.Int32
	o.Known = func(rel string) (int64, time.Time, bool) {
		recalled.Add(1)
		info, err := os.Stat(filepath.Join(dir, rel))
		if err != nil {
			return 0, time.Time{}, false
		}
		return info.Size(), info.ModTime(), true
	}
	var asked, listings atomic.Int32
	r := start(t, o, deafen, func(w *Watcher) {
		w.open = func(folder string) (tree, error) {
			disk, err := openRoot(folder)
			return &share{tree: disk, asked: &asked, listings: &listings}, err
		}
	})
	for range 4 {
		r.scans()
	}
	r.stop()
	if k := recalled.Load(); k != n {
		t.Errorf("Known was asked %d times for %d files", k, n)
	}
	if a, l := asked.Load(), listings.Load(); a > l*trickle || a < trickle {
		t.Errorf("%d questions after %d listings, want %d for each", a, l, trickle)
	}
}

func TestStopWhileHung(t *testing.T) {
	o := fast(t.TempDir())
	o.Stuck = 50 * time.Millisecond
	gate := make(chan struct{})
	r := start(t, o, func(w *Watcher) {
		w.open = func(folder string) (tree, error) {
			disk, err := openRoot(folder)
			return &share{tree: disk, hang: gate}, err
		}
	})
	r.until("stuck", func(s State) bool { return s.Condition == Stuck })
	r.stop() // fails if Run does not return
	close(gate)
}

func TestUnreadableSubFolder(t *testing.T) {
	dir := t.TempDir()
	mkdir(t, dir, "closed")
	r := start(t, fast(dir), func(w *Watcher) {
		w.open = func(folder string) (tree, error) {
			disk, err := openRoot(folder)
			return &share{tree: disk, fail: "closed"}, err
		}
	})
	r.until("failing", func(s State) bool { return s.Condition == Failing })
	if err := r.w.State().Err; !errors.Is(err, fs.ErrPermission) || !strings.Contains(err.Error(), `"closed"`) {
		t.Errorf("error %v", err)
	}
	write(t, filepath.Join(dir, "a.tif"), 10)
	r.want("a.tif", 10)
}

// TestOverflow drops a folder's notifications and then says that some were
// lost: only that can make the file known.
func TestOverflow(t *testing.T) {
	dir := t.TempDir()
	o := fast(dir)
	o.Rescan = time.Hour
	heard := make(chan *ears, 1)
	r := start(t, o, func(w *Watcher) {
		w.hear = func() (*ears, error) {
			e, err := newEars()
			heard <- e
			return e, err
		}
	})
	r.scans()
	e := <-heard
	if err := e.Remove(dir); err != nil {
		t.Fatal(err)
	}
	write(t, filepath.Join(dir, "a.tif"), 10)
	e.Errors <- fsnotify.ErrEventOverflow
	r.want("a.tif", 10)
}

func TestNobodyReads(t *testing.T) {
	dir := t.TempDir()
	write(t, filepath.Join(dir, "a.tif"), 10)
	r := start(t, fast(dir))
	r.until("settled", func(s State) bool { return s.Files == 1 && s.Unsettled == 0 })
	r.scans() // it goes on looking
	r.stop()  // and stops although nobody took the file
}

func TestLifecycle(t *testing.T) {
	w, err := New(fast(t.TempDir()))
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if err := w.Run(ctx, make(chan File)); err != nil { // stopped before it starts
		t.Error(err)
	}
	r := start(t, fast(t.TempDir()))
	r.scans()
	if err := r.w.Run(t.Context(), make(chan File)); !errors.Is(err, ErrRunning) {
		t.Errorf("second Run: %v", err)
	}
	r.stop()
	ctx, cancel = context.WithTimeout(t.Context(), 10*time.Millisecond)
	defer cancel()
	if err := r.w.Run(ctx, make(chan File)); err != nil { // again, and stopped soon
		t.Error(err)
	}
}

func TestOptions(t *testing.T) {
	_, err := New(Options{Quiet: -1, Depth: -2})
	if err == nil {
		t.Fatal("accepted")
	}
	for _, want := range []string{"folder is empty", "Quiet = -1ns is negative", "Depth = -2 is negative"} {
		if !strings.Contains(err.Error(), want) {
			t.Errorf("%v does not say %q", err, want)
		}
	}
}

// sample reads one metric with these labels.
func sample(t *testing.T, reg *prometheus.Registry, name, arm string) float64 {
	t.Helper()
	families, err := reg.Gather()
	if err != nil {
		t.Fatal(err)
	}
	for _, f := range families {
		if f.GetName() != name {
			continue
		}
		for _, m := range f.GetMetric() {
			if h := m.GetHistogram(); h != nil {
				return float64(h.GetSampleCount())
			}
			for _, l := range m.GetLabel() {
				if l.GetName() == "arm" && l.GetValue() == arm {
					return m.GetCounter().GetValue() + m.GetGauge().GetValue()
				}
			}
		}
	}
	t.Errorf("no %s for %s", name, arm)
	return 0
}

func TestMetricsAndLog(t *testing.T) {
	reg := prometheus.NewRegistry()
	m, err := NewMetrics(reg)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := NewMetrics(reg); err == nil {
		t.Error("registered twice")
	}
	core, logs := observer.New(zap.InfoLevel)
	dir := t.TempDir()
	a, b := fast(dir), fast(filepath.Join(dir, "none"))
	a.Metrics, b.Metrics = m, m
	b.Arm, b.Logger = "reference", zap.New(core)
	ra, rb := start(t, a), start(t, b)
	write(t, filepath.Join(dir, "a.tif"), 10)
	ra.want("a.tif", 10)
	ra.scans()
	rb.until("missing", func(s State) bool { return s.Condition == Missing })
	ra.stop()
	rb.stop()
	for _, c := range []struct {
		name, arm string
		want      float64
	}{
		{"unsheard_watch_files_total", "streak", 1},
		{"unsheard_watch_folder_up", "streak", 1},
		{"unsheard_watch_folder_up", "reference", 0},
	} {
		if got := sample(t, reg, c.name, c.arm); got != c.want {
			t.Errorf("%s{arm=%q} = %v, want %v", c.name, c.arm, got, c.want)
		}
	}
	if got := sample(t, reg, "unsheard_watch_scan_seconds", ""); got < 2 {
		t.Errorf("%v listings measured, want 2 at least", got)
	}
	if got := logs.FilterMessage("folder is missing").Len(); got != 1 {
		t.Errorf("missing was logged %d times, want once", got)
	}
}
