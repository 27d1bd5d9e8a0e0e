package dataset

import (
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"unicode/utf8"

	"github.com/google/go-cmp/cmp"
)

func TestOnlyTheRawTreeIsWalked(t *testing.T) {
	image := "func/sub-01_task-rest_bold.nii.gz"
	d := open(t,
		"sub-01/"+image, "sub-01/func/sub-01_task-rest_bold.json", "sub-01/func/._sub-01_task-rest_bold.nii.gz", "sub-01/func/._sub-01_task-rest_bold.json",
		"derivatives/x/sub-01/"+image, "sourcedata/sub-01/"+image, "code/sub-01/"+image, "stimuli/sub-01/"+image,
		".git/sub-01/"+image, ".sub-01/"+image, "sub-01/.func/x_bold.nii", "sub-01/anat/sub-01_task-rest_bold.nii.gz", "sub-01/derivatives/"+image,
		"sub-01/func/sub-01_task-rest_phase.nii.gz", "sub-01/func/sub-01_task-bold_sbref.nii.gz", "sub-01/func/sub-01_task-rest_cbv.nii.gz",
	)
	want := Run{Stem: "sub-01_task-rest", File: "sub-01/" + image, Dir: "sub-01/func", Entities: Entities{{"sub", "01"}, {"task", "rest"}},
		Sidecars: []string{"sub-01/func/sub-01_task-rest_bold.json"}, Group: "sub-01_task-rest"}
	if diff := cmp.Diff(want, only(t, d)); diff != "" {
		t.Error(diff)
	}
	if len(d.Notices) != 0 || len(d.LeftOut) != 0 {
		t.Error(d.Notices, d.LeftOut)
	}
	if d.Name != "Lighthouse keepers" || d.BIDSVersion != "1.11.1" || d.Derivative || !d.Described {
		t.Errorf("%+v", d)
	}
	if got := d.Path(want.File); got != filepath.Join(d.Root, "sub-01", "func", "sub-01_task-rest_bold.nii.gz") {
		t.Error(got)
	}
}

func TestSessionsAndSorting(t *testing.T) {
	d := open(t, "sub-2/ses-b/func/sub-2_ses-b_task-x_bold.nii", "sub-2/ses-a/func/sub-2_ses-a_task-x_bold.nii",
		"sub-10/func/sub-10_task-x_bold.nii", "sub-2+a/func/sub-2+a_task-x_bold.nii",
		// In a path + comes before the slash, in a folder list after the end of a name.
		"sub-10/ses-z/func/sub-10_ses-z_task-x_bold.nii")
	want := []string{"sub-10_task-x", "sub-10_ses-z_task-x", "sub-2+a_task-x", "sub-2_ses-a_task-x", "sub-2_ses-b_task-x"}
	if diff := cmp.Diff(want, stems(d.Runs)); diff != "" {
		t.Error(diff)
	}
	if !slices.IsSortedFunc(d.Runs, func(a, b Run) int { return strings.Compare(a.File, b.File) }) {
		t.Error("not sorted")
	}
}

func TestNotFound(t *testing.T) {
	dir := t.TempDir()
	files(t, dir, "file", "dangling -> nowhere")
	for _, root := range []string{filepath.Join(dir, "none"), filepath.Join(dir, "file"), filepath.Join(dir, "dangling"), "", filepath.Join(dir, "a\nb")} {
		d, err := Open(root)
		var missing *NotFound
		if !errors.As(err, &missing) || d != nil || strings.Contains(err.Error(), "\n") {
			t.Errorf("%s: %v, %v", root, d, err)
		}
	}
	if _, err := Open(filepath.Join(dir, "none")); !errors.Is(err, fs.ErrNotExist) {
		t.Error(err)
	}
	// A folder without subjects is a dataset without runs.
	if d := openAt(t, t.TempDir()); len(d.Runs) != 0 || d.Described || !slices.Equal(kinds(d), []string{"description dataset_description.json"}) {
		t.Error(d)
	}
}

