package main

import (
	"bytes"
	"os"
	"path/filepath"
	"testing"
)

// What is checked in is what the generator writes.
func TestAssemblyIsUpToDate(t *testing.T) {
	files, err := generate()
	if err != nil {
		t.Fatal(err)
	}
	for name, want := range files {
		got, err := os.ReadFile(filepath.Join("..", name))
		if err != nil {
			t.Error(err)
			continue
		}
		if !bytes.Equal(got, want) {
			t.Errorf("%s is not what the generator writes: run go generate ./internal/kernel", name)
		}
	}
}
