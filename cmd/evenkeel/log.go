package main

import (
	"encoding/json"
	"fmt"
	"io"
	"strings"
	"sync"
	"time"

	"evenkeel/fault"
	"evenkeel/pipeline"
)

// A logger writes what is not a result to standard error: lines that begin with the program's
// name, or with --log json one object a line: time, level, event, message, and
// what belongs to the event (run, fault, ...). Members may be added, never changed.
type logger struct {
	mu          sync.Mutex
	w           io.Writer
	json, quiet bool
	bar         *progress // nil when none is drawn
}

type fields map[string]any

func (l *logger) write(level, event, message string, f fields) {
	l.mu.Lock()
	defer l.mu.Unlock()
	w := l.w
	if l.bar != nil {
		w = l.bar // above the bar
	}
	if !l.json {
		for _, line := range strings.Split(message, "\n") {
			fmt.Fprintf(w, "evenkeel: %s\n", line)
		}
		return
	}
	o := fields{"time": time.Now().UTC().Format(time.RFC3339), "level": level, "event": event, "message": message}
	for k, v := range f {
		o[k] = v
	}
	b, err := json.Marshal(o) // members sorted by name
	if err != nil {
		b, _ = json.Marshal(fields{"level": "error", "event": "bug", "message": err.Error()})
	}
	w.Write(append(b, '\n'))
}

func (l *logger) info(event, message string, f fields) {
	if !l.quiet {
		l.write("info", event, message, f)
	}
}

func (l *logger) warn(event, message string, f fields) {
	if !l.quiet {
		l.write("warning", event, message, f)
	}
}

func (l *logger) error(event, message string, f fields) { l.write("error", event, message, f) }

// hint tells people, not scripts, where to look.
func (l *logger) hint(message string) {
	if !l.json && !l.quiet {
		l.write("info", "hint", message, nil)
	}
}

// fault reports a fault of a run; the JSON object is the one survey prints.
func (l *logger) fault(run string, f fault.Fault) {
	say := l.warn
	if f.Level == fault.Refuse {
		say = l.error
	}
	text := f.Error()
	if accepted(f) {
		text = "accepted: " + text
	}
	say("fault", text, fields{"run": run, "fault": f})
}

// accepted tells whether a fault would refuse its run, had the user not named it with --accept.
func accepted(f fault.Fault) bool {
	k, _ := fault.Lookup(f.ID)
	return k.Level == fault.Refuse && f.Level == fault.Warn
}

// bug reports a mistake of ours in a plain sentence. The stack goes with it only in
// the JSON log, where nobody mistakes it for the message.
func (l *logger) bug(b *pipeline.BugError) {
	l.error("bug", b.Error(), fields{"run": b.Run, "stack": string(b.Stack)})
}

func (l *logger) exit(code int) {
	if l.json {
		l.write("info", "exit", fmt.Sprintf("exit status %d", code), fields{"code": code})
	}
}
