package export

import (
	"context"
	"errors"
	"io"
	"io/fs"
	"os"
	"runtime"
	"syscall"
	"time"
)

// disk is the file operations of publishing, in one place so that tests can
// make the nth of them fail.
type disk struct {
	mkdir     func(path string) error
	create    func(path string) (file, error)
	rename    func(from, to string) error
	removeAll func(path string) error
	syncDir   func(path string) error
}

// file is an open file being written.
type file interface {
	io.Writer
	io.Seeker
	Sync() error
	Close() error
}

var realDisk = disk{
	mkdir: func(path string) error { return os.Mkdir(path, 0o777) },
	create: func(path string) (file, error) {
		return os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o666)
	},
	rename:    os.Rename,
	removeAll: os.RemoveAll,
	syncDir:   syncDir,
}

// syncDir makes renames in a folder last. Where the system cannot (Windows,
// some shares) there is nothing to be done, and it is no error.
func syncDir(path string) error {
	if runtime.GOOS == "windows" {
		return nil
	}
	d, err := os.Open(path)
	if err != nil {
		return err
	}
	defer d.Close()
	err = d.Sync()
	if errors.Is(err, syscall.EINVAL) || errors.Is(err, errors.ErrUnsupported) {
		return nil
	}
	return err
}

// On Windows virus scanners and readers hold files for moments, and renames
// fail meanwhile: try for about two seconds.
const (
	renameTries = 12
	renamePause = 25 * time.Millisecond
)

// move renames, trying again where the system refuses for moments only.
func (d *disk) move(ctx context.Context, from, to string) error {
	pause := renamePause
	for try := 1; ; try++ {
		err := d.rename(from, to)
		if err == nil || try == renameTries || !passing(err, runtime.GOOS) {
			return err
		}
		select {
		case <-ctx.Done():
			return err
		case <-time.After(pause):
		}
		pause = min(2*pause, 250*time.Millisecond)
	}
}

// passing reports whether a failed rename may succeed in a moment: on Windows
// ERROR_ACCESS_DENIED, ERROR_SHARING_VIOLATION (32) and ERROR_LOCK_VIOLATION
// (33), Microsoft's System Error Codes.
func passing(err error, system string) bool {
	if system != "windows" {
		return false
	}
	var no syscall.Errno
	return errors.Is(err, fs.ErrPermission) || errors.As(err, &no) && (no == 32 || no == 33)
}

// Retryable reports whether publishing again later may succeed: the disk was
// full, the share away, permission lost, the run interrupted. It is false for
// a result or place that will stay unfit.
func Retryable(err error) bool {
	if err == nil || errors.Is(err, ErrContent) || errors.Is(err, ErrPlace) {
		return false
	}
	if errors.Is(err, context.Canceled) || errors.Is(err, context.DeadlineExceeded) {
		return true
	}
	var no syscall.Errno
	if errors.As(err, &no) {
		return no != syscall.ENAMETOOLONG && no != syscall.EINVAL
	}
	var p *fs.PathError
	var l *os.LinkError
	return errors.As(err, &p) || errors.As(err, &l) || errors.Is(err, io.ErrShortWrite)
}
