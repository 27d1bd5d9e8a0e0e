package pipeline

import (
	"bufio"
	"os"
	"runtime"
	"strconv"
	"strings"

	units "github.com/docker/go-units"
)

// Bytes writes a size for people, in binary units.
func Bytes(n int64) string { return units.BytesSize(float64(n)) }

// ParseBytes reads a size such as 8GiB, 8GB, 512m; units are powers of 1024, as
// is usual for memory. It returns a [*UsageError].
func ParseBytes(option, v string) (int64, error) {
	n, err := units.RAMInBytes(v)
	if err != nil || n <= 0 {
		return 0, &UsageError{Where: option, Message: "found " + strconv.Quote(v) + ", expected a size such as 8GiB"}
	}
	return n, nil
}

// fallbackMemory is assumed where the system does not say what is free.
const fallbackMemory = 4 << 30

// DefaultMemory is three quarters of the memory that is free now, counting what
// the system could give back (MemAvailable) and the limit of the control group
// that a cluster's scheduler puts a job in.
func DefaultMemory() int64 {
	free := int64(fallbackMemory)
	if n, ok := memAvailable("/proc/meminfo"); ok {
		free = n
	}
	for _, name := range []string{"/sys/fs/cgroup/memory.max", "/sys/fs/cgroup/memory/memory.limit_in_bytes"} {
		b, err := os.ReadFile(name)
		if err != nil {
			continue
		}
		if n, err := strconv.ParseInt(strings.TrimSpace(string(b)), 10, 64); err == nil && n > 0 && n < free {
			free = n
		}
	}
	return free / 4 * 3
}

func memAvailable(name string) (int64, bool) {
	f, err := os.Open(name)
	if err != nil {
		return 0, false
	}
	defer f.Close()
	for sc := bufio.NewScanner(f); sc.Scan(); {
		// The kernel's own words: "MemAvailable:   23456 kB", in KiB.
		if v, ok := strings.CutPrefix(sc.Text(), "MemAvailable:"); ok {
			kb, err := strconv.ParseInt(strings.TrimSuffix(strings.TrimSpace(v), " kB"), 10, 64)
			return kb << 10, err == nil
		}
	}
	return 0, false
}

// Cores is how many cores the program may use.
func Cores() int { return runtime.GOMAXPROCS(0) }
