package main

import (
	"github.com/urfave/cli/v2"

	"evenkeel/pipeline"
)

// Commands whose names are promised and whose work comes with a later version.

func (s *session) reportCommand() *cli.Command {
	return later("report", "OUT", "rebuild the HTML report from the files in OUT (comes with a later version)")
}

func (s *session) clusterCommand() *cli.Command {
	return later("cluster", "DATASET OUT", "spread a cohort over a Slurm cluster (comes with a later version)")
}

func later(name, args, usage string) *cli.Command {
	return &cli.Command{
		Name: name, Usage: usage, ArgsUsage: args,
		Description: describe("Comes with a later version; this one does nothing and says so.", "evenkeel "+name+" "+args,
			codes(pipeline.ExitUsage).but(pipeline.ExitUsage, "always: the command comes with a later version")),
		Action: func(*cli.Context) error {
			return &pipeline.UsageError{Where: name, Message: "comes with a later version of evenkeel"}
		},
	}
}
