package main

// Trees that nobody would make, but for somebody who means harm or a program that went wrong.

import (
	"bytes"
	"fmt"
	"io/fs"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"
	"unicode/utf8"

	"golang.org/x/sys/unix"
)

// secret stands in every file outside the dataset that a link leads to.
const secret = "Nantucket"

// A hostile tree is built beside a sound run, sub-01.
type hostile struct {
	build func(t *testing.T, root, outside string)
	args  []string // options of both commands
	code  int      // of survey and steady
	says  string   // in what survey writes
}

func hostileTrees() map[string]hostile {
	must := func(t *testing.T, err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	put := func(t *testing.T, root, rel string, data []byte) {
		t.Helper()
		name := filepath.Join(root, rel)
		must(t, os.MkdirAll(filepath.Dir(name), 0o755))
		must(t, os.RemoveAll(name))
		must(t, os.WriteFile(name, data, 0o644))
	}
	// at puts something else than a file in a place.
	at := func(t *testing.T, root, rel string, make func(name string) error) {
		t.Helper()
		name := filepath.Join(root, rel)
		must(t, os.MkdirAll(filepath.Dir(name), 0o755))
		must(t, os.RemoveAll(name))
		must(t, make(name))
	}
	pipe := func(name string) error { return unix.Mkfifo(name, 0o644) }
	zero := func(name string) error { return unix.Mknod(name, unix.S_IFCHR|0o644, int(unix.Mkdev(1, 5))) }
	link := func(target string) func(string) error {
		return func(name string) error { return os.Symlink(target, name) }
	}
	folder := func(name string) error { return os.Mkdir(name, 0o755) }
	other := func(t *testing.T, root string) { // a second sound run
		writeDataset(root, newSailor().volumes(4).files("sub-02/func/sub-02_task-watch"))
	}
	const image, side, second = theRun + "_bold.nii", theRun + "_bold.json", "sub-02/func/sub-02_task-watch_bold"
	trees := map[string]hostile{
		"odd names": {build: func(t *testing.T, root, _ string) {
			for _, s := range []string{"\n", "\t", "\r", "\x1b[2J", "\xff\xfe", " ", "-rf", "--help", "..x", "...", "é", "e\u0301", "\u202e", "\x7f", `"`, "'", "`id`", "$(id)", "%s%n", "*", "?", "[", `\`, strings.Repeat("a", 200)} {
				put(t, root, "sub-01/func/"+s+"_bold.nii", []byte("x"))
				put(t, root, "sub-01/func/sub-01_task-"+s+"_bold.nii", []byte("x"))
				put(t, root, "sub-01/func/sub-01_task-"+s+"_bold.json", []byte("{}"))
				put(t, root, "sub-"+s+"/func/x", nil)
				put(t, root, "sub-01/ses-"+s+"/func/x", nil)
				put(t, root, s+"_bold.json", []byte("{}"))
			}
		}, code: 3, says: "not processed"}, // 200 letters are a label, and its image is none
		"odd names that are runs": {build: func(t *testing.T, root, _ string) {
			// Letters and digits of other scripts are no label of the standard.
			put(t, root, "sub-é/func/sub-é_task-watch_bold.nii", newSailor().image())
			put(t, root, "sub-01/func/sub-01_task-+_bold.nii", newSailor().image())
		}, code: 3},
		"names of 255 bytes": {build: func(t *testing.T, root, _ string) {
			long := "sub-01_task-" + strings.Repeat("a", 255-len("sub-01_task-_bold.nii")) + "_bold.nii"
			put(t, root, "sub-01/func/"+long, newSailor().image())
			put(t, root, "sub-"+strings.Repeat("b", 251)+"/func/x", nil)
		}, code: 0, says: "bytes long"},
		"1000 levels": {build: func(t *testing.T, root, _ string) {
			for _, top := range []string{"sub-01/func/deep", "sub-02/ses-1"} {
				must(t, os.MkdirAll(filepath.Join(root, top, strings.Repeat("d/", 1000)), 0o755))
			}
			must(t, os.MkdirAll(filepath.Join(root, strings.Repeat("sub-03/ses-1/func/", 100)), 0o755))
		}, code: 0},
		"circles of links": {build: func(t *testing.T, root, _ string) {
			at(t, root, "sub-02", link("sub-02"))
			at(t, root, "sub-03", link("sub-04"))
			at(t, root, "sub-04", link("sub-03"))
			at(t, root, "sub-05", link("."))
			at(t, root, "sub-06/func", link(".."))
			at(t, root, "sub-07/func", link("../sub-07/func"))
			at(t, root, "sub-08/func", link("../sub-01/func"))
			at(t, root, "sub-01/func/sub-01_task-ring_bold.nii", link("sub-01_task-ring_bold.nii"))
			at(t, root, "task-ring_bold.json", link("task-ring_bold.json"))
		}, code: 3},
		"links out of the dataset": {build: func(t *testing.T, root, outside string) {
			put(t, outside, "x_bold.nii", newSailor().image())
			put(t, outside, "x_bold.json", []byte(`{"TaskName": "`+secret+`", "InstitutionName": "`+secret+`", "RepetitionTime": 2}`))
			put(t, outside, "func/sub-03_task-watch_bold.nii", newSailor().image())
			put(t, outside, "func/sub-03_task-watch_bold.json", []byte(`{"TaskName": "`+secret+`"}`))
			put(t, outside, "annex/objects/x_bold.nii", newSailor().image())
			at(t, root, second+".nii", link(filepath.Join(outside, "x_bold.nii")))
			at(t, root, second+".json", link("../../../outside/x_bold.json"))
			at(t, root, "sub-03/func", link(filepath.Join(outside, "func")))
			at(t, root, "sub-04", link(outside))
			at(t, root, "sub-05", link("/"))
			at(t, root, "sub-06/func", link("/proc/self"))
			at(t, root, "sub-07/func", link("/dev"))
			at(t, root, "sub-01/func/sub-01_task-watch_events.tsv", link("/etc/passwd"))
			at(t, root, ".bidsignore", link("/etc/passwd"))
			at(t, root, "task-watch_bold.json", link("/proc/self/environ"))
			// Named like an annex, but not this dataset's.
			at(t, root, "sub-01/func/sub-01_task-annex_bold.nii", link(filepath.Join(outside, "annex/objects/x_bold.nii")))
		}, code: 65, says: "a link to something outside the dataset"},
		"a pipe for an image": {build: func(t *testing.T, root, _ string) {
			other(t, root)
			at(t, root, second+".nii", pipe)
		}, code: 3, says: "image-absent: " + second + ".nii: found neither a file nor a link to one"},
		"a pipe for a sidecar": {build: func(t *testing.T, root, _ string) {
			other(t, root)
			at(t, root, second+".json", pipe)
		}, code: 3, says: second + ".json: found neither a file nor a link to one"},
		"a pipe at the root for every sidecar": {build: func(t *testing.T, root, _ string) { at(t, root, "bold.json", pipe) },
			code: 65, says: "bold.json: found neither a file nor a link to one"},
		"a pipe for events":          {build: func(t *testing.T, root, _ string) { at(t, root, theRun+"_events.tsv", pipe) }, args: []string{"--events"}, code: 65},
		"a pipe for a reference":     {build: func(t *testing.T, root, _ string) { at(t, root, theRun+"_sbref.nii", pipe) }, args: []string{"--reference", "sbref", "--motion", "volume"}, code: 65},
		"a pipe for the description": {build: func(t *testing.T, root, _ string) { at(t, root, "dataset_description.json", pipe) }, code: 0, says: "dataset_description.json"},
		"a pipe for .bidsignore":     {build: func(t *testing.T, root, _ string) { at(t, root, ".bidsignore", pipe) }, code: 0, says: ".bidsignore"},
		"pipes for folders": {build: func(t *testing.T, root, _ string) {
			at(t, root, "sub-02", pipe)
			at(t, root, "sub-03/func", pipe)
			at(t, root, "sub-04/ses-1", pipe)
			at(t, root, ".git/annex/objects", pipe)
		}, code: 0},
		"a link to a pipe": {build: func(t *testing.T, root, _ string) {
			other(t, root)
			at(t, root, "code/pipe", pipe)
			at(t, root, second+".nii", link("../../code/pipe"))
		}, code: 3},
		"a socket": {build: func(t *testing.T, root, _ string) {
			other(t, root)
			at(t, root, second+".nii", func(name string) error {
				short := filepath.Join(os.TempDir(), fmt.Sprintf("ek%d", time.Now().UnixNano())) // a socket's own path may have 108 bytes
				l, err := net.ListenUnix("unix", &net.UnixAddr{Name: short, Net: "unix"})
				if err != nil {
					return err
				}
				l.SetUnlinkOnClose(false)
				defer l.Close()
				return os.Rename(short, name)
			})
		}, code: 3},
		"folders named like files": {build: func(t *testing.T, root, _ string) {
			other(t, root)
			at(t, root, second+".nii", folder)
			at(t, root, "sub-01/func/sub-01_task-watch_events.tsv", folder)
			at(t, root, "task-watch_events.tsv", folder)
			at(t, root, "dataset_description.json", folder)
			at(t, root, ".bidsignore", folder)
		}, code: 3},
		"a folder named like a sidecar": {build: func(t *testing.T, root, _ string) { at(t, root, side, folder) }, code: 65, says: side + ": found a folder"},
		"other cases": {build: func(t *testing.T, root, _ string) {
			put(t, root, "sub-01/func/sub-01_task-watch_BOLD.nii", newSailor().image())
			put(t, root, "sub-01/func/sub-01_TASK-watch_bold.nii", newSailor().image())
			put(t, root, "sub-01/func/SUB-01_task-watch_bold.nii", newSailor().image())
			put(t, root, "sub-01/FUNC/sub-01_task-watch_bold.nii", newSailor().image())
			put(t, root, "SUB-02/func/sub-02_task-watch_bold.nii", newSailor().image())
			put(t, root, "sub-01/func/sub-01_task-watch_bold.NII", newSailor().image())
		}, code: 0},
		"10000 files": {build: func(t *testing.T, root, _ string) {
			for i := range 3300 {
				for _, name := range []string{"sub-01/func/sub-01_task-t%d_bold.json", "sub-01/func/junk%d_bold.nii", "task-t%d_bold.json"} {
					must(t, os.WriteFile(filepath.Join(root, fmt.Sprintf(name, i)), []byte("{}"), 0o644))
				}
			}
			for i := range 100 {
				put(t, root, fmt.Sprintf("sub-x%d/func/y", i), nil)
			}
		}, code: 0},
		"1 KB that claims 60 GB": {build: func(t *testing.T, root, _ string) {
			other(t, root)
			s := newSailor()
			s.header.Dim[1], s.header.Dim[2], s.header.Dim[3], s.header.Dim[4] = 256, 256, 256, 900 // of 4 bytes: 60.4 GB
			head := s.headerBytes()
			must(t, os.Remove(filepath.Join(root, second+".nii")))
			put(t, root, second+".nii.gz", packed(append(head, make([]byte, 1<<20)...)))
		}, code: 3, says: second + ".nii.gz"},
	}
	if os.Geteuid() == 0 {
		trees["a device for an image"] = hostile{build: func(t *testing.T, root, _ string) { other(t, root); at(t, root, second+".nii", zero) }, code: 3}
		trees["devices everywhere"] = hostile{build: func(t *testing.T, root, _ string) {
			at(t, root, side, zero)
			at(t, root, theRun+"_events.tsv", zero)
			at(t, root, "dataset_description.json", zero)
			at(t, root, ".bidsignore", zero)
		}, args: []string{"--events"}, code: 65}
	}
	return trees
}

// snapshot describes everything below a folder: names, kinds, sizes, contents of small files.
func snapshot(t *testing.T, dir string) string {
	t.Helper()
	var b strings.Builder
	err := filepath.WalkDir(dir, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		info, err := d.Info()
		if err != nil {
			return err
		}
		fmt.Fprintf(&b, "%q %v", name, info.Mode())
		if !d.IsDir() {
			fmt.Fprintf(&b, " %d %d", info.Size(), info.ModTime().UnixNano())
		}
		b.WriteByte('\n')
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return b.String()
}

// No tree, however broken or hostile, takes the program down, holds it up, makes it
// read what lies outside or write anywhere but in OUT; what it says has no control character in it,
// and the sound run beside the trouble is done.
func TestHostileTrees(t *testing.T) {
	trees := hostileTrees()
	for name, c := range trees {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			place := t.TempDir()
			root, outside, out := filepath.Join(place, "raw"), filepath.Join(place, "outside"), filepath.Join(place, "out")
			writeDataset(root, newSailor().volumes(4).files(theRun))
			if err := os.MkdirAll(outside, 0o755); err != nil {
				t.Fatal(err)
			}
			c.build(t, root, outside)
			before := snapshot(t, root) + snapshot(t, outside)
			for _, args := range [][]string{{"survey", root}, {"survey", root, "--json"}, {"steady", root, out, "--log", "json"}, {"steady", root, out}} {
				if args[0] == "steady" {
					args = append(args, "--time", "none")
					if !slices.Contains(c.args, "--motion") {
						args = append(args, "--motion", "none")
					}
				}
				from := time.Now()
				p := start(t, func(cmd *exec.Cmd) { cmd.Dir = place }, append(args, c.args...)...)
				select {
				case <-p.ended:
				case <-time.After(30 * time.Second):
					p.cmd.Process.Kill()
					p.wait()
					t.Fatalf("%v hangs", args[0])
				}
				if d := time.Since(from); d > 2*time.Second {
					t.Logf("%v: %.2f s", args[0], d.Seconds())
				}
				said := p.stdout.String() + p.stderr.String()
				noTrace(t, said)
				if code := p.wait(); code != c.code {
					t.Errorf("%v: want %d: %.3000s", args, c.code, p)
				}
				if args[0] == "survey" && !strings.Contains(said, c.says) && len(args) == 2 {
					t.Errorf("%v does not say %q: %.3000s", args, c.says, said)
				}
				if strings.Contains(said, secret) || strings.Contains(said, "root:x:0") {
					t.Errorf("%v read what lies outside: %.3000s", args, said)
				}
				// JSON escapes those below a space only (RFC 8259, section 7).
				isJSON := slices.Contains(args, "--json") || slices.Contains(args, "json")
				if !utf8.ValidString(said) || strings.ContainsFunc(said, func(r rune) bool {
					return r < ' ' && r != '\n' || !isJSON && (r == 0x7f || r == 0x202e)
				}) {
					t.Errorf("%v: a control character, or no UTF-8: %.3000q", args, said)
				}
				if args[0] == "survey" && len(args) == 2 {
					for line := range strings.Lines(p.stderr.String()) {
						if !strings.HasPrefix(line, "evenkeel: ") {
							t.Errorf("a name breaks the line: %q", line)
						}
					}
				}
				if rss := p.cmd.ProcessState.SysUsage().(*syscall.Rusage).Maxrss; rss > 160<<10 { // KiB; the sound run alone takes some 50 MiB
					t.Errorf("%v held %d MiB", args, rss>>10)
				}
			}
			if after := snapshot(t, root) + snapshot(t, outside); after != before {
				t.Errorf("written outside OUT: before %s\nafter %s", before, after)
			}
			if entries, _ := os.ReadDir(place); len(entries) > 3 {
				t.Errorf("written beside OUT: %v", entries)
			}
			for _, rel := range outputs(out) {
				if bytes.Contains(mustRead(t, filepath.Join(out, rel)), []byte(secret)) {
					t.Errorf("%s holds what lies outside", rel)
				}
			}
			if _, err := os.Stat(filepath.Join(out, theRun+"_desc-steady_prov.json")); (err != nil) != (c.code == 65) {
				t.Errorf("the sound run: %v", err)
			}
		})
	}
}

// What stands in OUT where our files should stand cannot hold the program up either.
func TestHostileOut(t *testing.T) {
	dir := crewCohort(t, 1)
	args := []string{"--motion", "none", "--time", "none"}
	whole := process(t, dir, args...)
	want := finish(t, whole)
	for _, rel := range slices.Sorted(func(yield func(string) bool) {
		for rel := range want {
			if !yield(rel) {
				return
			}
		}
	}) {
		out := filepath.Join(t.TempDir(), "out")
		copyTree(t, whole, out)
		if err := os.Remove(filepath.Join(out, rel)); err != nil {
			t.Fatal(err)
		}
		if err := unix.Mkfifo(filepath.Join(out, rel), 0o644); err != nil {
			t.Fatal(err)
		}
		for _, command := range [][]string{{"audit", out, "--dataset", dir}, append([]string{"steady", dir, out}, args...), {"audit", out, "--dataset", dir}} {
			p := start(t, nil, command...)
			select {
			case <-p.ended:
			case <-time.After(20 * time.Second):
				p.cmd.Process.Kill()
				t.Fatalf("%s is a pipe: %s hangs", rel, command[0])
			}
			noTrace(t, p.stderr.String())
		}
		if rel != "dataset_description.json" { // without it, OUT is not ours
			want.same(t, out, rel+" was a pipe")
		}
	}
}

// A settings file that never ends is refused like any other that is none: 64, and no memory is
// filled with it.
func TestEndlessSettings(t *testing.T) {
	dir := crewCohort(t, 1)
	p := start(t, nil, "steady", dir, filepath.Join(t.TempDir(), "out"), "--settings", "/dev/zero")
	if code := p.wait(); code != 64 || !strings.Contains(p.stderr.String(), "/dev/zero: found more than 16 MiB") {
		t.Error(p)
	}
	if rss := p.cmd.ProcessState.SysUsage().(*syscall.Rusage).Maxrss; rss > 160<<10 { // KiB; 16 MiB, twice while they grow, and the program
		t.Errorf("held %d MiB", rss>>10)
	}
}
