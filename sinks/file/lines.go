package file

import (
	"fmt"

	"stillwell/online"
)

// Lines is a step, as it is written.
type Lines struct{ Readings, Alarms []byte }

// Encode writes a step as lines.
func Encode(o online.Output) (Lines, error) {
	var l Lines
	for i := range o.Readings {
		if err := appendLine(&l.Readings, &o.Readings[i], o.Readings[i].Study, o.Readings[i].Estimate); err != nil {
			return l, err
		}
	}
	for i := range o.Watches {
		if err := appendLine(&l.Readings, &o.Watches[i], o.Watches[i].Study, o.Watches[i].Watch); err != nil {
			return l, err
		}
	}
	for i := range o.Alarms {
		if err := appendLine(&l.Alarms, &o.Alarms[i], o.Alarms[i].Study, o.Alarms[i].Watch); err != nil {
			return l, err
		}
	}
	return l, nil
}

func appendLine(to *[]byte, v any, study, name string) (err error) {
	if *to, err = online.AppendLine(*to, v); err != nil {
		return fmt.Errorf("file sink: %s/%s: %w", study, name, err)
	}
	return nil
}
