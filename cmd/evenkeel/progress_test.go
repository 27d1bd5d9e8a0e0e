package main

import (
	"encoding/json"
	"fmt"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"evenkeel/pipeline"
	"evenkeel/provenance"
)

// screen shows what a terminal would after these bytes, as far as the bar uses one: line
// feed, carriage return, cursor up, erase to the end of the page (ECMA-48). Any other
// control sequence is an error; among them are those for colour.
type screen struct {
	mu          sync.Mutex
	lines       []string
	row, column int
	seen        []string // every line that stood at the bottom, without repetitions
	err         error
}

func (s *screen) Write(b []byte) (int, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for t := string(b); t != ""; {
		for len(s.lines) <= s.row {
			s.lines = append(s.lines, "")
		}
		line := &s.lines[s.row]
		if control, ok := strings.CutPrefix(t, "\x1b["); ok {
			end := strings.IndexAny(control, "AJ")
			if end < 0 {
				s.err = fmt.Errorf("control sequence %q", t)
				return len(b), nil
			}
			if n, err := strconv.Atoi(control[:end]); control[end] == 'A' && err == nil {
				s.row = max(0, s.row-n)
			} else if control[:end+1] == "J" {
				s.lines = s.lines[:s.row+1]
				s.lines[s.row] = s.lines[s.row][:min(s.column, len(s.lines[s.row]))]
			} else {
				s.err = fmt.Errorf("control sequence %q", t)
			}
			t = control[end+1:]
			continue
		}
		switch t[0] {
		case '\n':
			if len(s.seen) == 0 || s.seen[len(s.seen)-1] != *line {
				s.seen = append(s.seen, *line)
			}
			s.row, s.column = s.row+1, 0
		case '\r':
			s.column = 0
		default:
			*line += strings.Repeat(" ", max(0, s.column-len(*line)))
			*line = (*line)[:s.column] + t[:1] + (*line)[min(len(*line), s.column+1):]
			s.column++
		}
		t = t[1:]
	}
	return len(b), nil
}

func (s *screen) text() string {
	s.mu.Lock()
	defer s.mu.Unlock()
	return strings.Join(s.lines, "\n")
}

// bars are the bars that were drawn.
func (s *screen) bars() (out []string) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, line := range s.seen {
		if strings.HasPrefix(line, "evenkeel: [") {
			out = append(out, line)
		}
	}
	return out
}

// soon waits until the screen ends in a line that holds want: the bar is drawn every so often.
func (s *screen) soon(t *testing.T, want string) string {
	t.Helper()
	for range 400 {
		lines := strings.Split(strings.TrimRight(s.text(), "\n"), "\n")
		if last := lines[len(lines)-1]; strings.Contains(last, want) {
			return last
		}
		time.Sleep(5 * time.Millisecond)
	}
	t.Fatalf("no bar with %q on the screen:\n%s", want, s.text())
	return ""
}

func wide(columns int) func() (int, int, error) {
	return func() (int, int, error) { return columns, 25, nil }
}

// Every line stays, in its order, above the bar; of the bar nothing is left, finished or not.
// The last line comes when the work is complete, and right before the end.
func TestProgressKeepsLines(t *testing.T) {
	for _, steps := range []int{3, 10} { // interrupted, and to the end
		s := &screen{}
		l := &logger{w: s}
		l.bar = newProgress(s, wide(60), time.Now, 10)
		want := ""
		for i := range steps {
			l.step(1)
			if i < 2 || i == 9 { // now and then time for a drawing, also of a bar that is full
				if last := s.soon(t, fmt.Sprintf("%d0 %%", i+1)); len(last) >= 60 {
					t.Errorf("bar %q", last)
				}
			}
			l.info("done", fmt.Sprintf("run %d: done", i), nil)
			l.info("done", "the same line twice", nil)
			want += fmt.Sprintf("evenkeel: run %d: done\nevenkeel: the same line twice\n", i)
		}
		l.stopProgress()
		l.info("summary", "over", nil)
		if got := s.text(); got != want+"evenkeel: over\n" && got != want+"evenkeel: over" {
			t.Errorf("screen:\n%s", got)
		}
		if s.err != nil {
			t.Error(s.err)
		}
	}
}

// Lines from many goroutines, and an end at any moment of the drawing.
func TestProgressKeepsLinesOfAll(t *testing.T) {
	for round := range 20 {
		s := &screen{}
		l := &logger{w: s}
		l.bar = newProgress(s, wide(60), time.Now, 40)
		var all sync.WaitGroup
		for g := range 4 {
			all.Go(func() {
				for i := range 10 {
					l.step(1)
					l.info("done", fmt.Sprintf("%d of %d", i, g), nil)
				}
			})
		}
		all.Wait()
		time.Sleep(time.Duration(round) * 9 * time.Millisecond) // drawings come every 150 ms
		l.info("done", "last", nil)
		l.stopProgress()
		if got := strings.Count(s.text(), "evenkeel: "); got != 41 || strings.Contains(s.text(), "[") || !strings.HasSuffix(strings.TrimSpace(s.text()), "last") {
			t.Fatalf("round %d: %d lines\n%s", round, got, s.text())
		}
	}
}

