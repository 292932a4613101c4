package web

import (
	"context"
	"fmt"
	"net/http"
	"sync"
	"time"
)

const (
	pace  = time.Second      // no stream is told more often
	pulse = 5 * time.Second  // every stream is told at least this often: ages move on
	patch = 10 * time.Second // a stream that takes no byte for this long is cut
)

// hub hands "something changed" on to the open event streams. It keeps no
// list of changes: a stream that sleeps through three finds one, and the page
// then fetches the whole state.
type hub struct {
	most int

	mu      sync.Mutex // guards the three below
	streams map[chan struct{}]struct{}
	closed  chan struct{} // closed when no stream may stay
	done    bool
}

func newHub(most int) *hub {
	return &hub{most: most, streams: map[chan struct{}]struct{}{}, closed: make(chan struct{})}
}

// run tells the streams until ctx ends, then closes them.
func (h *hub) run(ctx context.Context, changed <-chan struct{}) error {
	defer h.close()
	beat := time.NewTicker(pulse)
	defer beat.Stop()
	for {
		select {
		case <-ctx.Done():
			return nil
		case _, ok := <-changed:
			if !ok {
				changed = nil
				continue
			}
		case <-beat.C:
		}
		h.tell()
		select {
		case <-ctx.Done():
			return nil
		case <-time.After(pace):
		}
	}
}

func (h *hub) tell() {
	h.mu.Lock()
	defer h.mu.Unlock()
	for c := range h.streams {
		select {
		case c <- struct{}{}:
		default: // it already knows
		}
	}
}

func (h *hub) close() {
	h.mu.Lock()
	defer h.mu.Unlock()
	if !h.done {
		h.done = true
		close(h.closed)
	}
}

// join adds a stream; it returns nil when there are too many or the hub is
// closed.
func (h *hub) join() chan struct{} {
	h.mu.Lock()
	defer h.mu.Unlock()
	if h.done || len(h.streams) >= h.most {
		return nil
	}
	c := make(chan struct{}, 1)
	h.streams[c] = struct{}{}
	return c
}

func (h *hub) leave(c chan struct{}) {
	h.mu.Lock()
	defer h.mu.Unlock()
	delete(h.streams, c)
}

// events answers GET /events.
func (s *Server) events(w http.ResponseWriter, r *http.Request) {
	if r.Method == http.MethodHead {
		w.Header().Set("Content-Type", "text/event-stream")
		return
	}
	c := s.hub.join()
	if c == nil {
		s.metrics.refused.WithLabelValues("streams").Inc()
		w.Header().Set("Retry-After", "15")
		http.Error(w, "too many open pages, this one reloads on its own", http.StatusServiceUnavailable)
		return
	}
	defer s.hub.leave(c)
	s.metrics.streams.Inc()
	defer s.metrics.streams.Dec()

	w.Header().Set("Content-Type", "text/event-stream")
	w.Header().Set("Cache-Control", "no-store")
	out := http.NewResponseController(w)
	_ = out.SetReadDeadline(time.Time{}) // a stream outlives the time of a page
	send := func(text string) bool {
		_ = out.SetWriteDeadline(time.Now().Add(patch))
		_, err := fmt.Fprint(w, text)
		return err == nil && out.Flush() == nil
	}
	// retry: the browser comes back by itself 3 s after a lost connection.
	for ok := send("retry: 3000\nevent: hello\ndata:\n\n"); ok; ok = send("event: changed\ndata:\n\n") {
		select {
		case <-c:
		case <-r.Context().Done():
			return
		case <-s.hub.closed:
			return
		}
	}
}
