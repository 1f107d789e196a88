// Package file writes readings and alarms as lines of JSON, so that after any crash the
// files hold exactly the lines of an undisturbed run: a step's lines go out in one write,
// a checkpoint remembers how far the files were good, and what came after it is kept as far as
// the same bytes come again, and cut off where they do not.
//
// What lies in the way and was not written by the state at hand is put away, never
// overwritten: readings.jsonl becomes readings-before-1.jsonl.
//
// A file of readings that has grown large is put aside at a step's end: readings-1.jsonl is
// the oldest. Of those put aside the youngest are kept, and whatever the last two
// checkpoints go on writing.
package file

import (
	"errors"
	"fmt"
	"path/filepath"
)

// Config says where the lines go.
type Config struct {
	Readings string // path of the readings; watches' readings go there too
	Alarms   string // path of the alarms; "" is alarms.jsonl beside Readings
	MaxBytes int64  // a file of readings that has grown beyond is put aside at a step's end; 0: never
	Keep     int    // how many of those put aside stay, the youngest; 0: all
	Replace  bool   // what the files held before is thrown away, instead of put away
}

// A Sink is the two files. Not for concurrent use, but for Sync and Durable.
type Sink struct {
	readings, alarms *log
}

// Place is how far both files are good, for a checkpoint.
type Place struct{ Readings, Alarms Spot }

// Spot is a place in one log.
type Spot struct {
	Path  string // of the log
	Aside int    // files put aside before
	Size  int64  // of the present one
	Tail  uint32 // checksum of its last bytes
	Mixed bool   `json:",omitempty"` // what lies behind the place was there before this state
}

// Open prepares the files, without touching them before something is to be written. from
// is the checkpoint's place; nil begins them anew. Where another path is asked for than
// the checkpoint's, and the file was not moved there, the lines go on in a new file.
func Open(cfg Config, from *Place) (*Sink, error) {
	if cfg.Alarms == "" {
		cfg.Alarms = filepath.Join(filepath.Dir(cfg.Readings), "alarms.jsonl")
	}
	if filepath.Clean(cfg.Alarms) == filepath.Clean(cfg.Readings) {
		return nil, fmt.Errorf("file sink: readings and alarms cannot share %s", cfg.Readings)
	}
	var at Place
	if from != nil {
		at = *from
	}
	s := &Sink{
		readings: &log{path: cfg.Readings, max: cfg.MaxBytes, keep: cfg.Keep, replace: cfg.Replace},
		alarms:   &log{path: cfg.Alarms, replace: cfg.Replace},
	}
	if err := errors.Join(s.readings.locate(at.Readings), s.alarms.locate(at.Alarms)); err != nil {
		return nil, err
	}
	return s, nil
}

// Place is how far the files are good now.
func (s *Sink) Place() Place { return Place{s.readings.place(), s.alarms.place()} }

// Emit writes a step, its readings in one write.
func (s *Sink) Emit(l Lines) error {
	return errors.Join(s.readings.write(l.Readings), s.alarms.write(l.Alarms))
}

// Sync makes what was written durable. It may run beside Emit.
func (s *Sink) Sync() error { return errors.Join(s.readings.sync(), s.alarms.sync()) }

// Durable tells that a checkpoint with this place can be restored, so that files before it
// may go. It may run beside Emit.
func (s *Sink) Durable(p Place) error {
	return errors.Join(s.readings.durable(p.Readings), s.alarms.durable(p.Alarms))
}

// End tells that nothing comes after what was written: what the files hold behind it goes.
func (s *Sink) End() error { return errors.Join(s.readings.end(), s.alarms.end()) }

// Close syncs and closes both files; files that nothing was written to come into being, so that
// a reader finds them.
func (s *Sink) Close() error { return errors.Join(s.readings.close(), s.alarms.close()) }
