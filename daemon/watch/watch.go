package watch

import (
	"errors"
	"fmt"
	"path/filepath"
	"sync"
	"time"

	"go.uber.org/zap"
)

// File is a whole, quiet file.
type File struct {
	// Path is the file's full path, Rel the part below the folder, with
	// forward slashes.
	Path, Rel string

	Size    int64
	ModTime time.Time
}

// Options says what to watch.
type Options struct {
	// Folder is watched. Required. It need not exist yet.
	Folder string

	// Station and Arm label the metrics and the log.
	Station, Arm string

	// Accept says whether a file matters, by its path below the folder.
	// Default: every file does.
	Accept func(rel string) bool

	// Known tells the content under which a file was taken in an earlier
	// run. Times that differ by less than a millisecond count as equal, so
	// that they may come from a database. Default: nothing is known.
	Known func(rel string) (size int64, mod time.Time, ok bool)

	// Quiet is how long a file must stay unchanged. Default 1s.
	Quiet time.Duration

	// Longest is how long a file may stay empty before it is given as it
	// is. Default 60s.
	Longest time.Duration

	// Rescan is the pause between two listings of the folder; a listing
	// that takes longer is followed by a pause as long as itself. Default
	// 10s.
	Rescan time.Duration

	// Depth is how many levels of sub-folders are watched. Default 0: the
	// folder alone.
	Depth int

	// Stuck is how long a single disk call may take before the folder
	// counts as stuck; five times the longest call so far is always
	// allowed. Default 10s.
	Stuck time.Duration

	// Logger reports changes of condition. Default: no log.
	Logger *zap.Logger

	// Metrics counts; several watchers share one. Default: no metrics.
	Metrics *Metrics
}

func (o *Options) fill() {
	if o.Accept == nil {
		o.Accept = func(string) bool { return true }
	}
	if o.Known == nil {
		o.Known = func(string) (int64, time.Time, bool) { return 0, time.Time{}, false }
	}
	def := func(d *time.Duration, value time.Duration) {
		if *d == 0 {
			*d = value
		}
	}
	def(&o.Quiet, time.Second)
	def(&o.Longest, time.Minute)
	def(&o.Rescan, 10*time.Second)
	def(&o.Stuck, 10*time.Second)
	if o.Logger == nil {
		o.Logger = zap.NewNop()
	}
}

// Validate lists every fault.
func (o *Options) Validate() error {
	var errs []error
	if o.Folder == "" {
		errs = append(errs, errors.New("folder is empty"))
	}
	for name, d := range map[string]time.Duration{"Quiet": o.Quiet, "Longest": o.Longest, "Rescan": o.Rescan, "Stuck": o.Stuck} {
		if d < 0 {
			errs = append(errs, fmt.Errorf("option %s = %v is negative", name, d))
		}
	}
	if o.Depth < 0 {
		errs = append(errs, fmt.Errorf("option Depth = %d is negative", o.Depth))
	}
	return errors.Join(errs...)
}

// Condition is how a folder does.
type Condition string

// Conditions.
const (
	OK      Condition = "ok"
	Missing Condition = "missing" // the folder is not there
	Stuck   Condition = "stuck"   // a disk call does not return
	Failing Condition = "failing" // the folder, or one in it, cannot be read
)

// State is a picture of a watcher at one moment.
type State struct {
	Folder    string
	Condition Condition

	// Since is when Condition became so.
	Since time.Time

	// Polling is true while notifications are not to be had and new files
	// are found by listing alone.
	Polling bool

	// LastScan is when the last complete listing ended, ScanTime how long
	// it took. Zero before the first.
	LastScan time.Time
	ScanTime time.Duration

	// Files counts the accepted names in the last listing, Unsettled the
	// files that are not quiet yet.
	Files, Unsettled int

	// Err says why Condition is not OK; nil if it is.
	Err error
}

// Watcher watches one folder.
type Watcher struct {
	o    Options
	open func(folder string) (tree, error) // the disk; tests put another one
	hear func() (*ears, error)             // the notifications; tests likewise

	mu    sync.Mutex // guards state and running
	state State
	runs  bool
}

// ErrRunning is returned by Run if the watcher runs already.
var ErrRunning = errors.New("the watcher is running")

// New makes a watcher; Run starts it.
func New(o Options) (*Watcher, error) {
	o.fill()
	if err := o.Validate(); err != nil {
		return nil, fmt.Errorf("watch folder %q: %w", o.Folder, err)
	}
	abs, err := filepath.Abs(o.Folder)
	if err != nil {
		return nil, fmt.Errorf("watch folder %q: %w", o.Folder, err)
	}
	o.Folder = abs
	o.Logger = o.Logger.With(zap.String("folder", abs), zap.String("station", o.Station), zap.String("arm", o.Arm))
	return &Watcher{
		o:     o,
		open:  openRoot,
		hear:  newEars,
		state: State{Folder: abs, Condition: OK, Since: time.Now()},
	}, nil
}

// State is how the folder does now.
func (w *Watcher) State() State {
	w.mu.Lock()
	defer w.mu.Unlock()
	return w.state
}

// update changes the state and reports a change of condition.
func (w *Watcher) update(change func(*State)) {
	w.mu.Lock()
	before := w.state.Condition
	change(&w.state)
	after := w.state
	if after.Condition != before {
		w.state.Since = time.Now()
	}
	w.mu.Unlock()
	w.o.Metrics.up(w.o.Station, w.o.Arm, after.Condition == OK)
	switch {
	case after.Condition == before:
	case after.Condition == OK:
		w.o.Logger.Info("folder is readable again")
	default:
		w.o.Logger.Warn("folder is "+string(after.Condition), zap.Error(after.Err))
	}
}
