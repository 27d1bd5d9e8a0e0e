package main

// Full disks, limits and users without rights, with the real causes. Mounting and
// another user need root.

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"golang.org/x/sys/unix"
)

// asRoot skips the test for a user who may not do what it takes.
func asRoot(t *testing.T) {
	t.Helper()
	if os.Geteuid() != 0 {
		t.Skip("skipped: only root may mount a file system or become another user")
	}
}

// smallDisk mounts a file system in memory; the function changes its options.
func smallDisk(t *testing.T, options string) (dir string, remount func(options string)) {
	t.Helper()
	asRoot(t)
	dir = t.TempDir()
	err := unix.Mount("evenkeel", dir, "tmpfs", 0, options)
	if errors.Is(err, unix.EPERM) {
		t.Skip("skipped: this root may not mount a file system")
	} else if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := unix.Unmount(dir, 0); err != nil {
			t.Error(err)
		}
	})
	return dir, func(options string) {
		t.Helper()
		if err := unix.Mount("evenkeel", dir, "tmpfs", unix.MS_REMOUNT, options); err != nil {
			t.Fatal(err)
		}
	}
}

// withoutTable is a finished output but for runs.tsv, which after a failure says so.
func (f finished) withoutTable(t *testing.T, out, when string) {
	t.Helper()
	for _, rel := range outputs(out) {
		switch {
		case isLeftover(rel):
			t.Errorf("%s: left %s", when, rel)
		case rel != "runs.tsv" && !bytes.Equal(f[rel], content(t, filepath.Join(out, rel))):
			t.Errorf("%s: %s is not the finished file", when, rel)
		}
	}
}

// A disk that is full at any stage: 74, with the file and the cause; what stands under a final name
// is whole; nothing hidden is left to fill the disk further; with room made, the same command
// completes.
func TestDiskIsFull(t *testing.T) {
	asRoot(t)
	dir := crewCohort(t, 2)
	for i, args := range [][]string{{"--motion", "volume", "--time", "sinc"}, {"--motion", "none"}} { // streamed, and in memory
		whole := process(t, dir, args...)
		want := finish(t, whole)
		var size int64
		for _, rel := range outputs(whole) {
			info, err := os.Stat(filepath.Join(whole, rel))
			if err != nil {
				t.Fatal(err)
			}
			size += info.Size()
		}
		for _, c := range []struct{ full, room string }{
			{fmt.Sprintf("size=%d", size/2), ""}, {fmt.Sprintf("size=%d", size*7/8), ""}, {"nr_inodes=12", "nr_inodes=1000"},
			{"size=4k", ""}, {"size=16k", ""}, {fmt.Sprintf("size=%d", size/4), ""}, {"nr_inodes=3", "nr_inodes=1000"},
		}[:7-4*i] {
			disk, remount := smallDisk(t, c.full)
			out := filepath.Join(disk, "out")
			when := fmt.Sprintf("%v %s", args, c.full)
			command := append([]string{"steady", dir, out, "--jobs", "2"}, args...)
			p := start(t, nil, command...)
			code, said := p.wait(), p.stderr.String()
			noTrace(t, said+p.stdout.String())
			if code != 74 || !strings.Contains(said, ": no space left on device") {
				t.Errorf("%s: %s", when, p)
			}
			// The message begins with the file, by a name that the user knows.
			for line := range strings.Lines(said) {
				if before, _, ok := strings.Cut(line, ": no space left"); ok && (!strings.Contains(before, "/") && !strings.Contains(before, "dataset_description.json") && !strings.Contains(before, "README") && !strings.Contains(before, "runs.")) {
					t.Errorf("%s: names no file: %s", when, line)
				}
				if strings.Contains(line, "/.") {
					t.Errorf("%s: names a hidden file: %s", when, line)
				}
			}
			want.withoutTable(t, out, when)
			if c.room == "" {
				c.room = "size=64m"
			}
			remount(c.room)
			if p := start(t, nil, command...); p.wait() != 0 {
				t.Errorf("%s, with room: %s", when, p)
			}
			want.same(t, out, when+", with room")
		}
	}
}

