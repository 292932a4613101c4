//go:build !linux && !windows

package daemon

func memoryTotal() int64 { return fallbackMemory }
