package watch

import "time"

// content is what tells one version of a file from the next.
type content struct {
	size int64
	mod  time.Time
}

func (c content) same(d content) bool { return c.size == d.size && c.mod.Equal(d.mod) }

// recorded is how far a time may move by being stored and read back.
const recorded = time.Millisecond

// track follows one unsettled file.
type track struct {
	content
	first time.Time // when it was first seen
	since time.Time // when its content was first seen as it is now
	look  time.Time // when to look again; zero while somebody is looking
}

// settler decides when files are quiet. It is pure: observations and times
// go in, settled files come out. Times are this computer's own.
type settler struct {
	quiet, longest time.Duration
	pending        map[string]*track
	done           map[string]content
	loose          map[string]bool // done, but as recorded by an earlier run
	queue          []glance        // in order of time
}

// glance is an appointment to look at a file; it is void unless the file's
// track still names the same time.
type glance struct {
	rel  string
	look time.Time
}

func newSettler(quiet, longest time.Duration) *settler {
	return &settler{quiet: quiet, longest: longest, pending: map[string]*track{},
		done: map[string]content{}, loose: map[string]bool{}}
}

// remember takes a file as settled by an earlier run.
func (s *settler) remember(rel string, c content) {
	s.done[rel] = c
	s.loose[rel] = true
}

// knows says whether a file is settled or being followed.
func (s *settler) knows(rel string) bool {
	_, ok := s.done[rel]
	return ok || s.pending[rel] != nil
}

// observe takes the content of a file, asked for between two times, and says
// whether this content is now settled and new.
func (s *settler) observe(rel string, c content, before, after time.Time) bool {
	t := s.pending[rel]
	if t == nil {
		if s.settled(rel, c) {
			return false
		}
		s.pending[rel] = &track{content: c, first: after, since: after}
		s.schedule(rel, after)
		return false
	}
	if !t.same(c) {
		t.content, t.since = c, after
	}
	if before.Sub(t.since) < s.quiet || c.size == 0 && before.Sub(t.first) < s.longest {
		s.schedule(rel, after)
		return false
	}
	delete(s.pending, rel)
	if s.settled(rel, c) {
		return false // it changed and changed back
	}
	s.done[rel] = c
	return true
}

// settled says whether this content of a file was settled before.
func (s *settler) settled(rel string, c content) bool {
	d, ok := s.done[rel]
	if !ok {
		return false
	}
	if s.loose[rel] && c.size == d.size && c.mod.Sub(d.mod).Abs() < recorded {
		s.done[rel] = c // from now on exactly
		d = c
	}
	delete(s.loose, rel)
	return d.same(c)
}

// vanish forgets an unsettled file. A settled one stays settled: a share
// that goes and comes back must not give everything again.
func (s *settler) vanish(rel string) { delete(s.pending, rel) }

// retry makes a new appointment after a look that failed.
func (s *settler) retry(rel string, now time.Time) {
	if s.pending[rel] != nil {
		s.schedule(rel, now)
	}
}

func (s *settler) schedule(rel string, now time.Time) {
	look := now.Add(s.quiet)
	s.pending[rel].look = look
	s.queue = append(s.queue, glance{rel, look})
}

// next is the time of the next appointment; zero if there is none.
func (s *settler) next() time.Time {
	for len(s.queue) > 0 {
		g := s.queue[0]
		if t := s.pending[g.rel]; t != nil && t.look.Equal(g.look) {
			return g.look
		}
		s.queue = s.queue[1:]
	}
	s.queue = nil
	return time.Time{}
}

// due takes up to most names whose time has come. Each must be answered by
// observe, vanish or retry.
func (s *settler) due(now time.Time, most int) []string {
	var out []string
	for len(out) < most {
		look := s.next()
		if look.IsZero() || look.After(now) {
			break
		}
		rel := s.queue[0].rel
		s.queue = s.queue[1:]
		s.pending[rel].look = time.Time{}
		out = append(out, rel)
	}
	return out
}

// absent forgets the unsettled files that a complete listing, begun at a
// time, did not show.
func (s *settler) absent(listed map[string]struct{}, begun time.Time) {
	for rel, t := range s.pending {
		if _, ok := listed[rel]; !ok && t.first.Before(begun) {
			delete(s.pending, rel)
		}
	}
}
