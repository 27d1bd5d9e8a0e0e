package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"runtime/debug"
	"strconv"
	"strings"
	"syscall"

	"github.com/urfave/cli/v2"
	"golang.org/x/term"

	"evenkeel/pipeline"
)

// A session is one invocation of the program.
type session struct {
	stdin   io.Reader
	stdout  *output
	stderr  io.Writer
	log     *logger
	command string                     // its name, "" if the line has none
	reached map[*pipeline.Plan]float64 // how far each run is, from 0 to 1
}

// output is standard output; it remembers what kept it from being written, which the
// option library and fmt do not tell.
type output struct {
	w   io.Writer
	err error
}

func (o *output) Write(b []byte) (int, error) {
	n, err := o.w.Write(b)
	if err != nil && o.err == nil {
		o.err = err
	}
	return n, err
}

// columns is the width of the terminal that standard output is, 0 if it is none: what is piped
// or kept in a file is not shortened. COLUMNS, if it is set, wins (POSIX, "Environment Variables").
func (s *session) columns() int {
	f, ok := s.stdout.w.(*os.File)
	if !ok || !term.IsTerminal(int(f.Fd())) {
		return 0
	}
	if n, err := strconv.Atoi(os.Getenv("COLUMNS")); err == nil && n > 0 {
		return n
	}
	n, _, err := term.GetSize(int(f.Fd()))
	if err != nil || n <= 0 {
		return 80
	}
	return n
}

// exit is returned by a command that ran its course with a code of its own; it has
// no ExitCode method, on which the option library would leave the process.
type exit struct{ code int }

func (e *exit) Error() string { return fmt.Sprintf("exit status %d", e.code) }

// Run executes the command line args (the program's name first) and returns the
// exit status. It never panics: a mistake of ours is reported in a plain sentence.
func Run(args []string, stdin io.Reader, stdout, stderr io.Writer) (code int) {
	s := &session{stdin: stdin, stdout: &output{w: stdout}, stderr: stderr, log: &logger{w: stderr}}
	defer func() {
		if v := recover(); v != nil {
			s.log.stopProgress()
			code = s.fail(&pipeline.BugError{Value: v, Stack: debug.Stack()})
		}
	}()
	app := s.app()
	line, err := normalise(app, args)
	s.log.json, s.log.quiet, s.command = line.json, line.quiet, line.command
	if err != nil {
		return s.fail(err)
	}
	ctx, stop := s.interruptible()
	defer stop()
	err = app.RunContext(ctx, line.args)
	s.log.stopProgress()
	var own *exit
	if errors.As(err, &own) {
		code, err = own.code, nil
	}
	switch {
	case gone(s.stdout.err) && (err == nil || gone(err)) && code != pipeline.ExitBug:
		// Whoever read wants no more: no news to anybody, but the code says that what was
		// asked for was not all delivered.
		return s.last(pipeline.ExitIO)
	case err != nil:
		return s.fail(err)
	case s.stdout.err != nil && code != pipeline.ExitBug && code != pipeline.ExitIO:
		return s.fail(&pipeline.IOError{Path: "standard output", Err: s.stdout.err})
	}
	return s.last(code)
}

// gone reports whether writing failed because the reader has gone away.
func gone(err error) bool { return errors.Is(err, syscall.EPIPE) }

// fail reports an error and returns its code.
func (s *session) fail(err error) int {
	code := pipeline.ExitCode(err, nil, false)
	var (
		bug   *pipeline.BugError
		usage *pipeline.UsageError
	)
	switch {
	case errors.As(err, &usage):
		s.log.error("usage", err.Error(), nil)
		help := "evenkeel help"
		if s.command != "" {
			help = "evenkeel " + s.command + " --help"
		}
		s.log.hint("see " + help)
	case errors.As(err, &bug):
		s.log.bug(bug)
	case code == pipeline.ExitInterrupt:
		s.log.error("interrupted", "interrupted; run the same command again to go on", nil)
	default:
		s.log.error("failed", err.Error(), nil)
	}
	return s.last(code)
}

// last is the last word of the JSON log.
func (s *session) last(code int) int {
	s.log.exit(code)
	return code
}

// interruptible returns a context that the first SIGINT or SIGTERM ends. Later
// ones change nothing: schedulers send several, and a clean end is under way.
func (s *session) interruptible() (context.Context, func()) {
	ctx, cancel := context.WithCancel(context.Background())
	signals := make(chan os.Signal, 8)
	signal.Notify(signals, os.Interrupt, syscall.SIGTERM)
	done := make(chan struct{})
	go func() {
		told := false
		for {
			select {
			case <-done:
				return
			case sig := <-signals:
				if !told {
					told = true
					s.log.warn("interrupted", fmt.Sprintf("%v: stopping after the step under way, no partial file is left", sig), nil)
					cancel()
				}
			}
		}
	}()
	return ctx, func() {
		signal.Stop(signals)
		close(done)
		cancel()
	}
}

