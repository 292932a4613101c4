package export

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strconv"
	"strings"
)

// The endings of hidden folders, see the package comment.
const (
	endPartial  = ".partial"
	endReady    = ".ready"
	endPrevious = ".previous"
)

// swap is one result folder and the hidden names one attempt uses beside it.
type swap struct {
	dir                      string
	partial, ready, previous string
	disk                     *disk
	warn                     func(error)
	open                     []file // written, not yet synced
}

func newSwap(dir string, o *Options) *swap {
	stem := filepath.Join(filepath.Dir(dir), "."+filepath.Base(dir)+"."+token(o))
	return &swap{dir: dir, partial: stem + endPartial, ready: stem + endReady, previous: stem + endPrevious,
		disk: o.disk, warn: o.Warn}
}

// identity is what decides whether one result replaces another.
type identity struct{ pass, bundle string }

// keeps reports whether the old result is filed when the new one takes its
// place. One whose metrics cannot be read is kept.
func (old identity) keeps(new identity) bool {
	return old.pass != quick && (old.bundle != new.bundle || old.pass == "")
}

func identify(dir string) identity {
	d, err := readDocument(dir)
	if err != nil {
		return identity{}
	}
	return identity{d.Pass, d.Bundle}
}

// wanted is false for a quick look where a finer result of the same bundle
// stands.
func (s *swap) wanted(r *Result) bool {
	old := identify(s.dir)
	return r.Pass != quick || old.pass == "" || old.pass == quick || old.bundle != r.Bundle
}

// swapTries bounds how often another process may put its result in place
// between steps 3 and 4.
const swapTries = 5

// swap does steps 3 to 6.
func (s *swap) swap(ctx context.Context) error {
	for try := 1; ; try++ {
		err := s.disk.move(ctx, s.dir, s.previous) // step 3
		old := err == nil
		if err != nil && !errors.Is(err, fs.ErrNotExist) {
			_ = s.discard(ctx, s.ready)
			return err
		}
		if err = s.disk.move(ctx, s.ready, s.dir); err == nil { // step 4
			break
		}
		if !old && try < swapTries && exists(s.dir) {
			continue
		}
		if old && s.disk.move(ctx, s.previous, s.dir) != nil {
			return fmt.Errorf("%w; both results are whole under hidden names until the folder is swept", err)
		}
		_ = s.discard(ctx, s.ready)
		return err
	}
	if err := s.disk.syncDir(filepath.Dir(s.dir)); err != nil {
		return err
	}
	if err := settle(ctx, s.disk, s.dir); err != nil {
		s.warn(fmt.Errorf("file the older result of %s: %w", s.dir, err))
	}
	return nil
}

// discard removes a hidden folder by way of the name that says garbage.
func (s *swap) discard(ctx context.Context, path string) error { return discard(ctx, s.disk, path) }

func discard(ctx context.Context, d *disk, path string) error {
	garbage := strings.TrimSuffix(strings.TrimSuffix(path, endReady), endPrevious) + endPartial
	if err := d.move(ctx, path, garbage); err != nil {
		return err
	}
	return d.removeAll(garbage)
}

func exists(path string) bool {
	_, err := os.Lstat(path)
	return err == nil
}

// settle files every previous folder of dir, which must exist: steps 5 and 6.
// It may be interrupted and run again at any point.
func settle(ctx context.Context, d *disk, dir string) error {
	list, err := leftovers(filepath.Dir(dir))
	if err != nil {
		return err
	}
	var errs []error
	for _, l := range list {
		if l.end == endPrevious && l.base == filepath.Base(dir) {
			errs = append(errs, fileAway(ctx, d, l.path, dir))
		}
	}
	return errors.Join(errs...)
}

// fileAway moves what is worth keeping from old into dir and removes the rest.
func fileAway(ctx context.Context, d *disk, old, dir string) error {
	was, is := identify(old), identify(dir)
	keep := was.keeps(is) && holdsResult(old)
	list, err := os.ReadDir(old)
	if err != nil {
		return ignoreMissing(err)
	}
	for _, e := range list {
		from := filepath.Join(old, e.Name())
		switch {
		case e.Name() == versions && e.IsDir():
			err = moveAll(ctx, d, from, filepath.Join(dir, versions))
		case !ours[e.Name()] && !exists(filepath.Join(dir, e.Name())):
			err = d.move(ctx, from, filepath.Join(dir, e.Name()))
		case !ours[e.Name()]:
			keep = true // a stranger's file that is there twice
		}
		if ignoreMissing(err) != nil {
			return err
		}
	}
	if !keep {
		return ignoreMissing(discard(ctx, d, old))
	}
	shelf := filepath.Join(dir, versions)
	if err := mkdir(d, shelf); err != nil {
		return err
	}
	return ignoreMissing(d.move(ctx, old, filepath.Join(shelf, nextVersion(shelf, was.bundle))))
}

// ours are the names of files that a result folder may hold.
var ours = map[string]bool{fileCube: true, fileMetrics: true, fileContact: true, fileMovie: true,
	fileLight: true, fileArrival: true, fileResidual: true, fileLog: true, versions: true}

// holdsResult reports whether anything of a result is in the folder.
func holdsResult(dir string) bool {
	return exists(filepath.Join(dir, fileMetrics)) || exists(filepath.Join(dir, fileCube))
}

// moveAll moves the entries of one folder into another.
func moveAll(ctx context.Context, d *disk, from, to string) error {
	list, err := os.ReadDir(from)
	if err != nil || len(list) == 0 {
		return err
	}
	if err := mkdir(d, to); err != nil {
		return err
	}
	for _, e := range list {
		name := e.Name()
		if exists(filepath.Join(to, name)) {
			name = nextVersion(to, strings.TrimLeft(name, "0123456789-"))
		}
		if err := d.move(ctx, filepath.Join(from, e.Name()), filepath.Join(to, name)); err != nil {
			return err
		}
	}
	return nil
}

func mkdir(d *disk, path string) error {
	if err := d.mkdir(path); err != nil && !errors.Is(err, fs.ErrExist) {
		return err
	}
	return nil
}

func ignoreMissing(err error) error {
	if errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	return err
}

// nextVersion names a version: one more than the highest number on the shelf,
// then the beginning of the bundle's identity.
func nextVersion(shelf, bundle string) string {
	n := 0
	list, _ := os.ReadDir(shelf)
	for _, e := range list {
		head, _, _ := strings.Cut(e.Name(), "-")
		if v, err := strconv.Atoi(head); err == nil {
			n = max(n, v)
		}
	}
	return fmt.Sprintf("%03d-%s", n+1, short(bundle))
}

// short is the beginning of a bundle's identity, fit for a file name.
func short(bundle string) string {
	var b strings.Builder
	for _, c := range bundle {
		ok := c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' || c >= '0' && c <= '9' || c == '_' || c == '-'
		if ok && b.Len() < 12 {
			b.WriteRune(c)
		}
	}
	if b.Len() == 0 {
		return "unknown"
	}
	return b.String()
}