func TestPartsAndEchoes(t *testing.T) {
	f := "sub-01/func/sub-01_task-"
	d := open(t,
		f+"a_part-mag_bold.nii.gz", f+"a_part-phase_bold.nii.gz", f+"a_part-phase_bold.json",
		f+"b_part-real_bold.nii", f+"b_part-imag_bold.nii",
		f+"c_echo-1_bold.nii", f+"c_echo-2_bold.nii", f+"c_echo-10_bold.nii", f+"c_run-2_echo-1_bold.nii",
	)
	// By file name, byte by byte: 0 comes before the underscore.
	want := []string{"sub-01_task-a_part-mag", "sub-01_task-c_echo-10", "sub-01_task-c_echo-1", "sub-01_task-c_echo-2", "sub-01_task-c_run-2_echo-1"}
	if diff := cmp.Diff(want, stems(d.Runs)); diff != "" {
		t.Error(diff)
	}
	var left []string
	for _, l := range d.LeftOut {
		left = append(left, l.ID+" "+l.File+" "+l.Found)
	}
	wantLeft := []string{"part-left-out " + f + "a_part-phase_bold.nii.gz part-phase",
		"part-left-out " + f + "b_part-imag_bold.nii part-imag", "part-left-out " + f + "b_part-real_bold.nii part-real"}
	if diff := cmp.Diff(wantLeft, left); diff != "" {
		t.Error(diff)
	}
	if len(d.Notices) != 0 { // the phase image's sidecar is in use
		t.Error(d.Notices)
	}
	r := run(t, d, "sub-01_task-c_echo-2")
	if diff := cmp.Diff(want[1:4], stems(d.Companions(r))); diff != "" || r.Group != "sub-01_task-c" {
		t.Errorf("%s %s", r.Group, diff)
	}
	if got := d.Companions(run(t, d, "sub-01_task-a_part-mag")); len(got) != 1 {
		t.Error(got)
	}
}

func TestImageTwice(t *testing.T) {
	d := open(t, "sub-01/func/sub-01_task-a_bold.nii", "sub-01/func/sub-01_task-a_bold.nii.gz")
	r := only(t, d)
	if diff := cmp.Diff([]string{"image-twice"}, faultIDs(r)); diff != "" || !strings.Contains(r.Faults[0].Found, "bold.nii and sub-01/func/sub-01_task-a_bold.nii.gz") {
		t.Error(diff, r.Faults)
	}
	// One of them excluded: the other is the run.
	d = open(t, ".bidsignore = *_bold.nii\n", "sub-01/func/sub-01_task-a_bold.nii", "sub-01/func/sub-01_task-a_bold.nii.gz")
	if r := only(t, d); len(r.Faults) != 0 || !strings.HasSuffix(r.File, ".gz") {
		t.Error(r)
	}
}

// What looks like a BOLD image and is not taken is never passed over in silence.
func TestNamesThatAreNotProcessed(t *testing.T) {
	for name, reason := range map[string]string{
		"sub-01_bold.nii.gz":                                    "entity task is missing",
		"task-rest_bold.nii.gz":                                 "entity sub is missing",
		"bold.nii":                                              "entity sub is missing",
		"sub-02_task-rest_bold.nii.gz":                          "its folder is of sub-01",
		"sub-01_ses-1_task-rest_bold.nii.gz":                    "its folder is of no session",
		"sub-01_task-rest_space-scanner_bold.nii.gz":            "entity space does not belong",
		"sub-01_task-rest_desc-steady_bold.nii.gz":              "is it a derivative?",
		"sub-01_run-1_task-rest_bold.nii.gz":                    "stands after run",
		"sub-01_task-rest_keel-1_bold.nii.gz":                   "is no entity",
		"sub-01_task-rest_BOLD.nii.gz":                          "small letters",
		"sub-01_task-rest_bold.NII.GZ":                          ".nii or .nii.gz",
		"sub-01_task-rest_bold.img":                             ".nii or .nii.gz",
		"sub-01_task-rest_bold copy.nii.gz":                     "its suffix",
		"sub-01_task-rest_bold_old.nii.gz":                      "not a key-label pair",
		"sub-01_task-re\nst_bold.nii":                           "only letters",
		"sub-01_task-\xff_bold.nii":                             "only letters",
		"sub-01_task-" + strings.Repeat("x", 210) + "_bold.nii": "the names of its outputs",
	} {
		d := open(t, "sub-01/func/"+name)
		if len(d.Runs) != 0 || len(d.Notices) != 1 {
			t.Errorf("%q: %v, %v", name, stems(d.Runs), d.Notices)
			continue
		}
		n := d.Notices[0]
		if n.Kind != NoticeName || n.Path != "sub-01/func/"+name || !strings.Contains(n.Found, reason) || n.Remedy == "" {
			t.Errorf("%q: %+v, want %q", name, n, reason)
		}
		if s := n.String(); strings.Contains(s, "\n") || !utf8.ValidString(s) {
			t.Errorf("not one printable line: %q", s)
		}
	}
}

