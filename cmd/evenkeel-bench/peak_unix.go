//go:build unix

package main

import (
	"os"
	"runtime"
	"syscall"
)

// peakBytes is the largest resident size of a process that has ended.
func peakBytes(st *os.ProcessState) int64 {
	u, ok := st.SysUsage().(*syscall.Rusage)
	if !ok {
		return 0
	}
	if runtime.GOOS == "darwin" || runtime.GOOS == "ios" {
		return int64(u.Maxrss) // bytes there
	}
	return int64(u.Maxrss) << 10
}

// processSeconds is the processor time that this process has used.
func processSeconds() float64 {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		return 0
	}
	return float64(u.Utime.Nano()+u.Stime.Nano()) / 1e9
}
