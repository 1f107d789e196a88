package station

import (
	"bufio"
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"hash/maphash"
	"io"
	"os"
	"sync"
	"unicode/utf8"

	"go.uber.org/zap"

	"stillwell/config"
)

// rejects is where readers put malformed events: a file of JSON lines, each with the event's
// partition, position, fault and text. An event that is read again after a restart is the same
// line again, and stands there once.
type rejects struct {
	log *zap.Logger

	mu      sync.Mutex
	file    *os.File
	size    int64 // of whole lines
	failing bool
	seed    maphash.Seed
	known   map[uint64]struct{} // lines that were there before
}

// rejectsKnown is how many bytes at the end of the file are looked through for lines that are
// there before; restarts do not go back further than that, or lines come twice.
const rejectsKnown = 64 << 20

// openRejects returns nil if the file keeps none.
func openRejects(f *config.File, log *zap.Logger) (*rejects, error) {
	if f.Stream.Reject == "" {
		return nil, nil
	}
	file, err := os.OpenFile(f.Stream.Reject, os.O_RDWR|os.O_APPEND|os.O_CREATE, 0o600)
	if err != nil {
		return nil, fmt.Errorf("stream.reject: %w; name a file that can be written", err)
	}
	r := &rejects{log: log, file: file, seed: maphash.MakeSeed(), known: map[uint64]struct{}{}}
	if err := r.recall(); err != nil {
		return nil, errors.Join(fmt.Errorf("stream.reject: %w", err), file.Close())
	}
	return r, nil
}

// recall takes note of the lines that are there; one that a crash has torn goes.
func (r *rejects) recall() error {
	size, err := r.file.Seek(0, io.SeekEnd)
	if err != nil {
		return err
	}
	r.size = max(0, size-rejectsKnown)
	in := bufio.NewReader(io.NewSectionReader(r.file, r.size, size-r.size))
	for {
		line, err := in.ReadBytes('\n')
		switch {
		case err == io.EOF && len(line) == 0:
			return nil
		case err == io.EOF && bytes.HasPrefix(line, []byte(`{"partition":`)):
			return r.file.Truncate(r.size) // its event comes again
		case err == io.EOF: // not ours, so it stays
			r.size = size + 1
			_, err = r.file.WriteString("\n")
			return err
		case err != nil:
			return err
		}
		r.known[maphash.Bytes(r.seed, line)] = struct{}{}
		r.size += int64(len(line))
	}
}

// put keeps an event. A full disk must not stop the stream; the event is counted all the same.
func (r *rejects) put(event Reject) {
	line := struct {
		Partition string `json:"partition"`
		Position  int64  `json:"position"`
		Fault     string `json:"fault"`
		Text      string `json:"text"`
		Bytes     []byte `json:"bytes,omitempty"` // in base64, where they are no text
	}{Partition: event.Partition, Position: event.Position, Fault: event.Fault, Text: string(event.Text)}
	if !utf8.Valid(event.Text) {
		line.Bytes = event.Text
	}
	var b bytes.Buffer
	enc := json.NewEncoder(&b)
	enc.SetEscapeHTML(false)
	err := enc.Encode(line)
	r.mu.Lock()
	defer r.mu.Unlock()
	if sum := maphash.Bytes(r.seed, b.Bytes()); len(r.known) > 0 {
		if _, there := r.known[sum]; there {
			return
		}
	}
	if err == nil {
		_, err = r.file.Write(b.Bytes())
	}
	switch {
	case err == nil:
		r.size += int64(b.Len())
		r.failing = false
	case !r.failing:
		r.failing = true
		r.log.Warn("malformed events cannot be kept, only counted, until there is room again", zap.Error(err))
		fallthrough
	default:
		_ = r.file.Truncate(r.size) // of a line that was torn; if that fails too, so it stays
	}
}

func (r *rejects) close() error {
	if r == nil {
		return nil
	}
	if err := r.file.Close(); err != nil {
		return fmt.Errorf("stream.reject: %w", err)
	}
	return nil
}
