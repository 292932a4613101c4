package web

import (
	"context"
	"sync"
	"time"
)

const (
	fresh     = time.Second     // a snapshot younger than this is shown again
	askTime   = 3 * time.Second // the longest a page waits for a new one
	oldNotice = 15 * time.Second
)

// cache holds the latest snapshot. One request at a time asks for a new one;
// the others wait for it, or go on with the old one when that takes long.
type cache struct {
	ask  func(context.Context) Snapshot
	turn chan struct{} // holds the token of the one who may ask

	mu   sync.Mutex // guards the two below
	snap Snapshot
	at   time.Time // when it was asked for, or did not come, by our monotonic clock
}

func newCache(ask func(context.Context) Snapshot) *cache {
	return &cache{ask: ask, turn: make(chan struct{}, 1)}
}

func (c *cache) get(ctx context.Context) Snapshot {
	if s, ok := c.last(); ok {
		return s
	}
	ctx, cancel := context.WithTimeout(ctx, askTime)
	defer cancel()
	select {
	case c.turn <- struct{}{}:
		defer func() { <-c.turn }()
	case <-ctx.Done():
		s, _ := c.last()
		return s
	}
	if s, ok := c.last(); ok { // someone else was quicker
		return s
	}
	at := time.Now()
	s := c.ask(ctx)
	c.mu.Lock()
	defer c.mu.Unlock()
	if s.Time.IsZero() {
		c.at = time.Now() // a Source in trouble gets a second to breathe
		return c.snap
	}
	c.snap, c.at = s, at
	return s
}

// last returns the snapshot held and whether it is fresh.
func (c *cache) last() (Snapshot, bool) {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.snap, !c.at.IsZero() && time.Since(c.at) < fresh
}
