package main

import (
	"bytes"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"golang.org/x/sys/unix"

	"evenkeel/pipeline"
)

// onTerminal runs a command whose standard error is a terminal of 100 columns, and shows that
// terminal; during is called while it runs.
func onTerminal(t *testing.T, during func(*screen), args ...string) (s *screen, code int) {
	t.Helper()
	master, err := os.OpenFile("/dev/ptmx", os.O_RDWR|syscall.O_NOCTTY, 0)
	if err != nil {
		t.Skip("no terminal can be made here: ", err)
	}
	defer master.Close()
	n, err := unix.IoctlGetInt(int(master.Fd()), unix.TIOCGPTN)
	if err == nil {
		err = unix.IoctlSetPointerInt(int(master.Fd()), unix.TIOCSPTLCK, 0)
	}
	if err == nil {
		err = unix.IoctlSetWinsize(int(master.Fd()), unix.TIOCSWINSZ, &unix.Winsize{Row: 25, Col: 100})
	}
	if err != nil {
		t.Fatal(err)
	}
	tty, err := os.OpenFile(fmt.Sprintf("/dev/pts/%d", n), os.O_RDWR|syscall.O_NOCTTY, 0)
	if err != nil {
		t.Skip("no terminal can be opened here: ", err)
	}
	s = &screen{}
	read := make(chan struct{})
	go func() { io.Copy(s, master); close(read) }() // ends with an error when the other side closes
	if during != nil {
		go during(s)
	}
	var out bytes.Buffer
	code = Run(append([]string{"evenkeel"}, args...), strings.NewReader(""), &out, tty)
	tty.Close()
	<-read
	if s.err != nil {
		t.Error(s.err)
	}
	return s, code
}

func TestBarOnATerminal(t *testing.T) {
	t.Setenv("TERM", "xterm")
	root, out := t.TempDir(), filepath.Join(t.TempDir(), "out")
	writeDataset(root, newSailor().files(theRun))
	s, code := onTerminal(t, nil, "steady", root, out)
	if code != pipeline.ExitDone || len(s.bars()) == 0 {
		t.Errorf("exit %d, bars %q", code, s.bars())
	}
	text := strings.TrimRight(s.text(), "\n")
	if strings.Contains(text, "[") || !strings.HasSuffix(text, theStem+": done\nevenkeel: 1 done") {
		t.Errorf("left on the terminal:\n%s", text)
	}
	for _, option := range [][]string{{"--quiet"}, {"--log", "json"}} {
		s, code := onTerminal(t, nil, append(option, "steady", "--redo", root, out)...)
		if code != pipeline.ExitDone || len(s.bars()) > 0 || strings.Contains(s.text(), "%") {
			t.Errorf("%v: exit %d, screen\n%s", option, code, s.text())
		}
	}
	t.Setenv("TERM", "dumb")
	if s, _ := onTerminal(t, nil, "steady", "--redo", root, out); len(s.bars()) > 0 {
		t.Errorf("bars on a terminal that cannot: %q", s.bars())
	}
}

// Ctrl-C while the bar stands: the terminal shows what was said, and no bar.
func TestInterruptOnATerminal(t *testing.T) {
	t.Setenv("TERM", "xterm")
	root, out := t.TempDir(), filepath.Join(t.TempDir(), "out")
	for i := range 9 {
		writeDataset(root, newSailor().files(fmt.Sprintf("sub-%02d/func/sub-%02d_task-watch", i, i)))
	}
	s, code := onTerminal(t, func(s *screen) {
		for range 1000 {
			if len(s.bars()) > 0 {
				break
			}
			time.Sleep(5 * time.Millisecond)
		}
		syscall.Kill(os.Getpid(), syscall.SIGINT)
	}, "steady", "--jobs", "1", root, out)
	text := strings.TrimRight(s.text(), "\n")
	if code != pipeline.ExitInterrupt || len(s.bars()) == 0 || strings.Contains(text, "[") || !strings.Contains(text, "evenkeel: interrupt: stopping") || !strings.Contains(text, "interrupted, not written") {
		t.Errorf("exit %d, left on the terminal:\n%s", code, text)
	}
}
