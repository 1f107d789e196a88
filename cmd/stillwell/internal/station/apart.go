package station

import (
	"fmt"
	"os"

	"stillwell/config"
)

// runApart is apart for the files of a run.
func runApart(f *config.File) error {
	read, written := []string{f.Path}, []string{f.Stream.Reject}
	if s := f.Stream.File; s != nil {
		read = append(read, s.Path)
	}
	if s := f.Sinks.File; s != nil {
		written = append(written, s.Path, s.Alarms)
	}
	return apart(read, written)
}

// apart sees that nothing that is read would be written over, under whatever name.
func apart(read, written []string) error {
	for _, in := range read {
		a, err := os.Stat(in)
		if err != nil || !a.Mode().IsRegular() {
			continue
		}
		for _, out := range written {
			if b, err := os.Stat(out); err == nil && os.SameFile(a, b) {
				return fmt.Errorf("%s is read, and what is written to %s would destroy it; name another path", in, out)
			}
		}
	}
	return nil
}
