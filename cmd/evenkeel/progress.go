package main

import (
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"golang.org/x/term"
)

// A progress is one bar over all runs, on the last line of a terminal. It is drawn by
// whoever has something to say, not by a goroutine of its own: a line written above
// it can then neither be lost nor come late, and nothing is left of the bar once it
// is cleared. No colour is used, so NO_COLOR is honoured as it stands.
type progress struct {
	w       io.Writer
	columns func() int
	now     func() time.Time
	started time.Time
	done    float64
	total   float64
}

// clearLine takes the cursor to the start of its line and empties it (ECMA-48: carriage
// return, erase in line).
const clearLine = "\r\x1b[K"

// startProgress begins to draw if standard error is a terminal and nothing speaks against it.
// total is the work of all runs together, in units of step.
func (l *logger) startProgress(total float64) {
	f, ok := l.w.(*os.File)
	if !ok || l.json || l.quiet || total <= 0 || !term.IsTerminal(int(f.Fd())) || os.Getenv("TERM") == "dumb" {
		return
	}
	columns := func() int {
		n, _, err := term.GetSize(int(f.Fd()))
		if err != nil || n <= 0 {
			return 80
		}
		return n
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	l.bar = &progress{w: f, columns: columns, now: time.Now, started: time.Now(), total: total}
	l.bar.draw()
}

func (l *logger) step(n float64) {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.bar != nil {
		l.bar.done = min(l.bar.total, l.bar.done+n)
		l.bar.draw()
	}
}

// stopProgress takes the bar away: it makes way for the result.
func (l *logger) stopProgress() {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.bar != nil {
		io.WriteString(l.bar.w, clearLine)
		l.bar = nil
	}
}

// Write puts whole lines above the bar.
func (p *progress) Write(b []byte) (int, error) {
	if _, err := io.WriteString(p.w, clearLine); err != nil {
		return 0, err
	}
	n, err := p.w.Write(b)
	if err == nil {
		p.draw()
	}
	return n, err
}

func (p *progress) draw() { io.WriteString(p.w, clearLine+p.line()) }

// line is the bar as it stands. The last column stays free: some terminals break a
// line that fills it.
func (p *progress) line() string {
	share := p.done / p.total
	left := ""
	// A rate is known when some work is done; earlier any number would be invented.
	if elapsed := p.now().Sub(p.started); share >= 0.05 && share < 1 && elapsed >= 2*time.Second {
		left = "  about " + roundTime(time.Duration(float64(elapsed)*(1-share)/share)) + " left"
	}
	tail := fmt.Sprintf("] %3.0f %%%s", 100*share, left)
	const head = "evenkeel: ["
	columns := p.columns() - 1
	room := min(40, columns-len(head)-len(tail))
	if room < 4 {
		tail = strings.TrimPrefix(tail, "] ")
		return tail[:max(0, min(len(tail), columns))]
	}
	full := int(share * float64(room))
	return head + strings.Repeat("#", full) + strings.Repeat(".", room-full) + tail
}

// roundTime writes a duration for people: "40s", "3m", "2h10m".
func roundTime(d time.Duration) string {
	switch {
	case d < time.Minute:
		return fmt.Sprintf("%ds", max(1, int(d.Round(time.Second).Seconds())))
	case d < time.Hour:
		return fmt.Sprintf("%dm", int(d.Round(time.Minute).Minutes()))
	}
	d = d.Round(10 * time.Minute)
	return fmt.Sprintf("%dh%02dm", int(d.Hours()), int(d.Minutes())%60)
}
