//go:build unix

package main

// What a job scheduler and a machine do to the program, with the real causes: SIGKILL at any
// instant, two processes on one OUT. Full disks and users without rights: crash_linux_test.go.

import (
	"bytes"
	"compress/gzip"
	"context"
	"encoding/binary"
	"errors"
	"flag"
	"fmt"
	"io"
	"io/fs"
	"maps"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"evenkeel/dataset"
	"evenkeel/provenance"
)

var crashLong = flag.Bool("crash.long", false, "kill 200 processes instead of 20")

// crashSeed makes the instants of a run of the tests repeatable, as far as a machine is.
const crashSeed = 5

// program finds the program under test as a command.
func program(t *testing.T) string {
	t.Helper()
	exe, err := exec.LookPath("evenkeel")
	if err != nil {
		t.Fatal(err)
	}
	return exe
}

// A job is the program, started in a process of its own.
type job struct {
	cmd            *exec.Cmd
	stdout, stderr bytes.Buffer
	ended          chan struct{}
}

// start runs the program in a process of its own, which may not last longer than two minutes.
func start(t *testing.T, prepare func(*exec.Cmd), args ...string) *job {
	t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), 2*time.Minute)
	p := &job{ended: make(chan struct{})}
	p.cmd = exec.CommandContext(ctx, program(t), args...)
	p.cmd.Stdout, p.cmd.Stderr = &p.stdout, &p.stderr
	if prepare != nil {
		prepare(p.cmd)
	}
	if err := p.cmd.Start(); err != nil {
		cancel()
		t.Fatal(err)
	}
	go func() {
		p.cmd.Wait()
		cancel()
		close(p.ended)
	}()
	return p
}

// wait gives the exit code, -1 if a signal ended the process.
func (p *job) wait() int {
	<-p.ended
	return p.cmd.ProcessState.ExitCode()
}

func (p *job) String() string {
	return dump(p.cmd.ProcessState.ExitCode(), p.stdout.String(), p.stderr.String())
}

// finished is what an undisturbed run writes, by path; a record without its log part, which
// holds times.
type finished map[string][]byte

func content(t *testing.T, name string) []byte {
	t.Helper()
	data := mustRead(t, name)
	if !strings.HasSuffix(name, "_prov.json") {
		return data
	}
	r, err := provenance.Parse(data)
	if err != nil {
		t.Fatalf("%s is no record: %v", filepath.Base(name), err)
	}
	r.Log = provenance.Log{}
	data, err = r.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	return data
}

func isLeftover(rel string) bool {
	base := filepath.Base(rel)
	return base[0] == '.' && base != ".bidsignore"
}

func finish(t *testing.T, out string) finished {
	t.Helper()
	f := finished{}
	for _, rel := range outputs(out) {
		f[rel] = content(t, filepath.Join(out, rel))
	}
	return f
}

// same fails the test unless OUT holds exactly these files: no leftovers either.
func (f finished) same(t *testing.T, out, when string) {
	t.Helper()
	if got, want := outputs(out), slices.Sorted(maps.Keys(f)); !slices.Equal(got, want) {
		t.Errorf("%s: files %v\nwant %v", when, got, want)
		return
	}
	for rel, want := range f {
		if !bytes.Equal(content(t, filepath.Join(out, rel)), want) {
			t.Errorf("%s: %s differs from an undisturbed run", when, rel)
		}
	}
}

// wreck is what a killed process left.
type wreck struct{ hidden, final, records int }