// The ^C that a terminal echoes moves the cursor to the right; nothing of the bar is left all
// the same.
func TestProgressAfterAnEcho(t *testing.T) {
	s := &screen{}
	l := &logger{w: s}
	l.bar = newProgress(s, wide(60), time.Now, 10)
	s.soon(t, "evenkeel: [")
	s.Write([]byte("^C"))
	l.warn("interrupted", "stopping", nil)
	l.stopProgress()
	if got := strings.TrimRight(s.text(), "\n"); got != "evenkeel: stopping" {
		t.Errorf("screen:\n%s", got)
	}
}

// While nothing changes nothing is written.
func TestProgressIsSilent(t *testing.T) {
	var out strings.Builder
	c := &console{out: &out, size: wide(60)}
	for _, text := range []string{"bar\n", "bar\n", "line\nbar\n", "line\nbar\n", "bar\n"} {
		c.WriteString(text)
		if err := c.Flush(1); err != nil {
			t.Fatal(err)
		}
	}
	if got := strings.ReplaceAll(out.String(), "\r\x1b[1A\x1b[J", "<"); got != "bar\n<line\nbar\n<line\nbar\n" {
		t.Errorf("%q", got)
	}
}

func TestProgressLine(t *testing.T) {
	for _, c := range []struct {
		done, skipped float64
		elapsed       time.Duration
		columns       int
		want          string
	}{
		{0, 0, time.Hour, 80, "evenkeel: [........................................]   0 %"},
		{50, 0, time.Second, 80, "evenkeel: [####################....................]  50 %"}, // too early to tell
		{4, 0, time.Minute, 80, "evenkeel: [##......................................]   4 %"},
		{25, 0, 10 * time.Second, 80, "evenkeel: [##########..............................]  25 %  about 30s left"},
		{10, 0, 10 * time.Minute, 80, "evenkeel: [####....................................]  10 %  about 1h30m left"},
		{100, 0, time.Hour, 80, "evenkeel: [########################################] 100 %"},
		// Half was up to date; a fifth of the other half took 10 s.
		{60, 50, 10 * time.Second, 80, "evenkeel: [########################................]  60 %  about 40s left"},
		{50, 50, 10 * time.Second, 80, "evenkeel: [####################....................]  50 %"},
		{100, 100, 10 * time.Second, 80, "evenkeel: [########################################] 100 %"},
		{25, 0, 10 * time.Second, 40, "evenkeel: [#....]  25 %  about 30s left"},
		{25, 0, 10 * time.Second, 30, "evenkeel: [###........]  25 %"},
		{25, 0, 10 * time.Second, 20, "[###........]  25 %"},
		{25, 0, 10 * time.Second, 0, "evenkeel: [##########..............................]  25 %  about 30s left"},
	} {
		s := &screen{}
		at := time.Unix(0, 0)
		var mu sync.Mutex
		p := newProgress(s, wide(c.columns), func() time.Time { mu.Lock(); defer mu.Unlock(); return at }, 100)
		mu.Lock()
		at = at.Add(c.elapsed)
		mu.Unlock()
		p.move(c.done, c.skipped)
		got := s.soon(t, fmt.Sprintf("%3.0f %%", c.done))
		p.stop()
		if got != c.want {
			t.Errorf("%+v: %q", c, got)
		}
	}
}

