//go:build unix

package dataset_test

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
	"unicode/utf8"

	"github.com/google/go-cmp/cmp"

	"evenkeel/dataset"
	"evenkeel/fault"
	"evenkeel/pipeline"
)

// treeWords are what names and links of fuzzed trees are mostly made of; any other byte stands for
// itself.
var treeWords = []string{
	"sub-01", "sub-02", "ses-1", "func", "/", "_", "task-a", "run-1", "run-01", "echo-1", "echo-2", "part-phase", "bold", "sbref", "events",
	".nii", ".nii.gz", ".json", ".tsv", "sub-01/func/sub-01_task-a_", "sub-02/ses-1/func/sub-02_ses-1_task-a_", "dataset_description.json", ".bidsignore",
	"..", "../outside", ".", ".git", ".git/annex/objects", "BOLD", "\n", "\x1b", "\xff", "-", "+", "é", "desc-x", "sub-", "participants.tsv", "*", "!",
}

// treeName spells a name out of bytes: below 0x80 words, above bytes.
func treeName(b []byte) string {
	var s strings.Builder
	for _, c := range b {
		if int(c) < len(treeWords) {
			s.WriteString(treeWords[c])
		} else {
			s.WriteByte(c)
		}
	}
	return strings.ReplaceAll(s.String(), "\x00", "")
}

// treeImage is a sound image of 2 x 2 x 2 voxels and 4 volumes (nifti1.h).
var treeImage = func() []byte {
	b := make([]byte, 352+2*2*2*4)
	le := binary.LittleEndian
	le.PutUint32(b, 348)
	for i, d := range []uint16{4, 2, 2, 2, 4, 1, 1, 1} {
		le.PutUint16(b[40+2*i:], d)
	}
	le.PutUint16(b[70:], 2) // unsigned bytes
	le.PutUint16(b[72:], 8)
	for i, v := range []float32{1, 3, 3, 3, 2, 0, 0, 0} {
		le.PutUint32(b[76+4*i:], math.Float32bits(v))
	}
	le.PutUint32(b[108:], math.Float32bits(352))
	b[123] = 2 | 8
	le.PutUint16(b[254:], 1)
	for i := range 3 {
		le.PutUint32(b[280+16*i+4*i:], math.Float32bits(3))
	}
	copy(b[344:], "n+1\x00")
	return b
}()

const (
	treeSidecar = `{"RepetitionTime": 2, "TaskName": "a", "SliceTiming": [0, 1], "PhaseEncodingDirection": "j"}`
	treeSecret  = "Nantucket" // stands in every file outside
)

// A grown tree: what it is made of, by kind of thing.
//
// Each line of data, up to a zero byte, is one thing: its kind, the length of its name, the name, and for links
// and files with a text what follows.
func growTree(root string, data []byte) {
	for _, line := range bytes.Split(data, []byte{0}) {
		if len(line) < 3 {
			continue
		}
		kind, n := line[0]%10, int(line[1])%len(line[2:])+1
		name, rest := treeName(line[2:2+n]), line[2+n:]
		full := filepath.Join(root, name) // cleaned: ".." could lead out
		if rel, err := filepath.Rel(root, full); err != nil || rel == "." || !filepath.IsLocal(rel) {
			continue
		}
		if os.MkdirAll(filepath.Dir(full), 0o755) != nil { // a name too long, a file in the way
			continue
		}
		// A link made before may lead out: nothing is put behind it.
		if real, err := filepath.EvalSymlinks(filepath.Dir(full)); err != nil || real != root && !strings.HasPrefix(real, root+"/") {
			continue
		}
		os.Remove(full)
		switch kind {
		case 0, 1:
			os.WriteFile(full, treeImage, 0o644)
		case 2, 3:
			os.WriteFile(full, []byte(treeSidecar), 0o644)
		case 4:
			os.WriteFile(full, rest, 0o644)
		case 5:
			os.Mkdir(full, 0o755)
		case 6:
			syscall.Mkfifo(full, 0o644)
		case 7:
			os.Symlink(treeName(rest), full)
		case 8:
			os.Symlink("/"+treeName(rest), full)
		case 9:
			os.Symlink(filepath.Join(filepath.Dir(root), "outside", treeName(rest)), full)
		}
	}
}

// listTree names everything below a folder, with its kind and size.
func listTree(dir string) (out []string) {
	filepath.WalkDir(dir, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return nil
		}
		line := name + " " + d.Type().String()
		if info, err := d.Info(); err == nil && d.Type().IsRegular() {
			line += " " + info.ModTime().String()
		}
		out = append(out, line)
		return nil
	})
	return out
}

// saneText fails the test on a text that could break a line or command a terminal.
func saneText(t *testing.T, text string) {
	t.Helper()
	if !utf8.ValidString(text) || strings.ContainsFunc(text, func(r rune) bool { return r < ' ' || r == 0x7f }) {
		t.Errorf("a control character or no UTF-8 in %q", text)
	}
	if strings.Contains(text, treeSecret) {
		t.Errorf("what lies outside is told: %q", text)
	}
}