// look checks a wreck: every file under a final name is a finished one, or one of before; and
// where there is a record, the files that it names are those of it.
func look(t *testing.T, out, when string, before, after finished) (w wreck) {
	t.Helper()
	for _, rel := range outputs(out) {
		if isLeftover(rel) {
			w.hidden++
			continue
		}
		w.final++
		got := content(t, filepath.Join(out, rel))
		isOld, isNew := before[rel] != nil && bytes.Equal(got, before[rel]), after[rel] != nil && bytes.Equal(got, after[rel])
		if !isOld && !isNew {
			t.Errorf("%s: %s stands under its final name and is neither a finished file nor one of before", when, rel)
		}
		if !strings.HasSuffix(rel, "_prov.json") {
			continue
		}
		w.records++
		r, err := provenance.Parse(got)
		if err != nil {
			t.Fatal(err)
		}
		for _, f := range r.Outputs {
			sum, n, err := provenance.DigestFile(context.Background(), filepath.Join(out, f.Path))
			if err != nil || sum != f.SHA256 || n != f.Bytes {
				t.Errorf("%s: %s stands there, but %s is not as it says (%v)", when, rel, f.Path, err)
			}
		}
	}
	return w
}

// copyTree copies a folder of files.
func copyTree(t *testing.T, from, to string) {
	t.Helper()
	if err := os.CopyFS(to, os.DirFS(from)); err != nil {
		t.Fatal(err)
	}
}

// names counts the names that stand below a folder.
func names(dir string) (n int) {
	filepath.WalkDir(dir, func(_ string, _ fs.DirEntry, err error) error {
		if err == nil {
			n++
		}
		return nil
	})
	return n
}

func crewCohort(t *testing.T, runs int) (dir string) {
	dir = filepath.Join(t.TempDir(), "raw")
	for i := range runs {
		sub := fmt.Sprintf("%02d", i+1)
		s := newSailor().volumes(5)
		s.gzip = i%2 == 1
		writeDataset(dir, s.files("sub-"+sub+"/func/sub-"+sub+"_task-watch"))
	}
	return dir
}

// Killed at any instant, the program leaves no file under its final name that differs from the
// finished one, and no record whose files are not its own; the same command then goes on to the same
// bytes, and nothing hidden is left. Half of the instants are anywhere in the time that an
// undisturbed process takes; half follow upon the appearance of some number of names in OUT, for most of the
// time is arithmetic, and what can go wrong goes wrong while files come and go.
func TestKilledAnywhere(t *testing.T) {
	total, runs := 20, 2
	if *crashLong {
		total, runs = 200, 4
	}
	dir := crewCohort(t, runs)
	random := rand.New(rand.NewPCG(crashSeed, 0))
	var kills, late, hidden, partial, records int
	for _, c := range []struct {
		name   string
		share  int // of the kills, in twentieths
		args   []string
		before []string // settings of an earlier time; nil: OUT is new
	}{
		{"in memory", 6, nil, nil},
		{"streamed", 8, []string{"--motion", "volume", "--time", "sinc"}, nil},
		// An older result with files that have no place in the new one.
		{"over an older one", 6, []string{"--motion", "none", "--time", "none"}, []string{"--motion", "path", "--space", "cubic"}},
	} {
		var before finished
		old := ""
		if c.before != nil {
			old = process(t, dir, c.before...)
			before = finish(t, old)
		}
		command := func(out string) []string { return append([]string{"steady", dir, out, "--jobs", "2"}, c.args...) }
		fresh := func() string {
			out := filepath.Join(t.TempDir(), "out")
			if old != "" {
				copyTree(t, old, out)
			}
			return out
		}
		whole := fresh()
		from, first := time.Now(), names(whole)
		if p := start(t, nil, command(whole)...); p.wait() != 0 {
			t.Fatal(p)
		}
		lasts := time.Since(from)
		after := finish(t, whole)
		for k := range total * c.share / 20 {
			out := fresh()
			p := start(t, nil, command(out)...)
			when := ""
			if k%2 == 0 {
				d := time.Duration(random.Int64N(int64(lasts)))
				when = fmt.Sprintf("%s, killed after %v", c.name, d.Round(time.Millisecond))
				select {
				case <-time.After(d):
				case <-p.ended:
				}
			} else {
				// Of an older result names go before others come: changes are counted, whichever way.
				n := 1 + random.IntN(max(1, len(after)*3/4))
				wait := time.Duration(random.Int64N(2) * random.Int64N(int64(3*time.Millisecond)))
				when = fmt.Sprintf("%s, killed %v after %d changes", c.name, wait, n)
				for seen, last := 0, first; seen < n; {
					now := names(out)
					if now != last {
						seen += max(1, max(now-last, last-now))
						last = now
					}
					select {
					case <-p.ended:
						seen = n
					default:
					}
				}
				time.Sleep(wait)
			}
			p.cmd.Process.Signal(syscall.SIGKILL)
			if code := p.wait(); code == 0 {
				late++
			} else if code != -1 {
				t.Errorf("%s: %s", when, p)
			}
			kills++
			w := look(t, out, when, before, after)
			if w.hidden > 0 {
				hidden++
			}
			if w.final > 0 && w.records < runs {
				partial++
			}
			if w.records > 0 {
				records++
			}
			if q := start(t, nil, command(out)...); q.wait() != 0 {
				t.Fatalf("%s, then: %s", when, q)
			}
			after.same(t, out, when)
		}
	}
	t.Logf("%d kills: %d left hidden files, %d some files under their final names without all records, %d at least one record; %d came too late", kills, hidden, partial, records, late)
	if late > kills/2 || hidden == 0 || partial == 0 {
		t.Errorf("the instants do not meet the work")
	}
}

