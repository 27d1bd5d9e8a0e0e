package dataset

import (
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
)

// Cases after the gitignore manual page ("PATTERN FORMAT" and "EXAMPLES"). A
// path that ends in a slash is a folder.
func TestIgnorePatterns(t *testing.T) {
	for _, c := range []struct {
		text string
		yes  string
		no   string
	}{
		{"hello.*", "hello.txt a/hello.java hello.x/y", "ahello.txt"},
		{"/hello.*", "hello.txt hello.c", "a/hello.java"},
		{"foo/", "foo/ a/foo/ a/foo/b", "foo a/foo"},
		{"doc/frotz", "doc/frotz doc/frotz/", "a/doc/frotz"},
		{"doc/frotz/", "doc/frotz/", "a/doc/frotz/ doc/frotz"},
		{"frotz/", "frotz/ a/frotz/", "frotz"},
		{"foo/*", "foo/test.json foo/bar/ foo/bar/hello.c", "foo/ a/foo/x"},
		{"**/foo", "foo a/foo a/b/foo", "foo2"},
		{"**/foo/bar", "foo/bar a/foo/bar", "foo/a/bar"},
		{"abc/**", "abc/x abc/x/y", "abc abc/ z/abc/x"},
		{"a/**/b", "a/b a/x/b a/x/y/b", "b x/a/b"},
		{"# comment\n\n\\#file", "#file", "comment file"},
		{"\\!important!.txt", "!important!.txt", "important!.txt"},
		{"*.nii\n!keep.nii", "a.nii b/c.nii", "keep.nii b/keep.nii"},
		{"!keep.nii\n*.nii", "keep.nii", "x"},
		{"a/\n!a/keep.nii", "a/keep.nii", ""},                                 // no way back out of an ignored folder
		{"/*\n!/foo\n/foo/*\n!/foo/bar", "x foo/x", "foo/ foo/bar foo/bar/y"}, // the manual's last example
		{"trailing  ", "trailing", ""},
		{"*_bold.nii.gz\r\n", "sub-1/func/sub-1_task-a_bold.nii.gz", ""},
		{"sub-0[1-3]/", "sub-01/func/x sub-03/", "sub-04/"},
		{"sub-0[!1]/", "sub-02/", "sub-01/"},
		{"s?b", "sub", "s/b"},
		{"{a,b}", "{a,b}", "a b"},
		{"*", "a a/b .x", ""},
		{"\ufeffx", "x", ""},
		{"**", "a a/b", ""},
		{".git**", ".git .gitignore a/.gitmodules", "git"},
	} {
		rules, bad := parseIgnore(c.text)
		if len(bad) != 0 {
			t.Errorf("%q: bad %q", c.text, bad)
		}
		check := func(paths string, want bool) {
			for _, p := range strings.Fields(paths) {
				rel, isDir := strings.CutSuffix(p, "/")
				if got := rules.ignored(rel, isDir); got != want {
					t.Errorf("%q: %s is %v, want %v", c.text, p, got, want)
				}
			}
		}
		check(c.yes, true)
		check(c.no, false)
	}
	_, bad := parseIgnore("[\na[\n/\n!\nx[[:alpha:]]\nok\nback\\")
	if diff := cmp.Diff([]string{"[", "a[", "/", "!", "x[[:alpha:]]", "back\\"}, bad); diff != "" {
		t.Error(diff)
	}
}

// A pattern made to backtrack must not hold up the walk.
func TestIgnoreDoesNotExplode(t *testing.T) {
	start := time.Now()
	rules, _ := parseIgnore(strings.Repeat("**/*a*a*/", 40) + "b\n" + strings.Repeat("*a", 100) + "b\n" + strings.Repeat("**/", 200) + "b")
	rules.ignored(strings.TrimSuffix(strings.Repeat("aaaaaaaaaaaaaaaa/", 60), "/"), false)
	rules.ignored(strings.Repeat("a", 250), false)
	// Milliseconds in practice; an exponential matcher would not end at all.
	if d := time.Since(start); d > 5*time.Second {
		t.Error(d)
	}
}

func TestIgnoreInTheWalk(t *testing.T) {
	d := open(t, ".bidsignore = sub-02/\n*_task-draft_*\n!*_run-2_*\n*_acq-z_bold.json\n[\n",
		"sub-01/func/sub-01_task-a_bold.nii", "sub-01/func/sub-01_task-draft_bold.nii", "sub-01/func/sub-01_task-draft_run-2_bold.nii",
		"sub-01/func/sub-01_task-draft_bold.json", "sub-01/func/draft_task-draft_bold.nii",
		"sub-01/func/sub-01_task-a_acq-z_bold.nii", "sub-01/func/sub-01_task-a_acq-z_bold.json",
		"sub-02/func/sub-02_task-a_bold.nii")
	if diff := cmp.Diff([]string{"sub-01_task-a_acq-z", "sub-01_task-a", "sub-01_task-draft_run-2"}, stems(d.Runs)); diff != "" {
		t.Error(diff)
	}
	if r := d.Runs[0]; len(r.Sidecars) != 0 {
		t.Error(r.Sidecars)
	}
	want := []string{"pattern .bidsignore", "ignored sub-01/func/draft_task-draft_bold.nii", "ignored sub-01/func/sub-01_task-a_acq-z_bold.json",
		"ignored sub-01/func/sub-01_task-draft_bold.json", "ignored sub-01/func/sub-01_task-draft_bold.nii", "ignored sub-02"}
	if diff := cmp.Diff(want, kinds(d)); diff != "" {
		t.Error(diff)
	}
}
