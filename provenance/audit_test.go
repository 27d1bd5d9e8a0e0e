package provenance

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"github.com/google/go-cmp/cmp"
)

// The good tree: an invented cohort of three runs, of which one stem begins
// another, in an output folder and a raw dataset. Every test breaks it in one
// way and expects one finding.
type tree struct {
	t        *testing.T
	out, raw string
}

var runs = []struct{ dir, stem string }{
	{"sub-01/func", "sub-01_task-harbour"},
	{"sub-01/func", "sub-01_task-harbour_run-2"},
	{"sub-02/ses-a/func", "sub-02_ses-a_task-harbour"},
}

func goodTree(t *testing.T) *tree {
	base := t.TempDir()
	tr := &tree{t, filepath.Join(base, "out"), filepath.Join(base, "raw")}
	tr.write(tr.raw, "task-harbour_bold.json", `{"RepetitionTime":2}`)
	tr.write(tr.out, "dataset_description.json", "{}")
	tr.write(tr.out, "runs.tsv", "run\n")
	for _, r := range runs {
		tr.write(tr.raw, r.dir+"/"+r.stem+"_bold.nii.gz", "raw "+r.stem)
		tr.write(tr.out, r.dir+"/"+r.stem+"_desc-steady_bold.nii.gz", "steady "+r.stem)
		tr.write(tr.out, r.dir+"/"+r.stem+"_desc-head_mask.nii.gz", "mask "+r.stem)
		tr.write(tr.out, r.dir+"/"+r.stem+"_desc-steady_pose.tsv", "time\n")
		tr.record(r.dir, r.stem, func(*Record) {})
	}
	return tr
}

func (tr *tree) write(root, path, content string) {
	tr.t.Helper()
	name := filepath.Join(root, path)
	if err := errors.Join(os.MkdirAll(filepath.Dir(name), 0o755), os.WriteFile(name, []byte(content), 0o644)); err != nil {
		tr.t.Fatal(err)
	}
}

// audit is an audit by one worker that notes no versions.
func audit(out, raw string) ([]Finding, Checked, error) {
	return Auditor{Out: out, Raw: raw}.Audit(context.Background())
}

// describe digests the file at path (with slashes) below root.
func describe(role, root, path string) (File, error) {
	sum, n, err := DigestFile(context.Background(), filepath.Join(root, filepath.FromSlash(path)))
	return File{Role: role, Path: path, SHA256: sum, Bytes: n}, err
}

// record writes the record of a run, changed.
func (tr *tree) record(dir, stem string, change func(*Record)) {
	tr.t.Helper()
	file := func(root, role, path string) File {
		f, err := describe(role, root, path)
		if err != nil {
			tr.t.Fatal(err)
		}
		return f
	}
	r := &Record{
		Run: stem,
		Inputs: []File{
			file(tr.raw, "series", dir+"/"+stem+"_bold.nii.gz"),
			file(tr.raw, "sidecar", "task-harbour_bold.json"),
		},
		Outputs: []File{
			file(tr.out, "steady-series", dir+"/"+stem+"_desc-steady_bold.nii.gz"),
			file(tr.out, "mask", dir+"/"+stem+"_desc-head_mask.nii.gz"),
			file(tr.out, "pose-table", dir+"/"+stem+"_desc-steady_pose.tsv"),
		},
		Values:   []Value{{"RepetitionTime", "2", "task-harbour_bold.json"}},
		Software: Software{Name: "evenkeel", Version: "0.1.0"},
	}
	change(r)
	data, err := r.Marshal()
	if err != nil {
		tr.t.Fatal(err)
	}
	tr.write(tr.out, dir+"/"+stem+RecordSuffix, string(data))
}

func (tr *tree) do(err error) {
	tr.t.Helper()
	if err != nil {
		tr.t.Fatal(err)
	}
}

const (
	one    = "sub-01/func/sub-01_task-harbour"
	two    = "sub-01/func/sub-01_task-harbour_run-2"
	three  = "sub-02/ses-a/func/sub-02_ses-a_task-harbour"
	series = "_desc-steady_bold.nii.gz"
	pose   = "_desc-steady_pose.tsv"
	mask   = "_desc-head_mask.nii.gz"
)