// A second signal changes nothing: 75, and nothing is left of the runs under way.
func TestTerminatedTwice(t *testing.T) {
	dir := crewCohort(t, 3)
	out := filepath.Join(t.TempDir(), "out")
	p := start(t, nil, "steady", dir, out, "--jobs", "1")
	for !slices.ContainsFunc(outputs(out), func(rel string) bool { return strings.HasSuffix(rel, ".lock") }) {
		select {
		case <-p.ended:
			t.Fatalf("no lock was seen: %s", p)
		default:
		}
	}
	p.cmd.Process.Signal(syscall.SIGTERM)
	time.Sleep(time.Millisecond)
	p.cmd.Process.Signal(syscall.SIGTERM)
	if code := p.wait(); code != 75 {
		t.Error(p)
	}
	noTrace(t, p.stderr.String())
	if left := slices.DeleteFunc(outputs(out), func(rel string) bool { return !isLeftover(rel) }); len(left) > 0 {
		t.Errorf("left: %v", left)
	}
	if q := start(t, nil, "steady", dir, out); q.wait() != 0 {
		t.Fatal(q)
	}
	finish(t, process(t, dir)).same(t, out, "terminated twice")
}

// held reports whether a process holds the lock of that name.
func held(name string) bool {
	f, err := os.Open(name)
	if err != nil {
		return false
	}
	defer f.Close()
	err = syscall.Flock(int(f.Fd()), syscall.LOCK_EX|syscall.LOCK_NB)
	return errors.Is(err, syscall.EWOULDBLOCK)
}

// Two processes on one OUT: the second waits for each run that the first has under way, and both end
// well. If the first is killed meanwhile, the second takes over, and clears what is left of it. What a live
// process has under way is not touched by another.
func TestTwoOnOneOut(t *testing.T) {
	dir := crewCohort(t, 2)
	want := finish(t, process(t, dir))
	for _, kill := range []bool{false, true} {
		out := filepath.Join(t.TempDir(), "out")
		args := []string{"steady", dir, out, "--jobs", "1", "--log", "json"}
		first := start(t, nil, args...)
		lock := filepath.Join(out, "sub-01/func/.sub-01_task-watch.lock")
		for !held(lock) {
			select {
			case <-first.ended:
				t.Fatalf("no lock was seen: %s", first)
			default:
			}
		}
		if kill {
			// Stopped, it holds its lock for as long as the second takes to meet it.
			first.cmd.Process.Signal(syscall.SIGSTOP)
		}
		var told watch
		told.sign, told.seen = "waiting", make(chan struct{})
		second := start(t, func(c *exec.Cmd) { c.Stderr = struct{ io.Writer }{&told} }, args...)
		if kill {
			select {
			case <-told.seen:
			case <-time.After(30 * time.Second):
				t.Fatal("a run held by a stopped process was not waited for")
			}
			first.cmd.Process.Signal(syscall.SIGKILL)
		}
		if code := first.wait(); code != 0 && !kill {
			t.Errorf("the first: %s", first)
		}
		if code := second.wait(); code != 0 {
			t.Errorf("the second: exit %d\n%s", code, told.String())
		}
		want.same(t, out, fmt.Sprintf("two on one OUT, killed %v", kill))
	}
	// Many at once, on a new OUT: all write the files common to all runs.
	out := filepath.Join(t.TempDir(), "out")
	var crowd []*job
	for range 4 {
		crowd = append(crowd, start(t, nil, "steady", dir, out, "--jobs", "1"))
	}
	for _, p := range crowd {
		if p.wait() != 0 {
			t.Error(p)
		}
	}
	want.same(t, out, "four on one OUT")
}

