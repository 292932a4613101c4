package queue

import "sync"

// subscribers are told, without detail, that something changed.
type subscribers struct {
	mu  sync.Mutex
	all map[chan struct{}]struct{} // guarded by mu
}

// Changes returns a channel that receives a value after something in the
// ledger was changed by this process. Changes that come faster than they are
// read are told once. stop ends it; the channel is never closed.
func (s *Store) Changes() (changes <-chan struct{}, stop func()) {
	c := make(chan struct{}, 1)
	s.subs.mu.Lock()
	defer s.subs.mu.Unlock()
	if s.subs.all == nil {
		s.subs.all = map[chan struct{}]struct{}{}
	}
	s.subs.all[c] = struct{}{}
	return c, func() {
		s.subs.mu.Lock()
		defer s.subs.mu.Unlock()
		delete(s.subs.all, c)
	}
}

func (s *Store) changed() {
	s.subs.mu.Lock()
	defer s.subs.mu.Unlock()
	for c := range s.subs.all {
		select {
		case c <- struct{}{}:
		default: // it has one to read already
		}
	}
}
