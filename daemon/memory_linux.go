package daemon

import "golang.org/x/sys/unix"

// memoryTotal returns the computer's memory in bytes.
func memoryTotal() int64 {
	var s unix.Sysinfo_t
	if err := unix.Sysinfo(&s); err != nil {
		return fallbackMemory
	}
	return int64(s.Totalram) * int64(s.Unit)
}
