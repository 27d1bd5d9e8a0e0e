package main

import "github.com/urfave/cli/v2"

func (s *session) demoCommand() *cli.Command {
	return &cli.Command{Name: "demo", Action: func(*cli.Context) error { return nil }}
}
