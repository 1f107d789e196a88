package station

import (
	"bufio"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"sync"

	"stillwell/config"
)

// rejecting returns where readers put malformed events, nil if the file keeps none: a file of
// JSON lines, each with the event's partition, position, fault and text.
func rejecting(f *config.File) (func(Reject), func() error, error) {
	if f.Stream.Reject == "" {
		return nil, func() error { return nil }, nil
	}
	file, err := os.OpenFile(f.Stream.Reject, os.O_WRONLY|os.O_APPEND|os.O_CREATE, 0o600)
	if err != nil {
		return nil, nil, fmt.Errorf("stream.reject: %w", err)
	}
	var mu sync.Mutex
	w := bufio.NewWriter(file)
	enc := json.NewEncoder(w)
	enc.SetEscapeHTML(false)
	put := func(r Reject) {
		mu.Lock()
		defer mu.Unlock()
		// A full disk must not stop the stream; the event is counted all the same.
		_ = enc.Encode(struct {
			Partition string `json:"partition"`
			Position  int64  `json:"position"`
			Fault     string `json:"fault"`
			Text      string `json:"text"`
		}{r.Partition, r.Position, r.Fault, string(r.Text)})
		_ = w.Flush()
	}
	return put, func() error { return errors.Join(w.Flush(), file.Close()) }, nil
}