// Help shows an option on one line and what it does, wrapped, below it: with
// longer option names than columns, a table would not fit a terminal.
func init() {
	cli.FlagStringer = func(f cli.Flag) string {
		var name, usage, value string
		switch f := f.(type) {
		case *cli.BoolFlag:
			name, usage = f.Name, f.Usage
		case *cli.StringFlag:
			name, usage, value = f.Name, f.Usage, f.DefaultText
			if value == "" {
				value = f.Value
			}
		case *cli.StringSliceFlag:
			name, usage = f.Name, f.Usage
		default:
			return f.String()
		}
		line := "--" + name
		if before, rest, ok := strings.Cut(usage, "`"); ok {
			placeholder, after, _ := strings.Cut(rest, "`")
			line += " " + placeholder
			if before == "" {
				usage = strings.TrimPrefix(after, ": ")
			} else {
				usage = before + placeholder + after
			}
		}
		if value != "" {
			usage += " (default: " + value + ")"
		}
		const indent = "      "
		for _, l := range wrap(usage, 80-3-len(indent)) {
			line += "\n   " + indent + l
		}
		return line
	}
}

// wrap breaks a text at spaces into lines of at most width.
func wrap(text string, width int) []string {
	var out []string
	line := ""
	for _, w := range strings.Fields(text) {
		if line != "" && len(line)+1+len(w) > width {
			out = append(out, line)
			line = ""
		}
		if line != "" {
			line += " "
		}
		line += w
	}
	return append(out, line)
}

const research = "FOR RESEARCH ONLY. Not a medical device; not for diagnosis or treatment. Images of\na head can identify a person: treat outputs as you treat the raw data."

func (s *session) app() *cli.App {
	app := &cli.App{
		Name:      "evenkeel",
		Usage:     "raw EPI BOLD runs in, series at one instant and one head position out",
		UsageText: "evenkeel [global options] COMMAND [options] ARGUMENTS",
		Description: "Turns the raw BOLD runs of a BIDS dataset into series in which every voxel of a\n" +
			"volume refers to one instant and one head position, with the poses, the figures\n" +
			"and the record of how each was made. Options may stand before and after arguments.\n\n" +
			research + "\n\nEXAMPLE:\n  evenkeel survey voyage && evenkeel steady voyage voyage-steady\n\n" + exitHelp(nil),
		Writer: s.stdout, ErrWriter: s.stderr, Reader: s.stdin,
		HideVersion: true, HideHelpCommand: false,
		DisableSliceFlagSeparator: true,
		// Codes are decided in one place, after deferred functions have run.
		ExitErrHandler: func(*cli.Context, error) {},
		OnUsageError: func(_ *cli.Context, err error, _ bool) error {
			return &pipeline.UsageError{Message: err.Error()}
		},
		Flags: globalFlags(),
		Action: func(c *cli.Context) error {
			return &pipeline.UsageError{Message: "no command given; one of " + strings.Join(commandNames(c.App), ", ")}
		},
		Commands: []*cli.Command{
			s.surveyCommand(), s.steadyCommand(), s.auditCommand(), s.reportCommand(), s.clusterCommand(), s.demoCommand(), s.versionCommand(),
		},
	}
	for _, c := range app.Commands {
		c.Flags = append(c.Flags, globalFlags()...)
		c.OnUsageError = app.OnUsageError
		c.UseShortOptionHandling = false
		c.HideHelpCommand = true
	}
	return app
}

func commandNames(app *cli.App) []string {
	var out []string
	for _, c := range app.Commands {
		if c.Name != "help" {
			out = append(out, c.Name)
		}
	}
	return out
}

// globalFlags are accepted before and after the command.
func globalFlags() []cli.Flag {
	return []cli.Flag{
		&cli.StringFlag{Name: "log", Usage: "log on standard error as `text|json`, JSON being one object a line", Value: "text"},
		&cli.BoolFlag{Name: "quiet", Usage: "say nothing but results and errors: warnings are hidden too"},
	}
}

// exitCodes are those that a command can end with, with what they mean there: "" is
// what they mean everywhere.
type exitCodes map[int]string

func codes(list ...int) exitCodes {
	c := exitCodes{}
	for _, code := range list {
		c[code] = ""
	}
	return c
}

// but says what a code means for this command.
func (c exitCodes) but(code int, meaning string) exitCodes {
	c[code] = meaning
	return c
}

// exitHelp lists exit codes, those given or (nil) all, for help.
func exitHelp(own exitCodes) string {
	var b strings.Builder
	b.WriteString("EXIT CODES:")
	for _, e := range pipeline.ExitCodes {
		meaning, wanted := own[e.Code]
		if meaning == "" {
			meaning = e.Meaning
		}
		if wanted || own == nil {
			fmt.Fprintf(&b, "\n  %2d  %s", e.Code, meaning)
		}
	}
	return b.String()
}

// describe joins the parts of a command's help.
func describe(text, example string, own exitCodes) string {
	return text + "\n\nEXAMPLE:\n  " + example + "\n\n" + exitHelp(own)
}

// arguments takes a fixed number of arguments, named for the message.
func arguments(c *cli.Context, names ...string) ([]string, error) {
	got := c.Args().Slice()
	least := 0
	for _, n := range names {
		if !strings.HasPrefix(n, "[") {
			least++
		}
	}
	line := "evenkeel " + c.Command.Name + " " + strings.Join(names, " ")
	if len(got) < least {
		return nil, &pipeline.UsageError{Where: c.Command.Name, Message: fmt.Sprintf("%s is missing; give %s", names[len(got)], line)}
	}
	if len(got) > len(names) {
		return nil, &pipeline.UsageError{Where: c.Command.Name, Message: fmt.Sprintf("%q is one argument too many; give %s", got[len(names)], line)}
	}
	for i, g := range got {
		if g == "" {
			return nil, &pipeline.UsageError{Where: c.Command.Name, Message: names[i] + " is empty; give " + line}
		}
	}
	return got, nil
}
