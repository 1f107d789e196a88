//go:build unix

package file

import (
	"io/fs"
	"os"
	"syscall"
	"time"

	"golang.org/x/sys/unix"
)

// openPipe keeps open from waiting for a pipe's writer.
const openPipe = os.O_RDONLY | unix.O_NONBLOCK

// identity returns a file's device and inode.
func identity(info fs.FileInfo) (device, inode uint64) {
	if st, ok := info.Sys().(*syscall.Stat_t); ok {
		return uint64(st.Dev), uint64(st.Ino)
	}
	return 0, 0
}

// readable waits until a read of f would return at once, at most for a while.
func readable(f *os.File, wait time.Duration) (ready bool, err error) {
	conn, err := f.SyscallConn()
	if err != nil {
		return false, err
	}
	fds := []unix.PollFd{{Events: unix.POLLIN}}
	var n int
	var pollErr error
	if err := conn.Control(func(fd uintptr) {
		fds[0].Fd = int32(fd)
		n, pollErr = unix.Poll(fds, int(wait.Milliseconds()))
	}); err != nil {
		return false, err
	}
	if pollErr == unix.EINTR {
		return false, nil
	}
	return n > 0, pollErr
}
