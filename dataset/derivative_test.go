package dataset

import (
	"encoding/json"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

func TestOutputPathAndURI(t *testing.T) {
	r := Run{Stem: "sub-01_task-a+b_run-1", Dir: "sub-01/func"}
	for _, c := range []struct{ desc, suffix, ext, want string }{
		{"steady", "bold", ".nii.gz", "sub-01/func/sub-01_task-a+b_run-1_desc-steady_bold.nii.gz"},
		{"", "events", ".tsv", "sub-01/func/sub-01_task-a+b_run-1_events.tsv"},
	} {
		if got := OutputPath(r, c.desc, c.suffix, c.ext); got != c.want {
			t.Error(got)
		}
	}
	// BIDS, Common principles, "BIDS URI": the two forms given there.
	if got := URI("", "sub-01/func/x.nii"); got != "bids::sub-01/func/x.nii" {
		t.Error(got)
	}
	if got := URI(RawName, "/sub-01/func/x.nii"); got != "bids:raw:sub-01/func/x.nii" {
		t.Error(got)
	}
}

// The golden files are written by hand after BIDS 1.11.1, "Dataset description"
// and "Derived dataset and pipeline description".
func TestDescriptionGolden(t *testing.T) {
	for file, d := range map[string]Derivative{
		"description_linked.json": {SourceName: "Lighthouse <keepers> & crew", SourceVersion: "1.2.0", SourceDOI: "doi:10.1234/sea", Version: "0.1.0", RawLink: "../.."},
		"description_doi.json":    {Name: "Crew", SourceDOI: "doi:10.1234/sea", Version: "0.1.0"},
		"description_alone.json":  {SourceName: "Lighthouse keepers", Version: "0.1.0"},
	} {
		want, err := os.ReadFile(filepath.Join("testdata", file))
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(string(want), string(d.DescriptionJSON())); diff != "" {
			t.Errorf("%s: %s", file, diff)
		}
	}
}

// Required fields (schema rules/dataset_metadata), whatever the source says.
func TestDescriptionIsAlwaysValid(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		d := Derivative{Name: rapid.String().Draw(t, "name"), SourceName: rapid.String().Draw(t, "source"), Version: "1"}
		if rapid.Bool().Draw(t, "link") {
			d.RawLink = "../raw"
		}
		var got struct {
			Name, BIDSVersion, DatasetType string
			GeneratedBy                    []struct{ Name, Version, Description string }
			DatasetLinks                   map[string]string
		}
		if err := json.Unmarshal(d.DescriptionJSON(), &got); err != nil {
			t.Fatal(err)
		}
		if got.Name == "" || got.BIDSVersion != "1.11.1" || got.DatasetType != "derivative" || len(got.GeneratedBy) != 1 || got.GeneratedBy[0].Name != "evenkeel" {
			t.Fatal(got)
		}
		if link := got.DatasetLinks["raw"]; link == "" || (link == Unlinked) != (d.RawLink == "") {
			t.Fatal("URIs of the raw dataset need a link to it: ", link)
		}
	})
}

// .bidsignore holds exactly the files that the standard has no name for.
func TestIgnoreTextCoversTheUnnamed(t *testing.T) {
	rules, bad := parseIgnore(string(IgnoreText()))
	if len(bad) != 0 {
		t.Fatal(bad)
	}
	r := Run{Stem: "sub-01_ses-1_task-a_run-1", Dir: "sub-01/ses-1/func"}
	unnamed := 0
	for _, o := range Outputs {
		for _, ext := range o.Exts {
			rel := OutputPath(r, o.Desc, o.Suffix, ext)
			if rules.ignored(rel, false) == o.Named {
				t.Errorf("%s: named %v", rel, o.Named)
			}
			if !o.Named {
				unnamed++
			}
		}
	}
	if unnamed < 10 {
		t.Error(unnamed)
	}
	for _, rel := range []string{"runs.tsv", "report.html"} {
		if !rules.ignored(rel, false) {
			t.Error(rel)
		}
	}
	for _, rel := range []string{"dataset_description.json", "README", "sub-01/func/sub-01_task-a_desc-steady_bold.json", "sub-01/func/sub-01_task-a_desc-head_mask.json",
		"sub-01/func/sub-01_task-a_bold.nii.gz"} {
		if rules.ignored(rel, false) {
			t.Error(rel)
		}
	}
	// A name at the limit leaves room for the longest output under its hidden name.
	stem := "sub-" + strings.Repeat("1", MaxName-longestOutput-4)
	if n := len("." + OutputPath(Run{Stem: stem}, "steady", "reference", ".nii.gz") + "4294967295"); n != MaxName {
		t.Error(n)
	}
}

func TestReadmeText(t *testing.T) {
	text := string(Derivative{SourceName: "Lighthouse\nkeepers", Version: "0.1.0"}.ReadmeText())
	for _, want := range []string{"RESEARCH ONLY", "PRIVACY", "evenkeel 0.1.0", "Lighthouse keepers", "STEM_desc-steady_bold.nii.gz, .json", "STEM_desc-steady_pose.tsv, .json",
		"runs.tsv, runs.json", "_prov.json", "n/a", "the anatomy of each output voxel comes", "magnetisation was in equilibrium", "no segment of k-space", "Never both"} {
		if !strings.Contains(text, want) {
			t.Errorf("README lacks %q", want)
		}
	}
	for _, o := range Outputs {
		if name := OutputPath(Run{Stem: "STEM"}, o.Desc, o.Suffix, o.Exts[0]); !strings.Contains(text, name) {
			t.Errorf("README lacks %s", name)
		}
	}
	if m := regexp.MustCompile(`(?m)^.{121,}$`).FindString(text); m != "" {
		t.Error("long line:", m)
	}
}

