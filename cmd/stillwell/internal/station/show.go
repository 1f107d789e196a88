package station

import (
	"encoding/json"
	"fmt"
	"time"

	"stillwell/online"
	"stillwell/stream/checkpoint"
	"stillwell/stream/order"
)

// Contents is what a state directory holds, for people and programs.
type Contents struct {
	Sequence   uint64                   `json:"sequence"`
	Saved      time.Time                `json:"saved"`
	Step       string                   `json:"step"` // end of the last evaluated step
	Settled    order.Verdicts           `json:"settled"`
	Partitions []PartitionContents      `json:"partitions"`
	Studies    map[string]StudyContents `json:"studies"`
	Pages      int                      `json:"pages"`
	Bytes      int64                    `json:"bytes"`
	Skipped    []string                 `json:"skipped,omitempty"` // newer checkpoints that are damaged
}

// PartitionContents is where a partition stands.
type PartitionContents struct {
	Name   string `json:"name"`
	Offset int64  `json:"offset"` // where a restart reads on
	Max    string `json:"max"`    // largest event time before it
	Idle   bool   `json:"idle"`
}

// StudyContents is what is kept of a study.
type StudyContents struct {
	Outcomes online.Outcomes `json:"outcomes"`
	Bytes    int64           `json:"bytes"`
}

// Show reads the newest checkpoint of a directory, without disturbing a daemon that has it.
func Show(dir string) (Contents, error) {
	var c Contents
	store, err := checkpoint.OpenReadOnly(dir, checkpoint.Options{})
	if err != nil {
		return c, err
	}
	defer func() { _ = store.Close() }()
	snap, err := store.Load()
	if err != nil {
		return c, err
	}
	if snap == nil {
		return c, fmt.Errorf("%s holds no checkpoint", dir)
	}
	var m Meta
	if err := json.Unmarshal(snap.Meta, &m); err != nil {
		return c, fmt.Errorf("%s: the checkpoint's head cannot be read: %w", dir, err)
	}
	c = Contents{Sequence: snap.Sequence, Saved: m.Saved, Step: timeOrNone(m.Step), Settled: m.Settled,
		Studies: map[string]StudyContents{}, Pages: len(snap.Pages)}
	for _, p := range m.Streams {
		c.Partitions = append(c.Partitions, PartitionContents{p.Name, p.At.Offset, timeOrNone(p.Max), p.Idle})
	}
	for name, o := range m.Outcomes {
		c.Studies[name] = StudyContents{Outcomes: o}
	}
	for name, b := range snap.Pages {
		c.Bytes += int64(len(b))
		s := c.Studies[online.StudyOf(name)]
		s.Bytes += int64(len(b))
		c.Studies[online.StudyOf(name)] = s
	}
	for _, err := range snap.Skipped {
		c.Skipped = append(c.Skipped, err.Error())
	}
	return c, nil
}

func timeOrNone(at int64) string {
	if at == order.Never {
		return "none yet"
	}
	return time.Unix(0, at).UTC().Format(time.RFC3339Nano)
}