// A limit on the size of files (RLIMIT_FSIZE, as batch systems set it): 74, not the end by SIGXFSZ.
func TestFileSizeIsLimited(t *testing.T) {
	sh, err := exec.LookPath("sh")
	if err != nil {
		t.Fatal(err)
	}
	dir := crewCohort(t, 1)
	args := []string{"--motion", "volume", "--time", "sinc"}
	want := finish(t, process(t, dir, args...))
	for _, blocks := range []int{0, 2, 40, 160} { // of 512 bytes (POSIX, ulimit)
		out := filepath.Join(t.TempDir(), "out")
		command := append([]string{"steady", dir, out}, args...)
		p := start(t, func(c *exec.Cmd) {
			c.Args = append([]string{"sh", "-c", fmt.Sprintf(`ulimit -f %d; exec "$0" "$@"`, blocks), c.Path}, command...)
			c.Path = sh
		}, command...)
		code, said := p.wait(), p.stderr.String()
		noTrace(t, said)
		if code != 74 || !strings.Contains(said, "file too large") {
			t.Errorf("%d blocks: %s", blocks, p)
		}
		when := fmt.Sprintf("files of %d blocks", blocks)
		want.withoutTable(t, out, when)
		if p := start(t, nil, command...); p.wait() != 0 {
			t.Errorf("%s, without a limit: %s", when, p)
		}
		want.same(t, out, when+", without a limit")
	}
}

// nobody is the user without rights of every Linux (65534, the overflow id of the kernel).
const nobody = 65534

// open makes a place in which everybody may look around, with the program in it.
func openPlace(t *testing.T) (place, exe string) {
	t.Helper()
	asRoot(t)
	place, err := os.MkdirTemp("", "evenkeel")
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { os.RemoveAll(place) })
	if err := os.Chmod(place, 0o755); err != nil {
		t.Fatal(err)
	}
	exe = filepath.Join(place, "evenkeel")
	if err := os.WriteFile(exe, mustRead(t, program(t)), 0o755); err != nil {
		t.Fatal(err)
	}
	return place, exe
}

// A user without rights: OUT that cannot be written is 73, unless nothing has to be written; files
// and folders that cannot be read are told, and never taken for absent.
func TestUserWithoutRights(t *testing.T) {
	place, exe := openPlace(t)
	as := func(args ...string) *job {
		t.Helper()
		return start(t, func(c *exec.Cmd) {
			c.Path = exe
			c.Dir = "/"
			c.SysProcAttr = &syscall.SysProcAttr{Credential: &syscall.Credential{Uid: nobody, Gid: nobody}}
		}, args...)
	}
	fast := []string{"--motion", "none", "--time", "none"}
	steady := func(dir, out string, more ...string) []string {
		return append(append([]string{"steady", dir, out}, fast...), more...)
	}
	dir := filepath.Join(place, "raw")
	for _, sub := range []string{"01", "02"} {
		writeDataset(dir, newSailor().volumes(4).files("sub-"+sub+"/func/sub-"+sub+"_task-watch"))
	}
	mine := filepath.Join(place, "mine") // nobody's own
	if err := os.Mkdir(mine, 0o755); err != nil {
		t.Fatal(err)
	}
	give := func(name string) {
		t.Helper()
		filepath.WalkDir(name, func(p string, _ fs.DirEntry, err error) error {
			if err == nil {
				err = os.Lchown(p, nobody, nobody)
			}
			if err != nil {
				t.Fatal(err)
			}
			return nil
		})
	}
	give(mine)
	theirs := filepath.Join(place, "out") // root's
	if p := start(t, nil, steady(dir, theirs)...); p.wait() != 0 {
		t.Fatal(p)
	}
	half := filepath.Join(mine, "half") // their own, but for one folder
	copyTree(t, theirs, half)
	give(half)
	if err := os.Chown(filepath.Join(half, "sub-01/func"), 0, 0); err != nil {
		t.Fatal(err)
	}
	before := finish(t, theirs)
	image, side := filepath.Join(dir, "sub-01/func/sub-01_task-watch_bold.nii"), filepath.Join(dir, "sub-01/func/sub-01_task-watch_bold.json")
	for _, c := range []struct {
		name string
		args []string
		shut string // what nobody else may read or enter
		code int
		says string
	}{
		{"OUT in a folder of root's", steady(dir, filepath.Join(place, "new")), "", 73, "new: cannot be created: permission denied"},
		{"OUT of root's, up to date", steady(dir, theirs), "", 0, ""},
		{"OUT of root's", steady(dir, theirs, "--redo"), "", 73, "out/sub-01/func: cannot be created: permission denied"},
		{"OUT of root's, other settings", steady(dir, theirs, "--skip", "1"), "", 73, "cannot be created: permission denied"},
		{"OUT with a folder of root's", steady(dir, half, "--redo"), "", 73, "sub-01/func: cannot be created: permission denied"},
		{"an image", steady(dir, filepath.Join(mine, "a")), image, 74, "sub-01/func/sub-01_task-watch_bold.nii: reading the header: permission denied"},
		{"an image, survey", []string{"survey", dir}, image, 74, "sub-01/func/sub-01_task-watch_bold.nii: reading the header: permission denied"},
		{"a sidecar", steady(dir, filepath.Join(mine, "b")), side, 74, "sub-01/func/sub-01_task-watch_bold.json: reading: permission denied"},
		{"a folder of images", steady(dir, filepath.Join(mine, "c")), filepath.Join(dir, "sub-01/func"), 3, "sub-01/func: a folder that cannot be read: permission denied"},
		{"a folder of images, survey", []string{"survey", dir}, filepath.Join(dir, "sub-01/func"), 3, "sub-01/func: a folder that cannot be read: permission denied"},
		{"a subject", []string{"survey", dir}, filepath.Join(dir, "sub-02"), 3, "sub-02: a folder that cannot be read: permission denied"},
		{"the dataset", []string{"survey", dir}, dir, 66, "permission denied"},
		{"the dataset, steady", steady(dir, filepath.Join(mine, "d")), dir, 66, "permission denied"},
		{"the description", []string{"survey", dir}, filepath.Join(dir, "dataset_description.json"), 0, "dataset_description.json"},
		{"a settings file", steady(dir, filepath.Join(mine, "e"), "--settings", exe+".json"), "", 64, "evenkeel.json"},
		{"audit of what cannot be read", []string{"audit", theirs, "--dataset", dir}, filepath.Join(theirs, "sub-01/func"), 4, "unreadable: sub-01/func: found permission denied"},
	} {
		if c.shut != "" {
			info, err := os.Stat(c.shut)
			if err != nil {
				t.Fatal(err)
			}
			if err := os.Chmod(c.shut, 0); err != nil {
				t.Fatal(err)
			}
			defer os.Chmod(c.shut, info.Mode())
		}
		p := as(c.args...)
		code, said := p.wait(), p.stderr.String()+p.stdout.String()
		noTrace(t, said)
		if code != c.code || !strings.Contains(said, c.says) {
			t.Errorf("%s: want exit %d and %q: %s", c.name, c.code, c.says, p)
		}
		if c.shut != "" {
			os.Chmod(c.shut, 0o755)
		}
	}
	before.same(t, theirs, "a user without rights")
	if left := outputs(filepath.Join(mine, "d")); len(left) > 0 {
		t.Errorf("left: %v", left)
	}
}

