//go:build unix

package queue

import (
	"errors"
	"os"

	"golang.org/x/sys/unix"
)

// lockFile takes f for this process, without waiting. The kernel lets go of it
// when the process ends, however it ends.
func lockFile(f *os.File) (bool, error) {
	err := unix.Flock(int(f.Fd()), unix.LOCK_EX|unix.LOCK_NB)
	if errors.Is(err, unix.EWOULDBLOCK) {
		return false, nil
	}
	return err == nil, err
}

func unlockFile(f *os.File) error { return unix.Flock(int(f.Fd()), unix.LOCK_UN) }
