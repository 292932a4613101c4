//go:build !windows

package daemon

import "golang.org/x/sys/unix"

// free returns the bytes an unprivileged process may still write at dir.
func free(dir string) (int64, error) {
	var s unix.Statfs_t
	if err := unix.Statfs(dir, &s); err != nil {
		return 0, err
	}
	return int64(s.Bavail) * int64(s.Bsize), nil //nolint:unconvert // the types differ between systems
}
