package main

import (
	"encoding/json"
	"fmt"
	"path/filepath"
	"strings"

	"github.com/urfave/cli/v2"

	"evenkeel/dataset"
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
			"another version is noted and is no difference. With --replay each run is also computed\n"+
			"again in a scratch folder, from the raw data and the settings that its record names,\n"+
			"and compared byte for byte: what differs is named with where and by how much. Replay\n"+
			"with the version that wrote a record: another may rightly give other bytes, and the\n"+
			"finding then names both.", "evenkeel audit voyage-steady --dataset voyage --replay",
			codes(pipeline.ExitDone, pipeline.ExitOutside, pipeline.ExitUsage, pipeline.ExitNoInput, pipeline.ExitBug, pipeline.ExitNoCreate, pipeline.ExitIO, pipeline.ExitInterrupt).
				but(pipeline.ExitDone, "every file looked for is what its record says").
				but(pipeline.ExitOutside, "a difference was found").
				but(pipeline.ExitUsage, "the command line is wrong; nothing was started").
				but(pipeline.ExitNoCreate, "the scratch folder cannot be created").
				but(pipeline.ExitNoInput, "OUT or the raw dataset given is missing or unreadable, or OUT holds no record").
				but(pipeline.ExitInterrupt, "interrupted: run the same command again")),
		Flags: []cli.Flag{
			&cli.StringFlag{Name: "dataset", Usage: "the raw dataset, in `DIR`"},
			&cli.BoolFlag{Name: "json", Usage: "the findings as one JSON document"},
			&cli.BoolFlag{Name: "replay", Usage: "also compute each run again from its record alone, and compare every byte"},
			&cli.StringFlag{Name: "scratch", Usage: "with --replay: compute in a new folder inside `DIR`, which needs room for the outputs of the runs at work; each is taken away when it has been compared", DefaultText: "the system's temporary folder"},
			&cli.StringFlag{Name: "jobs", Usage: "with --replay: `N` runs at once", DefaultText: "chosen from cores and runs"},
			&cli.StringFlag{Name: "memory", Usage: "with --replay: memory that runs may hold together, as `SIZE` (8GiB)", DefaultText: "3/4 of what is free"},
		},
		Action: func(c *cli.Context) error {
			args, err := arguments(c, "OUT")
			if err != nil {
				return err
			}
			return s.audit(c, args[0])
		},
	}
}

// auditDocument is what --json prints.
type auditDocument struct {
	Out      string               `json:"out"`
	Dataset  string               `json:"dataset"` // "" when it could not be found
	Records  int                  `json:"records"`
	Outputs  int                  `json:"outputs"`
	Inputs   int                  `json:"inputs"`
	Unseen   int                  `json:"inputs_unseen"`
	Unlisted int                  `json:"unlisted"`
	Replay   *replayDocument      `json:"replay,omitempty"`
	Findings []provenance.Finding `json:"findings"`
}

type replayDocument struct {
	Runs        int `json:"runs"`
	Same        int `json:"same"`
	Differ      int `json:"differ"`
	NotReplayed int `json:"not_replayed"`
}

func (s *session) audit(c *cli.Context, out string) error {
	replay, err := s.replayRequest(c, out)
	if err != nil {
		return err
	}
	findings, checked, raw, err := pipeline.Audit(c.Context, out, c.String("dataset"), func(done, of int) {
		if done == 1 {
			s.log.startProgress(float64(of))
		}
		s.log.step(1)
	})
	s.log.stopProgress()
	if err != nil {
		return err
	}
	doc := auditDocument{out, shownRaw(out, raw, c.String("dataset")), checked.Records, checked.Outputs, checked.Inputs, checked.InputsUnseen, checked.Unlisted, nil, append([]provenance.Finding{}, findings...)}
	if replay != nil && checked.Records > 0 {
		if raw == "" {
			// What the digests tell is told all the same.
			if err := s.writeAudit(doc, c.Bool("json")); err != nil {
				return &pipeline.IOError{Path: "standard output", Err: err}
			}
			_, why := pipeline.LinkedRaw(out)
			s.log.error("not-replayed", "nothing can be computed again: "+why+"; give --dataset DIR", nil)
			return &exit{pipeline.ExitNoInput}
		}
		if err := pipeline.CheckScratch(out, raw, replay.Scratch); err != nil {
			return err
		}
		replay.Raw = raw
		s.log.startProgress(float64(checked.Records))
		more, count, err := replay.Run(c.Context)
		s.log.stopProgress()
		if err != nil {
			return err
		}
		doc.Findings = append(doc.Findings, more...)
		doc.Replay = &replayDocument{count.Runs, count.Same, count.Other, count.Missed()}
	}
	if err := s.writeAudit(doc, c.Bool("json")); err != nil {
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
	if provenance.Differences(doc.Findings) > 0 {
		return &exit{pipeline.ExitOutside}
	}
	return nil
}

// shownRaw gives the raw dataset as it may be shown: as it was given, or found from OUT the way
// OUT was given, for the folders above both may be named after a person.
func shownRaw(out, raw, given string) string {
	if given != "" || raw == "" || filepath.IsAbs(out) {
		return raw
	}
	here, err := dataset.RealPath(".")
	if err != nil {
		return raw
	}
	rel, err := filepath.Rel(here, raw)
	if err != nil {
		return raw
	}
	return rel
}

// replayRequest reads the options that go with --replay; nil without it.
func (s *session) replayRequest(c *cli.Context, out string) (*pipeline.Replay, error) {
	if !c.Bool("replay") {
		for _, name := range []string{"scratch", "jobs", "memory"} {
			if c.IsSet(name) {
				return nil, &pipeline.UsageError{Where: "--" + name, Message: "goes with --replay"}
			}
		}
		return nil, nil
	}
	r := &pipeline.Replay{Out: out, Scratch: c.String("scratch"), Observe: s.observeReplay}
	var err error
	if c.IsSet("jobs") {
		if r.Jobs, err = count(c, "jobs", 1); err != nil {
			return nil, err
		}
	}
	r.Memory, err = memory(c)
	return r, err
}

// observeReplay shows how far a replay is; how a run differs is among the findings.
func (s *session) observeReplay(e pipeline.Event) {
	if e.Kind != pipeline.RunEnded {
		return
	}
	s.log.step(1)
	says := map[pipeline.Verdict]string{pipeline.Same: "the same byte for byte", pipeline.NotSame: "not the same", pipeline.NotComputed: "could not be computed"}[e.Verdict]
	s.log.info("replayed", e.Plan.Run.Stem+": "+says, nil)
}

func (s *session) writeAudit(doc auditDocument, asJSON bool) error {
	var b strings.Builder
	if asJSON {
		data, err := json.MarshalIndent(doc, "", "  ")
		if err != nil {
			return err
		}
		b.Write(append(data, '\n'))
	} else {
		for _, f := range doc.Findings {
			b.WriteString(f.String() + "\n")
		}
		fmt.Fprintf(&b, "%s, %s and %s checked: %s\n", counted(doc.Records, "record"), counted(doc.Outputs, "output"), counted(doc.Inputs, "input"), counted(provenance.Differences(doc.Findings), "difference"))
		if r := doc.Replay; r != nil {
			fmt.Fprintf(&b, "%s computed again: %d the same byte for byte, %d not the same, %d could not be computed\n", counted(r.Runs, "run"), r.Same, r.Differ, r.NotReplayed)
		}
	}
	_, err := fmt.Fprint(s.stdout, b.String())
	return err
}

func counted(n int, what string) string {
	if n != 1 {
		what += "s"
	}
	return fmt.Sprintf("%d %s", n, what)
}
