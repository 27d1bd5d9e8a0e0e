package main

// Options are accepted before and after arguments, and global ones before and
// after the command. The option library stops at the first argument, so the line
// is put in order here first: command, options (as --name=value), "--", arguments.

import (
	"fmt"
	"slices"
	"strings"

	"github.com/urfave/cli/v2"

	"evenkeel/pipeline"
)

type commandLine struct {
	args        []string // for the option library
	command     string   // its name, "" if there is none
	json, quiet bool     // known before the library has looked, for errors about the line itself
}

// normalise puts a command line in order; it returns a *pipeline.UsageError for a command or
// option that is not there, with what was probably meant.
func normalise(app *cli.App, args []string) (commandLine, error) {
	var (
		line    commandLine
		command *cli.Command
		options []string
		rest    []string
		help    bool
	)
	usage := func(where, format string, a ...any) error {
		return &pipeline.UsageError{Where: where, Message: fmt.Sprintf(format, a...)}
	}
	tokens := args[min(1, len(args)):]
	// Errors are told in the form asked for, wherever on the line that stands.
	for i, t := range tokens {
		name, value, has := strings.Cut(strings.TrimLeft(t, "-"), "=")
		if !strings.HasPrefix(t, "-") || t == "--" {
			if t == "--" {
				break
			}
			continue
		}
		switch {
		case name == "log" && has:
			line.json = value == "json"
		case name == "log" && i+1 < len(tokens):
			line.json = tokens[i+1] == "json"
		case name == "quiet" && !has:
			line.quiet = true
		}
	}
	for i := 0; i < len(tokens); i++ {
		t := tokens[i]
		if t == "--" {
			rest = append(rest, tokens[i+1:]...)
			break
		}
		if (t == "--version" || t == "-version") && command == nil {
			t = "version"
		}
		if t == "-h" || t == "--help" || t == "-help" {
			help = true
			continue
		}
		if len(t) > 1 && t[0] == '-' {
			name, value, has := strings.Cut(strings.TrimLeft(t, "-"), "=")
			flags := app.Flags
			if command != nil {
				flags = command.Flags // the global ones among them
			}
			f := find(flags, name)
			if f == nil {
				return line, unknownOption(app, command, t, name)
			}
			if _, isSwitch := f.(*cli.BoolFlag); isSwitch {
				if has && value != "true" && value != "false" {
					return line, usage("--"+name, "takes no value")
				}
				if !has {
					value = "true"
				}
			} else if !has {
				if i+1 >= len(tokens) {
					return line, usage("--"+name, "needs a value")
				}
				i++
				value = tokens[i]
			}
			if name == "log" && value != "text" && value != "json" {
				return line, usage("--log", "found %q, expected text or json", value)
			}
			options = append(options, "--"+name+"="+value)
			continue
		}
		if command == nil {
			if t == "help" {
				return helpLine(app, args[0], tokens[i+1:], line)
			}
			if command = app.Command(t); command == nil {
				return line, usage(t, "is no command%s; one of %s", pipeline.DidYouMean(t, commandNames(app)), strings.Join(commandNames(app), ", "))
			}
			line.command = command.Name
			continue
		}
		rest = append(rest, t)
	}
	line.args = []string{"evenkeel"}
	switch {
	case command == nil && help:
		line.args = append(line.args, "--help")
	case help:
		line.args = append(line.args, command.Name, "--help")
	case command != nil:
		line.args = append(line.args, command.Name)
		line.args = append(line.args, options...)
		line.args = append(append(line.args, "--"), rest...)
	default:
		line.args = append(line.args, options...)
	}
	return line, nil
}

// helpLine turns "help [COMMAND]" into "[COMMAND] --help".
func helpLine(app *cli.App, name string, topics []string, line commandLine) (commandLine, error) {
	topics = slices.DeleteFunc(slices.Clone(topics), func(t string) bool { return strings.HasPrefix(t, "-") })
	line.args = []string{"evenkeel"}
	if len(topics) > 0 {
		if app.Command(topics[0]) == nil {
			return line, &pipeline.UsageError{Where: "help " + topics[0], Message: "is no command" + pipeline.DidYouMean(topics[0], commandNames(app)) + "; one of " + strings.Join(commandNames(app), ", ")}
		}
		line.args = append(line.args, topics[0])
	}
	line.args = append(line.args, "--help")
	return line, nil
}

func find(flags []cli.Flag, name string) cli.Flag {
	for _, f := range flags {
		if slices.Contains(f.Names(), name) {
			return f
		}
	}
	return nil
}

func unknownOption(app *cli.App, command *cli.Command, token, name string) error {
	var names []string
	where, flags := "evenkeel", app.Flags
	if command != nil {
		where, flags = command.Name, command.Flags
	}
	for _, f := range flags {
		names = append(names, "--"+f.Names()[0])
	}
	message := "is no option of " + where
	if near := pipeline.DidYouMean("--"+name, names); near != "" {
		message += near
	} else if command == nil {
		for _, c := range app.Commands {
			if find(c.Flags, name) != nil {
				message += fmt.Sprintf("; it belongs after the command, as in evenkeel %s %s", c.Name, token)
				break
			}
		}
	}
	return &pipeline.UsageError{Where: token, Message: message}
}
