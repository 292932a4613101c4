package watch

import (
	"errors"
	"path/filepath"
	"strings"
	"time"

	"github.com/fsnotify/fsnotify"
)

// ears hears the notifications of the operating system, where there are any.
type ears struct{ *fsnotify.Watcher }

// newEars opens the notifications. The room for events is what the channel
// may hold while Run is busy; what does not fit is an overflow, and that is
// a reason to list the folder.
func newEars() (*ears, error) {
	w, err := fsnotify.NewBufferedWatcher(4096)
	if err != nil {
		return nil, err
	}
	return &ears{w}, nil
}

var errDeaf = errors.New("notifications are not available")

// add listens to one folder. Adding it again is harmless, and necessary if
// it was removed and made anew.
func (e *ears) add(dir string) error {
	if e == nil {
		return errDeaf
	}
	return e.Add(dir)
}

// close ends the notifications. It does not wait longer than a time: while
// an add hangs on a share, closing hangs as well.
func (e *ears) close(most time.Duration) {
	if e == nil {
		return
	}
	done := make(chan struct{})
	go func() {
		_ = e.Close() // nothing is lost: the next run lists the folder
		close(done)
	}()
	select {
	case <-done:
	case <-time.After(most):
	}
}

func (e *ears) events() <-chan fsnotify.Event {
	if e == nil {
		return nil
	}
	return e.Events
}

func (e *ears) errors() <-chan error {
	if e == nil {
		return nil
	}
	return e.Errors
}

// relative is the part of an event's name below the folder, with forward
// slashes.
func relative(folder, name string) (string, bool) {
	rel, err := filepath.Rel(folder, name)
	if err != nil || rel == ".." || strings.HasPrefix(rel, ".."+string(filepath.Separator)) {
		return "", false
	}
	return filepath.ToSlash(rel), true
}
