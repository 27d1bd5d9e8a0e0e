package main

import (
	"encoding/json"
	"fmt"
	"runtime"
	"strings"

	"github.com/urfave/cli/v2"

	"evenkeel/pipeline"
	"evenkeel/provenance"
)

func (s *session) versionCommand() *cli.Command {
	return &cli.Command{
		Name:  "version",
		Usage: "print version, revision, Go version, platform, module versions and CPU features",
		Description: describe("Prints what a record says about the software, and the processor's features.", "evenkeel version --json",
			codes(pipeline.ExitDone, pipeline.ExitUsage, pipeline.ExitIO).
				but(pipeline.ExitDone, "printed").
				but(pipeline.ExitUsage, "the command line is wrong").
				but(pipeline.ExitIO, "standard output cannot be written (a full disk)")),
		Flags: []cli.Flag{&cli.BoolFlag{Name: "json", Usage: "as one JSON document"}},
		Action: func(c *cli.Context) error {
			if _, err := arguments(c); err != nil {
				return err
			}
			sw, features := pipeline.Software(), pipeline.CPUFeatures()
			if c.Bool("json") {
				type module struct {
					Path    string `json:"path"`
					Version string `json:"version"`
				}
				doc := struct {
					Version      string   `json:"version"`
					Revision     *string  `json:"revision"` // null when it was built from sources without git
					Modified     bool     `json:"modified"`
					Go           string   `json:"go"`
					OS           string   `json:"os"`
					Architecture string   `json:"architecture"`
					CPUFeatures  []string `json:"cpu_features"`
					Modules      []module `json:"modules"`
				}{sw.Version, nil, sw.Modified, sw.GoVersion, runtime.GOOS, runtime.GOARCH, append([]string{}, features...), []module{}}
				if sw.Revision != "" {
					doc.Revision = &sw.Revision
				}
				for _, m := range sw.Modules {
					doc.Modules = append(doc.Modules, module{m.Path, m.Version})
				}
				b, err := json.MarshalIndent(doc, "", "  ")
				if err != nil {
					return err
				}
				fmt.Fprintf(s.stdout, "%s\n", b)
				return nil
			}
			fmt.Fprintf(s.stdout, "evenkeel %s\n%s\n%s %s/%s\ncpu features: %s\n", sw.Version, revisionWords(sw), sw.GoVersion, runtime.GOOS, runtime.GOARCH, strings.Join(features, " "))
			for _, m := range sw.Modules {
				fmt.Fprintf(s.stdout, "%s %s\n", m.Path, m.Version)
			}
			return nil
		},
	}
}

// revisionWords says which source the program was built from.
func revisionWords(sw provenance.Software) string {
	switch {
	case sw.Revision == "":
		return "revision unknown: built from sources without git"
	case sw.Modified:
		return "revision " + sw.Revision + ", with changes that are in no revision"
	}
	return "revision " + sw.Revision
}