// An input that vanishes, is cut short, grows or is written anew while its run is worked on is found,
// by each run itself; the others of the cohort are done.
func TestInputChangesMidRun(t *testing.T) {
	image := theRun + "_bold.nii"
	routes := [][]string{{"--order", "time-first"}, {"--motion", "volume", "--time", "sinc"}} // in memory, and streamed
	for name, change := range map[string]func(full string) error{
		"vanishes":      os.Remove,
		"is cut short":  func(full string) error { return os.Truncate(full, 5000) },
		"grows":         func(full string) error { return os.Truncate(full, 1<<20) },
		"becomes empty": func(full string) error { return os.Truncate(full, 0) },
		"is rewritten": func(full string) error {
			data, err := os.ReadFile(full)
			if err != nil {
				return err
			}
			data[len(data)-2] ^= 1
			return os.WriteFile(full, data, 0o644)
		},
		"becomes a pipe": func(full string) error {
			if err := os.Remove(full); err != nil {
				return err
			}
			return unix.Mkfifo(full, 0o644)
		},
	} {
		these := routes
		if name != "vanishes" && name != "is cut short" {
			these = these[1:] // one of them will do
		}
		for _, args := range these {
			dir := crewCohort(t, 2)
			out := filepath.Join(t.TempDir(), "out")
			p := start(t, nil, append([]string{"steady", dir, out, "--jobs", "1"}, args...)...)
			for !held(filepath.Join(out, "sub-01/func/.sub-01_task-watch.lock")) {
				select {
				case <-p.ended:
					t.Fatalf("%s: no lock was seen: %s", name, p)
				default:
				}
			}
			time.Sleep(10 * time.Millisecond) // into the estimate
			p.cmd.Process.Signal(syscall.SIGSTOP)
			if err := change(filepath.Join(dir, image)); err != nil {
				t.Fatal(err)
			}
			p.cmd.Process.Signal(syscall.SIGCONT)
			code, said := p.wait(), p.stderr.String()
			noTrace(t, said)
			// One run is refused, one is done.
			if code != 3 || !strings.Contains(said, "evenkeel: input-changed: "+image) {
				t.Errorf("%s %v: %s", name, args, p)
			}
			if left := outputs(filepath.Join(out, "sub-01")); len(left) > 0 {
				t.Errorf("%s: left %v", name, left)
			}
			if done := outputs(filepath.Join(out, "sub-02")); len(done) == 0 {
				t.Errorf("%s: the other run is not there", name)
			}
		}
	}
}
