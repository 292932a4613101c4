package queue_test

import (
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/testutil"

	"unsheard/queue"
)

func TestMetrics(t *testing.T) {
	reg := prometheus.NewPedanticRegistry()
	now := time.Unix(1_000_000, 0)
	path := filepath.Join(t.TempDir(), "ledger.db")
	open := func() *queue.Store {
		s, err := queue.Open(t.Context(), queue.Options{Path: path, Registerer: reg, Clock: func() time.Time { return now }})
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	s := open()
	if err := enter(t.Context(), s, 3); err != nil {
		t.Fatal(err)
	}
	now = now.Add(90 * time.Second)
	want := func(text string, names ...string) {
		t.Helper()
		if err := testutil.GatherAndCompare(reg, strings.NewReader(text), names...); err != nil {
			t.Error(err)
		}
	}
	want(`
# HELP unsheard_queue_depth Jobs that wait, retries and pauses included.
# TYPE unsheard_queue_depth gauge
unsheard_queue_depth{pass="full"} 3
unsheard_queue_depth{pass="quick"} 3
unsheard_queue_depth{pass="spread"} 0
# HELP unsheard_queue_oldest_age_seconds Time since the longest waiting job was queued, 0 if none waits.
# TYPE unsheard_queue_oldest_age_seconds gauge
unsheard_queue_oldest_age_seconds{pass="full"} 90
unsheard_queue_oldest_age_seconds{pass="quick"} 90
unsheard_queue_oldest_age_seconds{pass="spread"} 0
`, "unsheard_queue_depth", "unsheard_queue_oldest_age_seconds")
	workAll(t, s, 3)
	want(`
# HELP unsheard_shots Shots in the ledger.
# TYPE unsheard_shots gauge
unsheard_shots{state="done"} 3
unsheard_shots{state="failed"} 0
unsheard_shots{state="held"} 0
unsheard_shots{state="lone"} 0
unsheard_shots{state="paired"} 0
unsheard_shots{state="quarantined"} 0
unsheard_shots{state="running"} 0
unsheard_shots{state="waiting"} 0
# HELP unsheard_attempts_total Attempts at shots that ended since the service started.
# TYPE unsheard_attempts_total counter
unsheard_attempts_total{outcome="done",pass="full"} 3
unsheard_attempts_total{outcome="done",pass="quick"} 3
unsheard_attempts_total{outcome="done",pass="spread"} 0
unsheard_attempts_total{outcome="failed",pass="full"} 0
unsheard_attempts_total{outcome="failed",pass="quick"} 0
unsheard_attempts_total{outcome="failed",pass="spread"} 0
unsheard_attempts_total{outcome="given-up",pass="full"} 0
unsheard_attempts_total{outcome="given-up",pass="quick"} 0
unsheard_attempts_total{outcome="given-up",pass="spread"} 0
`, "unsheard_shots", "unsheard_attempts_total")
	problems, err := testutil.GatherAndLint(reg)
	if err != nil || len(problems) > 0 {
		t.Errorf("lint: %v, %v", problems, err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	s = open() // the same registry again: Close had to give it back
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}
