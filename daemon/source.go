package daemon

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync/atomic"
	"time"

	"unsheard/config"
	"unsheard/daemon/watch"
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
	snap.Attention, snap.More, err = s.attention(ctx, snap.Stations)
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

// attention lists what waits for a person: folders, bundles, then shots.
func (s *source) attention(ctx context.Context, stations []web.Station) (out []web.Attention, more int, err error) {
	for _, st := range stations {
		for _, f := range st.Folders {
			if f.Condition != string(watch.OK) {
				out = append(out, web.Attention{Station: st.Name, Name: f.Path, State: f.Condition, Since: f.Since,
					Text: fmt.Sprintf("the %s folder is %s: %s", f.Arm, f.Condition, f.Detail), Remedy: "check the share, its cable and its rights; it is taken up again by itself"})
			}
		}
		if st.Warning != "" {
			out = append(out, web.Attention{Station: st.Name, Name: "bundle", State: "bundle", Text: st.Warning,
				Remedy: "make one with unsheard calibrate and put it into the station's bundle folder"})
		}
		rejected, ferr := s.store.Frames(ctx, st.Name, queue.FrameRejected, troubles)
		err = errors.Join(err, ferr)
		for _, f := range rejected {
			if time.Since(f.Seen) < attentive {
				out = append(out, web.Attention{Station: st.Name, Name: f.Path, State: "rejected", Since: f.Seen, Text: f.Reason, Remedy: "see the file itself"})
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

// Shot returns everything about a shot.
func (s *source) Shot(ctx context.Context, id int64) (web.ShotDetail, error) {
	sh, attempts, err := s.store.Shot(ctx, id)
	if errors.Is(err, queue.ErrNotFound) {
		return web.ShotDetail{}, web.ErrNotFound
	}
	if err != nil {
		return web.ShotDetail{}, err
	}
	d := web.ShotDetail{Shot: listedShot(sh), Gap: sh.Gap, Bundle: sh.ShownBundle, Folder: sh.ResultDir}
	for _, a := range attempts {
		w := web.Attempt{Number: a.Number, Pass: string(a.Pass), Host: a.Host, Start: a.Started, Err: a.Error}
		if !a.Ended.IsZero() {
			w.Took = max(a.Ended.Sub(a.Started), 1)
		}
		d.Attempts = append(d.Attempts, w)
	}
	d.Frames = s.frames(sh)
	s.results(sh, &d)
	return d, nil
}

func (s *source) frames(sh queue.Shot) (out []web.Frame) {
	p, ok := s.worker.places[sh.Station]
	if !ok {
		return nil
	}
	add := func(arm, rel, path string, t time.Time) {
		if rel == "" {
			return
		}
		f := web.Frame{Arm: arm, Path: path, Time: t}
		if st, err := os.Stat(path); err == nil {
			f.Size = st.Size()
		}
		out = append(out, f)
	}
	add("streak", sh.StreakPath, p.streakFile(sh.StreakPath), sh.Taken)
	add("reference", sh.ReferencePath, p.referenceFile(sh.ReferencePath), sh.Taken.Add(sh.Gap))
	return out
}

// results reads the numbers and the files of a result folder.
func (s *source) results(sh queue.Shot, d *web.ShotDetail) {
	if sh.ResultDir == "" {
		return
	}
	var m struct {
		Bundle     string                      `json:"bundle"`
		Quantities map[string]measure.Quantity `json:"quantities"`
		Verdict    measure.Verdict             `json:"verdict"`
	}
	if raw, err := readFile(sh.ResultDir, "metrics.json"); err == nil && json.Unmarshal(raw, &m) == nil {
		names := make([]string, 0, len(m.Quantities))
		for n := range m.Quantities {
			names = append(names, n)
		}
		slices.Sort(names)
		for _, n := range names {
			d.Quantities = append(d.Quantities, shownQuantity(n, m.Quantities[n]))
		}
		for _, r := range m.Verdict.Reasons {
			d.Reasons = append(d.Reasons, web.Reason{Code: r.Code, Text: r.Text, Remedy: r.Remedy})
		}
	}
	entries, err := os.ReadDir(sh.ResultDir)
	if err != nil {
		return
	}
	for _, e := range entries {
		if st, err := e.Info(); err == nil && st.Mode().IsRegular() {
			d.Files = append(d.Files, web.Info{Name: e.Name(), Size: st.Size(), ModTime: st.ModTime()})
		}
	}
}

// metricsBytes bounds the metrics.json that the page reads.
const metricsBytes = 16 << 20

// readFile reads a small file of a result folder without leaving it.
func readFile(dir, name string) ([]byte, error) {
	root, err := os.OpenRoot(dir)
	if err != nil {
		return nil, err
	}
	defer root.Close()
	f, err := root.Open(name)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	return io.ReadAll(io.LimitReader(f, metricsBytes))
}

// Open opens a result file of a shot.
func (s *source) Open(ctx context.Context, shot int64, name string) (io.ReadSeekCloser, web.Info, error) {
	sh, _, err := s.store.Shot(ctx, shot)
	if errors.Is(err, queue.ErrNotFound) || err == nil && sh.ResultDir == "" {
		return nil, web.Info{}, web.ErrNotFound
	}
	if err != nil {
		return nil, web.Info{}, err
	}
	root, err := os.OpenRoot(sh.ResultDir)
	if err != nil {
		return nil, web.Info{}, web.ErrNotFound
	}
	defer root.Close()
	f, err := root.Open(name)
	if err != nil {
		return nil, web.Info{}, web.ErrNotFound
	}
	st, err := f.Stat()
	if err != nil || !st.Mode().IsRegular() {
		f.Close()
		return nil, web.Info{}, web.ErrNotFound
	}
	return f, web.Info{Name: name, Size: st.Size(), ModTime: st.ModTime()}, nil
}

// Changed tells the page that something changed.
func (s *source) Changed() <-chan struct{} { return s.changes }

// Ready returns the checks that decide whether work gets done.
func (s *source) Ready(ctx context.Context) []web.Check {
	var out []web.Check
	add := func(name string, err error) {
		c := web.Check{Name: name, OK: err == nil}
		if err != nil {
			c.Detail = err.Error()
		}
		out = append(out, c)
	}
	_, err := s.store.Counts(ctx, "")
	add("ledger", err)
	err = nil
	if !s.working.Load() {
		err = errors.New("no job is started: the service is starting or stopping")
	}
	add("workers", err)
	for i, in := range s.intakes {
		c := &s.config.Station[i]
		for j := range in.arms {
			w := in.arms[j].watcher.State()
			err = nil
			if w.Condition != watch.OK {
				err = fmt.Errorf("%s is %s: %v", w.Folder, w.Condition, w.Err)
			}
			add("folder "+c.Name+" "+string(in.arms[j].name), err)
		}
		_, err = s.bundles.at(c.Bundle, time.Now())
		add("bundle "+c.Name, err)
		add("disk "+c.Name, s.worker.room(s.worker.places[c.Name]))
	}
	return out
}

// heartbeat is how often the main loop shows that it turns.
const heartbeat = time.Second

// Alive reports a main loop that has stopped turning.
func (s *source) Alive(context.Context) error {
	if d := time.Since(time.Unix(0, s.beat.Load())); d > 10*heartbeat {
		return fmt.Errorf("the main loop has not turned for %v", d.Round(time.Second))
	}
	return nil
}

// pulse keeps the heart beating until ctx ends.
func (s *source) pulse(ctx context.Context) error {
	t := time.NewTicker(heartbeat)
	defer t.Stop()
	for {
		s.beat.Store(time.Now().UnixNano())
		select {
		case <-ctx.Done():
			return nil
		case <-t.C:
		}
	}
}
