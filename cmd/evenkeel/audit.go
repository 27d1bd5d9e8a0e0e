package main

import (
	"context"
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
			"The raw files are found through OUT's DatasetLinks, or with --dataset. A record of\n"+
			"another version is noted and is no difference.", "evenkeel audit voyage-steady --dataset voyage",
			codes(pipeline.ExitDone, pipeline.ExitOutside, pipeline.ExitUsage, pipeline.ExitNoInput, pipeline.ExitBug, pipeline.ExitIO, pipeline.ExitInterrupt).
				but(pipeline.ExitDone, "every file looked for is what its record says").
				but(pipeline.ExitOutside, "a difference was found").
				but(pipeline.ExitUsage, "the command line is wrong; nothing was started").
				but(pipeline.ExitNoInput, "OUT or the raw dataset given is missing or unreadable, or OUT holds no record").
				but(pipeline.ExitInterrupt, "interrupted: run the same command again")),
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
			return s.audit(c.Context, args[0], c.String("dataset"), c.Bool("json"))
		},
	}
}

func (s *session) audit(ctx context.Context, out, raw string, asJSON bool) error {
	findings, checked, raw, err := pipeline.Audit(ctx, out, raw, func(done, of int) {
		if done == 1 {
			s.log.startProgress(float64(of))
		}
		s.log.step(1)
	})
	s.log.stopProgress()
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
			Unlisted int                  `json:"unlisted"`
			Findings []provenance.Finding `json:"findings"`
		}{out, raw, checked.Records, checked.Outputs, checked.Inputs, checked.InputsUnseen, checked.Unlisted, append([]provenance.Finding{}, findings...)}
		data, err := json.MarshalIndent(doc, "", "  ")
		if err != nil {
			return err
		}
		b.Write(append(data, '\n'))
	} else {
		for _, f := range findings {
			b.WriteString(f.String() + "\n")
		}
		fmt.Fprintf(&b, "%s, %s and %s checked: %s\n", counted(checked.Records, "record"), counted(checked.Outputs, "output"), counted(checked.Inputs, "input"), counted(provenance.Differences(findings), "difference"))
	}
	if _, err := fmt.Fprint(s.stdout, b.String()); err != nil {
		return &pipeline.IOError{Path: "standard output", Err: err}
	}
	if checked.Unlisted > 0 {
		s.log.warn("unlisted", fmt.Sprintf("%s beside records that no record names", counted(checked.Unlisted, "file")), nil)
	}
	if checked.InputsUnseen > 0 {
		_, why := pipeline.LinkedRaw(out)
		s.log.warn("inputs-unseen", fmt.Sprintf("%s not checked: %s; give --dataset DIR", counted(checked.InputsUnseen, "input"), why), nil)
	}
	if checked.Records == 0 {
		s.log.warn("no-records", out+" holds no record: nothing could be checked", nil)
	}
	if provenance.Differences(findings) > 0 {
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
