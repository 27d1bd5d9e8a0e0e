package dataset

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// files makes a tree: a name that ends in a slash is a folder, "a -> b" a
// symbolic link, "a = text" a file with that text, any other an almost empty file.
func files(t *testing.T, root string, names ...string) {
	t.Helper()
	for _, n := range names {
		name, text, hasText := strings.Cut(n, " = ")
		link, target, isLink := strings.Cut(n, " -> ")
		if isLink {
			name = link
		}
		full := filepath.Join(root, filepath.FromSlash(name))
		var err error
		if strings.HasSuffix(name, "/") {
			if err := os.MkdirAll(full, 0o755); err != nil {
				t.Fatal(err)
			}
			continue
		}
		if err := os.MkdirAll(filepath.Dir(full), 0o755); err != nil {
			t.Fatal(err)
		}
		switch {
		case isLink:
			err = os.Symlink(filepath.FromSlash(target), full)
		case hasText:
			err = os.WriteFile(full, []byte(text), 0o644)
		default:
			err = os.WriteFile(full, []byte("x"), 0o644)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
}

const described = `dataset_description.json = {"Name": "Lighthouse keepers", "BIDSVersion": "1.11.1", "DatasetType": "raw"}`

// open makes a described dataset of these files and opens it.
func open(t *testing.T, names ...string) *Dataset {
	t.Helper()
	root := t.TempDir()
	files(t, root, append([]string{described}, names...)...)
	return openAt(t, root)
}

func openAt(t *testing.T, root string) *Dataset {
	t.Helper()
	d, err := Open(root)
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// only returns the one run of a dataset.
func only(t *testing.T, d *Dataset) Run {
	t.Helper()
	if len(d.Runs) != 1 {
		t.Fatalf("%d runs, want 1; notices: %v", len(d.Runs), d.Notices)
	}
	return d.Runs[0]
}

func run(t *testing.T, d *Dataset, stem string) Run {
	t.Helper()
	for _, r := range d.Runs {
		if r.Stem == stem {
			return r
		}
	}
	t.Fatalf("no run %s among %v", stem, stems(d.Runs))
	return Run{}
}

func stems(runs []Run) []string {
	out := []string{}
	for _, r := range runs {
		out = append(out, r.Stem)
	}
	return out
}

func faultIDs(r Run) []string {
	out := []string{}
	for _, f := range r.Faults {
		out = append(out, f.ID)
	}
	return out
}

// kinds lists the notices as "kind path".
func kinds(d *Dataset) []string {
	out := []string{}
	for _, n := range d.Notices {
		out = append(out, string(n.Kind)+" "+n.Path)
	}
	return out
}