func TestGoodTree(t *testing.T) {
	tr := goodTree(t)
	for _, c := range []struct {
		raw  string
		want Checked
	}{
		{tr.raw, Checked{Records: 3, Outputs: 9, Inputs: 6}},
		{"", Checked{Records: 3, Outputs: 9, InputsUnseen: 6}},
	} {
		findings, checked, err := audit(tr.out, c.raw)
		if err != nil || len(findings) > 0 || checked != c.want {
			t.Errorf("%v, %+v, %v", findings, checked, err)
		}
	}
	// An empty folder is in order too, and says that nothing was checked.
	findings, checked, err := audit(t.TempDir(), "")
	if err != nil || len(findings) > 0 || checked != (Checked{}) {
		t.Errorf("%v, %+v, %v", findings, checked, err)
	}
}

func TestAuditFindsTheBreak(t *testing.T) {
	sum := func(s string) string {
		var d Digester
		d.Write([]byte(s))
		return "SHA-256 " + d.Sum()
	}
	remove := func(path ...string) func(*tree) {
		return func(tr *tree) {
			for _, p := range path {
				tr.do(os.Remove(filepath.Join(tr.out, p)))
			}
		}
	}
	rec := RecordSuffix
	for name, c := range map[string]struct {
		damage func(*tree)
		want   []Finding
	}{
		"output gone": {remove(one + pose), []Finding{
			{Missing, one + rec, one + pose, "nothing", "5 bytes"}}},
		"output is a folder": {func(tr *tree) {
			remove(one + pose)(tr)
			tr.do(os.Mkdir(filepath.Join(tr.out, one+pose), 0o755))
		}, []Finding{{Unreadable, one + rec, one + pose, "a folder", "a file of 5 bytes"}}},
		"output is a pipe": {func(tr *tree) {
			remove(one + pose)(tr)
			tr.do(syscall.Mkfifo(filepath.Join(tr.out, one+pose), 0o644))
		}, []Finding{{Unreadable, one + rec, one + pose, "a pipe", "a file of 5 bytes"}}},
		"output is a link to nothing": {func(tr *tree) {
			remove(one + pose)(tr)
			tr.do(os.Symlink("nowhere", filepath.Join(tr.out, one+pose)))
		}, []Finding{{Missing, one + rec, one + pose, "a link to nothing", "5 bytes"}}},
		"output is a link out of the folder": {func(tr *tree) {
			// The file there has the right content; it is not looked at.
			remove(one + pose)(tr)
			tr.write(tr.raw, "pose.tsv", "time\n")
			tr.do(os.Symlink(filepath.Join(tr.raw, "pose.tsv"), filepath.Join(tr.out, one+pose)))
		}, []Finding{{Unreadable, one + rec, one + pose, "path escapes from parent", "a file of 5 bytes"}}},
		"output is a link inside the folder": {func(tr *tree) {
			tr.do(os.MkdirAll(filepath.Join(tr.out, ".store"), 0o755))
			tr.do(os.Rename(filepath.Join(tr.out, one+pose), filepath.Join(tr.out, ".store/1")))
			tr.do(os.Symlink("../../.store/1", filepath.Join(tr.out, one+pose)))
		}, nil},
		"output shorter": {func(tr *tree) { tr.write(tr.out, two+pose, "time") }, []Finding{
			{Changed, two + rec, two + pose, "4 bytes", "5 bytes"}}},
		"output of one byte": {func(tr *tree) { tr.write(tr.out, two+pose, "t") }, []Finding{
			{Changed, two + rec, two + pose, "1 byte", "5 bytes"}}},
		"one letter changed": {func(tr *tree) { tr.write(tr.out, three+pose, "tide\n") }, []Finding{
			{Changed, three + rec, three + pose, sum("tide\n"), sum("time\n")}}},
		"output's folder is a file": {func(tr *tree) {
			tr.record("sub-01/func", "sub-01_task-harbour", func(r *Record) {
				r.Outputs = append(r.Outputs, File{"x", "runs.tsv/x", strings.Repeat("0", 64), 1})
			})
		}, []Finding{{Missing, one + rec, "runs.tsv/x", "nothing", "1 byte"}}},
		"stranger": {func(tr *tree) { tr.write(tr.out, one+"_desc-smooth_bold.nii.gz", "") }, []Finding{
			{Unlisted, one + rec, one + "_desc-smooth_bold.nii.gz", "a file that the record does not list", "only files of the record under this run's name"}}},
		"stranger of the longer stem": {func(tr *tree) { tr.write(tr.out, two+"_events.tsv", "") }, []Finding{
			{Unlisted, two + rec, two + "_events.tsv", "a file that the record does not list", "only files of the record under this run's name"}}},
		"a file of nobody": {func(tr *tree) { tr.write(tr.out, "sub-01/func/sub-01_task-harbour2_bold.json", "") }, []Finding{
			{Unlisted, "", "sub-01/func/sub-01_task-harbour2_bold.json", "a file that no record lists", "only files of runs, beside their records"}}},
		"a file of the dataset": {func(tr *tree) { tr.write(tr.out, "notes.txt", "") }, nil},
		"a hidden file":         {func(tr *tree) { tr.write(tr.out, "sub-01/func/."+filepath.Base(one)+"_desc-steady_prov.json", "x") }, nil},
		"a hidden folder":       {func(tr *tree) { tr.write(tr.out, "sub-01/.old/x_prov.json", "x") }, nil},
		"record gone": {remove(two + rec), []Finding{
			{NoRecord, two + rec, two + series, "no record", filepath.Base(two) + rec}}},
		"record gone, other stem": {remove(one + rec), []Finding{
			{NoRecord, one + rec, one + series, "no record", filepath.Base(one) + rec}}},
		"series without a record, uncompressed": {func(tr *tree) { tr.write(tr.out, "sub-09/func/sub-09_desc-steady_bold.nii", "") }, []Finding{
			{NoRecord, "sub-09/func/sub-09" + rec, "sub-09/func/sub-09_desc-steady_bold.nii", "no record", "sub-09" + rec}}},
		"record is not JSON": {func(tr *tree) { tr.write(tr.out, one+rec, "{") }, []Finding{
			{RecordInvalid, one + rec, one + rec, "no JSON: unexpected end of JSON input (line 1, column 1)", "JSON"}}},
		"record empty": {func(tr *tree) { tr.write(tr.out, two+rec, "") }, []Finding{
			{RecordInvalid, two + rec, two + rec, "no JSON: unexpected end of JSON input (line 1, column 1)", "JSON"}}},
		"record of something else": {func(tr *tree) { tr.write(tr.out, "sub-03_prov.json", "[]") }, []Finding{
			{RecordInvalid, "sub-03_prov.json", "sub-03_prov.json", "an array", "an object"}}},
		"record edited": {func(tr *tree) {
			data, err := os.ReadFile(filepath.Join(tr.out, one+rec))
			tr.do(err)
			tr.write(tr.out, one+pose, "tide\n")
			good, bad := strings.TrimPrefix(sum("time\n"), "SHA-256 "), strings.TrimPrefix(sum("tide\n"), "SHA-256 ")
			tr.write(tr.out, one+rec, string(bytes.Replace(data, []byte(good), []byte(bad), 1)))
		}, []Finding{{RecordInvalid, one + rec, one + rec, "prefix.run", ""}}},
		"record under the name of another run": {func(tr *tree) {
			tr.do(os.Rename(filepath.Join(tr.out, two+rec), filepath.Join(tr.out, "sub-01/func/sub-01_task-harbour_run-3"+rec)))
			for _, f := range []string{series, mask, pose} {
				remove(two + f)(tr)
			}
		}, []Finding{{RecordInvalid, "sub-01/func/sub-01_task-harbour_run-3" + rec, "sub-01/func/sub-01_task-harbour_run-3" + rec,
			"the name sub-01_task-harbour_run-3" + rec, "the name sub-01_task-harbour_run-2" + rec}}},
		"record too large": {func(tr *tree) { tr.do(os.Truncate(filepath.Join(tr.out, one+rec), MaxBytes+1)) }, []Finding{
			{RecordInvalid, one + rec, one + rec, fmt.Sprintf("%d bytes", MaxBytes+1), fmt.Sprintf("at most %d", MaxBytes)}}},
		"record is a link out of the folder": {func(tr *tree) {
			tr.do(os.Rename(filepath.Join(tr.out, one+rec), filepath.Join(tr.raw, "x")))
			tr.do(os.Symlink(filepath.Join(tr.raw, "x"), filepath.Join(tr.out, one+rec)))
		}, []Finding{{Unreadable, one + rec, one + rec, "path escapes from parent", "a record"}}},
		"record is a link to nothing": {func(tr *tree) {
			remove(one + rec)(tr)
			tr.do(os.Symlink("nowhere", filepath.Join(tr.out, one+rec)))
		}, []Finding{{Unreadable, one + rec, one + rec, "a link to nothing", "a record"}}},
		"record is a pipe": {func(tr *tree) {
			remove(one + rec)(tr)
			tr.do(syscall.Mkfifo(filepath.Join(tr.out, one+rec), 0o644))
		}, []Finding{{Unreadable, one + rec, one + rec, "a pipe", "a record"}}},
		"subject moved away and linked": {func(tr *tree) {
			tr.do(os.Rename(filepath.Join(tr.out, "sub-02"), filepath.Join(tr.raw, "elsewhere")))
			tr.do(os.Symlink(filepath.Join(tr.raw, "elsewhere"), filepath.Join(tr.out, "sub-02")))
		}, []Finding{{Unreadable, "", "sub-02", "a link (path escapes from parent)", "a folder: links to folders are not followed"}}},
		"session moved inside and linked": {func(tr *tree) {
			tr.do(os.Rename(filepath.Join(tr.out, "sub-02/ses-a"), filepath.Join(tr.out, ".a")))
			tr.do(os.Symlink("../.a", filepath.Join(tr.out, "sub-02/ses-a")))
		}, []Finding{{Unreadable, "", "sub-02/ses-a", "a link (a folder)", "a folder: links to folders are not followed"}}},
		"raw dataset linked into the output": {func(tr *tree) {
			tr.do(os.Symlink(tr.raw, filepath.Join(tr.out, "sourcedata")))
		}, nil},
		"listed twice": {func(tr *tree) {
			tr.record("sub-01/func", "sub-01_task-harbour_run-2", func(r *Record) {
				f, err := describe("mask", tr.out, one+mask)
				tr.do(err)
				r.Outputs = append(r.Outputs, f)
			})
		}, []Finding{{ListedTwice, two + rec, one + mask, "it in " + one + rec + " too", "every file in one record"}}},
		"input gone": {func(tr *tree) { tr.do(os.Remove(filepath.Join(tr.raw, two+"_bold.nii.gz"))) }, []Finding{
			{InputMissing, two + rec, two + "_bold.nii.gz", "nothing", "29 bytes"}}},
		"input not fetched": {func(tr *tree) {
			tr.do(os.Remove(filepath.Join(tr.raw, two+"_bold.nii.gz")))
			tr.do(os.Symlink("../../.store/key", filepath.Join(tr.raw, two+"_bold.nii.gz")))
		}, []Finding{{InputMissing, two + rec, two + "_bold.nii.gz", "a link to nothing", "29 bytes"}}},
		"input kept in a store elsewhere": {func(tr *tree) {
			tr.do(os.Remove(filepath.Join(tr.raw, two+"_bold.nii.gz")))
			// What a link of a raw dataset leads to counts, wherever it is.
			tr.write(tr.out, ".store/key", "raw "+filepath.Base(two))
			tr.do(os.Symlink(filepath.Join(tr.out, ".store/key"), filepath.Join(tr.raw, two+"_bold.nii.gz")))
		}, nil},
		"input longer": {func(tr *tree) { tr.write(tr.raw, two+"_bold.nii.gz", "raw raw "+filepath.Base(two)) }, []Finding{
			{InputChanged, two + rec, two + "_bold.nii.gz", "33 bytes", "29 bytes"}}},
		"input changed": {func(tr *tree) { tr.write(tr.raw, two+"_bold.nii.gz", "RAW "+filepath.Base(two)) }, []Finding{
			{InputChanged, two + rec, two + "_bold.nii.gz", sum("RAW " + filepath.Base(two)), sum("raw " + filepath.Base(two))}}},
		"input is a folder": {func(tr *tree) {
			tr.do(os.Remove(filepath.Join(tr.raw, two+"_bold.nii.gz")))
			tr.do(os.Mkdir(filepath.Join(tr.raw, two+"_bold.nii.gz"), 0o755))
		}, []Finding{{InputUnreadable, two + rec, two + "_bold.nii.gz", "a folder", "a file of 29 bytes"}}},
		// One file that every record names: one finding for each.
		"shared input changed": {func(tr *tree) { tr.write(tr.raw, "task-harbour_bold.json", `{"RepetitionTime":3}`) }, []Finding{
			{InputChanged, one + rec, "task-harbour_bold.json", sum(`{"RepetitionTime":3}`), sum(`{"RepetitionTime":2}`)},
			{InputChanged, two + rec, "task-harbour_bold.json", sum(`{"RepetitionTime":3}`), sum(`{"RepetitionTime":2}`)},
			{InputChanged, three + rec, "task-harbour_bold.json", sum(`{"RepetitionTime":3}`), sum(`{"RepetitionTime":2}`)}}},
		"one path in both datasets, changed in one": {func(tr *tree) {
			tr.write(tr.raw, "dataset_description.json", "{ }")
			tr.record("sub-01/func", "sub-01_task-harbour", func(r *Record) {
				in, err := describe("description", tr.raw, "dataset_description.json")
				tr.do(err)
				out, err := describe("description", tr.out, "dataset_description.json")
				tr.do(err)
				r.Inputs, r.Outputs = append(r.Inputs, in), append(r.Outputs, out)
			})
			tr.write(tr.raw, "dataset_description.json", "{\n}")
		}, []Finding{{InputChanged, one + rec, "dataset_description.json", sum("{\n}"), sum("{ }")}}},
		"another version": {func(tr *tree) {
			tr.record("sub-01/func", "sub-01_task-harbour", func(r *Record) { r.Software.Version = "0.0.9" })
		}, []Finding{{OtherVersion, one + rec, one + rec, "0.0.9", "0.1.0"}}},
	} {
		t.Run(name, func(t *testing.T) {
			tr := goodTree(t)
			c.damage(tr)
			a := Auditor{Out: tr.out, Raw: tr.raw, Version: "0.1.0"}
			got, checked, err := a.Audit(context.Background())
			if err != nil {
				t.Fatal(err)
			}
			want := c.want
			for i := range want {
				// The identifier that would fit is not worked out by hand.
				if i < len(got) && want[i].Found == "prefix.run" && strings.HasPrefix(got[i].Found, "prefix.run: ") {
					want[i].Found, want[i].Expected = got[i].Found, got[i].Expected
				}
			}
			if d := cmp.Diff(want, got); d != "" {
				t.Errorf("-want +got\n%s", d)
			}
			for _, f := range got {
				if f.Difference() == (f.Kind == OtherVersion) {
					t.Errorf("difference: %v of %s", f.Difference(), f.Kind)
				}
			}
			// The same for any number of workers.
			a.Workers = 7
			calls, last := 0, 0
			a.Done = func(done, of int) {
				calls++
				if done != calls || done > of {
					t.Errorf("done %d of %d at call %d", done, of, calls)
				}
				last = of
			}
			again, checkedAgain, err := a.Audit(context.Background())
			if err != nil || checked != checkedAgain {
				t.Errorf("%v, %+v, %+v", err, checked, checkedAgain)
			}
			if calls != last {
				t.Errorf("%d calls of %d", calls, last)
			}
			if d := cmp.Diff(got, again); d != "" {
				t.Errorf("one worker, seven workers:\n%s", d)
			}
		})
	}
}