func TestOtherThingsOutOfPlace(t *testing.T) {
	d := open(t, "sub-01_task-rest_bold.nii.gz", "sub-01/sub-01_task-rest_bold.nii.gz", "sub-01/ses-1/x_bold.nii", "sub-01/func/deep/x_bold.nii",
		"sub-01 copy/func/sub-01_task-rest_bold.nii", "sub-/func/x_bold.nii", "sub-02 = a file", "sub-01/ses-a_b/func/x_bold.nii", "sub-03/func = a file",
		"sub-01/func/sub-01_task-Row_bold.nii", "sub-01/func/sub-01_task-row_bold.nii")
	want := []string{"name sub-/", "misplaced sub-01/func/deep", "name sub-01/func/sub-01_task-row_bold", "name sub-01/ses-a_b",
		"misplaced sub-01/ses-1/x_bold.nii", "misplaced sub-01/sub-01_task-rest_bold.nii.gz", "misplaced sub-01_task-rest_bold.nii.gz",
		"name sub-01 copy", "name sub-02", "name sub-03/func"}
	want[0] = "name sub-"
	got := kinds(d)
	slices.Sort(want)
	slices.Sort(got)
	if diff := cmp.Diff(want, got); diff != "" {
		t.Error(diff)
	}
	if len(d.Runs) != 2 {
		t.Error(stems(d.Runs))
	}
}

func TestUnreadableFolderIsTold(t *testing.T) {
	root := t.TempDir()
	files(t, root, described, "sub-01/func/sub-01_task-a_bold.nii", "sub-02/func/sub-02_task-a_bold.nii", "task-b_bold.json")
	shut := filepath.Join(root, "sub-01", "func")
	if err := os.Chmod(shut, 0); err != nil {
		t.Fatal(err)
	}
	defer os.Chmod(shut, 0o755)
	if _, err := os.ReadDir(shut); err == nil {
		t.Skip("skipped: permissions do not bind this user")
	}
	checkUnreadable(t, openAt(t, root))
}

// The same without permissions, which do not bind root: a folder that is gone
// by the time it is read.
func TestVanishedFolderIsTold(t *testing.T) {
	root := t.TempDir()
	files(t, root, described, "sub-01/", "sub-02/func/sub-02_task-a_bold.nii", "task-b_bold.json")
	tr, err := newTree(root)
	if err != nil {
		t.Fatal(err)
	}
	w := &walker{tree: tr, d: &Dataset{Root: root}, used: map[string]bool{}}
	entries, err := os.ReadDir(root)
	if err != nil {
		t.Fatal(err)
	}
	w.function(place{rel: "sub-01/func", subject: "01"}, nil)
	w.root(entries)
	w.finish()
	checkUnreadable(t, w.d)
}

func checkUnreadable(t *testing.T, d *Dataset) {
	t.Helper()
	// task-b_bold.json may apply to what was not seen: nothing is said of it.
	if diff := cmp.Diff([]string{"unreadable sub-01/func"}, kinds(d)); diff != "" {
		t.Fatal(diff)
	}
	n := d.Notices[0]
	if !n.Hides() || strings.Contains(n.String(), d.Root) {
		t.Error(n)
	}
	if diff := cmp.Diff([]string{"sub-02_task-a"}, stems(d.Runs)); diff != "" {
		t.Error(diff)
	}
	if got := d.SelectNotices(Filter{"sub": {"02"}}); len(got) != 0 {
		t.Error(got)
	}
	if got := d.SelectNotices(Filter{"sub": {"sub-01"}, "task": {"a"}}); len(got) != 1 {
		t.Error(got)
	}
}

