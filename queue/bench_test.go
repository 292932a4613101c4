package queue_test

import (
	"context"
	"fmt"
	"path/filepath"
	"sync/atomic"
	"testing"
	"time"

	"unsheard/queue"
)

// BenchmarkLedger measures what a page and the watcher ask of a ledger with
// 100,000 shots.
func BenchmarkLedger(b *testing.B) {
	const n = 100_000
	s, err := queue.Open(b.Context(), queue.Options{Path: filepath.Join(b.TempDir(), "ledger.db"), Passes: []queue.Pass{queue.Full}})
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	fill(b, s, n)
	middle, err := s.Shots(b.Context(), queue.Filter{Until: time.Unix(n/2, 0), Limit: 1})
	if err != nil || len(middle) != 1 {
		b.Fatal(middle, err)
	}
	for _, c := range []struct {
		name string
		f    queue.Filter
	}{
		{"first page", queue.Filter{}},
		{"page in the middle", queue.Filter{Before: middle[0].Cursor()}},
		{"one station", queue.Filter{Station: "bay"}},
		{"one state", queue.Filter{States: []queue.State{queue.StatePaired}}},
		{"state of a station", queue.Filter{Station: "bay", States: []queue.State{queue.StateLone}, Before: middle[0].Cursor()}},
		{"two states", queue.Filter{States: []queue.State{queue.StateLone, queue.StatePaired}}},
		{"verdict that none has", queue.Filter{Verdict: "unusable"}},
		{"text that none has", queue.Filter{Text: "nowhere"}},
	} {
		b.Run(c.name, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				if _, err := s.Shots(b.Context(), c.f); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
	b.Run("counts", func(b *testing.B) {
		for b.Loop() {
			if _, err := s.Counts(b.Context(), ""); err != nil {
				b.Fatal(err)
			}
		}
	})
	b.Run("depth", func(b *testing.B) {
		for b.Loop() {
			if _, err := s.QueueDepth(b.Context()); err != nil {
				b.Fatal(err)
			}
		}
	})
	b.Run("known", func(b *testing.B) {
		for b.Loop() {
			if known, err := s.Known(b.Context(), "bay", queue.Streak); err != nil || len(known) != n {
				b.Fatal(len(known), err)
			}
		}
	})
}

// fill makes n shots, every fifth of them lone.
func fill(b *testing.B, s *queue.Store, n int) {
	b.Helper()
	var frames []queue.Frame
	for i := range n {
		for _, arm := range []queue.Arm{queue.Streak, queue.Reference} {
			frames = append(frames, queue.Frame{Station: "bay", Arm: arm, Path: fmt.Sprintf("%06d.tif", i), Size: 1,
				ModTime: time.Unix(int64(i), 0), Stamp: time.Unix(int64(i), 0), HasTime: true})
		}
	}
	added, err := s.AddFrames(b.Context(), frames)
	if err != nil {
		b.Fatal(err)
	}
	var d queue.Decision
	for i := 0; i < len(added); i += 2 {
		if i%10 == 0 {
			d.Lone = append(d.Lone, queue.Lone{Frame: added[i].ID, Reason: "nobody came"})
		} else {
			d.Pairs = append(d.Pairs, queue.Pair{Streak: added[i].ID, Reference: added[i+1].ID})
		}
	}
	if _, err := s.Commit(b.Context(), d, "b1"); err != nil {
		b.Fatal(err)
	}
}

// BenchmarkWork measures the ledger's share of a job: pairs are worked that are
// no work at all.
func BenchmarkWork(b *testing.B) {
	s, err := queue.Open(b.Context(), queue.Options{Path: filepath.Join(b.TempDir(), "ledger.db"), Passes: []queue.Pass{queue.Full}})
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	if err := enter(b.Context(), s, b.N); err != nil {
		b.Fatal(err)
	}
	ctx, cancel := context.WithCancel(b.Context())
	left := int64(b.N)
	w := queue.WorkerFunc(func(context.Context, queue.Task) (queue.Outcome, error) {
		if atomic.AddInt64(&left, -1) == 0 {
			cancel()
		}
		return queue.Outcome{Verdict: "good"}, nil
	})
	b.ResetTimer()
	if err := s.Run(ctx, w, queue.RunOptions{Slots: 2}); err != nil {
		b.Fatal(err)
	}
	b.StopTimer()
	if counts, err := s.Counts(b.Context(), ""); err != nil || counts[queue.StateDone] != b.N {
		b.Fatal(counts, err)
	}
}
