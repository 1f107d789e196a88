package checkpoint

import (
	"bufio"
	"errors"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
)

// A real directory: rights, leftovers of a crash, foreign files.
func TestDirectory(t *testing.T) {
	dir := t.TempDir()
	for _, name := range []string{".0000000000000007.checkpoint8123", ".0000000000000007.checkpoint", "notes.txt", "7.checkpoint", ".bashrc"} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte("x"), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.Mkdir(filepath.Join(dir, fileName(9)), 0o700); err != nil {
		t.Fatal(err)
	}
	s, err := Open(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	if snap, err := s.Load(); snap != nil || err != nil {
		t.Fatalf("%v, %v", snap, err)
	}
	for i := range 5 {
		if err := s.Commit([]byte{byte(i)}, []Page{{"a", noise(100, uint64(i))}}, nil); err != nil {
			t.Fatal(err)
		}
	}
	found, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, e := range found {
		names = append(names, e.Name())
		if _, ok := parseName(e.Name()); ok && !e.IsDir() {
			if info, err := e.Info(); err != nil || info.Mode().Perm() != 0o600 {
				t.Errorf("%s has rights %v, %v", e.Name(), info.Mode(), err)
			}
		}
	}
	want := []string{".0000000000000007.checkpoint", ".bashrc", fileName(4), fileName(5), fileName(9), "7.checkpoint", "lock", "notes.txt"}
	if !slices.Equal(names, want) {
		t.Errorf("directory holds %v, want %v", names, want)
	}
}

// A file that is given up leaves nothing behind, even where TMPDIR would do for it.
func TestDiscard(t *testing.T) {
	dir := t.TempDir()
	t.Setenv("TMPDIR", t.TempDir())
	f, err := osFS{dir}.Create("a")
	if err != nil {
		t.Fatal(err)
	}
	if found, _ := os.ReadDir(dir); len(found) != 1 {
		t.Errorf("the temporary file is not in the directory: %v", found)
	}
	if _, err := f.Write([]byte("half")); err != nil {
		t.Fatal(err)
	}
	if err := f.Discard(); err != nil {
		t.Fatal(err)
	}
	if found, _ := os.ReadDir(dir); len(found) > 0 {
		t.Errorf("left behind: %v", found)
	}
}

// A daemon that goes on between listing and opening takes files away: not damage.
func TestLookWhileFilesGo(t *testing.T) {
	for _, hurry := range []int{1, 30} { // commits meanwhile
		d := newDisk()
		s := openSmall(t, d)
		s.small = 0
		if _, err := s.Load(); err != nil {
			t.Fatal(err)
		}
		commit := func() {
			if err := s.Commit([]byte("m"), []Page{{"a", noise(200, 1)}, {"b", noise(200, 2)}}, nil); err != nil {
				t.Fatal(err)
			}
		}
		for range 10 {
			commit()
		}
		opened := 0
		ro, err := OpenReadOnly("state", Options{FS: watched{d, func() {
			if opened++; opened == 1 {
				for range hurry {
					commit()
				}
			}
		}}})
		if err != nil {
			t.Fatal(err)
		}
		snap, err := ro.Load()
		if err != nil || len(snap.Skipped) > 0 {
			t.Fatalf("%d commits meanwhile: %+v, %v", hurry, snap, err)
		}
		if want := uint64(10 + hurry); hurry > 1 && snap.Sequence != want {
			t.Errorf("found checkpoint %d, want %d", snap.Sequence, want)
		}
	}
}

type watched struct {
	*disk
	opening func()
}

func (w watched) Open(name string) (File, int64, error) {
	w.opening()
	return w.disk.Open(name)
}

// Looking on while a daemon commits sees whole checkpoints only, and no damage.
func TestLookWhileCommitting(t *testing.T) {
	dir := t.TempDir()
	s, err := Open(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	s.small = 0
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	write := func(i int) error {
		b := []byte(fmt.Sprint(i))
		return s.Commit(b, []Page{{"a", b}, {fmt.Sprint("b", i%10), noise(3000, uint64(i))}}, nil)
	}
	if err := write(0); err != nil {
		t.Fatal(err)
	}
	var wg sync.WaitGroup
	stop := make(chan struct{})
	wg.Go(func() {
		for i := 1; ; i++ {
			select {
			case <-stop:
				return
			default:
			}
			if err := write(i); err != nil {
				t.Error(err)
				return
			}
		}
	})
	ro, err := OpenReadOnly(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	last := uint64(0)
	for range 100 {
		snap, err := ro.Load()
		if err != nil || len(snap.Skipped) > 0 || string(snap.Meta) != string(snap.Pages["a"]) || snap.Sequence < last {
			t.Errorf("%+v, %v", snap, err)
			break
		}
		last = max(last, snap.Sequence, s.Stats().Sequence/2)
	}
	close(stop)
	wg.Wait()
}

func TestLock(t *testing.T) {
	dir := t.TempDir()
	child := exec.Command(os.Args[0], "-test.run=^TestHoldLock$")
	child.Env = append(os.Environ(), "CHECKPOINT_LOCK="+dir)
	out, err := child.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := child.Start(); err != nil {
		t.Fatal(err)
	}
	defer child.Wait()
	defer child.Process.Kill()
	if line, err := bufio.NewReader(out).ReadString('\n'); line != "held\n" {
		t.Fatalf("child says %q, %v", line, err)
	}
	_, err = Open(dir, Options{})
	if !errors.Is(err, ErrLocked) || !strings.Contains(err.Error(), fmt.Sprintf("process %d", child.Process.Pid)) {
		t.Fatalf("error %v, want one that names process %d", err, child.Process.Pid)
	}
	if _, err := OpenReadOnly(dir, Options{}); err != nil {
		t.Errorf("looking takes no lock: %v", err)
	}
	// Killed: the system gives the lock back, though the file still names the dead.
	child.Process.Kill()
	child.Wait()
	s, err := Open(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := Open(dir, Options{}); !errors.Is(err, ErrLocked) || !strings.Contains(err.Error(), fmt.Sprintf("process %d", os.Getpid())) {
		t.Errorf("error %v, want one that names this process", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if s, err = Open(dir, Options{}); err != nil {
		t.Fatal(err)
	}
	s.Close()
}

// TestHoldLock is the other process of TestLock.
func TestHoldLock(t *testing.T) {
	dir := os.Getenv("CHECKPOINT_LOCK")
	if dir == "" {
		t.Skip("runs as a process of its own, from TestLock")
	}
	if _, err := Open(dir, Options{}); err != nil {
		t.Fatal(err)
	}
	fmt.Println("held")
	io.Copy(io.Discard, os.Stdin) // ends at once, as there is no input
	select {}
}
