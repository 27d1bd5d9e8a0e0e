package pipeline

import (
	"bufio"
	"os"
	"path"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"

	units "github.com/docker/go-units"
)

// Bytes writes a size for people, in binary units.
func Bytes(n int64) string { return units.BytesSize(float64(n)) }

// bytesUp writes a size like [Bytes], but rounded up: what it writes, read by [ParseBytes], is n
// or more, by less than 2 in 1000. Who is told that so much is needed must be able to ask for it.
func bytesUp(n int64) string {
	for m := n; ; m += m>>12 + 1 { // Bytes keeps four digits
		s := Bytes(m)
		if v, err := ParseBytes("", s); err != nil || v >= n {
			return s
		}
	}
}

// ParseBytes reads a size such as 8GiB, 8GB, 512m; units are powers of 1024, as
// is usual for memory. It returns a [*UsageError].
func ParseBytes(option, v string) (int64, error) {
	// "8Gi", as in the units of containers, is 8GiB.
	if s := strings.ToLower(v); strings.HasSuffix(s, "i") && len(s) > 1 && strings.ContainsRune("kmgtp", rune(s[len(s)-2])) {
		v += "B"
	}
	n, err := units.RAMInBytes(v)
	if err != nil || n <= 0 {
		return 0, &UsageError{Where: option, Message: "found " + strconv.Quote(v) + ", expected a size such as 8GiB"}
	}
	return n, nil
}

// fallbackMemory is assumed where the system does not say what is free.
const fallbackMemory = 4 << 30

// DefaultMemory is three quarters of the memory that is free now: what the system
// could give back (MemAvailable), or what the control groups that the program runs
// in leave, where that is less. A cluster's scheduler puts each job in one.
func DefaultMemory() int64 {
	free := int64(fallbackMemory)
	if n, ok := memAvailable("/proc/meminfo"); ok {
		free = n
	}
	if n, ok := groupFree("/proc/self/cgroup", "/sys/fs/cgroup"); ok {
		free = min(free, n)
	}
	return free / 4 * 3
}

// groupFiles are the names of the memory controller's files, in version 1 and 2 of
// control groups (Linux, Documentation/admin-guide/cgroup-v1/memory.rst and
// cgroup-v2.rst).
type groupFiles struct{ limit, used, idle string }

var (
	groups1 = groupFiles{"memory.limit_in_bytes", "memory.usage_in_bytes", "total_inactive_file"}
	groups2 = groupFiles{"memory.max", "memory.current", "inactive_file"}
)

// groupFree returns the least that a control group of this process, or a parent of
// it, has left below its limit: the limit less what is in use, without the file pages
// that the kernel would drop first. proc lists the process's groups, mount is where
// they are mounted; ok is false when there is no limit.
func groupFree(proc, mount string) (least int64, ok bool) {
	list, err := os.ReadFile(proc)
	if err != nil {
		return 0, false
	}
	for _, line := range strings.Split(strings.TrimSpace(string(list)), "\n") {
		// "hierarchy:controllers:path"; version 2 is hierarchy 0 and names none.
		f := strings.SplitN(line, ":", 3)
		if len(f) != 3 {
			continue
		}
		root, files := mount, groups2
		switch {
		case f[0] == "0" && f[1] == "":
		case slices.Contains(strings.Split(f[1], ","), "memory"):
			root, files = filepath.Join(mount, "memory"), groups1
		default:
			continue
		}
		// In a container the path may be that of the host, and not be there:
		// its parents are looked at all the same, up to the mount.
		for at := path.Clean("/" + f[2]); ; at = path.Dir(at) {
			if n, limited := files.free(filepath.Join(root, filepath.FromSlash(at))); limited && (!ok || n < least) {
				least, ok = n, true
			}
			if at == "/" {
				break
			}
		}
	}
	return least, ok
}

// free is what one group has left; limited is false when it has no limit.
func (f groupFiles) free(dir string) (n int64, limited bool) {
	limit, ok := readNumber(filepath.Join(dir, f.limit))
	if !ok {
		return 0, false // no such group, or "max"
	}
	used, _ := readNumber(filepath.Join(dir, f.used))
	stat, _ := os.ReadFile(filepath.Join(dir, "memory.stat"))
	for _, line := range strings.Split(string(stat), "\n") {
		if v, ok := strings.CutPrefix(line, f.idle+" "); ok {
			if idle, err := strconv.ParseInt(v, 10, 64); err == nil {
				used -= idle
			}
		}
	}
	return max(0, limit-max(0, used)), true
}

func readNumber(name string) (int64, bool) {
	b, err := os.ReadFile(name)
	if err != nil {
		return 0, false
	}
	n, err := strconv.ParseInt(strings.TrimSpace(string(b)), 10, 64)
	return n, err == nil
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
