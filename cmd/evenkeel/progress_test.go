package main

import (
	"errors"
	"fmt"
	"strings"
	"testing"
	"time"

	"evenkeel/pipeline"
)

// screen shows what a terminal would after these bytes, as far as the bar uses one: line
// feed, carriage return, erase to the end of the line (ECMA-48).
type screen struct {
	lines  []string
	column int
}

func (s *screen) Write(b []byte) (int, error) {
	if s.lines == nil {
		s.lines = []string{""}
	}
	for t := string(b); t != ""; {
		last := &s.lines[len(s.lines)-1]
		switch {
		case strings.HasPrefix(t, "\x1b[K"):
			*last = (*last)[:s.column]
			t = t[3:]
			continue
		case t[0] == '\x1b':
			return 0, errors.New("another control sequence")
		case t[0] == '\n':
			s.lines, s.column = append(s.lines, ""), 0
		case t[0] == '\r':
			s.column = 0
		default:
			*last = (*last)[:s.column] + t[:1] + (*last)[min(len(*last), s.column+1):]
			s.column++
		}
		t = t[1:]
	}
	return len(b), nil
}

// Every line stays, in its order, above the bar; of the bar nothing is left, finished or not.
func TestProgressKeepsLines(t *testing.T) {
	for _, steps := range []int{3, 10} { // interrupted, and to the end
		s := &screen{}
		l := &logger{w: s}
		l.bar = &progress{w: s, columns: func() int { return 60 }, now: time.Now, started: time.Now(), total: 10}
		want := ""
		for i := range steps {
			l.step(1)
			l.info("done", fmt.Sprintf("run %d: done", i), nil)
			want += fmt.Sprintf("evenkeel: run %d: done\n", i)
			if last := s.lines[len(s.lines)-1]; !strings.HasPrefix(last, "evenkeel: [#") || len(last) >= 60 {
				t.Errorf("bar %q", last)
			}
		}
		l.stopProgress()
		l.info("summary", "over", nil)
		if got := strings.Join(s.lines, "\n"); got != want+"evenkeel: over\n" {
			t.Errorf("screen:\n%s", got)
		}
	}
}

func TestProgressLine(t *testing.T) {
	at := time.Unix(0, 0)
	for _, c := range []struct {
		done    float64
		elapsed time.Duration
		columns int
		want    string
	}{
		{0, time.Hour, 80, "evenkeel: [........................................]   0 %"},
		{50, time.Second, 80, "evenkeel: [####################....................]  50 %"}, // too early to tell
		{25, 10 * time.Second, 80, "evenkeel: [##########..............................]  25 %  about 30s left"},
		{10, 10 * time.Minute, 80, "evenkeel: [####....................................]  10 %  about 1h30m left"},
		{100, time.Hour, 80, "evenkeel: [########################################] 100 %"},
		{25, 10 * time.Second, 40, "evenkeel: [#....]  25 %  about 30s left"},
		{25, 10 * time.Second, 20, " 25 %  about 30s le"},
	} {
		p := &progress{columns: func() int { return c.columns }, now: func() time.Time { return at.Add(c.elapsed) }, started: at, done: c.done, total: 100}
		if got := p.line(); got != c.want {
			t.Errorf("%+v: %q", c, got)
		}
	}
}

// Whatever the stages a run went through, in the end it counts as one; estimation counts for most.
func TestStagesMoveTheBar(t *testing.T) {
	p := &pipeline.Plan{}
	for _, end := range []int{0, 2, len(pipeline.Stages)} {
		l := &logger{w: &screen{}}
		l.bar = &progress{w: &screen{}, columns: func() int { return 80 }, now: time.Now, total: 1}
		s := &session{log: l}
		for _, stage := range pipeline.Stages[:end] {
			s.observe(pipeline.Event{Kind: pipeline.RunStage, Plan: p, Stage: stage})
		}
		if end == 2 && l.bar.done > 0.2 {
			t.Errorf("estimation has begun, and the bar stands at %g", l.bar.done)
		}
		if end > 2 && l.bar.done < 0.8 {
			t.Errorf("writing has begun, and the bar stands at %g", l.bar.done)
		}
		s.observe(pipeline.Event{Kind: pipeline.RunEnded, Plan: p, Outcome: &pipeline.Outcome{Plan: p, State: pipeline.Done}})
		if d := l.bar.done - 1; d > 1e-9 || d < -1e-9 {
			t.Errorf("after %d stages and the end: %g", end, l.bar.done)
		}
	}
}
