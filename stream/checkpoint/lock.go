package checkpoint

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"

	"github.com/gofrs/flock"
)

// lockName is never removed: a process that waits for it would lock a file without a name.
const lockName = "lock"

// lock takes the directory for this process until unlock; the system gives it back
// when the process dies. The file holds the process id, for the error of the next one.
func lock(dir string) (unlock func() error, err error) {
	path := filepath.Join(dir, lockName)
	l := flock.New(path, flock.SetPermissions(0o600))
	ok, err := l.TryLock()
	if err != nil {
		return nil, fmt.Errorf("locking state directory %s: %w", dir, err)
	}
	if !ok {
		return nil, fmt.Errorf("%w: %s is held by %s; stop it, or name another directory", ErrLocked, dir, holder(path))
	}
	// The lock belongs to the open file of l, not to its contents.
	if err := os.WriteFile(path, fmt.Appendf(nil, "%d\n", os.Getpid()), 0o600); err != nil {
		return nil, fmt.Errorf("locking state directory %s: %w", dir, errors.Join(err, l.Close()))
	}
	return func() error {
		// From here on nobody holds it; the next holder writes its own id.
		return errors.Join(os.Truncate(path, 0), l.Close())
	}, nil
}

// holder names the process that holds the lock, as far as its file tells.
func holder(path string) string {
	b, err := os.ReadFile(path)
	if pid, e := strconv.Atoi(strings.TrimSpace(string(b))); err == nil && e == nil {
		return fmt.Sprintf("process %d", pid)
	}
	return "another process"
}
