package rig

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"time"
)

// wait sleeps until our clock shows t, delivering late partners when due.
func (r *run) wait(ctx context.Context, t time.Time) error {
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		if err := r.lateUntil(ctx, time.Now()); err != nil {
			return err
		}
		d := time.Until(t)
		for _, f := range r.late {
			d = min(d, time.Until(f.due))
		}
		if time.Until(t) <= 0 {
			return nil
		}
		if err := sleep(ctx, d); err != nil {
			return err
		}
	}
}

// lateUntil delivers the late partners due by now; without pauses between the
// shots they all wait for the end.
func (r *run) lateUntil(ctx context.Context, now time.Time) error {
	if r.c.Every == 0 {
		return nil
	}
	var rest []delivery
	for i, f := range r.late {
		if f.due.After(now) {
			rest = append(rest, f)
			continue
		}
		if err := r.deliver(ctx, f); err != nil {
			r.late = append(rest, r.late[i:]...)
			return err
		}
	}
	r.late = rest
	return nil
}

// finish delivers what is still to come.
func (r *run) finish(ctx context.Context) error {
	for _, f := range r.late {
		if r.c.Every > 0 {
			if err := sleep(ctx, time.Until(f.due)); err != nil {
				return err
			}
		}
		if err := r.deliver(ctx, f); err != nil {
			return err
		}
	}
	r.late = nil
	return nil
}

// sleep waits for d or the end of the context.
func sleep(ctx context.Context, d time.Duration) error {
	if d <= 0 {
		return ctx.Err()
	}
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-ctx.Done():
		return ctx.Err()
	case <-t.C:
		return nil
	}
}

// deliver writes a file as a camera does: under a temporary name that is then
// renamed, or growing in place.
func (r *run) deliver(ctx context.Context, f delivery) error {
	path := filepath.Join(f.folder, f.name)
	if r.c.Slow > 0 {
		return grow(ctx, path, f.data, r.c.Slow)
	}
	part := filepath.Join(f.folder, "."+f.name+".part")
	if err := os.WriteFile(part, f.data, 0o644); err != nil {
		return err
	}
	return os.Rename(part, path)
}

// chunks is the number of pieces in which a growing file is written.
const chunks = 8

// grow writes a file piece by piece over the given time. A file cut short by
// the end of the context stays as it is, as after a power failure.
func grow(ctx context.Context, path string, data []byte, over time.Duration) (err error) {
	f, err := os.Create(path)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	for i := range chunks {
		if _, err := f.Write(data[len(data)*i/chunks : len(data)*(i+1)/chunks]); err != nil {
			return err
		}
		if err := sleep(ctx, over/chunks); err != nil {
			return err
		}
	}
	return nil
}
