package release

import (
	"bytes"
	"crypto/sha256"
	"debug/elf"
	"debug/macho"
	"encoding/hex"
	"encoding/json"
	"flag"
	"fmt"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"testing"
)

// By default both clones share Go's build cache, which is keyed by everything that a compilation
// is told: what the clones tell it differently is seen, what the compiler itself would do differently
// the next time is not. With this flag each clone compiles all anew, for every platform; some minutes.
var fresh = flag.Bool("release.fresh", false, "compile everything anew for each clone, and for every platform")

// plain is the environment without what would lead git elsewhere.
func plain(more ...string) []string {
	var env []string
	for _, v := range os.Environ() {
		if !strings.HasPrefix(v, "GIT_") {
			env = append(env, v)
		}
	}
	return append(env, more...)
}

func command(t *testing.T, dir string, env []string, name string, args ...string) (string, error) {
	t.Helper()
	c := exec.Command(name, args...)
	c.Dir, c.Env = dir, env
	var out, errs bytes.Buffer
	c.Stdout, c.Stderr = &out, &errs
	err := c.Run()
	if err != nil {
		err = fmt.Errorf("%s %s: %w\n%s%s", name, strings.Join(args, " "), err, out.String(), errs.String())
	}
	return out.String(), err
}

func must(t *testing.T, dir string, env []string, name string, args ...string) string {
	t.Helper()
	out, err := command(t, dir, env, name, args...)
	if err != nil {
		t.Fatal(err)
	}
	return strings.TrimSpace(out)
}

// repository makes a git repository of the sources as they stand: committed or not, and also
// where they came without git.
func repository(t *testing.T) string {
	t.Helper()
	root, err := filepath.Abs("..")
	if err != nil {
		t.Fatal(err)
	}
	dir := filepath.Join(t.TempDir(), "origin")
	err = filepath.WalkDir(root, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		rel, _ := filepath.Rel(root, name)
		switch {
		case d.IsDir() && (d.Name() == ".git" || rel == "dist" || rel == filepath.Join("testdata", "rapid")):
			return filepath.SkipDir
		case d.IsDir():
			return os.MkdirAll(filepath.Join(dir, rel), 0o755)
		case !d.Type().IsRegular():
			return nil
		}
		info, err := d.Info()
		if err != nil {
			return err
		}
		b, err := os.ReadFile(name)
		if err != nil {
			return err
		}
		return os.WriteFile(filepath.Join(dir, rel), b, info.Mode().Perm())
	})
	if err != nil {
		t.Fatal(err)
	}
	must(t, dir, plain(), "git", "init", "-q", "-b", "main")
	commit(t, dir, "The sources as they stand")
	return dir
}

func commit(t *testing.T, dir, message string) {
	t.Helper()
	env := plain("GIT_AUTHOR_NAME=A boatswain", "GIT_AUTHOR_EMAIL=boatswain@ship.invalid", "GIT_COMMITTER_NAME=A boatswain", "GIT_COMMITTER_EMAIL=boatswain@ship.invalid",
		"GIT_AUTHOR_DATE=2001-02-03T04:05:06Z", "GIT_COMMITTER_DATE=2001-02-03T04:05:06Z")
	must(t, dir, env, "git", "add", "-A")
	must(t, dir, env, "git", "-c", "commit.gpgsign=false", "-c", "core.hooksPath=/dev/null", "commit", "-q", "-m", message)
}

func need(t *testing.T) {
	t.Helper()
	if testing.Short() {
		t.Skip("builds the program several times; not with -short")
	}
	for _, name := range []string{"git", "sh", "go"} {
		if _, err := exec.LookPath(name); err != nil {
			t.Skipf("%s is not here", name)
		}
	}
}

// temporary is a folder whose removal is not hindered by files that are read-only, as
// those of a module cache are.
func temporary(t *testing.T) string {
	dir := t.TempDir()
	t.Cleanup(func() {
		filepath.WalkDir(dir, func(name string, d fs.DirEntry, err error) error {
			if err == nil && d.IsDir() {
				os.Chmod(name, 0o755)
			}
			return nil
		})
	})
	return dir
}

