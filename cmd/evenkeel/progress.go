package main

import (
	"io"
	"os"

	"github.com/vbauerster/mpb/v8"
	"github.com/vbauerster/mpb/v8/decor"
	"golang.org/x/term"
)

// A progress is one bar over all runs, drawn on a terminal only. Lines written to
// it appear above the bar.
type progress struct {
	p   *mpb.Progress
	bar *mpb.Bar
}

// startProgress begins to draw if standard error is a terminal and nothing speaks against it.
// steps is the number of steps that all runs have together.
func (l *logger) startProgress(steps int) {
	f, ok := l.w.(*os.File)
	if !ok || l.json || l.quiet || steps == 0 || !term.IsTerminal(int(f.Fd())) {
		return
	}
	p := mpb.New(mpb.WithOutput(f), mpb.WithWidth(40))
	// No colour is used anywhere, so NO_COLOR is honoured as it stands.
	bar := p.AddBar(int64(steps),
		mpb.PrependDecorators(decor.Name("evenkeel: ")),
		mpb.AppendDecorators(decor.Percentage(decor.WC{W: 5}), decor.Elapsed(decor.ET_STYLE_GO, decor.WC{W: 8})))
	l.mu.Lock()
	l.bar = &progress{p, bar}
	l.mu.Unlock()
}

func (l *logger) step(n int) {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.bar != nil {
		l.bar.bar.IncrBy(n)
	}
}

func (l *logger) stopProgress() {
	l.mu.Lock()
	bar := l.bar
	l.bar = nil
	l.mu.Unlock()
	if bar != nil {
		bar.bar.Abort(true) // the bar makes way for the result
		bar.p.Wait()
	}
}

var _ io.Writer = (*progress)(nil)

func (p *progress) Write(b []byte) (int, error) { return p.p.Write(b) }