// Leftovers of every kind that a dead process can leave, the common files' included, go with the next
// run; those of a run that another process has in hand stay, and so does what is nobody's.
func TestLeftoversOfTheDead(t *testing.T) {
	dir := crewCohort(t, 2)
	args := []string{"--motion", "none", "--time", "none"}
	want := finish(t, process(t, dir, args...))
	out := process(t, dir, args...)
	put := func(rel string) string {
		t.Helper()
		name := filepath.Join(out, rel)
		if err := os.WriteFile(name, []byte("half"), 0o644); err != nil {
			t.Fatal(err)
		}
		return name
	}
	for _, rel := range []string{".dataset_description.json0123456789", ".README0123456789", "..bidsignore0123456789", ".runs.json0123456789", ".runs.tsv0123456789", ".runs.tsv.lock",
		"sub-01/func/.sub-01_task-watch.lock", "sub-01/func/.sub-01_task-watch_desc-shots_pose.tsv0123456789", // of other settings
		"sub-01/func/.sub-01_task-watch_desc-steady_bold.nii.gz0123456789"} {
		put(rel)
	}
	theirs := put("sub-02/func/.sub-02_task-watch_desc-steady_bold.nii.gz0123456789")
	lock, err := os.Create(filepath.Join(out, "sub-02/func/.sub-02_task-watch.lock"))
	if err != nil {
		t.Fatal(err)
	}
	if err := syscall.Flock(int(lock.Fd()), syscall.LOCK_EX); err != nil {
		t.Fatal(err)
	}
	if p := start(t, nil, append([]string{"steady", dir, out, "--subject", "01"}, args...)...); p.wait() != 0 {
		t.Fatal(p)
	}
	left := slices.DeleteFunc(outputs(out), func(rel string) bool { return !isLeftover(rel) })
	if !slices.Equal(left, []string{"sub-02/func/.sub-02_task-watch.lock", "sub-02/func/" + filepath.Base(theirs)}) {
		t.Errorf("left: %v", left)
	}
	lock.Close() // the process ends
	// A record that a process took away before it died no longer names the files of then.
	for _, o := range dataset.Outputs {
		for _, ext := range o.Exts {
			put("sub-01/func/sub-01_task-watch_desc-" + o.Desc + "_" + o.Suffix + ext)
		}
	}
	if err := os.Remove(filepath.Join(out, "sub-01/func/sub-01_task-watch_desc-steady_prov.json")); err != nil {
		t.Fatal(err)
	}
	if p := start(t, nil, append([]string{"steady", dir, out}, args...)...); p.wait() != 0 {
		t.Fatal(p)
	}
	want.same(t, out, "leftovers")
}

// headerBytes are those before the voxels, whatever the header claims.
func (s *sailor) headerBytes() []byte {
	good := newSailor().image()[:352]
	for k := range 4 { // dim[1..4] (nifti1.h)
		binary.LittleEndian.PutUint16(good[42+2*k:], uint16(s.header.Dim[k+1]))
	}
	return good
}

// packed compresses bytes.
func packed(data []byte) []byte {
	var b bytes.Buffer
	w := gzip.NewWriter(&b)
	w.Write(data)
	w.Close()
	return b.Bytes()
}