// Two clones in different folders, one of them shallow and without tags, built by users with
// different environments, module caches and configurations: the same binaries, that name
// nobody's folders.
func TestSameBinariesFromTwoClones(t *testing.T) {
	need(t)
	origin := repository(t)
	revision := must(t, origin, plain(), "git", "rev-parse", "HEAD")
	version := must(t, origin, plain(), "sed", "-n", `s/^const Version = "\(.*\)"/\1/p`, "pipeline/plan.go")
	must(t, origin, plain(), "git", "tag", "v"+version)

	// What one user has and the other has not.
	one, two := temporary(t), temporary(t)
	a, b := filepath.Join(one, "a"), filepath.Join(two, "deeper", "down the hold", "b")
	must(t, one, plain(), "git", "clone", "-q", origin, a)
	must(t, two, plain(), "git", "clone", "-q", "--no-tags", "--depth", "1", "file://"+origin, b)
	modules := must(t, a, plain(), "go", "env", "GOMODCACHE")
	own := filepath.Join(two, "gopath")
	noise := plain("TZ=Pacific/Kiritimati", "LC_ALL=tr_TR.UTF-8", "LANG=tr_TR.UTF-8", "GOFLAGS=-race -tags=netgo -buildvcs=true -gcflags=-N", "GOAMD64=v3", "GOARM64=v9.0",
		"CGO_ENABLED=1", "CGO_CFLAGS=-O0", "GODEBUG=http2client=0", "GOOS=windows", "GOARCH=386", "GOWORK="+filepath.Join(two, "go.work"), "CDPATH=/:/tmp",
		"GOPATH="+own, "GOMODCACHE="+filepath.Join(own, "modules"), "GOPROXY=file://"+filepath.ToSlash(modules)+"/cache/download", "GOSUMDB=off",
		"GIT_DIR="+filepath.Join(two, "nowhere"), "USER=bilge", "HOME="+two)
	still := plain("TZ=UTC", "LC_ALL=C")
	// Files that git ignores are no part of the revision, and would not even compile.
	if err := os.MkdirAll(filepath.Join(b, "dist"), 0o755); err != nil {
		t.Fatal(err)
	}
	for name, text := range map[string]string{filepath.Join(b, "pipeline", "ignored.go"): "package rubbish\n", filepath.Join(b, ".git", "info", "exclude"): "ignored.go\n",
		filepath.Join(two, "go.work"): "go 1.26\n"} {
		if err := os.WriteFile(name, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	platforms := []string{"linux/amd64", "linux/arm64"}
	if *fresh {
		platforms = append(platforms, "darwin/arm64")
		still = append(still, "GOCACHE="+filepath.Join(one, "cache"))
		noise = append(noise, "GOCACHE="+filepath.Join(two, "cache"))
	} else {
		noise = append(noise, "GOCACHE="+must(t, a, plain(), "go", "env", "GOCACHE"))
	}
	var args []string
	for _, p := range platforms {
		args = append(args, "--only", p)
	}
	outA, outB := filepath.Join(one, "out"), filepath.Join(b, "dist")
	must(t, one, still, filepath.Join(a, "release", "build.sh"), append(args, "out")...)
	must(t, b, noise, "sh", append(append([]string{"release/build.sh"}, args...), "dist")...)

	sums := ""
	for _, p := range platforms {
		name := "evenkeel-" + version + "-" + strings.ReplaceAll(p, "/", "-")
		x, err := os.ReadFile(filepath.Join(outA, name))
		if err != nil {
			t.Fatal(err)
		}
		y, err := os.ReadFile(filepath.Join(outB, name))
		if err != nil {
			t.Fatal(err)
		}
		sumX, sumY := sha256.Sum256(x), sha256.Sum256(y)
		t.Logf("%s %x", name, sumX)
		if sumX != sumY {
			t.Errorf("%s: %x from one clone, %x from the other", name, sumX, sumY)
		}
		sums += hex.EncodeToString(sumX[:]) + "  " + name + "\n"
		goroot := must(t, a, plain(), "go", "env", "GOROOT")
		for _, folder := range []string{one, two, origin, modules, goroot + "/src", filepath.Dir(filepath.Dir(origin))} {
			if at := bytes.Index(x, []byte(folder)); at >= 0 {
				t.Errorf("%s names the folder %s: %q", name, folder, x[at:min(len(x), at+100)])
			}
			if at := bytes.Index(y, []byte(folder)); at >= 0 {
				t.Errorf("%s names the folder %s: %q", name, folder, y[at:min(len(y), at+100)])
			}
		}
		static(t, p, x)
	}
	for _, out := range []string{outA, outB} {
		if got, err := os.ReadFile(filepath.Join(out, "SHA256SUMS")); err != nil || string(got) != sums {
			t.Errorf("SHA256SUMS: %v\n%s\nwant\n%s", err, got, sums)
		}
	}
	if runtime.GOOS == "linux" && (runtime.GOARCH == "amd64" || runtime.GOARCH == "arm64") {
		told(t, filepath.Join(outB, "evenkeel-"+version+"-linux-"+runtime.GOARCH), version, revision, false)
	}
}

// static holds a binary against its platform: nothing of it is looked for on the machine it
// runs on (on macOS, where programs must go through it, but the system's own library).
func static(t *testing.T, platform string, b []byte) {
	t.Helper()
	if platform == "darwin/arm64" {
		f, err := macho.NewFile(bytes.NewReader(b))
		if err != nil {
			t.Fatal(err)
		}
		libs, err := f.ImportedLibraries()
		if err != nil || f.Cpu != macho.CpuArm64 {
			t.Errorf("%s: %v %v", platform, f.Cpu, err)
		}
		for _, l := range libs {
			if !strings.HasPrefix(l, "/usr/lib/") && !strings.HasPrefix(l, "/System/Library/") {
				t.Errorf("%s: needs %s", platform, l)
			}
		}
		return
	}
	f, err := elf.NewFile(bytes.NewReader(b))
	if err != nil {
		t.Fatal(err)
	}
	if want := map[string]elf.Machine{"linux/amd64": elf.EM_X86_64, "linux/arm64": elf.EM_AARCH64}[platform]; f.Machine != want {
		t.Errorf("%s: %v", platform, f.Machine)
	}
	for _, p := range f.Progs {
		if p.Type == elf.PT_INTERP || p.Type == elf.PT_DYNAMIC {
			t.Errorf("%s: not static: %v", platform, p.Type)
		}
	}
}

// told holds what a binary says of itself against what it was built from.
func told(t *testing.T, program, version, revision string, modified bool) {
	t.Helper()
	var doc struct {
		Version          string
		Revision         *string
		Modified         *bool
		Go, OS           string
		Architecture     string
		Modules          []struct{ Path, Version string }
		CPUFeaturesFound []string `json:"cpu_features"`
	}
	text := must(t, "", plain(), program, "version")
	if err := json.Unmarshal([]byte(must(t, "", plain(), program, "version", "--json")), &doc); err != nil {
		t.Fatal(err)
	}
	got := ""
	if doc.Revision != nil {
		got = *doc.Revision
	}
	if doc.Version != version || got != revision || doc.Modified == nil || *doc.Modified != modified || doc.Go == "" ||
		doc.OS != runtime.GOOS || doc.Architecture != runtime.GOARCH || len(doc.Modules) == 0 {
		t.Errorf("version --json: %+v, want version %s, revision %q, modified %v", doc, version, revision, modified)
	}
	words := "revision " + revision + "\n"
	switch {
	case revision == "":
		words = "revision unknown: built from sources without git\n"
	case modified:
		words = "revision " + revision + ", with changes that are in no revision\n"
	}
	if want := "evenkeel " + version + "\n" + words; !strings.HasPrefix(text, want) {
		t.Errorf("version: found\n%s\nwant it to begin\n%s", text, want)
	}
}

// A folder with changes, a tag that is not the version, and sources without git are told
// from a release.
func TestWhatIsNoReleaseSaysSo(t *testing.T) {
	need(t)
	clone := repository(t)
	revision := must(t, clone, plain(), "git", "rev-parse", "HEAD")
	version := must(t, clone, plain(), "sed", "-n", `s/^const Version = "\(.*\)"/\1/p`, "pipeline/plan.go")
	script, out := filepath.Join(clone, "release", "build.sh"), filepath.Join(t.TempDir(), "out")
	only := runtime.GOOS + "/" + runtime.GOARCH
	refused := func(words string, args ...string) {
		t.Helper()
		_, err := command(t, clone, plain(), script, args...)
		if err == nil || !strings.Contains(err.Error(), words) {
			t.Errorf("%v: %v, want a refusal that says %q", args, err, words)
		}
		if _, err := os.Stat(out); err == nil {
			t.Errorf("%v: something was written", args)
		}
	}
	refused("expected a folder")
	refused("--only: found plan9/amd64", "--only", "plan9/amd64", out)
	must(t, clone, plain(), "git", "tag", "v99.1.0")
	refused("tagged v99.1.0 and pipeline/plan.go says "+version, out)
	must(t, clone, plain(), "git", "tag", "-d", "v99.1.0")
	// A new file that go build would take in is a change as much as one in a file that git knows.
	added := filepath.Join(clone, "pipeline", "added.go")
	if err := os.WriteFile(added, []byte("package pipeline\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	refused("pipeline/added.go", out)
	refused("commit them, or give --modified", out)

	switch only {
	case "linux/amd64", "linux/arm64", "darwin/arm64":
		must(t, clone, plain(), script, "--modified", "--only", only, out)
		told(t, filepath.Join(out, "evenkeel-"+version+"-"+runtime.GOOS+"-"+runtime.GOARCH), version, revision, true)
	}

	// As Go builds it by itself, from a checkout and without one.
	program := filepath.Join(t.TempDir(), "evenkeel")
	own := plain("GOFLAGS=", "CGO_ENABLED=0")
	must(t, clone, own, "go", "build", "-buildvcs=true", "-o", program, "./cmd/evenkeel")
	told(t, program, version, revision, true)
	if err := os.Remove(added); err != nil {
		t.Fatal(err)
	}
	must(t, clone, own, "go", "build", "-buildvcs=true", "-o", program, "./cmd/evenkeel")
	told(t, program, version, revision, false)
	if err := os.RemoveAll(filepath.Join(clone, ".git")); err != nil {
		t.Fatal(err)
	}
	must(t, clone, own, "go", "build", "-o", program, "./cmd/evenkeel")
	told(t, program, version, "", false)
	if err := os.RemoveAll(out); err != nil {
		t.Fatal(err)
	}
	refused("is no git checkout", out)
}
