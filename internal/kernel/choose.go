package kernel

import "os"

// useAssembly says which twin runs. It is set before main and by tests only.
var useAssembly = haveAVX2 && os.Getenv("EVENKEEL_PLAIN") != "1"

// SetPlain forces plain Go (true) or lets the processor decide (false), and returns
// what was. It is for tests and benchmarks: no kernel may be running.
func SetPlain(plain bool) (was bool) {
	was = !useAssembly
	useAssembly = haveAVX2 && !plain
	return was
}

// Assembly reports whether kernels run as assembly.
func Assembly() bool { return useAssembly }

// check panics if a condition on the caller's slices does not hold. What it guards
// is memory: assembly checks no index.
func check(ok bool, what string) {
	if !ok {
		panic("kernel: " + what)
	}
}
