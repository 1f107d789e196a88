package checkpoint

import (
	"errors"
	"io"
	"os"
	"path/filepath"
	"syscall"

	"github.com/google/renameio/v2"
)

// FS is what a Store asks of its directory. Names have no folder in them.
type FS interface {
	List() ([]Entry, error)
	Open(name string) (f File, size int64, err error)
	// Create begins a file that has the name only once it is complete.
	Create(name string) (Pending, error)
	Remove(name string) error
	// SyncDir makes the names durable: what was replaced and removed up to now.
	SyncDir() error
}

// An Entry is one name in a directory.
type Entry struct {
	Name string
	Size int64
}

// A File is open for reading.
type File interface {
	io.ReaderAt
	io.Closer
}

// A Pending file is being written under a temporary name.
type Pending interface {
	io.Writer
	// Replace makes the contents durable, closes the file and gives it its name.
	Replace() error
	// Discard closes and removes the file; after a Replace that succeeded it does nothing.
	Discard() error
}

// osFS is a directory of the operating system.
type osFS struct{ dir string }

func (d osFS) List() ([]Entry, error) {
	found, err := os.ReadDir(d.dir)
	if err != nil {
		return nil, err
	}
	var entries []Entry
	for _, e := range found {
		if !e.Type().IsRegular() {
			continue
		}
		info, err := e.Info()
		if errors.Is(err, os.ErrNotExist) {
			continue // removed meanwhile, by a daemon we only look at
		}
		if err != nil {
			return nil, err
		}
		entries = append(entries, Entry{e.Name(), info.Size()})
	}
	return entries, nil
}

func (d osFS) Open(name string) (File, int64, error) {
	f, err := os.Open(filepath.Join(d.dir, name))
	if err != nil {
		return nil, 0, err
	}
	info, err := f.Stat()
	if err != nil {
		f.Close()
		return nil, 0, err
	}
	return f, info.Size(), nil
}

func (d osFS) Create(name string) (Pending, error) {
	// The temporary file lies in the same directory, whatever TMPDIR says: the store
	// looks there for what a crash has left. Unit keys are nobody else's business: 0600.
	f, err := renameio.NewPendingFile(filepath.Join(d.dir, name),
		renameio.WithTempDir(d.dir), renameio.WithStaticPermissions(0o600))
	if err != nil {
		return nil, err
	}
	return pendingFile{f}, nil
}

func (d osFS) Remove(name string) error { return os.Remove(filepath.Join(d.dir, name)) }

func (d osFS) SyncDir() error { return syncDir(d.dir) }

func syncDir(dir string) error {
	f, err := os.Open(dir)
	if err != nil {
		return err
	}
	err = f.Sync()
	if errors.Is(err, syscall.EINVAL) || errors.Is(err, syscall.ENOTSUP) {
		err = nil // a file system that keeps its names by other means, such as one on a network
	}
	return errors.Join(err, f.Close())
}

type pendingFile struct{ *renameio.PendingFile }

func (p pendingFile) Replace() error { return p.CloseAtomicallyReplace() }
func (p pendingFile) Discard() error { return p.Cleanup() }
