package station

import (
	"context"
	"strings"

	"stillwell/config"
	"stillwell/stream"
)

// renamed is a source of one partition, which gets another name: a file's state belongs to
// the path that the study file has for it, from whatever folder the program is started.
type renamed struct {
	stream.Source
	name string
}

// written is a file's path as the study file has it, which the stream's fingerprint holds.
func written(f *config.File) string {
	for _, line := range f.StreamPrint.Lines {
		if path, ok := strings.CutPrefix(line, "file.path: "); ok {
			return path
		}
	}
	return f.Stream.File.Path
}

func (r renamed) Run(ctx context.Context, to stream.Receiver) error {
	return r.Source.Run(ctx, renaming{to, r.name})
}

type renaming struct {
	stream.Receiver
	name string
}

func (r renaming) Open(string) (*stream.Partition, stream.Position, bool, error) {
	return r.Receiver.Open(r.name)
}
