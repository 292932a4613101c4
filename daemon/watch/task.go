package watch

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"sync/atomic"
	"time"
)

// tree is the disk as far as it is used: os.Root.
type tree interface {
	// ReadDir hands over what is in a folder.
	ReadDir(dir string, each func(fs.DirEntry)) error
	Lstat(rel string) (fs.FileInfo, error)
	Close() error
}

// root is the real disk.
type root struct{ *os.Root }

func openRoot(folder string) (tree, error) {
	r, err := os.OpenRoot(folder)
	if err != nil {
		return nil, err
	}
	return root{r}, nil
}

// chunk is how many entries are read, and how many files asked for, at once.
const chunk = 1000

// ReadDir opens the folder by its path, because a folder opened through
// os.Root asks for the size of every file in it, which takes minutes on a
// share. It then makes sure that this is the folder that os.Root sees.
func (r root) ReadDir(dir string, each func(fs.DirEntry)) error {
	f, err := os.Open(filepath.Join(r.Name(), filepath.FromSlash(dir)))
	if err != nil {
		return err
	}
	defer f.Close()
	if err := r.inside(f, dir); err != nil {
		return err
	}
	for {
		list, err := f.ReadDir(chunk)
		for _, e := range list {
			each(e)
		}
		if errors.Is(err, io.EOF) {
			return nil
		}
		if err != nil {
			return err
		}
	}
}

// inside refuses a folder to which a link led out of the root.
func (r root) inside(f *os.File, dir string) error {
	opened, err := f.Stat()
	if err != nil {
		return err
	}
	seen, err := r.Stat(filepath.FromSlash(dir))
	if err != nil {
		return err
	}
	if !os.SameFile(opened, seen) {
		return fmt.Errorf("folder %q was exchanged while it was opened", dir)
	}
	return nil
}

func (r root) Lstat(rel string) (fs.FileInfo, error) {
	return r.Root.Lstat(filepath.FromSlash(rel))
}

// task is one piece of disk work.
type task struct {
	full  bool     // list everything
	dirs  []string // list these sub-folders and what is below them
	names []string // ask for the content of these
}

// result is what came of a task.
type result struct {
	task
	begun, ended time.Time
	err          error // the folder itself could not be opened or listed
	partial      error // a sub-folder could not be listed
	listed       []string
	looks        []look
	deaf         error // a folder sends no notifications
}

// look is the answer for one name.
type look struct {
	rel           string
	info          fs.FileInfo
	err           error
	before, after time.Time
}

// pulse shows that disk calls return. The worker writes, Run reads.
type pulse struct {
	last    atomic.Int64 // UnixNano is not monotonic: nanoseconds since start
	slowest atomic.Int64
	start   time.Time
}

func (p *pulse) beat() {
	now := int64(time.Since(p.start))
	if d := now - p.last.Swap(now); d > p.slowest.Load() {
		p.slowest.Store(d)
	}
}

// silent is how long no call has returned.
func (p *pulse) silent() time.Duration { return time.Since(p.start) - time.Duration(p.last.Load()) }

// worker does one task.
type worker struct {
	folder string
	depth  int
	open   func(string) (tree, error)
	ears   *ears
	pulse  *pulse
	res    result
}

func (w *worker) do(t task) result {
	w.res = result{task: t, begun: time.Now()}
	defer func() { w.res.ended = time.Now() }()
	disk, err := w.open(w.folder)
	w.pulse.beat()
	if err != nil {
		w.res.err = err
		return w.finish()
	}
	defer disk.Close()
	if t.full {
		w.list(disk, ".", 0)
	}
	for _, dir := range t.dirs {
		w.list(disk, dir, level(dir)+1)
	}
	for _, rel := range t.names {
		l := look{rel: rel, before: time.Now()}
		l.info, l.err = disk.Lstat(rel)
		l.after = time.Now()
		w.pulse.beat()
		w.res.looks = append(w.res.looks, l)
	}
	return w.finish()
}

func (w *worker) finish() result {
	w.res.ended = time.Now()
	return w.res
}

// list reads a folder at a depth and those below it. It listens to a folder
// before it reads it, so that no file can slip in between.
func (w *worker) list(disk tree, dir string, depth int) {
	if err := w.ears.add(filepath.Join(w.folder, filepath.FromSlash(dir))); err != nil {
		w.res.deaf = err
	}
	w.pulse.beat()
	var subs []string
	err := disk.ReadDir(dir, func(e fs.DirEntry) {
		w.pulse.beat()
		rel := below(dir, e.Name())
		switch {
		case ignored(e.Name()):
		case e.IsDir():
			subs = append(subs, rel)
		case e.Type().IsRegular():
			w.res.listed = append(w.res.listed, rel)
		}
	})
	w.pulse.beat()
	switch {
	case err == nil:
	case dir == ".":
		w.res.err = err
	case errors.Is(err, fs.ErrNotExist): // removed while we looked
	default:
		w.res.partial = fmt.Errorf("list folder %q: %w", dir, err)
	}
	if depth < w.depth {
		for _, sub := range subs {
			w.list(disk, sub, depth+1)
		}
	}
}
