package queue

import (
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
	"time"
)

// lock is the hold of this process on a ledger: an operating system's lock on a
// file beside it, which also says who holds it. The file stays when the lock
// goes; deleting it would let two processes hold two files of one name.
type lock struct{ f *os.File }

// acquire takes the lock for the ledger at path. The text in the file is only
// for people; the lock is what counts.
func acquire(path string, now time.Time) (*lock, error) {
	f, err := os.OpenFile(path+".lock", os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return nil, fmt.Errorf("open ledger %q: make its lock file: %w", path, err)
	}
	ok, err := lockFile(f)
	if err != nil {
		err = fmt.Errorf("open ledger %q: lock %q: %w (is it on a local disk?)", path, f.Name(), err)
		return nil, errors.Join(err, f.Close())
	}
	if !ok {
		return nil, errors.Join(lockedError{path, holder(f)}, f.Close())
	}
	host, _ := os.Hostname()
	text := fmt.Sprintf("process %d on %s, since %s\n", os.Getpid(), host, now.UTC().Format(time.RFC3339))
	if err := errors.Join(f.Truncate(0), writeAt(f, text)); err != nil {
		return nil, errors.Join(fmt.Errorf("open ledger %q: write its lock file: %w", path, err), f.Close())
	}
	return &lock{f}, nil
}

func writeAt(f *os.File, text string) error {
	_, err := f.WriteAt([]byte(text), 0)
	return err
}

func holder(f *os.File) string {
	text, err := io.ReadAll(io.LimitReader(f, 256))
	who := strings.TrimSpace(string(text))
	if err != nil || who == "" {
		return "another process"
	}
	return who
}

func (l *lock) release() error {
	return errors.Join(l.f.Truncate(0), unlockFile(l.f), l.f.Close())
}