func TestRawLink(t *testing.T) {
	for _, c := range []struct{ out, root, home, want string }{
		{"/data/raw/derivatives/even", "/data/raw", "/home/anna", "../.."},
		{"/data/raw/derivatives/deep/even", "/data/raw", "", "../../.."},
		{"/home/anna/raw/derivatives/even", "/home/anna/raw", "/home/anna", "../.."},
		{"/data/study", "/data/study/sourcedata/raw", "", "sourcedata/raw"},
		{"/data/even", "/data/raw", "/home/anna", "../raw"},
		{"/home/anna/even", "/home/anna/raw", "/home/anna", "../raw"},
		{"/data/study/derivatives/even", "/data/study/rawdata", "", "../../rawdata"},
		{"/data/study/derivatives/even", "/data/study/sourcedata/raw", "", "../../sourcedata/raw"},
		{"/data/study/even", "/data/study/sourcedata/raw", "", "../sourcedata/raw"},
		{"/data/a b/even", "/data/a b/raw 1%", "", "../raw%201%25"},
		{"/data/study", "/data/study/a:b/raw", "", "./a:b/raw"},
		// Names of people, or of folders that are neither's own:
		{"/home/bob", "/home/anna", "/home/bob", ""},
		{"/home/bob", "/home/anna", "/root", ""},
		{"/staff/bob", "/staff/anna", "/staff/bob", ""},
		{"/Users/derivatives/even", "/Users/anna", "", ""},
		{"/tmp/even", "/data/raw", "", ""},
		{"/even", "/raw", "", ""},
		{"/data/results/even", "/data/anna/raw", "", ""},
		{"/data/results/even", "/data/raw", "", ""},
		{"/data/even", "/data/anna/raw", "", ""},
		{"/data/a/derivatives/x/even", "/data/a/raw", "", ""},
		{"/data/raw", "/data/raw", "", ""},
	} {
		if got := rawLink(c.out, c.root, c.home); got != c.want {
			t.Errorf("from %s to %s: %q, want %q", c.out, c.root, got, c.want)
		}
	}
}

// What RawLinkFor writes, FindRaw reads, through links and before OUT exists.
func TestRawLinkFindsBack(t *testing.T) {
	dir := t.TempDir()
	files(t, dir, "study/raw 1/"+described, "study/real/", "study/link -> real", "far/off/link -> ../../study/real", "alias -> study")
	for _, c := range []struct{ out, root, link string }{
		{"study/raw 1/derivatives/even", "study/raw 1", "../.."},
		{"study/even", "study/raw 1", "../raw%201"},
		{"alias/even2", "study/raw 1", "../raw%201"},
		{"study/link", "alias/raw 1", "../raw%201"},
		{"far/off/link", "study/raw 1", "../raw%201"},
	} {
		out, root := filepath.Join(dir, c.out), filepath.Join(dir, c.root)
		link := RawLinkFor(out, root)
		if link != c.link {
			t.Errorf("%s: %q, want %q", c.out, link, c.link)
		}
		if err := os.MkdirAll(out, 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(out, "dataset_description.json"), Derivative{RawLink: link}.DescriptionJSON(), 0o644); err != nil {
			t.Fatal(err)
		}
		got, ok := FindRaw(out)
		a, err1 := os.Stat(got)
		b, err2 := os.Stat(root)
		if !ok || err1 != nil || err2 != nil || !os.SameFile(a, b) {
			t.Errorf("%s: found %s %v, %v %v", c.out, got, ok, err1, err2)
		}
		if !openAt(t, out).Derivative {
			t.Error("not read as a derivative")
		}
	}
	for _, link := range []string{"doi:10.1234/sea", "https://example.org/raw", "%zz", "", "a\\u0000b"} {
		out := t.TempDir()
		files(t, out, `dataset_description.json = {"DatasetLinks": {"raw": "`+link+`"}}`)
		if got, ok := FindRaw(out); ok {
			t.Errorf("%s: %s", link, got)
		}
	}
	if _, ok := FindRaw(filepath.Join(dir, "none")); ok {
		t.Error("found without OUT")
	}
}

func TestNoPersonalPathInTheDescription(t *testing.T) {
	home := t.TempDir()
	t.Setenv("HOME", filepath.Join(home, "anna"))
	files(t, home, "anna/", "bob/raw/")
	link := RawLinkFor(filepath.Join(home, "anna"), filepath.Join(home, "bob"))
	if link != "" {
		t.Error(link)
	}
	if s := string(Derivative{RawLink: link}.DescriptionJSON()); slices.ContainsFunc([]string{"bob", "anna", home}, func(x string) bool { return strings.Contains(s, x) }) {
		t.Error(s)
	}
}