// Whatever the stages a run went through, in the end it counts as one; estimation counts for
// most, and moves the bar by itself.
func TestStagesMoveTheBar(t *testing.T) {
	p := &pipeline.Plan{}
	for _, end := range []int{0, 1, len(pipeline.Stages)} {
		l := &logger{w: &screen{}}
		bar := newProgress(&screen{}, wide(80), time.Now, 1)
		l.bar = bar
		s := &session{log: l}
		for _, stage := range pipeline.Stages[:end] {
			s.observe(pipeline.Event{Kind: pipeline.RunStage, Plan: p, Stage: stage})
		}
		if end == 1 {
			if bar.done > 0.2 {
				t.Errorf("estimation has begun, and the bar stands at %g", bar.done)
			}
			was := bar.done
			for _, share := range []float64{0.5, 0.2} { // the bar does not go back
				s.observe(pipeline.Event{Kind: pipeline.RunShare, Plan: p, Stage: "estimate", Share: share})
				if moved := bar.done - was; moved < 0.3 || moved > 0.45 {
					t.Errorf("half of the estimation moved the bar by %g", moved)
				}
			}
		}
		if end > 1 && bar.done < 0.8 {
			t.Errorf("writing has begun, and the bar stands at %g", bar.done)
		}
		state := pipeline.Done
		if end == 0 {
			state = pipeline.UpToDate
		}
		s.observe(pipeline.Event{Kind: pipeline.RunEnded, Plan: p, Outcome: &pipeline.Outcome{Plan: p, State: state}})
		if d := bar.done - 1; d > 1e-9 || d < -1e-9 {
			t.Errorf("after %d stages and the end: %g", end, bar.done)
		}
		if skipped := bar.skipped > 0; skipped != (end == 0) {
			t.Errorf("after %d stages: %g skipped", end, bar.skipped)
		}
		l.stopProgress()
	}
	sum := 0.0
	for _, stage := range pipeline.Stages {
		sum += stageShares[stage]
	}
	if sum < 1-1e-9 || sum > 1+1e-9 || !slices.Contains(pipeline.Stages, "joint") || stageShares["joint"] != 0 || stageShares["steady"] != 0 {
		t.Errorf("the shares of the stages sum to %g", sum)
	}
}

// A run tells how far its estimation and its joint resampling are, up to the whole, with a path
// and without.
func TestRunsTellShares(t *testing.T) {
	for _, motion := range []string{"path", "volume"} {
		dir := t.TempDir()
		writeDataset(dir, newSailor().files(theRun))
		set := pipeline.DefaultSettings()
		set.Motion, set.Order = motion, "joint"
		ds, plans := plansOf(t, dir, nil, set)
		stage, shares := "", map[string][]float64{}
		outcomes, err := pipeline.Steady(t.Context(), ds, plans, pipeline.Job{Out: filepath.Join(t.TempDir(), "out"), Observe: func(e pipeline.Event) {
			switch e.Kind {
			case pipeline.RunStage:
				stage = e.Stage
			case pipeline.RunShare:
				if e.Stage != stage || e.Plan != plans[0] {
					t.Errorf("%s tells of %s", stage, e.Stage)
				}
				shares[stage] = append(shares[stage], e.Share)
			}
		}})
		if code := pipeline.ExitCode(err, outcomes, false); code != 0 {
			t.Fatalf("exit %d: %v %+v", code, err, outcomes)
		}
		for _, stage := range []string{"estimate", "joint"} {
			told := shares[stage]
			if len(told) < 2*crewVolumes || !slices.IsSorted(told) || told[0] > 0.1 || told[len(told)-1] < 0.999 || told[len(told)-1] > 1.001 {
				t.Errorf("%s, %s: told %v", motion, stage, told)
			}
		}
	}
}

// The JSON log and the record tell how long the stages lasted, in the same words: those of a
// run in memory and those of a streamed one.
func TestStageSeconds(t *testing.T) {
	for _, c := range []struct{ args, stages []string }{
		{nil, []string{"estimate", "joint", "measure-raw", "measure-steady", "read", "write"}},
		{[]string{"--motion", "volume", "--time", "sinc"}, []string{"estimate", "steady", "write"}},
	} {
		dir, out := t.TempDir(), filepath.Join(t.TempDir(), "out")
		writeDataset(dir, newSailor().files(theRun))
		code, stdout, stderr := run(append([]string{"steady", dir, out, "--log", "json"}, c.args...)...)
		if code != 0 {
			t.Fatal(dump(code, stdout, stderr))
		}
		var told map[string]float64
		for _, line := range strings.Split(strings.TrimSpace(stderr), "\n") {
			var e struct {
				Event   string
				Seconds map[string]float64 `json:"stage_seconds"`
			}
			if err := json.Unmarshal([]byte(line), &e); err != nil {
				t.Fatal(err)
			}
			if e.Event == "done" {
				told = e.Seconds
			}
		}
		record, err := os.ReadFile(filepath.Join(out, filepath.FromSlash(theRun+"_desc-steady_prov.json")))
		if err != nil {
			t.Fatal(err)
		}
		r, err := provenance.Parse(record)
		if err != nil {
			t.Fatal(err)
		}
		for _, seconds := range []map[string]float64{told, r.Log.StageSeconds} {
			if got := slices.Sorted(maps.Keys(seconds)); !slices.Equal(got, c.stages) {
				t.Errorf("%v: stages %v, want %v", c.args, got, c.stages)
			}
			for stage, s := range seconds {
				if s <= 0 {
					t.Errorf("%v: %s lasted %g s", c.args, stage, s)
				}
			}
		}
	}
}
