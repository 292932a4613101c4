package queue

import (
	"errors"
	"fmt"
	"time"
)

var (
	// ErrLocked is matched by the error of an Open whose ledger another
	// process holds; the error's text names that process.
	ErrLocked = errors.New("the ledger is in use")
	// ErrNewer is matched by the error of an Open whose ledger was written by
	// a newer program.
	ErrNewer = errors.New("the ledger was written by a newer version of this program")
	// ErrNotFound is matched when no shot has the wanted ID or name.
	ErrNotFound = errors.New("no such shot")
	// ErrRunning is returned by a second Run at the same time.
	ErrRunning = errors.New("the queue is already being worked")
)

// reasons for which a job's context is cancelled or its claim refused.
var (
	errSuperseded = errors.New("superseded")
	errStale      = errors.New("the job is no longer wanted")
	errBusy       = errors.New("an earlier attempt on the same shot has not returned yet")
)

type permanentError struct{ error }

func (e permanentError) Unwrap() error { return e.error }

// Permanent marks a worker's error as one that no further attempt can mend: the
// shot is quarantined at once. A nil error stays nil.
func Permanent(err error) error {
	if err == nil {
		return nil
	}
	return permanentError{err}
}

type laterError struct {
	error
	after time.Duration
}

func (e laterError) Unwrap() error { return e.error }

// Later marks a worker's error as none of the shot's fault (disk full, share
// away): the shot goes back to paired with the error as its reason and is tried
// again after d, and the attempt is not counted. A nil error stays nil.
func Later(err error, d time.Duration) error {
	if err == nil {
		return nil
	}
	return laterError{err, max(d, 0)}
}

// lockedError says who holds the lock.
type lockedError struct{ path, holder string }

func (e lockedError) Error() string {
	return fmt.Sprintf("open ledger %q: it is in use by %s: stop that process first, or give this one another state folder", e.path, e.holder)
}

func (e lockedError) Is(target error) bool { return target == ErrLocked }
