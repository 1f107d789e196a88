package boundary

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
)

// stateVersion is the first byte of a stored sequence. The rest, little endian:
//
//	error, tune_for         float64
//	method, side, crossed   byte
//	m, se_m, clock, n*, p   float64
const stateVersion = 1

// stored is a sequence as it is laid out.
type stored struct {
	Version                         uint8
	Error, TuneFor                  float64
	Method                          Method
	Side                            Side
	Crossed                         bool
	Start, StartSE, Ratio, Tuned, P float64
}

// AppendBinary appends the sequence to b. Equal sequences give equal bytes. It never fails.
func (s Sequence) AppendBinary(b []byte) ([]byte, error) {
	return binary.Append(b, binary.LittleEndian, stored{stateVersion,
		s.Config.Error, s.Config.TuneFor, s.Config.Method, s.Config.Side, s.Crossed,
		s.Clock.Start, s.Clock.StartSE, s.Clock.Ratio, s.Tuned, s.P})
}

// DecodeSequence reads a sequence from the front of b and returns what follows it.
// It refuses what no sequence can be.
func DecodeSequence(b []byte) (Sequence, []byte, error) {
	var w stored
	n, err := binary.Decode(b, binary.LittleEndian, &w)
	if err != nil {
		return Sequence{}, nil, fmt.Errorf("stored sequence: %d bytes, want %d: %w", len(b), binary.Size(w), err)
	}
	if w.Version != stateVersion {
		return Sequence{}, nil, fmt.Errorf("stored sequence: version %d, want %d", w.Version, stateVersion)
	}
	s := Sequence{
		Config:  Config{Error: w.Error, Method: w.Method, Side: w.Side, TuneFor: w.TuneFor},
		Clock:   Clock{Start: w.Start, StartSE: w.StartSE, Ratio: w.Ratio},
		Tuned:   w.Tuned,
		P:       w.P,
		Crossed: w.Crossed,
	}
	if err := s.validate(); err != nil {
		return Sequence{}, nil, fmt.Errorf("stored %w", err)
	}
	if again, _ := s.AppendBinary(nil); !bytes.Equal(again, b[:n]) {
		return Sequence{}, nil, fmt.Errorf("stored sequence: a truth value is neither 0 nor 1")
	}
	return s, b[n:], nil
}

// validate checks that a sequence can have come about.
func (s Sequence) validate() error {
	if err := s.Config.Validate(); err != nil {
		return err
	}
	if !s.Clock.Begun() {
		if s != (Sequence{Config: s.Config, P: 1}) {
			return fmt.Errorf("sequence: results before the start")
		}
		return nil
	}
	positive := func(x float64) bool { return x > 0 && !math.IsInf(x, 1) }
	switch {
	case !positive(s.Clock.Start) || !positive(s.Clock.StartSE):
		return fmt.Errorf("sequence: start at %g units with standard error %g", s.Clock.Start, s.Clock.StartSE)
	case !(s.Clock.Ratio >= 1 && s.Clock.Ratio <= longest):
		return fmt.Errorf("sequence: clock = %g, want 1 to %g", s.Clock.Ratio, longest)
	case s.Config.Method == Mixture && !positive(s.Tuned), s.Config.Method == Delayed && s.Tuned != 0:
		return fmt.Errorf("sequence: %v tuned for %g units", s.Config.Method, s.Tuned)
	case !(s.P >= 0 && s.P <= 1):
		return fmt.Errorf("sequence: p = %g", s.P)
	}
	return nil
}
