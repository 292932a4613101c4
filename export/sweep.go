package export

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"
)

// SweepOptions say what to sweep.
type SweepOptions struct {
	// Older spares hidden folders whose attempt began less than this ago, as
	// it may still be running. Default 24 h; negative: spare none.
	Older time.Duration

	// Dead, if not nil, is asked about folders that Older would spare: true
	// if the attempt named (Options.Attempt is part of the name) is known to
	// have ended.
	Dead func(name string) bool

	disk *disk
	now  func() time.Time
}

// Swept counts what a sweep did.
type Swept struct {
	Removed  int // unfinished folders removed
	Finished int // interrupted swaps finished
	Spared   int // hidden folders left, as they may be in use
}

// leftover is a hidden folder of an attempt.
type leftover struct {
	path, name string
	base       string // of the result folder
	began      time.Time
	end        string
}

// leftovers lists the hidden folders in parent, in order of name.
func leftovers(parent string) ([]leftover, error) {
	list, err := os.ReadDir(parent)
	if err != nil {
		return nil, err
	}
	var out []leftover
	for _, e := range list {
		if l, ok := parseLeftover(e.Name()); ok && e.IsDir() {
			l.path = filepath.Join(parent, e.Name())
			out = append(out, l)
		}
	}
	return out, nil
}

// parseLeftover takes .base.token.end apart; base may hold dots.
func parseLeftover(name string) (l leftover, ok bool) {
	rest, hidden := strings.CutPrefix(name, ".")
	end := filepath.Ext(rest)
	rest = strings.TrimSuffix(rest, end)
	tok := filepath.Ext(rest)
	l = leftover{name: name, base: strings.TrimSuffix(rest, tok), end: end}
	stamp, random, _ := strings.Cut(strings.TrimPrefix(tok, "."), "-")
	ms, err := strconv.ParseInt(stamp, 36, 64)
	l.began = time.UnixMilli(ms)
	ok = hidden && err == nil && len(random) >= 12 && l.base != "" &&
		(end == endPartial || end == endReady || end == endPrevious)
	return l, ok
}

// Sweep tidies up in parent after processes that died while publishing:
// finishes swaps that were interrupted and removes unfinished folders. It
// touches nothing but the hidden folders of this package and the results they
// belong to. An error about one folder does not stop the others.
func Sweep(ctx context.Context, parent string, o SweepOptions) (Swept, error) {
	if o.Older == 0 {
		o.Older = 24 * time.Hour
	}
	if o.disk == nil {
		o.disk = &realDisk
	}
	if o.now == nil {
		o.now = time.Now
	}
	list, err := leftovers(parent)
	if err != nil {
		return Swept{}, fmt.Errorf("sweep %s: %w", parent, err)
	}
	var n Swept
	var stale []leftover
	for _, l := range list {
		if o.now().Sub(l.began) < o.Older && (o.Dead == nil || !o.Dead(l.name)) {
			n.Spared++
			continue
		}
		stale = append(stale, l)
	}
	if err := tidy(ctx, o.disk, stale, &n); err != nil {
		return n, fmt.Errorf("sweep %s: %w", parent, err)
	}
	return n, nil
}

// tidy finishes the swaps among the stale folders, then removes the rest:
// what may be the only copy goes back into place before anything is removed.
func tidy(ctx context.Context, d *disk, stale []leftover, n *Swept) error {
	var errs []error
	for _, l := range stale {
		if l.end != endPrevious {
			continue
		}
		if err := restore(ctx, d, l); err != nil {
			errs = append(errs, err)
			continue
		}
		n.Finished++
	}
	for _, l := range stale {
		var err error
		switch {
		case l.end == endPartial:
			err = d.removeAll(l.path)
		case l.end == endReady && exists(l.path):
			err = discard(ctx, d, l.path)
		default:
			continue
		}
		if err != nil {
			errs = append(errs, err)
			continue
		}
		n.Removed++
	}
	return errors.Join(errs...)
}

// restore finishes a swap from step 3 on.
func restore(ctx context.Context, d *disk, l leftover) error {
	dir := filepath.Join(filepath.Dir(l.path), l.base)
	if !exists(dir) {
		ready := strings.TrimSuffix(l.path, endPrevious) + endReady
		if !exists(ready) {
			return d.move(ctx, l.path, dir)
		}
		if err := d.move(ctx, ready, dir); err != nil {
			return err
		}
	}
	return fileAway(ctx, d, l.path, dir)
}
