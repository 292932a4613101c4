package daemon

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"sync/atomic"
	"time"

	"unsheard/config"
	"unsheard/daemon/web"
	"unsheard/pipeline/measure"
	"unsheard/queue"
)

// source shows the service to the page.
type source struct {
	config  *config.Config
	store   *queue.Store
	intakes []*intake
	bundles *bundles
	worker  *worker
	slots   int
	changes <-chan struct{}
	beat    atomic.Int64 // when the heart beat last, unix ns
	working atomic.Bool  // the queue is being worked
	ending  atomic.Bool
}

// recent is how many shots the first page shows, and troubles how many things
// that need a person.
const (
	recent   = 9
	troubles = 8
)

// Now returns the state of the service.
func (s *source) Now(ctx context.Context) web.Snapshot {
	snap := web.Snapshot{Campaign: s.config.Campaign.Name, Time: time.Now()}
	var faults []error
	q, err := s.queue(ctx)
	snap.Queue, faults = q, append(faults, err)
	for i, in := range s.intakes {
		snap.Stations = append(snap.Stations, s.station(&s.config.Station[i], in))
	}
	snap.Attention, snap.More, err = s.attention(ctx)
	faults = append(faults, err)
	snap.Recent, err = s.recent(ctx)
	faults = append(faults, err)
	if err := errors.Join(faults...); err != nil {
		snap.Fault = err.Error()
	}
	return snap
}

// recent lists the latest shots with a result, and those that were given up.
// What only waits or runs is in the health line.
func (s *source) recent(ctx context.Context) (out []web.Shot, err error) {
	f := queue.Filter{Limit: 4 * recent,
		States: []queue.State{queue.StateDone, queue.StateRunning, queue.StatePaired, queue.StateFailed, queue.StateQuarantined}}
	for range 10 { // a long queue lies before the first result: look a few pages down
		shots, err := s.store.Shots(ctx, f)
		if err != nil || len(shots) == 0 {
			return out, err
		}
		for _, sh := range shots {
			if sh.ResultDir != "" || sh.State == queue.StateQuarantined {
				out = append(out, listedShot(sh))
			}
			if len(out) == recent {
				return out, nil
			}
		}
		f.Before, f.Limit = shots[len(shots)-1].Cursor(), 200
	}
	return out, nil
}

func (s *source) queue(ctx context.Context) (web.Queue, error) {
	counts, err := s.store.Counts(ctx, "")
	if err != nil {
		return web.Queue{}, err
	}
	depth, err := s.store.QueueDepth(ctx)
	if err != nil {
		return web.Queue{}, err
	}
	q := web.Queue{Waiting: counts[queue.StatePaired], Running: counts[queue.StateRunning], Retrying: counts[queue.StateFailed],
		Slots: s.slots, PerShot: time.Duration(s.worker.perShot.Load())}
	if q.Waiting > 0 {
		q.Oldest = max(depth[queue.Quick].Oldest, depth[queue.Full].Oldest)
	}
	if sh, ok, err := s.store.LastDone(ctx, ""); err == nil && ok {
		q.Last = sh.Finished
	}
	if s.ending.Load() {
		q.Stopped = "the service is stopping"
	}
	for name, p := range s.worker.places {
		if err := s.worker.room(p); err != nil && q.Stopped == "" {
			q.Stopped = fmt.Sprintf("station %s: %v", name, err)
		}
	}
	return q, nil
}

// expiring is how long before the end of a bundle's validity it is mentioned.
const expiring = 12 * time.Hour

func (s *source) station(c *config.Station, in *intake) web.Station {
	st := web.Station{Name: c.Name}
	b, err := s.bundles.at(c.Bundle, time.Now())
	if err != nil {
		st.Warning = err.Error()
	} else {
		st.Bundle = fmt.Sprintf("%s (%.8s)", filepath.Base(b.Dir), b.ID)
		if left := time.Until(b.ValidUntil); !b.ValidUntil.IsZero() && left < expiring {
			st.Warning = fmt.Sprintf("its validity ends in %v: take a new calibration series", left.Round(time.Minute))
		}
	}
	for i := range in.arms {
		w := in.arms[i].watcher.State()
		f := web.Folder{Arm: string(in.arms[i].name), Path: w.Folder, Condition: string(w.Condition), Since: w.Since}
		if t := in.arms[i].last.Load(); t != 0 {
			f.Last = time.Unix(0, t)
		}
		if w.Err != nil {
			f.Detail = w.Err.Error()
		}
		st.Folders = append(st.Folders, f)
	}
	return st
}

