package batch

import (
	"fmt"
	"math"
	"math/bits"

	"stillwell/online/wire"
)

// stateVersion is the first byte of a stored series. The rest, in the forms of package wire:
//
//	scores                 U64
//	steps a full batch     U64
//	units of full batches  count, and each U64
//	their sums             scores F64 each
//	open steps, units      U64
//	open sums              two F64, high and low, for each score
const stateVersion = 1

// AppendBinary appends the series to b. Equal series give equal bytes. The error is always nil.
func (s *Series) AppendBinary(b []byte) ([]byte, error) {
	w := wire.Writer{B: b}
	w.U8(stateVersion)
	w.U64(uint64(s.Scores))
	w.U64(uint64(s.Size))
	w.U64(uint64(len(s.Units)))
	for _, n := range s.Units {
		w.U64(uint64(n))
	}
	for _, x := range s.Sums {
		w.F64(x)
	}
	w.U64(uint64(s.Open.Steps))
	w.U64(uint64(s.Open.Units))
	for i := range s.Scores {
		w.F64(s.Open.High[i])
		w.F64(s.Open.Low[i])
	}
	return w.B, nil
}

// Decode reads a series from the front of b and returns what follows it.
//
//	error  wraps wire.ErrMalformed for what no series can be
func Decode(b []byte) (*Series, []byte, error) {
	r := wire.NewReader(b)
	if v := r.U8(); v != stateVersion {
		r.Fail("version %d, want %d", v, stateVersion)
	}
	natural := func(what string) int64 {
		n := r.U64()
		if n > math.MaxInt64 {
			r.Fail("%s = %d", what, n)
			return 0
		}
		return int64(n)
	}
	scores := r.Count(16) // each has an open sum at the end
	s := &Series{Scores: scores, Size: natural("steps a batch"), Open: newOpen(scores)}
	batches := r.Count(1)
	if batches >= Most {
		r.Fail("%d batches, want fewer than %d", batches, Most)
		batches = 0
	}
	for range batches {
		s.Units = append(s.Units, natural("units"))
	}
	for range batches * scores {
		s.Sums = append(s.Sums, r.F64())
		if r.Err() != nil {
			break
		}
	}
	s.Open.Steps, s.Open.Units = natural("open steps"), natural("open units")
	for i := range scores {
		s.Open.High[i], s.Open.Low[i] = r.F64(), r.F64()
	}
	switch {
	case scores < 1:
		r.Fail("%d scores, want 1 or more", scores)
	case bits.OnesCount64(uint64(s.Size)) != 1 || s.Size > 1 && batches < Most/2:
		r.Fail("%d batches of %d steps", batches, s.Size)
	case s.Open.Steps >= s.Size:
		r.Fail("%d steps in an open batch of %d", s.Open.Steps, s.Size)
	}
	if err := r.Err(); err != nil {
		return nil, nil, fmt.Errorf("stored series: %w", err)
	}
	return s, b[len(b)-r.Remaining():], nil
}
