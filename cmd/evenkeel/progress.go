package main

import (
	"bytes"
	"fmt"
	"io"
	"os"
	"strings"
	"sync"
	"time"

	"github.com/vbauerster/mpb/v8"
	"github.com/vbauerster/mpb/v8/decor"
	"golang.org/x/term"
)

// A progress is one bar over all runs, on the last line of a terminal. No colour is
// used, so NO_COLOR is honoured as it stands.
//
// The container draws every so often, and what is written to it appears above the bar with
// the next drawing. Its bar must never complete by itself: lines written between the last
// drawing and the end would be lost. So its total is open until [progress.stop].
type progress struct {
	container *mpb.Progress
	bar       *mpb.Bar
	console   *console
	now       func() time.Time

	mu      sync.Mutex // the container draws from a goroutine of its own
	started time.Time
	done    float64
	skipped float64 // of done: took no time
	total   float64
}

// barSteps is how finely the bar moves: finer than any terminal is wide.
const barSteps = 10000

// startProgress begins to draw if standard error is a terminal and nothing speaks against it.
// total is the work of all runs together, in units of step.
func (l *logger) startProgress(total float64) {
	f, ok := l.w.(*os.File)
	if !ok || l.json || l.quiet || total <= 0 || !term.IsTerminal(int(f.Fd())) || os.Getenv("TERM") == "dumb" {
		return
	}
	p := newProgress(f, func() (int, int, error) { return term.GetSize(int(f.Fd())) }, time.Now, total)
	l.mu.Lock()
	defer l.mu.Unlock()
	l.bar = p
}

func (l *logger) step(n float64) { l.move(n, 0) }

// skip is step for work that turned out to be none: it says nothing about the time left.
func (l *logger) skip(n float64) { l.move(n, n) }

func (l *logger) move(n, skipped float64) {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.bar != nil {
		l.bar.move(n, skipped)
	}
}

// stopProgress takes the bar away: it makes way for the result. When it returns every line
// written above the bar stands on the terminal.
func (l *logger) stopProgress() {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.bar != nil {
		l.bar.stop()
		l.bar = nil
	}
}

// newProgress draws on out, a terminal of that size.
func newProgress(out io.Writer, size func() (columns, rows int, err error), now func() time.Time, total float64) *progress {
	p := &progress{console: &console{out: out, size: size}, now: now, started: now(), total: total}
	p.container = mpb.New(mpb.WithConsoleWriter(p.console))
	p.bar = p.container.New(0, mpb.BarStyle().Lbound("[").Filler("#").Tip("#").Padding(".").Rbound("]"),
		mpb.BarWidth(42),
		mpb.BarFillerTrim(),
		mpb.PrependDecorators(decor.Any(barName)),
		mpb.AppendDecorators(decor.Any(barShare), decor.Any(func(s decor.Statistics) string {
			// Whole, or not at all.
			if left := p.left(); len(left)+barLeast <= s.AvailableWidth {
				return left
			}
			return ""
		})))
	p.bar.SetTotal(barSteps, false)
	return p
}

// barLeast is the width below which a bar says nothing: the name, or the time left,
// is left out before it gets that narrow.
const barLeast = 6

func barName(s decor.Statistics) string {
	const name = "evenkeel: "
	if s.AvailableWidth < len(name)+len(" 100 %")+barLeast {
		return ""
	}
	return name
}

func barShare(s decor.Statistics) string {
	return fmt.Sprintf(" %3d %%", 100*s.Current/max(1, s.Total))
}

// left says how long it will take, as soon as a rate is known; earlier any number would
// be invented.
func (p *progress) left() string {
	p.mu.Lock()
	defer p.mu.Unlock()
	elapsed := p.now().Sub(p.started)
	worked := (p.done - p.skipped) / (p.total - p.skipped)
	if !(worked >= 0.05 && worked < 1) || elapsed < 2*time.Second {
		return ""
	}
	return "  about " + roundTime(time.Duration(float64(elapsed)*(1-worked)/worked)) + " left"
}

func (p *progress) move(n, skipped float64) {
	p.mu.Lock()
	p.done = min(p.total, p.done+n)
	p.skipped += skipped
	at := int64(barSteps * p.done / p.total)
	p.mu.Unlock()
	p.bar.SetCurrent(at)
}

// Write puts whole lines above the bar.
func (p *progress) Write(b []byte) (int, error) {
	if n, err := p.container.Write(b); err == nil {
		return n, nil
	}
	return p.console.out.Write(b) // the container has given up drawing
}

// stop takes the bar away; nobody may write meanwhile.
func (p *progress) stop() {
	p.bar.Abort(true)
	p.container.Wait()
	p.console.Flush(0) // whatever the last drawing has left, had it failed or come too early
}

// A console is the terminal as the container sees it. Unlike the one the container brings, it
// goes to the start of the line before it erases (the ^C that a terminal echoes has
// moved the cursor), leaves the last column free (some terminals break a line that
// fills it), and is silent while nothing changes.
type console struct {
	bytes.Buffer // the drawing to come
	out          io.Writer
	size         func() (columns, rows int, err error)
	shown        string // the bar as it stands, with its line feeds
}

func (c *console) IsTerminal() bool { return true }

// GetTermSize has no error: a terminal that does not tell its size gets the usual one.
func (c *console) GetTermSize() (columns, rows int, err error) {
	columns, rows, err = c.size()
	if err != nil || columns <= 1 || rows <= 0 {
		columns, rows = 80, 24
	}
	return columns - 1, rows, nil
}

// Flush puts the drawing in place of the bar; its last so many lines are the new bar.
func (c *console) Flush(lines int) error {
	text := c.String()
	bar := len(text)
	for range lines {
		bar = 1 + strings.LastIndexByte(text[:max(0, bar-1)], '\n')
	}
	if bar == 0 && text == c.shown {
		c.Reset()
		return nil
	}
	if n := strings.Count(c.shown, "\n"); n > 0 {
		// ECMA-48: carriage return, cursor up, erase to the end of the page.
		text = fmt.Sprintf("\r\x1b[%dA\x1b[J", n) + text
	}
	if _, err := io.WriteString(c.out, text); err != nil {
		return err
	}
	c.shown = c.String()[bar:]
	c.Reset()
	return nil
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
