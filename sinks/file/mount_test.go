//go:build linux

package file

import (
	"errors"
	"syscall"
	"testing"
)

// mount is a small disk of its own, in memory.
func mount(t *testing.T, flags uintptr, size string) string {
	t.Helper()
	dir := t.TempDir()
	err := syscall.Mount("tmpfs", dir, "tmpfs", flags, "size="+size)
	if errors.Is(err, syscall.EPERM) || errors.Is(err, syscall.EACCES) {
		t.Skipf("a disk of its own needs the right to mount: %v", err)
	}
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(dir, 0); err != nil {
			t.Error(err)
		}
	})
	return dir
}

const readOnly = syscall.MS_RDONLY

// enlarge gives a disk more room.
func enlarge(t *testing.T, dir, size string) {
	t.Helper()
	if err := syscall.Mount("tmpfs", dir, "tmpfs", syscall.MS_REMOUNT, "size="+size); err != nil {
		t.Fatal(err)
	}
}
