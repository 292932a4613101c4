package daemon

import (
	"unsafe"

	"golang.org/x/sys/windows"
)

// memoryStatus is MEMORYSTATUSEX of the Windows API.
type memoryStatus struct {
	length, load                                                uint32
	total, avail, totalPage, availPage, totalVirt, availVirt, _ uint64
}

// memoryTotal returns the computer's memory in bytes.
func memoryTotal() int64 {
	s := memoryStatus{length: uint32(unsafe.Sizeof(memoryStatus{}))}
	call := windows.NewLazySystemDLL("kernel32.dll").NewProc("GlobalMemoryStatusEx")
	if ok, _, _ := call.Call(uintptr(unsafe.Pointer(&s))); ok == 0 {
		return fallbackMemory
	}
	return int64(s.total)
}