// Whatever the tree: the walk and the survey end, without a panic, with the same answer twice; no run and
// no input lies outside of it; nothing in it changes; and what is said of it is fit for a terminal.
func FuzzTree(f *testing.F) {
	thing := func(kind byte, name []byte, rest ...byte) []byte {
		return append(append([]byte{kind, byte(len(name) - 1)}, name...), rest...)
	}
	seed := func(things ...[]byte) { f.Add(bytes.Join(things, []byte{0})) }
	// Words by their place in treeWords.
	image, side := thing(0, []byte{19, 12, 15}), thing(2, []byte{19, 12, 17})
	seed(image, side, thing(4, []byte{21}, []byte(`{"Name":"x","BIDSVersion":"1.11.1"}`)...))
	seed(image, thing(2, []byte{12, 17}), thing(7, []byte{1, 4, 3}, 23, 4, 3))    // inherited; a link inside
	seed(side, thing(6, []byte{19, 12, 15}))                                      // a pipe for an image
	seed(image, thing(6, []byte{19, 12, 17}), thing(6, []byte{21}))               // pipes for sidecar and description
	seed(side, thing(9, []byte{19, 12, 15}, []byte("sub-01_task-a_bold.nii")...)) // out
	seed(side, image, thing(9, []byte{1}, []byte("sub-02")...), thing(8, []byte{1, 4, 3}), thing(7, []byte{0, 4, 2}, 25))
	seed(thing(7, []byte{0}, 0), thing(7, []byte{1}, 0), image)
	seed(image, side, thing(4, []byte{22}, 38, '\n', 39, 0x80, '\n'))
	seed(thing(5, []byte{19, 12, 15}), side, thing(5, []byte{19, 12, 17}))
	seed(image, side, thing(0, []byte{19, 29, 12, 15}), thing(0, []byte{19, 30, 31, 12, 15}), thing(0, []byte{19, 28, 15}))
	f.Fuzz(func(t *testing.T, data []byte) {
		if len(data) > 4<<10 {
			return
		}
		place, err := filepath.EvalSymlinks(t.TempDir())
		if err != nil {
			t.Fatal(err)
		}
		root, outside := filepath.Join(place, "raw"), filepath.Join(place, "outside")
		for _, dir := range []string{root, filepath.Join(outside, "sub-02", "func")} {
			if err := os.MkdirAll(dir, 0o755); err != nil {
				t.Fatal(err)
			}
		}
		sidecar := []byte(`{"RepetitionTime": 2, "TaskName": "` + treeSecret + `", "Manufacturer": "` + treeSecret + `"}`)
		for name, content := range map[string][]byte{"sub-01_task-a_bold.nii": treeImage, "sub-01_task-a_bold.json": sidecar,
			"sub-02/func/sub-02_task-a_bold.nii": treeImage, "sub-02/func/sub-02_task-a_bold.json": sidecar} {
			if err := os.WriteFile(filepath.Join(outside, name), content, 0o644); err != nil {
				t.Fatal(err)
			}
		}
		growTree(root, data)
		before := listTree(place)

		ctx, cancel := context.WithTimeout(context.Background(), 20*time.Second)
		defer cancel()
		settings := pipeline.DefaultSettings()
		settings.Events, settings.Reference = true, pipeline.Standard{Word: "sbref"}
		look := func() (*dataset.Dataset, []*pipeline.Plan, error) {
			ds, err := dataset.Open(root)
			if err != nil {
				t.Fatalf("the root is a folder, yet: %v", err)
			}
			plans, err := pipeline.Survey(ctx, ds, pipeline.Request{Settings: settings, Workers: 1})
			return ds, plans, err
		}
		type answer struct {
			ds    *dataset.Dataset
			plans []*pipeline.Plan
			err   error
		}
		done := make(chan answer, 1)
		go func() {
			ds, plans, err := look()
			done <- answer{ds, plans, err}
		}()
		var a answer
		select {
		case a = <-done:
		case <-time.After(20 * time.Second):
			t.Fatal("the walk hangs")
		}
		ds := a.ds
		for _, n := range ds.Notices {
			saneText(t, n.String())
		}
		for _, x := range ds.LeftOut {
			saneText(t, x.Error())
		}
		var nothing *pipeline.NothingSelected
		var refused *pipeline.Refused
		switch {
		case errors.As(a.err, &nothing) && len(ds.Runs) == 0, errors.As(a.err, &refused) && ds.Derivative:
			return
		case a.err != nil:
			t.Fatal(a.err)
		}
		for _, p := range a.plans {
			var bug *pipeline.BugError
			if errors.As(p.Err, &bug) {
				t.Fatalf("%v\n%s", bug, bug.Stack)
			}
			if p.Err != nil {
				saneText(t, p.Err.Error())
			}
			absent := map[string]bool{}
			for _, x := range p.Faults {
				saneText(t, x.Error())
				if _, ok := fault.Lookup(x.ID); !ok {
					t.Errorf("fault %q", x.ID)
				}
				absent[x.File] = absent[x.File] || x.ID == "image-absent"
			}
			if p.Acq != nil {
				for _, field := range append(p.Acq.Used, p.Acq.Carried...) {
					saneText(t, field.Key)
					if strings.Contains(field.Raw, treeSecret) {
						t.Errorf("%s was read outside", field.Key)
					}
				}
			}
			for _, in := range p.Inputs {
				if !filepath.IsLocal(in.Path) {
					t.Errorf("input %q", in.Path)
				}
				if absent[in.Path] {
					continue
				}
				real, err := filepath.EvalSymlinks(ds.Path(in.Path))
				if err != nil || !strings.HasPrefix(real, root+"/") {
					t.Errorf("input %q is %q: %v", in.Path, real, err)
				}
			}
			for _, o := range p.Outputs {
				if !filepath.IsLocal(o.Path) || len(filepath.Base(o.Path)) > 244 { // 255 less a dot and ten digits
					t.Errorf("output %q", o.Path)
				}
			}
		}
		again, _, _ := look()
		if d := cmp.Diff(ds.Notices, again.Notices) + cmp.Diff(ds.LeftOut, again.LeftOut) + cmp.Diff(len(ds.Runs), len(again.Runs)); d != "" {
			t.Error(d)
		}
		if d := cmp.Diff(before, listTree(place)); d != "" {
			t.Errorf("the tree changed: %s", d)
		}
	})
}