func TestAuditVersionNotAsked(t *testing.T) {
	tr := goodTree(t)
	tr.record("sub-01/func", "sub-01_task-harbour", func(r *Record) { r.Software.Version = "0.0.9" })
	if findings, _, err := audit(tr.out, tr.raw); err != nil || len(findings) > 0 {
		t.Errorf("%v, %v", findings, err)
	}
}

// Through a link, an output folder is the same.
func TestAuditThroughALink(t *testing.T) {
	tr := goodTree(t)
	link := filepath.Join(t.TempDir(), "link")
	tr.do(os.Symlink(tr.out, link))
	tr.do(os.Remove(filepath.Join(tr.out, one+pose)))
	findings, checked, err := audit(link, "")
	if err != nil || len(findings) != 1 || checked.Records != 3 {
		t.Errorf("%v, %+v, %v", findings, checked, err)
	}
}

func TestAuditCannotBeMade(t *testing.T) {
	tr := goodTree(t)
	for _, c := range [][2]string{
		{filepath.Join(tr.out, "none"), ""},
		{filepath.Join(tr.out, "runs.tsv"), ""},
		{tr.out, filepath.Join(tr.out, "none")},
	} {
		if findings, checked, err := audit(c[0], c[1]); err == nil || findings != nil || checked != (Checked{}) {
			t.Errorf("%v: %v, %+v", c, findings, checked)
		}
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, _, err := (Auditor{Out: tr.out}).Audit(ctx); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
	// Cancelled while files are read.
	ctx, cancel = context.WithCancel(context.Background())
	defer cancel()
	a := Auditor{Out: tr.out, Done: func(done, of int) {
		if done == 2 {
			cancel()
		}
		if done > 2 {
			t.Errorf("file %d of %d after the end", done, of)
		}
	}}
	if _, _, err := a.Audit(ctx); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

func TestFindingsAreSortedAndWritten(t *testing.T) {
	tr := goodTree(t)
	for _, p := range []string{three + pose, two + mask, one + mask, two + RecordSuffix} {
		tr.do(os.Remove(filepath.Join(tr.out, p)))
	}
	tr.write(tr.out, one+pose, "ti") // of the kinds, changed stands before missing
	got, _, err := Auditor{Out: tr.out, Workers: 4}.Audit(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	var lines []string
	for _, f := range got {
		lines = append(lines, f.String())
	}
	want := []string{
		"missing: " + one + mask + ": found nothing, expected 24 bytes (" + one + RecordSuffix + ")",
		"changed: " + one + pose + ": found 2 bytes, expected 5 bytes (" + one + RecordSuffix + ")",
		"no-record: " + two + series + ": found no record, expected " + filepath.Base(two) + RecordSuffix + " (" + two + RecordSuffix + ")",
		"missing: " + three + pose + ": found nothing, expected 5 bytes (" + three + RecordSuffix + ")",
	}
	if d := cmp.Diff(want, lines); d != "" {
		t.Errorf("-want +got\n%s", d)
	}
	if Differences(got) != 4 || Differences([]Finding{{Kind: OtherVersion}, {Kind: "of the future"}}) != 1 {
		t.Error("differences are miscounted")
	}
	data, err := json.Marshal(Finding{Missing, "r", "f", "x", "y"})
	if want := `{"kind":"missing","record":"r","file":"f","found":"x","expected":"y"}`; err != nil || string(data) != want {
		t.Errorf("%s, %v", data, err)
	}
}

// An output that was touched after its record was written.
func ExampleAuditor() {
	out, err := os.MkdirTemp("", "lantern")
	if err != nil {
		fmt.Println(err)
		return
	}
	defer os.RemoveAll(out)
	const name = "sub-01_desc-steady_pose.tsv"
	os.WriteFile(filepath.Join(out, name), []byte("time\n"), 0o644)
	pose, _ := describe("pose-table", out, name)
	r := &Record{Run: "sub-01", Outputs: []File{pose}, Software: Software{Name: "evenkeel", Version: "0.1.0"}}
	data, _ := r.Marshal()
	os.WriteFile(filepath.Join(out, "sub-01"+RecordSuffix), data, 0o644)

	os.WriteFile(filepath.Join(out, name), []byte("time\t\n"), 0o644)
	findings, checked, err := Auditor{Out: out}.Audit(context.Background())
	for _, f := range findings {
		fmt.Println(f)
	}
	fmt.Println(checked.Records, "record,", checked.Outputs, "output,", err)
	// Output:
	// changed: sub-01_desc-steady_pose.tsv: found 6 bytes, expected 5 bytes (sub-01_desc-steady_prov.json)
	// 1 record, 1 output, <nil>
}
