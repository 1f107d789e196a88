package online

import (
	"bytes"
	"encoding/json"
	"time"
)

// MarshalJSON writes the segment as an object, in the order of the file's `by`.
func (s Segment) MarshalJSON() ([]byte, error) {
	b := []byte{'{'}
	for i, p := range s {
		if i > 0 {
			b = append(b, ',')
		}
		b = appendText(b, p.Field)
		b = append(b, ':')
		b = appendText(b, p.Value)
	}
	return append(b, '}'), nil
}

// MarshalJSON writes the counts as an object, in the order of the arms.
func (c Counts) MarshalJSON() ([]byte, error) {
	b := []byte{'{'}
	for i, n := range c {
		if i > 0 {
			b = append(b, ',')
		}
		b = appendText(b, n.Name)
		b = append(b, ':')
		b, _ = appendValue(b, n.N) // an integer always encodes
	}
	return append(b, '}'), nil
}

// appendText writes a JSON string; names from events are data, and go in as such.
func appendText(b []byte, s string) []byte {
	b, _ = appendValue(b, s) // a string always encodes
	return b
}

func appendValue(b []byte, v any) ([]byte, error) {
	var buf bytes.Buffer
	enc := json.NewEncoder(&buf)
	enc.SetEscapeHTML(false)
	if err := enc.Encode(v); err != nil {
		return b, err
	}
	return append(b, bytes.TrimSuffix(buf.Bytes(), []byte("\n"))...), nil
}

// AppendLine appends a reading, watch reading or alarm as one line of JSON.
func AppendLine(b []byte, v any) ([]byte, error) {
	b, err := appendValue(b, v)
	return append(b, '\n'), err
}

// timeText is a time of the stream as output has it.
func timeText(at int64) string { return time.Unix(0, at).UTC().Format(time.RFC3339Nano) }

// SilentAlarm is raised by the wall clock when no partition has brought anything for long.
func SilentAlarm(newest int64, now time.Time, after time.Duration) Alarm {
	return Alarm{Kind: "alarm", ID: alarmID("silent", newest), Watch: "silent", State: StateRaised,
		Time:  now.UTC().Format(time.RFC3339Nano),
		Words: "No event has come for " + after.String() + ", from any partition; the last one is of " + timeText(newest) + ". Events may be stuck upstream; nothing has been counted as zero."}
}
