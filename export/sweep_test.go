package export

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"
)

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