func TestAnnexLinks(t *testing.T) {
	root := filepath.Join(t.TempDir(), "set")
	store := ".git/annex/objects/aa/bb/KEY/KEY"
	files(t, root, described, store,
		"sub-01/func/sub-01_task-there_bold.nii.gz -> ../../"+store,
		"sub-01/func/sub-01_task-unfetched_bold.nii.gz -> ../../.git/annex/objects/cc/dd/GONE/GONE",
		"sub-01/func/sub-01_task-pointer_bold.nii.gz = /annex/objects/MD5E-s123--abc.nii.gz\n",
		"sub-01/func/sub-01_task-plain_bold.nii.gz -> sub-01_task-there_bold.nii.gz",
		"sub-01/func/sub-01_task-circle_bold.nii.gz -> sub-01_task-circle_bold.nii.gz",
		"sub-01/func/sub-01_task-folder_bold.nii.gz/",
		"sub-01/func/sub-01_task-nojson_bold.nii.gz", "sub-01/func/sub-01_task-nojson_bold.json -> ../../.git/annex/objects/x",
		"sub-02 -> sub-03/deeper", "sub-03/deeper/func/sub-02_task-a_bold.nii",
		"../elsewhere/func/sub-04_task-a_bold.nii", "../elsewhere/secret",
		"sub-04 -> ../elsewhere",
		"sub-05/func -> ../../../elsewhere/func",
		"sub-01/func/sub-01_task-out_bold.nii.gz -> ../../../elsewhere/secret",
		"sub-01/func/sub-01_task-device_bold.nii.gz -> /dev/null",
		"sub-06 -> nowhere",
	)
	if err := syscall.Mkfifo(filepath.Join(root, "sub-01/func/sub-01_task-pipe_bold.nii.gz"), 0o644); err != nil {
		t.Log("no named pipes here:", err)
		files(t, root, "sub-01/func/sub-01_task-pipe_bold.nii.gz/")
	}
	check := func(t *testing.T, root string) {
		d := openAt(t, root)
		for task, found := range map[string]string{
			"there": "", "plain": "",
			"unfetched": "annexed content that has not been fetched", "pointer": "pointer to content", "circle": "cannot be followed", "folder": "a folder",
			"pipe": "", "out": "a link to something outside the dataset", "device": "a link to something outside the dataset", "nojson": "annexed content that has not been fetched",
		} {
			r := run(t, d, "sub-01_task-"+task)
			if task == "pipe" {
				if len(r.Faults) != 1 || r.Faults[0].ID != "image-absent" {
					t.Error(r.Faults)
				}
				continue
			}
			if found == "" {
				if len(r.Faults) != 0 {
					t.Errorf("%s: %v", task, r.Faults)
				}
				continue
			}
			if !slices.Equal(faultIDs(r), []string{"image-absent"}) || !strings.Contains(r.Faults[0].Found, found) || r.Faults[0].Expected == "" || r.Faults[0].Remedy == "" {
				t.Errorf("%s: %v, want %s", task, r.Faults, found)
				continue
			}
			if s := r.Faults[0].Error(); strings.Contains(s, "elsewhere") || strings.Contains(s, root) || strings.Contains(s, "GONE") {
				t.Errorf("tells where a link leads: %s", s)
			}
		}
		if r := run(t, d, "sub-01_task-unfetched"); !strings.Contains(r.Faults[0].Remedy, "git annex get "+r.File) {
			t.Error(r.Faults)
		}
		if r := run(t, d, "sub-01_task-nojson"); r.Faults[0].File != "sub-01/func/sub-01_task-nojson_bold.json" || len(r.Sidecars) != 0 {
			t.Error(r)
		}
		if r := run(t, d, "sub-02_task-a"); len(r.Faults) != 0 {
			t.Error(r.Faults)
		}
		if diff := cmp.Diff([]string{"outside sub-04", "outside sub-05/func", "outside sub-06"}, kinds(d)); diff != "" {
			t.Error(diff)
		}
	}
	t.Run("plain root", func(t *testing.T) { check(t, root) })
	link := filepath.Join(t.TempDir(), "link")
	if err := os.Symlink(root, link); err != nil {
		t.Fatal(err)
	}
	t.Run("root is a link", func(t *testing.T) { check(t, link) })
}

// The store of a dataset inside another lies where .git points to; that is its
// own. A link planted as .git does not open the rest of the disk.
func TestStoreElsewhere(t *testing.T) {
	dir := t.TempDir()
	files(t, dir, "modules/set/annex/objects/K/K", "modules/set/config", "private/file",
		"good/"+described, "good/.git -> ../modules/set",
		"good/sub-1/func/sub-1_task-a_bold.nii -> ../../.git/annex/objects/K/K",
		"good/sub-1/func/sub-1_task-b_bold.nii -> ../../.git/config",
		"bad/"+described, "bad/.git/annex/objects -> ../../../private",
		"bad/sub-1/func/sub-1_task-a_bold.nii -> ../../../private/file")
	d := openAt(t, filepath.Join(dir, "good"))
	if r := run(t, d, "sub-1_task-a"); len(r.Faults) != 0 {
		t.Error(r.Faults)
	}
	if r := run(t, d, "sub-1_task-b"); len(r.Faults) != 1 {
		t.Error(r.Faults)
	}
	if r := only(t, openAt(t, filepath.Join(dir, "bad"))); len(r.Faults) != 1 {
		t.Error(r.Faults)
	}
}

