package main

import (
	"encoding/json"
	"fmt"
	"strings"

	"github.com/urfave/cli/v2"

	"evenkeel/pipeline"
	"evenkeel/provenance"
)

func (s *session) auditCommand() *cli.Command {
	return &cli.Command{
		Name:      "audit",
		Usage:     "check every record against the files it names",
		ArgsUsage: "OUT",
		Description: describe("Digests every file that a record in OUT names and says which are missing or changed.\n"+
			"The raw files are found through OUT's DatasetLinks, or with --dataset.", "evenkeel audit voyage-steady --dataset voyage",
			pipeline.ExitDone, pipeline.ExitOutside, pipeline.ExitUsage, pipeline.ExitNoInput, pipeline.ExitBug, pipeline.ExitIO),
		Flags: []cli.Flag{
			&cli.StringFlag{Name: "dataset", Usage: "the raw dataset, in `DIR`"},
			&cli.BoolFlag{Name: "json", Usage: "the findings as one JSON document"},
			&cli.BoolFlag{Name: "replay", Usage: "recompute each run from its record and compare (comes with a later version)"},
		},
		Action: func(c *cli.Context) error {
			args, err := arguments(c, "OUT")
			if err != nil {
				return err
			}
			if c.Bool("replay") {
				return &pipeline.UsageError{Where: "--replay", Message: "comes with a later version; without it, digests are checked"}
			}
			return s.audit(args[0], c.String("dataset"), c.Bool("json"))
		},
	}
}

func (s *session) audit(out, raw string, asJSON bool) error {
	findings, checked, raw, err := pipeline.Audit(out, raw)
	if err != nil {
		return err
	}
	var b strings.Builder
	if asJSON {
		doc := struct {
			Out      string               `json:"out"`
			Dataset  string               `json:"dataset"` // "" when it could not be found
			Records  int                  `json:"records"`
			Outputs  int                  `json:"outputs"`
			Inputs   int                  `json:"inputs"`
			Unseen   int                  `json:"inputs_unseen"`
			Findings []provenance.Finding `json:"findings"`
		}{out, raw, checked.Records, checked.Outputs, checked.Inputs, checked.InputsUnseen, append([]provenance.Finding{}, findings...)}
		data, err := json.MarshalIndent(doc, "", "  ")
		if err != nil {
			return err
		}
		b.Write(append(data, '\n'))
	} else {
		for _, f := range findings {
			fmt.Fprintf(&b, "%s: %s", f.Kind, f.File)
			if f.Found != "" {
				fmt.Fprintf(&b, ": found %s", f.Found)
			}
			if f.Expected != "" {
				fmt.Fprintf(&b, ", expected %s", f.Expected)
			}
			fmt.Fprintf(&b, " (%s)\n", f.Record)
		}
		fmt.Fprintf(&b, "%s, %s and %s checked: %s\n", counted(checked.Records, "record"), counted(checked.Outputs, "output"), counted(checked.Inputs, "input"), counted(len(findings), "difference"))
	}
	if _, err := fmt.Fprint(s.stdout, b.String()); err != nil {
		return &pipeline.IOError{Path: "standard output", Err: err}
	}
	if checked.InputsUnseen > 0 {
		s.log.warn("inputs-unseen", fmt.Sprintf("%s not checked: the raw dataset was not found; give --dataset DIR", counted(checked.InputsUnseen, "input")), nil)
	}
	if len(findings) > 0 {
		return &exit{pipeline.ExitOutside}
	}
	return nil
}

func counted(n int, what string) string {
	if n != 1 {
		what += "s"
	}
	return fmt.Sprintf("%d %s", n, what)
}
