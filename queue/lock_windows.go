package queue

import (
	"errors"
	"os"

	"golang.org/x/sys/windows"
)

// lockAt is the offset of the one byte that is locked. Windows locks bind:
// beyond the text, the holder's name stays readable for others.
const lockAt = 1 << 30

// lockFile takes f for this process, without waiting. The kernel lets go of it
// when the process ends, however it ends.
func lockFile(f *os.File) (bool, error) {
	at := windows.Overlapped{Offset: lockAt}
	err := windows.LockFileEx(windows.Handle(f.Fd()),
		windows.LOCKFILE_EXCLUSIVE_LOCK|windows.LOCKFILE_FAIL_IMMEDIATELY, 0, 1, 0, &at)
	if errors.Is(err, windows.ERROR_LOCK_VIOLATION) || errors.Is(err, windows.ERROR_IO_PENDING) {
		return false, nil
	}
	return err == nil, err
}

func unlockFile(f *os.File) error {
	at := windows.Overlapped{Offset: lockAt}
	return windows.UnlockFileEx(windows.Handle(f.Fd()), 0, 1, 0, &at)
}
