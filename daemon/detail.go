package daemon

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"io"
	"os"
	"slices"
	"time"

	"unsheard/daemon/web"
	"unsheard/pipeline/measure"
	"unsheard/queue"
)

// Shot returns everything about a shot.
func (s *source) Shot(ctx context.Context, id int64) (web.ShotDetail, error) {
	sh, attempts, err := s.store.Shot(ctx, id)
	if errors.Is(err, queue.ErrNotFound) {
		return web.ShotDetail{}, web.ErrNotFound
	}
	if err != nil {
		return web.ShotDetail{}, err
	}
	d := web.ShotDetail{Shot: listedShot(sh), Gap: sh.Gap, Bundle: cmp.Or(sh.ShownBundle, readSummary(sh.Summary).Bundle), Folder: sh.ResultDir}
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
