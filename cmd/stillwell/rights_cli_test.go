//go:build linux

package main

import (
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// nobody is a user without rights.
const nobody = 65534

// TestNoRights: what may not be read or written is told, with the user who may not. Root may
// everything, so the program then runs as nobody.
func TestNoRights(t *testing.T) {
	dir := site(t, joined(tickets(50, 100)))
	if err := os.Chmod(dir, 0o755); err != nil {
		t.Fatal(err)
	}
	binary := os.Args[0]
	var as *syscall.SysProcAttr
	if os.Geteuid() == 0 {
		binary = filepath.Join(folder(t), "stillwell")
		if err := os.Chmod(filepath.Dir(binary), 0o755); err != nil {
			t.Fatal(err)
		}
		copyFile(t, os.Args[0], binary)
		as = &syscall.SysProcAttr{Credential: &syscall.Credential{Uid: nobody, Gid: nobody}}
	}
	refused := func(code int, args string, parts ...string) {
		t.Helper()
		p := &program{Cmd: exec.Command(binary, strings.Fields(args)...), t: t, out: &buffer{}, errout: &buffer{}, done: make(chan struct{})}
		p.Env, p.Dir, p.SysProcAttr = append(os.Environ(), asProgram+"=1"), dir, as
		p.Stdout, p.Stderr = p.out, p.errout
		p.begin()
		if got := p.end(); got != code {
			t.Errorf("%s: exit %d, want %d\n%s", args, got, code, p.errout)
		}
		mentions(t, p.errout.String(), append(parts, "permission denied")...)
	}
	closed := filepath.Join(dir, "closed")
	if err := os.Mkdir(closed, 0o755); err != nil {
		t.Fatal(err)
	}
	put(t, filepath.Join(closed, "events.jsonl"), "")
	put(t, filepath.Join(dir, "secret.jsonl"), "")
	put(t, filepath.Join(dir, "secret.yaml"), siteStudy("file: {path: events.jsonl}", ""))
	put(t, filepath.Join(dir, "sink.yaml"), siteStudy("file: {path: events.jsonl}", "sinks: {file: {path: closed/readings.jsonl}}\nstate: {dir: open/state}\n"))
	put(t, filepath.Join(dir, "state.yaml"), siteStudy("file: {path: events.jsonl}", "state: {dir: closed/state}\n"))
	put(t, filepath.Join(dir, "reject.yaml"), siteStudy("file: {path: events.jsonl}\nreject: {path: closed/rejects.jsonl}", "state: {dir: open/state}\n"))
	put(t, filepath.Join(dir, "input.yaml"), siteStudy("file: {path: secret.jsonl}", "state: {dir: open/state}\n"))
	open := filepath.Join(dir, "open")
	if err := os.Mkdir(open, 0o755); err != nil {
		t.Fatal(err)
	}
	invoke(t, dir, exitDone, "run", "study.yaml") // leaves a state that is nobody else's business
	for path, mode := range map[string]os.FileMode{open: 0o777, closed: 0, filepath.Join(dir, "secret.jsonl"): 0, filepath.Join(dir, "secret.yaml"): 0} {
		if err := os.Chmod(path, mode); err != nil {
			t.Fatal(err)
		}
	}
	t.Cleanup(func() { _ = os.Chmod(closed, 0o755) })
	if as == nil { // the state is this user's own
		if err := os.Chmod(filepath.Join(dir, "state"), 0); err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() { _ = os.Chmod(filepath.Join(dir, "state"), 0o755) })
	}

	refused(exitWrong, "check secret.yaml", "study file", "secret.yaml")
	refused(exitFailed, "replay study.yaml --from secret.jsonl --out open/out", "secret.jsonl", "the right to read it")
	refused(exitFailed, "replay study.yaml --from closed/events.jsonl --out open/out", "closed/events.jsonl", "to enter its folder")
	refused(exitFailed, "replay study.yaml --from events.jsonl --out closed/out", "closed", "name another")
	refused(exitFailed, "run input.yaml", "secret.jsonl", "the right to read it")
	refused(exitFailed, "run sink.yaml", "file sink", "closed", "name another path")
	refused(exitFailed, "run state.yaml", "state directory", "closed/state")
	refused(exitFailed, "run reject.yaml", "stream.reject", "closed/rejects.jsonl", "name a file that can be written")
	refused(exitFailed, "show state", "state directory state")
}

func copyFile(t *testing.T, from, to string) {
	t.Helper()
	in, err := os.Open(from)
	if err != nil {
		t.Fatal(err)
	}
	defer in.Close()
	out, err := os.OpenFile(to, os.O_CREATE|os.O_WRONLY, 0o755)
	if err != nil {
		t.Fatal(err)
	}
	_, err = io.Copy(out, in)
	if err := out.Close(); err != nil {
		t.Fatal(err)
	}
	if err != nil {
		t.Fatal(err)
	}
}
