package boundary

import (
	"fmt"
	"math"

	"stillwell/online/wire"
)

// stateVersion is the first byte of a stored sequence. The rest, in the forms of
// package wire:
//
//	error, tune_for         F64
//	method, side            U8
//	crossed                 Bool
//	m, se_m, clock, n*, p   F64
const stateVersion = 1

// AppendBinary appends the sequence to b. Equal sequences give equal bytes. The error is always nil.
func (s Sequence) AppendBinary(b []byte) ([]byte, error) {
	w := wire.Writer{B: b}
	w.U8(stateVersion)
	w.F64(s.Config.Error)
	w.F64(s.Config.TuneFor)
	w.U8(uint8(s.Config.Method))
	w.U8(uint8(s.Config.Side))
	w.Bool(s.Crossed)
	for _, x := range []float64{s.Clock.Start, s.Clock.StartSE, s.Clock.Ratio, s.Tuned, s.P} {
		w.F64(x)
	}
	return w.B, nil
}

// DecodeSequence reads a sequence from the front of b and returns what follows it.
//
//	error  wraps wire.ErrMalformed for what no sequence can be
func DecodeSequence(b []byte) (Sequence, []byte, error) {
	r := wire.NewReader(b)
	if v := r.U8(); v != stateVersion {
		r.Fail("version %d, want %d", v, stateVersion)
	}
	var s Sequence
	s.Config.Error = r.F64()
	s.Config.TuneFor = r.F64()
	s.Config.Method = Method(r.U8())
	s.Config.Side = Side(r.U8())
	s.Crossed = r.Bool()
	for _, x := range []*float64{&s.Clock.Start, &s.Clock.StartSE, &s.Clock.Ratio, &s.Tuned, &s.P} {
		*x = r.F64()
	}
	if err := s.validate(); err != nil {
		r.Fail("%v", err)
	}
	if err := r.Err(); err != nil {
		return Sequence{}, nil, fmt.Errorf("stored sequence: %w", err)
	}
	return s, b[len(b)-r.Remaining():], nil
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
