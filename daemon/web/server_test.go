package web

import (
	"bufio"
	"context"
	"net/http"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"go.uber.org/goleak"
)

func TestSnapshotIsSharedForASecond(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		f := newFake()
		h := serve(t, f, nil).Handler()
		for range 20 {
			get(t, h, "/")
		}
		if f.asked != 1 {
			t.Errorf("20 pages at once asked %d times, want 1", f.asked)
		}
		time.Sleep(fresh)
		get(t, h, "/")
		if f.asked != 2 {
			t.Errorf("a second later asked %d times, want 2", f.asked)
		}
	})
}

// TestSlowSource has a source that hangs until its context ends: pages go on
// with the old state, and one request at a time asks.
func TestSlowSource(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		calls := 0
		c := newCache(func(ctx context.Context) Snapshot {
			calls++
			if calls == 1 {
				return Snapshot{Time: start, Campaign: "first"}
			}
			<-ctx.Done()
			return Snapshot{}
		})
		c.get(t.Context())
		time.Sleep(fresh)
		began := time.Now()
		var all sync.WaitGroup
		for range 10 {
			all.Go(func() {
				if got := c.get(t.Context()); got.Campaign != "first" {
					t.Errorf("got %q, want the snapshot before", got.Campaign)
				}
			})
		}
		all.Wait()
		if calls != 2 {
			t.Errorf("asked %d times, want 2", calls)
		}
		if waited := time.Since(began); waited > askTime {
			t.Errorf("pages waited %v, want at most %v", waited, askTime)
		}
	})
}

func TestOldStateSaysSo(t *testing.T) {
	f := newFake()
	s := serve(t, f, func(o *Options) { o.Clock = func() time.Time { return start.Add(2 * time.Minute) } })
	if body := get(t, s.Handler(), "/").Body.String(); !strings.Contains(body, "has not answered for 1 min 52 s") || !strings.Contains(body, `data-level="bad"`) {
		t.Error("a state of two minutes ago is shown as if it were new")
	}
	f = newFake()
	f.snap = Snapshot{}
	if body := get(t, serve(t, f, nil).Handler(), "/").Body.String(); !strings.Contains(body, "no answer") {
		t.Error("a service that never answered is shown as healthy")
	}
}

func TestHubCoalesces(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		h := newHub(2)
		ctx, stop := context.WithCancel(t.Context())
		changed := make(chan struct{})
		done := make(chan error, 1)
		go func() { done <- h.run(ctx, changed) }()
		c, d := h.join(), h.join()
		if h.join() != nil {
			t.Error("a third stream was let in, want at most 2")
		}
		told := 0
		began := time.Now()
		for range 4 { // each takes a second: the hub does not hear faster
			changed <- struct{}{}
			synctest.Wait()
			select {
			case <-c:
				told++
			default:
			}
		}
		if took := time.Since(began); took != 3*pace || told != 4 {
			t.Errorf("4 changes took %v and told %d times, want %v and 4", took, told, 3*pace)
		}
		if len(d) != 1 {
			t.Errorf("a stream that sleeps holds %d hints, want 1", len(d))
		}
		h.leave(d)
		if h.join() == nil {
			t.Error("no room after a stream left")
		}
		stop()
		if err := <-done; err != nil {
			t.Errorf("run: %v", err)
		}
		select {
		case <-h.closed:
		default:
			t.Error("streams stay open after the end")
		}
		if h.join() != nil {
			t.Error("a closed hub lets streams in")
		}
	})
}

func TestHubBeatsWithoutChanges(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		h := newHub(1)
		ctx, stop := context.WithCancel(t.Context())
		changed := make(chan struct{})
		close(changed) // a source that ends its hints must not spin the loop
		done := make(chan error, 1)
		go func() { done <- h.run(ctx, changed) }()
		c := h.join()
		began := time.Now()
		<-c
		if got := time.Since(began); got != pulse {
			t.Errorf("first beat after %v, want %v", got, pulse)
		}
		stop()
		<-done
	})
}

func TestRunServesAndStops(t *testing.T) {
	defer goleak.VerifyNone(t)
	f := newFake()
	s := serve(t, f, func(o *Options) { o.Streams = 1 })
	if got := s.Addr(); got != "" {
		t.Errorf("address %q before listening", got)
	}
	if err := s.Listen(t.Context()); err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(t.Context())
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx) }()

	tr := &http.Transport{}
	defer tr.CloseIdleConnections()
	client := &http.Client{Transport: tr, Timeout: 20 * time.Second}
	base := "http://" + s.Addr()
	stream, err := client.Get(base + "/events")
	if err != nil {
		t.Fatal(err)
	}
	defer stream.Body.Close()
	lines := bufio.NewScanner(stream.Body)
	expect := func(want string) {
		t.Helper()
		for lines.Scan() {
			if lines.Text() == want {
				return
			}
		}
		t.Fatalf("the stream ended (%v) before %q", lines.Err(), want)
	}
	expect("event: hello")
	f.set(func(*fake) {})
	expect("event: changed")
	second, err := client.Get(base + "/events")
	if err != nil {
		t.Fatal(err)
	}
	second.Body.Close()
	if second.StatusCode != http.StatusServiceUnavailable || second.Header.Get("Retry-After") == "" {
		t.Errorf("second stream: %s, want 503 with Retry-After", second.Status)
	}
	stop()
	if err := <-done; err != nil {
		t.Errorf("run: %v", err)
	}
	for lines.Scan() {
	}
	if err := s.Run(t.Context()); err == nil {
		t.Error("a second run is accepted")
	}
	if err := s.Close(); err != nil {
		t.Errorf("close after the end: %v", err)
	}
}

func TestStopBeforeStart(t *testing.T) {
	defer goleak.VerifyNone(t)
	s := serve(t, newFake(), nil)
	if err := s.Listen(t.Context()); err != nil {
		t.Fatal(err)
	}
	addr := s.Addr()
	ctx, stop := context.WithCancel(t.Context())
	stop()
	if err := s.Run(ctx); err != nil {
		t.Errorf("run with an ended context: %v", err)
	}
	// The address is free again.
	next := serve(t, newFake(), func(o *Options) { o.Listen = addr })
	if err := next.Listen(t.Context()); err != nil {
		t.Fatalf("take the address again: %v", err)
	}
	other := serve(t, newFake(), func(o *Options) { o.Listen = addr })
	if err := other.Run(t.Context()); err == nil || !strings.Contains(err.Error(), "is another unsheard running") {
		t.Errorf("address in use: %v", err)
	}
	if err := next.Close(); err != nil {
		t.Error(err)
	}
}

func TestTwoServersNeedTwoRegistries(t *testing.T) {
	s := serve(t, newFake(), nil)
	if _, err := New(s.opt); err == nil {
		t.Error("metrics registered twice without an error")
	}
}
