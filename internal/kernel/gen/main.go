// Command gen writes the assembly of package kernel and the Go declarations that
// go with it:
//
//	go run ./internal/kernel/gen -out internal/kernel
//
// The test of this package writes them anew and compares.
package main

import (
	"bytes"
	"flag"
	"fmt"
	"go/format"
	"log"
	"os"
	"path/filepath"

	"github.com/mmcloughlin/avo/build"
	"github.com/mmcloughlin/avo/pass"
	"github.com/mmcloughlin/avo/printer"
)

func main() {
	log.SetFlags(0)
	flags := flag.NewFlagSet("gen", flag.ExitOnError) // the default set has avo's own -out
	out := flags.String("out", ".", "`directory` to write to")
	flags.Parse(os.Args[1:])
	files, err := generate()
	if err != nil {
		log.Fatal(err)
	}
	for name, text := range files {
		if err := os.WriteFile(filepath.Join(*out, name), text, 0o644); err != nil {
			log.Fatal(err)
		}
	}
}

// g collects the functions.
var g *build.Context

// generate returns the files by name.
func generate() (map[string][]byte, error) {
	g = build.NewContext()
	points()
	fir()
	affine()
	prefilter()
	gram()
	rows()
	locate()
	passes()
	interpolate(false)
	interpolate(true)
	lanesFunctions()
	transform()
	ramps()
	slopes()
	ladder()
	for _, unsigned := range []bool{false, true} {
		from16(unsigned, false)
		from16(unsigned, true)
	}
	changes()
	apart()
	courses()

	f, err := g.Result()
	if err != nil {
		return nil, err
	}
	if err := pass.Compile.Execute(f); err != nil {
		return nil, err
	}
	cfg := printer.Config{Name: "internal/kernel/gen", Pkg: "kernel"}
	asm, err := printer.NewGoAsm(cfg).Print(f)
	if err != nil {
		return nil, err
	}
	stubs, err := printer.NewStubs(cfg).Print(f)
	if err != nil {
		return nil, err
	}
	// Elsewhere the same names exist, so that the choice can be written once.
	var none bytes.Buffer
	fmt.Fprintf(&none, "// %s\n\n//go:build !amd64\n\npackage kernel\n", cfg.GeneratedWarning())
	for _, fn := range f.Functions() {
		fmt.Fprintf(&none, "\n%s { panic(\"kernel: no assembly for this processor\") }\n", fn.Stub())
	}
	plain, err := format.Source(none.Bytes())
	if err != nil {
		return nil, err
	}
	return map[string][]byte{"asm_amd64.s": asm, "asm_amd64.go": stubs, "asm_other.go": plain}, nil
}