func TestDescriptions(t *testing.T) {
	for text, found := range map[string]string{
		`{"Name": "x", "BIDSVersion": "1.8.0", "DatasetType": "derivative", "DatasetDOI": "10.1234/sea"}`: "",
		`{"Name": "x"}`:                         "no BIDSVersion",
		`{"Name": 3, "BIDSVersion": "1.8.0"}`:   "no Name",
		`{"Name": "x", "BIDSVersion": "1.8.0",`: "no JSON object",
		`[]`:                                    "no JSON object",
		``:                                      "no JSON object",
		strings.Repeat("[", 1<<20):              "no JSON object",
		// Valid, and deeper than the parser may be trusted to go.
		`{"Name": "x", "BIDSVersion": "1.8.0", "a": ` + strings.Repeat("[", 2000) + strings.Repeat("]", 2000) + "}": "no JSON object",
		strings.Repeat(" ", maxSmallFile+1): "larger than",
	} {
		root := t.TempDir()
		files(t, root, "dataset_description.json = "+text)
		d := openAt(t, root)
		if found == "" {
			if len(d.Notices) != 0 || !d.Derivative || d.DOI != "doi:10.1234/sea" || d.BIDSVersion != "1.8.0" {
				t.Errorf("%+v", d)
			}
			continue
		}
		if len(d.Notices) != 1 || d.Notices[0].Kind != NoticeDescription || !strings.Contains(d.Notices[0].Found, found) || d.Derivative {
			t.Errorf("%.50s: %v", text, d.Notices)
		}
	}
}

func TestFilters(t *testing.T) {
	f := "/func/sub-"
	d := open(t, "sub-01"+f+"01_task-row_dir-AP_run-01_bold.nii", "sub-01"+f+"01_task-row_dir-PA_run-1_bold.nii", "sub-01"+f+"01_task-rest_run-2_echo-1_bold.nii",
		"sub-01"+f+"01_task-rest_run-2_echo-02_bold.nii", "sub-1"+f+"1_task-row_acq-x_run-10_bold.nii", "sub-1"+f+"1_task-row_part-phase_bold.nii")
	for _, c := range []struct {
		f    Filter
		want int
	}{
		{nil, 5}, {Filter{}, 5}, {Filter{"sub": nil}, 5}, {Filter{"sub": {"01"}}, 4}, {Filter{"sub": {"sub-1"}}, 1}, {Filter{"sub": {"01", "1"}}, 5},
		{Filter{"run": {"1"}}, 2}, {Filter{"run": {"run-001"}}, 2}, {Filter{"run": {"0"}}, 0}, {Filter{"run": {"x"}}, 0}, {Filter{"run": {""}}, 0},
		{Filter{"run": {"10"}}, 1}, {Filter{"echo": {"2"}}, 1}, {Filter{"echo": {"1", "2"}}, 2},
		{Filter{"dir": {"AP"}}, 1}, {Filter{"dir": {"ap"}}, 0}, {Filter{"acq": {"x"}}, 1}, {Filter{"ses": {"1"}}, 0}, {Filter{"keel": {"1"}}, 0},
		{Filter{"task": {"row"}, "sub": {"01"}}, 2}, {Filter{"sub": {"02"}}, 0}, {Filter{"sub": {"sub-"}}, 0}, {Filter{"part": {"phase"}}, 0},
	} {
		if got := d.Select(c.f); len(got) != c.want {
			t.Errorf("%v: %v, want %d", c.f, stems(got), c.want)
		}
	}
	if a, b := d.SelectLeftOut(Filter{"sub": {"1"}}), d.SelectLeftOut(Filter{"sub": {"01"}}); len(a) != 1 || len(b) != 0 {
		t.Error(a, b)
	}
}

// The series measured on scanners: see the README of that dataset.
func TestRealSeries(t *testing.T) {
	root := os.Getenv("EVENKEEL_TEST_SERIES")
	if root == "" {
		t.Skip("skipped: EVENKEEL_TEST_SERIES does not name the folder of the real series")
	}
	d := openAt(t, root)
	if len(d.Runs) != 12 || len(d.LeftOut) != 0 || len(d.Notices) != 0 || d.Name == "" {
		t.Fatalf("%d runs, %v, %v", len(d.Runs), d.LeftOut, d.Notices)
	}
	for _, r := range d.Runs {
		if len(r.Faults) != 0 || len(r.Sidecars) != 1 || r.Sidecars[0] != r.Dir+"/"+r.Stem+"_bold.json" {
			t.Errorf("%s: %v %v", r.Stem, r.Faults, r.Sidecars)
		}
		if _, err := os.Stat(d.Path(r.File)); err != nil {
			t.Error(err)
		}
	}
	if got := d.Select(Filter{"sub": {"phantomC"}, "dir": {"AP", "PA"}}); len(got) != 2 {
		t.Error(stems(got))
	}
}
