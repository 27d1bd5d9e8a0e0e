package dataset

import (
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

// BIDS, Common principles, "The Inheritance Principle", Example 1: the run
// acq-longtr gets EchoTime from the root and RepetitionTime from its subject's
// file; acq-default gets both from the root.
func TestInheritanceExample1(t *testing.T) {
	d := open(t,
		`task-rest_bold.json = {"EchoTime": 0.04, "RepetitionTime": 1.0}`,
		"sub-01/func/sub-01_task-rest_acq-default_bold.nii.gz",
		"sub-01/func/sub-01_task-rest_acq-longtr_bold.nii.gz",
		`sub-01/func/sub-01_task-rest_acq-longtr_bold.json = {"RepetitionTime": 3.0}`,
	)
	for stem, want := range map[string][]string{
		"sub-01_task-rest_acq-longtr":  {"task-rest_bold.json", "sub-01/func/sub-01_task-rest_acq-longtr_bold.json"},
		"sub-01_task-rest_acq-default": {"task-rest_bold.json"},
	} {
		r := run(t, d, stem)
		if diff := cmp.Diff(want, r.Sidecars); diff != "" || len(r.Faults) != 0 {
			t.Errorf("%s: %v %s", stem, r.Faults, diff)
		}
	}
	if len(d.Notices) != 0 {
		t.Error(d.Notices)
	}
}

// Example 2 there: two files of one folder apply to the same image, which is not allowed.
func TestInheritanceExample2(t *testing.T) {
	d := open(t,
		"sub-01/ses-test/sub-01_ses-test_task-overtverbgeneration_bold.json",
		"sub-01/ses-test/sub-01_ses-test_task-overtverbgeneration_run-2_bold.json",
		"sub-01/ses-test/func/sub-01_ses-test_task-overtverbgeneration_run-1_bold.nii.gz",
		"sub-01/ses-test/func/sub-01_ses-test_task-overtverbgeneration_run-2_bold.nii.gz",
	)
	if r := run(t, d, "sub-01_ses-test_task-overtverbgeneration_run-1"); len(r.Faults) != 0 || len(r.Sidecars) != 1 {
		t.Errorf("run 1: %v %v", r.Faults, r.Sidecars)
	}
	r := run(t, d, "sub-01_ses-test_task-overtverbgeneration_run-2")
	if diff := cmp.Diff([]string{"sidecar-ambiguous"}, faultIDs(r)); diff != "" {
		t.Fatal(diff)
	}
	f := r.Faults[0]
	if f.File != r.File || !strings.Contains(f.Found, "generation_bold.json and ") || !strings.Contains(f.Found, "run-2_bold.json") {
		t.Error(f)
	}
}

func TestInheritanceOverAllLevels(t *testing.T) {
	image := "sub-01/ses-1/func/sub-01_ses-1_task-rest_run-1_bold.nii.gz"
	chain := []string{"bold.json", "sub-01/sub-01_task-rest_bold.json", "sub-01/ses-1/sub-01_ses-1_bold.json",
		"sub-01/ses-1/func/sub-01_ses-1_task-rest_run-1_bold.json"}
	d := open(t, append(slices.Clone(chain), image,
		// None of these applies:
		"task-nback_bold.json",    // another label
		"task-rest+_bold.json",    // a label that only begins alike
		"acq-wide_bold.json",      // an entity that the image lacks
		"task-rest_sbref.json",    // another suffix
		"sub-02/sub-02_bold.json", // another branch
		"sub-01/ses-2/ses-2_bold.json",
		"sub-01/ses-1/func/sub-01_ses-1_task-rest_run-01_bold.json", // whole labels are compared, not numbers
		"sub-01/ses-1/anat/sub-01_ses-1_bold.json",
	)...)
	r := only(t, d)
	if diff := cmp.Diff(chain, r.Sidecars); diff != "" || len(r.Faults) != 0 {
		t.Errorf("%v %s", r.Faults, diff)
	}
	want := []string{"unused acq-wide_bold.json", "unused sub-01/ses-1/func/sub-01_ses-1_task-rest_run-01_bold.json",
		"unused sub-01/ses-2/ses-2_bold.json", "unused sub-02/sub-02_bold.json", "unused task-nback_bold.json", "unused task-rest+_bold.json"}
	if diff := cmp.Diff(want, kinds(d)); diff != "" {
		t.Error(diff)
	}
}

// A root bold.json beside a root task-rest_bold.json: both apply at one level.
func TestAmbiguityAtTheRoot(t *testing.T) {
	d := open(t, "bold.json", "task-rest_bold.json", "sub-01/func/sub-01_task-rest_bold.nii", "sub-01/func/sub-01_task-row_bold.nii")
	if diff := cmp.Diff([]string{"sidecar-ambiguous"}, faultIDs(run(t, d, "sub-01_task-rest"))); diff != "" {
		t.Error(diff)
	}
	if r := run(t, d, "sub-01_task-row"); len(r.Faults) != 0 || !slices.Equal(r.Sidecars, []string{"bold.json"}) {
		t.Error(r.Faults, r.Sidecars)
	}
}

// Rule 3: a metadata file below another subject or session applies to nothing, and that is said.
func TestMisplacedSidecar(t *testing.T) {
	d := open(t, "sub-01/func/sub-01_task-rest_bold.nii.gz", "sub-01/func/sub-02_task-rest_bold.json", "sub-01/func/task-rest_sub-01_bold.json",
		"sub-01/func/sub-02_task-rest_events.tsv")
	if r := only(t, d); len(r.Sidecars) != 0 || r.Events != "" {
		t.Error(r)
	}
	want := []string{"misplaced sub-01/func/sub-02_task-rest_bold.json", "misplaced sub-01/func/sub-02_task-rest_events.tsv",
		"name sub-01/func/task-rest_sub-01_bold.json"}
	if diff := cmp.Diff(want, kinds(d)); diff != "" {
		t.Error(diff)
	}
}

// Of tables only the lowest applies (rule 5a).
func TestEvents(t *testing.T) {
	d := open(t, "task-row_events.tsv", "sub-01/sub-01_task-row_events.tsv",
		"sub-01/func/sub-01_task-row_run-1_events.tsv",
		"sub-01/func/sub-01_task-row_run-1_bold.nii.gz",
		"sub-01/func/sub-01_task-row_run-2_bold.nii.gz",
		"sub-02/func/sub-02_task-row_bold.nii.gz",
		"sub-02/func/sub-02_task-rest_bold.nii.gz",
		"sub-03/func/sub-03_task-row_echo-1_bold.nii.gz", "sub-03/func/sub-03_events.tsv", "sub-03/func/sub-03_task-row_events.tsv",
		"sub-04/func/sub-04_task-row_bold.nii.gz", "sub-04/func/sub-04_task-row_events.tsv -> gone.tsv",
	)
	for stem, want := range map[string]string{
		"sub-01_task-row_run-1":  "sub-01/func/sub-01_task-row_run-1_events.tsv",
		"sub-01_task-row_run-2":  "sub-01/sub-01_task-row_events.tsv",
		"sub-02_task-row":        "task-row_events.tsv",
		"sub-02_task-rest":       "",
		"sub-03_task-row_echo-1": "",
		"sub-04_task-row":        "",
	} {
		r := run(t, d, stem)
		if r.Events != want || len(r.Faults) != 0 {
			t.Errorf("%s: %q, want %q; %v", stem, r.Events, want, r.Faults)
		}
		id := ""
		if r.EventsFault != nil {
			id = r.EventsFault.ID
		}
		if w := map[string]string{"sub-03_task-row_echo-1": "sidecar-ambiguous", "sub-04_task-row": "image-absent"}[stem]; id != w {
			t.Errorf("%s: events fault %q, want %q", stem, id, w)
		}
	}
}

func TestSBRef(t *testing.T) {
	f := "sub-01/func/sub-01_task-"
	d := open(t,
		f+"a_bold.nii.gz", f+"a_sbref.nii.gz", f+"a_run-1_sbref.nii.gz",
		f+"b_bold.nii.gz", f+"b_dir-AP_sbref.nii.gz", "sub-01/func/sub-01_sbref.nii.gz", // no inheritance for images
		f+"c_echo-1_bold.nii", f+"c_echo-2_bold.nii", f+"c_echo-1_sbref.nii", f+"c_sbref.nii",
		f+"d_part-mag_bold.nii", f+"d_sbref.nii",
		f+"e_bold.nii", f+"e_part-mag_sbref.nii", f+"e_part-phase_sbref.nii",
		f+"f_bold.nii", f+"f_sbref.nii", f+"f_sbref.nii.gz",
		f+"g_bold.nii", f+"g_sbref.nii -> gone",
	)
	for stem, want := range map[string]string{
		"a": f + "a_sbref.nii.gz", "b": "", "c_echo-1": f + "c_echo-1_sbref.nii", "c_echo-2": f + "c_sbref.nii",
		"d_part-mag": f + "d_sbref.nii", "e": f + "e_part-mag_sbref.nii", "f": "", "g": "",
	} {
		r := run(t, d, "sub-01_task-"+stem)
		if r.SBRef != want || len(r.Faults) != 0 {
			t.Errorf("%s: %q, want %q; %v", stem, r.SBRef, want, r.Faults)
		}
		id := ""
		if r.SBRefFault != nil {
			id = r.SBRefFault.ID
		}
		if w := map[string]string{"f": "image-twice", "g": "image-absent"}[stem]; id != w {
			t.Errorf("%s: fault %q, want %q", stem, id, w)
		}
	}
}
