package station

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"sync"
	"unicode/utf8"

	"go.uber.org/zap"

	"stillwell/config"
)

// rejects is where readers put malformed events: a file of JSON lines, each with the event's
// partition, position, fault and text. What is read again after a restart stands there again.
type rejects struct {
	log *zap.Logger

	mu      sync.Mutex
	file    *os.File
	size    int64 // of whole lines
	failing bool
}

// openRejects returns nil if the file keeps none.
func openRejects(f *config.File, log *zap.Logger) (*rejects, error) {
	if f.Stream.Reject == "" {
		return nil, nil
	}
	file, err := os.OpenFile(f.Stream.Reject, os.O_RDWR|os.O_APPEND|os.O_CREATE, 0o600)
	if err != nil {
		return nil, fmt.Errorf("stream.reject: %w; name a file that can be written", err)
	}
	r := &rejects{log: log, file: file}
	if r.size, err = file.Seek(0, io.SeekEnd); err == nil && r.size > 0 {
		last := make([]byte, 1)
		if _, err = file.ReadAt(last, r.size-1); err == nil && last[0] != '\n' {
			_, err = file.WriteString("\n") // a crash has torn the last line; the next is whole
			r.size++
		}
	}
	if err != nil {
		return nil, errors.Join(fmt.Errorf("stream.reject: %w", err), file.Close())
	}
	return r, nil
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
