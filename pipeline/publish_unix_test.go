//go:build unix

package pipeline

import (
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// publishForever names the folder in which a process of its own publishes without end.
const publishForever = "EVENKEEL_TEST_PUBLISH_FOREVER"

// generations publishes one generation of a run over the other: files of which each says of which
// generation it is, one of them only in every second, the record last.
func generations(dir string) error {
	for n := 0; ; n++ {
		p := &publisher{out: dir}
		for _, name := range []string{"x_bold.nii.gz", "x_bold.json", "x_events.tsv", "x_mask.nii.gz", "x_pose.tsv", "x_quality.json", "x_prov.json"} {
			if name == "x_events.tsv" && n%2 == 1 {
				continue
			}
			if err := p.writeBytes("", name, []byte(strings.Repeat(fmt.Sprintf("%d ", n), 1000))); err != nil {
				return err
			}
		}
		if err := p.publish([]string{"x_events.tsv"}); err != nil {
			return err
		}
	}
}

// A process killed while it replaces one result by another: where there is a record, every file is
// of its generation, and none of another is left. Killed is a process that does nothing but
// publish, so that nearly every kill meets it.
func TestPublishKilled(t *testing.T) {
	if dir := os.Getenv(publishForever); dir != "" {
		t.Fatal(generations(dir))
	}
	random := rand.New(rand.NewPCG(5, 0))
	var with, without, cut int
	const kills = 30
	for k := range kills {
		dir := t.TempDir()
		cmd := exec.Command(os.Args[0], "-test.run", "^TestPublishKilled$")
		cmd.Env = append(os.Environ(), publishForever+"="+dir)
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		record := filepath.Join(dir, "x_prov.json")
		for from := time.Now(); ; {
			if _, err := os.Stat(record); err == nil {
				break
			}
			if time.Since(from) > 20*time.Second {
				cmd.Process.Kill()
				cmd.Wait()
				t.Fatal("nothing was published")
			}
		}
		time.Sleep(time.Duration(random.Int64N(int64(20 * time.Millisecond))))
		for from := time.Now(); k%2 == 0 && time.Since(from) < 5*time.Second; {
			if _, err := os.Stat(record); err != nil {
				break // between two generations
			}
		}
		cmd.Process.Signal(syscall.SIGKILL)
		cmd.Wait()
		if cmd.ProcessState.ExitCode() != -1 {
			t.Fatalf("publishing ended by itself: %v", cmd.ProcessState)
		}
		files := map[string]string{}
		for _, name := range listing(t, dir) {
			if name[0] == '.' {
				continue
			}
			data, err := os.ReadFile(filepath.Join(dir, name))
			if err != nil {
				t.Fatal(err)
			}
			n, _, _ := strings.Cut(string(data), " ")
			if string(data) != strings.Repeat(n+" ", 1000) {
				t.Errorf("%s is not whole", name)
			}
			files[name] = n
		}
		n, ok := files["x_prov.json"]
		if !ok {
			without++
			continue
		}
		with++
		even := strings.ContainsAny(n[len(n)-1:], "02468")
		want := 6
		if even {
			want = 7
		}
		if len(files) != want {
			t.Errorf("record of generation %s beside %d files: %v", n, len(files), files)
		}
		for name, g := range files {
			if g != n {
				t.Errorf("record of generation %s beside %s of %s", n, name, g)
			}
		}
		if len(listing(t, dir)) > len(files) {
			cut++
		}
	}
	t.Logf("%d kills: %d left no record, %d one, beside hidden files in %d", kills, without, with, cut)
	if without == 0 || cut == 0 {
		t.Error("the instants do not meet the work")
	}
}
