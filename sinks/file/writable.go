package file

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"syscall"
)

// writable says what is wrong with the place of a file before anything is written.
func writable(path string) error {
	dir := filepath.Dir(path)
	info, err := os.Stat(dir)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return fmt.Errorf("file sink: the folder %s does not exist; make it, or name another path", dir)
	case err != nil:
		return fmt.Errorf("file sink: %w; name another path", err)
	case !info.IsDir():
		return fmt.Errorf("file sink: %s is not a folder; name another path", dir)
	}
	info, err = os.Stat(path)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return writableFolder(dir)
	case err != nil:
		return fmt.Errorf("file sink: %w; name another path", err)
	case info.IsDir():
		return fmt.Errorf("file sink: %s is a folder, want a file", path)
	case !info.Mode().IsRegular():
		return fmt.Errorf("file sink: %s is a pipe or device, where a line that a crash has torn could not be mended; name a file", path)
	}
	f, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		return notWritable(err)
	}
	return f.Close()
}

// writableFolder tries it out, for there is no other way to know.
func writableFolder(dir string) error {
	f, err := os.CreateTemp(dir, ".stillwell-*")
	if err != nil {
		return notWritable(err)
	}
	return errors.Join(f.Close(), os.Remove(f.Name()))
}

func notWritable(err error) error {
	if errors.Is(err, fs.ErrPermission) || errors.Is(err, syscall.EROFS) {
		return fmt.Errorf("file sink: %w; give user %d the right to write there, or name another path", err, os.Getuid())
	}
	return fmt.Errorf("file sink: %w; name another path", err)
}

// failed is the error of a write; the step it belongs to will come again.
func failed(err error) error {
	if errors.Is(err, syscall.ENOSPC) || errors.Is(err, syscall.EDQUOT) {
		return fmt.Errorf("file sink: %w; make room and start again, nothing is lost", err)
	}
	return fmt.Errorf("file sink: %w", err)
}
