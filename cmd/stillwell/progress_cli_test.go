//go:build linux

package main

import (
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"golang.org/x/sys/unix"
)

// terminal is a terminal of a given width, and what is written to it.
func terminal(t *testing.T, width uint16) (tty *os.File, seen *buffer) {
	t.Helper()
	screen, err := os.OpenFile("/dev/ptmx", os.O_RDWR, 0)
	if err != nil {
		t.Skipf("there are no terminals here: %v", err)
	}
	n, err := unix.IoctlGetInt(int(screen.Fd()), unix.TIOCGPTN)
	if err == nil {
		err = unix.IoctlSetPointerInt(int(screen.Fd()), unix.TIOCSPTLCK, 0)
	}
	if err == nil {
		tty, err = os.OpenFile(fmt.Sprintf("/dev/pts/%d", n), os.O_RDWR|unix.O_NOCTTY, 0)
	}
	if err == nil {
		err = unix.IoctlSetWinsize(int(tty.Fd()), unix.TIOCSWINSZ, &unix.Winsize{Row: 24, Col: width})
	}
	if err != nil {
		t.Fatal(err)
	}
	seen = &buffer{}
	done := make(chan struct{})
	go func() {
		_, _ = io.Copy(seen, screen) // ends with an error when the last user of the terminal is gone
		close(done)
	}()
	t.Cleanup(func() {
		_ = tty.Close()
		<-done
		_ = screen.Close()
	})
	return tty, seen
}

// TestProgressOnTerminal: one line, redrawn in place, within the width, and erased at the end.
func TestProgressOnTerminal(t *testing.T) {
	for _, width := range []uint16{80, 20} {
		tty, seen := terminal(t, width)
		var done atomic.Int64
		stop := showProgress(tty, func() (int64, int64) { return done.Add(3 << 20), 100 << 20 })
		until(t, "a few drawings", func() bool { return strings.Count(seen.String(), "%") >= 5 })
		stop()
		stop()
		until(t, "the end", func() bool { return strings.HasSuffix(seen.String(), "\r\x1b[K") })
		all := strings.Split(strings.TrimSuffix(seen.String(), "\r\x1b[K"), "\r")[1:]
		for _, line := range all {
			line, ok := strings.CutSuffix(line, "\x1b[K")
			if !ok || len(line) >= int(width) || strings.ContainsAny(line, "\n\x1b") {
				t.Errorf("drawn on %d columns: %q", width, line)
			}
		}
		if last := all[len(all)-1]; width == 80 && !regexp.MustCompile(`^ *\d+% of 100\.0 MiB  \d+\.\d MiB/s  \d+s left`).MatchString(last) {
			t.Errorf("drawn: %q", last)
		}
	}
}

// TestProgressElsewhere: nothing, and nothing to wait for.
func TestProgressElsewhere(t *testing.T) {
	f, err := os.Create(filepath.Join(folder(t), "log"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	asked := false
	showProgress(f, func() (int64, int64) { asked = true; return 1, 2 })()
	if asked || text(t, f.Name()) != "" {
		t.Errorf("progress in a file: %q", text(t, f.Name()))
	}
}

// TestMeter: rate and time left, over the last drawings.
func TestMeter(t *testing.T) {
	const mb = 1 << 20
	start := time.Unix(0, 0)
	for _, tt := range []struct {
		name  string
		total int64
		done  []int64 // at whole seconds
		want  string
	}{
		{"the start", 100 * mb, []int64{0}, "  0% of 100.0 MiB"},
		{"a steady rate", 100 * mb, []int64{0, 10 * mb, 20 * mb}, " 20% of 100.0 MiB  10.0 MiB/s  8s left"},
		{"nothing yet", 100 * mb, []int64{0, 0, 0}, "  0% of 100.0 MiB  0 B/s"},
		{"the end", 100 * mb, []int64{0, 100 * mb}, "100% of 100.0 MiB  100.0 MiB/s  0s left"},
		{"more than there was", 100 * mb, []int64{0, 150 * mb}, "100% of 100.0 MiB  150.0 MiB/s  0s left"},
		{"minutes", 1000 * mb, []int64{0, 10 * mb}, "  1% of 1000.0 MiB  10.0 MiB/s  1m39s left"},
		{"an empty file", 0, []int64{0, 0}, "  0% of 0 B  0 B/s"},
		{"a pipe", -1, []int64{0, 3 * mb / 2}, "read 1.5 MiB  1.5 MiB/s"},
		{"much", 5 << 40, []int64{0, 3 << 30}, "  0% of 5120.0 GiB  3.0 GiB/s  28m26s left"},
	} {
		var m meter
		var got string
		for i, d := range tt.done {
			got = m.line(start.Add(time.Duration(i)*time.Second), d, tt.total)
		}
		if got != tt.want {
			t.Errorf("%s: %q, want %q", tt.name, got, tt.want)
		}
	}

	var m meter // what was long ago does not count
	for i := range 200 {
		m.line(start.Add(time.Duration(i)*time.Second), int64(i)*mb, -1)
	}
	for i := range window {
		m.line(start.Add(time.Duration(200+i)*time.Second), 200*mb, -1)
	}
	if got := m.line(start.Add(time.Duration(200+window)*time.Second), 200*mb, -1); got != "read 200.0 MiB  0 B/s" {
		t.Errorf("a stream that has come to rest: %q", got)
	}
}

// TestReplayOnTerminal: the program itself, with standard error on a terminal.
func TestReplayOnTerminal(t *testing.T) {
	lines := tickets(40, 1000)
	dir := site(t, joined(lines))
	tty, seen := terminal(t, 100)
	r, w, err := os.Pipe()
	if err != nil {
		t.Fatal(err)
	}
	p := &program{Cmd: exec.Command(os.Args[0], "replay", "study.yaml", "--from", "-", "--out", "out"), t: t, out: &buffer{}, errout: seen, done: make(chan struct{})}
	p.Env, p.Dir = append(os.Environ(), asProgram+"=1"), dir
	p.Stdin, p.Stdout, p.Stderr = r, p.out, tty
	p.begin()
	_ = r.Close()
	if _, err := w.WriteString(joined(lines[:500])); err != nil {
		t.Fatal(err)
	}
	until(t, "progress", func() bool { return strings.Contains(seen.String(), "read 5") && strings.Contains(seen.String(), "/s") })
	if _, err := w.WriteString(joined(lines[500:])); err != nil {
		t.Fatal(err)
	}
	_ = w.Close()
	if code := p.end(); code != exitDone {
		t.Fatalf("exit %d: %q", code, seen)
	}
	until(t, "the line to be erased", func() bool { return strings.HasSuffix(seen.String(), "\r\x1b[K") })
	if strings.Contains(seen.String(), "\n") || p.out.String() != "" {
		t.Errorf("standard error %q, standard output %q; want one line redrawn", seen, p.out)
	}
	same(t, replayed{readings: text(t, filepath.Join(dir, "out", "readings.jsonl")), alarms: text(t, filepath.Join(dir, "out", "alarms.jsonl"))},
		replay(t, dir, "study.yaml", "events.jsonl"))
}