// attention lists the frames and shots that wait for a person, most recent
// first; the page itself adds folders and bundles that are amiss.
func (s *source) attention(ctx context.Context) (out []web.Attention, more int, err error) {
	for i := range s.config.Station {
		name := s.config.Station[i].Name
		rejected, ferr := s.store.Frames(ctx, name, queue.FrameRejected, troubles)
		err = errors.Join(err, ferr)
		for _, f := range rejected {
			if time.Since(f.Seen) < attentive {
				out = append(out, web.Attention{Station: name, Name: f.Path, State: "rejected", Since: f.Seen, Text: f.Reason, Remedy: "mend the file or its name; it is taken up again by itself"})
			}
		}
	}
	shots, serr := s.store.Shots(ctx, queue.Filter{Limit: 3 * troubles, Since: time.Now().Add(-attentive),
		States: []queue.State{queue.StateHeld, queue.StateQuarantined, queue.StateLone}})
	err = errors.Join(err, serr)
	for _, sh := range shots {
		out = append(out, web.Attention{Shot: sh.ID, Name: sh.Name, Station: sh.Station, State: string(sh.State),
			Since: sh.Updated, Text: sh.Reason, Remedy: remedy(sh.State)})
	}
	if len(out) > troubles {
		out, more = out[:troubles], len(out)-troubles
	}
	return out, more, err
}

// attentive is how long ago a shot may have been taken to be mentioned on the
// first page; the list keeps all of them.
const attentive = 24 * time.Hour

func remedy(s queue.State) string {
	switch s {
	case queue.StateHeld:
		return "look at the frames' times and numbers, and at the cameras' clocks"
	case queue.StateLone:
		return "look whether the other camera took the shot; a late file is still paired by itself"
	}
	return "mend what the reason names; a file that is written anew is taken up again"
}

// listedShot is a shot of the ledger as the lists show it.
func listedShot(sh queue.Shot) web.Shot {
	sum := readSummary(sh.Summary)
	out := web.Shot{ID: sh.ID, Name: sh.Name, Station: sh.Station, Time: sh.Taken, State: string(sh.State),
		Pass: string(sh.ShownPass), Verdict: sh.Verdict, Reason: sh.Reason, Published: sh.Finished}
	if out.Reason == "" && len(sum.Reasons) > 0 {
		out.Reason = sum.Reasons[0].Text
	}
	for _, q := range sum.Quantities {
		out.Key = append(out.Key, shownQuantity(q.Name, q.Quantity))
	}
	out.Picture = sh.ResultDir != "" && exists(filepath.Join(sh.ResultDir, "contact.png"))
	return out
}

func exists(path string) bool {
	_, err := os.Stat(path)
	return err == nil
}

func shownQuantity(name string, q measure.Quantity) web.Quantity {
	out := web.Quantity{Name: strings.ReplaceAll(name, "_", " "), Value: q.Value, Sigma: math.NaN(), Unit: q.Unit, Method: q.Method}
	if q.Sigma != nil {
		out.Sigma = *q.Sigma
	}
	if out.Unit == "1" {
		out.Unit = "" // a plain number
	}
	return out
}

// Shots returns a page of the table.
func (s *source) Shots(ctx context.Context, f web.Filter) (web.Page, error) {
	q := queue.Filter{Station: f.Station, Verdict: f.Verdict, Text: f.Text, Limit: f.Limit + 1}
	if f.State != "" {
		q.States = []queue.State{queue.State(f.State)}
	}
	if f.After != "" {
		c, err := parseCursor(f.After)
		if err != nil {
			return web.Page{}, err
		}
		q.Before = c
	}
	shots, err := s.store.Shots(ctx, q)
	if err != nil {
		return web.Page{}, err
	}
	var p web.Page
	if len(shots) > f.Limit {
		shots = shots[:f.Limit]
		c := shots[f.Limit-1].Cursor()
		p.Next = fmt.Sprintf("%d-%d", c.Taken.UnixNano(), c.ID)
	}
	for _, sh := range shots {
		p.Shots = append(p.Shots, listedShot(sh))
	}
	return p, nil
}

func parseCursor(text string) (*queue.Cursor, error) {
	taken, id, ok := strings.Cut(strings.TrimPrefix(text, "-"), "-")
	t, err1 := strconv.ParseInt(taken, 10, 64)
	n, err2 := strconv.ParseInt(id, 10, 64)
	if !ok || err1 != nil || err2 != nil {
		return nil, web.ErrCursor
	}
	if strings.HasPrefix(text, "-") {
		t = -t
	}
	return &queue.Cursor{Taken: time.Unix(0, t).UTC(), ID: n}, nil
}
