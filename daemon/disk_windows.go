package daemon

import "golang.org/x/sys/windows"

// free returns the bytes this user may still write at dir.
func free(dir string) (int64, error) {
	p, err := windows.UTF16PtrFromString(dir)
	if err != nil {
		return 0, err
	}
	var n uint64
	if err := windows.GetDiskFreeSpaceEx(p, &n, nil, nil); err != nil {
		return 0, err
	}
	return int64(min(n, 1<<62)), nil
}
