package evenkeel

import (
	"go/parser"
	"go/token"
	"io/fs"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// rooms says, for each package, which of our own packages its code may import.
// Imports point one way: the command knows the pipeline, the pipeline knows the
// file formats and the science, the science knows neither files nor names. The
// leaves may be known to all: fault (values without behaviour), and the
// internal ones (arithmetic, loops, kernels, decompression).
var rooms = map[string][]string{
	"cmd/evenkeel-bench":  {"nifti", "realign"},
	"cmd/evenkeel":        {"pipeline", "dataset", "provenance", "realign", "quality", "phantom"},
	"pipeline":            {"dataset", "sidecar", "nifti", "slicetime", "realign", "quality", "provenance"},
	"dataset":             {},
	"sidecar":             {},
	"nifti":               {},
	"provenance":          {},
	"slicetime":           {},
	"realign":             {"slicetime"},
	"quality":             {"realign", "slicetime"},
	"phantom":             {"nifti"},
	"fault":               nil,
	"internal/detmath":    nil,
	"internal/inflate":    nil,
	"internal/kernel":     nil,
	"internal/kernel/gen": nil,
	"internal/parallel":   nil,
	"release":             nil,
	"":                    nil,
}

var leaves = []string{"fault", "internal/detmath", "internal/inflate", "internal/kernel", "internal/parallel"}

func TestImportsPointDown(t *testing.T) {
	seen := map[string]bool{}
	err := filepath.WalkDir(".", func(path string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		name := d.Name()
		if d.IsDir() {
			if path != "." && (strings.HasPrefix(name, ".") || name == "testdata") {
				return filepath.SkipDir
			}
			return nil
		}
		if !strings.HasSuffix(name, ".go") || strings.HasSuffix(name, "_test.go") {
			return nil
		}
		room := filepath.ToSlash(filepath.Dir(path))
		if room == "." {
			room = ""
		}
		if strings.HasPrefix(room, "examples") {
			return nil
		}
		may, known := rooms[room]
		if !known {
			t.Errorf("%s: package %q has no place in the table of rooms: decide who may know it, here and in ARCHITECTURE.md", path, room)
			return nil
		}
		seen[room] = true
		f, err := parser.ParseFile(token.NewFileSet(), path, nil, parser.ImportsOnly)
		if err != nil {
			return err
		}
		for _, i := range f.Imports {
			p, _ := strconv.Unquote(i.Path.Value)
			if p == "C" || p == "net/http" || p == "plugin" {
				t.Errorf("%s imports %s: no cgo and no network at run time", path, p)
			}
			own, ok := strings.CutPrefix(p, "evenkeel/")
			if !ok {
				continue
			}
			leaf := slices.Contains(leaves, own)
			if !slices.Contains(may, own) && !(leaf && may != nil) {
				t.Errorf("%s: %q must not import %q", path, room, own)
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	for room := range rooms {
		if !seen[room] {
			t.Errorf("the table of rooms names %q, which does not exist", room)
		}
	}
}
