package kernel

import (
	"os"
	"syscall"
	"testing"
	"unsafe"
)

// fenced copies v to memory that ends where a page without access begins: one
// read past the end is a fault. front fences the other end.
func fenced[T any](tb testing.TB, v []T, front bool) []T {
	tb.Helper()
	var zero T
	page := os.Getpagesize()
	size := len(v) * int(unsafe.Sizeof(zero))
	whole := (size+page-1)/page*page + 2*page
	m, err := syscall.Mmap(-1, 0, whole, syscall.PROT_READ|syscall.PROT_WRITE, syscall.MAP_ANON|syscall.MAP_PRIVATE)
	if err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(func() { syscall.Munmap(m) })
	for _, fence := range [][]byte{m[:page], m[whole-page:]} {
		if err := syscall.Mprotect(fence, syscall.PROT_NONE); err != nil {
			tb.Fatal(err)
		}
	}
	at := whole - page - size
	if front {
		at = page
	}
	if len(v) == 0 {
		return v
	}
	f := unsafe.Slice((*T)(unsafe.Pointer(&m[at])), len(v))
	copy(f, v)
	return f
}

// cpuTime is the processor time used so far, in nanoseconds: on a machine that
// others share it says more than the clock.
func cpuTime() int64 {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		panic(err)
	}
	return u.Utime.Nano() + u.Stime.Nano()
}
