package moment

import (
	"bytes"
	"encoding/binary"
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"stillwell/online/wire"
)

func codecShape(t testing.TB) *Shape {
	return mustShape(t, 3, [][2]int{{0, 0}, {0, 1}, {1, 1}}, [][3]int{{2, 2, 2}})
}

func codecCells(t testing.TB) []*Cell {
	s := codecShape(t)
	return []*Cell{
		NewCell(s),
		fill(t, s, []float64{0, 1, 0}, nil),
		fill(t, s, nil, [][]float64{{0.1, 2, 3}, {4, 0.7, -6}}),
		fill(t, s, []float64{0.3, 1, -7}, [][]float64{{0.1, 2, 3}, {4, 0.7, -6}, {1e9, -1e-9, 0}}),
	}
}

func encode(t testing.TB, v interface {
	AppendBinary([]byte) ([]byte, error)
}) []byte {
	t.Helper()
	b, err := v.AppendBinary(nil)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func TestCellSurvivesItsBytes(t *testing.T) {
	for _, c := range codecCells(t) {
		full := encode(t, c)
		got, rest, err := DecodeCell(c.shape, append(full[:len(full):len(full)], "more"...))
		if err != nil {
			t.Fatal(err)
		}
		if string(rest) != "more" || !got.Equal(c) {
			t.Fatalf("read back %+v and %q, want %+v", got, rest, c)
		}
		for i := range full {
			if _, _, err := DecodeCell(c.shape, full[:i]); !errors.Is(err, wire.ErrMalformed) {
				t.Errorf("first %d of %d bytes: %v", i, len(full), err)
			}
		}
		if _, _, err := DecodeCell(fullShape(t, 3), full); !errors.Is(err, ErrShape) {
			t.Errorf("bytes of another shape: %v", err)
		}
	}
}

func TestCellRefusesWhatItNeverWrites(t *testing.T) {
	s := codecShape(t)
	c := codecCells(t)[2]
	sums := len(encode(t, c)) - 16*len(c.sums) // where they begin; before it the origin flag, before that the count, 2
	for what, change := range map[string]func(b []byte){
		"version":           func(b []byte) { b[0] = 9 },
		"sums of no units":  func(b []byte) { b[sums-2] = 0 },
		"origin flag":       func(b []byte) { b[sums-1] = 2 },
		"not a number":      func(b []byte) { binary.LittleEndian.PutUint64(b[sums:], math.Float64bits(math.NaN())) },
		"not normalised":    func(b []byte) { binary.LittleEndian.PutUint64(b[sums+8:], math.Float64bits(1)) },
		"infinite":          func(b []byte) { binary.LittleEndian.PutUint64(b[sums:], math.Float64bits(math.Inf(1))) },
		"infinite low part": func(b []byte) { binary.LittleEndian.PutUint64(b[sums+8:], math.Float64bits(math.Inf(1))) },
	} {
		b := bytes.Clone(encode(t, c))
		change(b)
		if _, _, err := DecodeCell(s, b); !errors.Is(err, wire.ErrMalformed) {
			t.Errorf("%s: %v", what, err)
		}
	}
	zeros := NewCell(s)
	zeros.origin = make([]float64, 3)
	many := NewCell(s)
	many.n = maxUnits
	negative := NewCell(s)
	negative.sums[1].Hi = math.Copysign(0, -1)
	for what, c := range map[string]*Cell{"zero origin": zeros, "too many units": many, "negative zero": negative} {
		if _, _, err := DecodeCell(s, encode(t, c)); !errors.Is(err, wire.ErrMalformed) {
			t.Errorf("%s: %v", what, err)
		}
	}
}

func FuzzDecodeCell(f *testing.F) {
	s := codecShape(f)
	for _, c := range codecCells(f) {
		f.Add(encode(f, c))
	}
	f.Fuzz(func(t *testing.T, in []byte) {
		c, rest, err := DecodeCell(s, in)
		if err != nil {
			return
		}
		if got := encode(t, c); !bytes.Equal(got, in[:len(in)-len(rest)]) {
			t.Fatalf("decode then encode changed %x to %x", in, got)
		}
	})
}

func codecHeavies(t testing.TB) []*Heavy {
	var hs []*Heavy
	for _, n := range []int{0, 1, 3, 10} {
		h := mustHeavy(t, 2, 4)
		rng := rand.New(rand.NewPCG(5, uint64(n)))
		for range n {
			h.Add(randomUnit(rng), []float64{rng.NormFloat64(), rng.ExpFloat64()})
		}
		h.Focus([]float64{1, -2}, []float64{0.1, 1})
		hs = append(hs, h)
	}
	return hs
}

func TestHeavySurvivesItsBytes(t *testing.T) {
	for _, h := range codecHeavies(t) {
		full := encode(t, h)
		got, rest, err := DecodeHeavy(2, 4, append(full[:len(full):len(full)], "more"...))
		if err != nil {
			t.Fatal(err)
		}
		if string(rest) != "more" || !got.Equal(h) || got.least != h.least {
			t.Fatalf("read back %+v and %q, want %+v", got, rest, h)
		}
		for i := range full {
			if _, _, err := DecodeHeavy(2, 4, full[:i]); !errors.Is(err, wire.ErrMalformed) {
				t.Errorf("first %d of %d bytes: %v", i, len(full), err)
			}
		}
		for _, other := range [][2]int{{3, 4}, {2, 5}} {
			if _, _, err := DecodeHeavy(other[0], other[1], full); !errors.Is(err, ErrShape) {
				t.Errorf("read as %v: %v", other, err)
			}
		}
		full[0] = 7
		if _, _, err := DecodeHeavy(2, 4, full); !errors.Is(err, wire.ErrMalformed) {
			t.Errorf("version 7: %v", err)
		}
	}
}

func TestHeavyRefusesWhatItNeverWrites(t *testing.T) {
	h := codecHeavies(t)[1] // one unit, then four extremes
	full := encode(t, h)
	const row = 17 + 2*8 // a name with its length, two scores
	first := len(full) - 5*row
	long := append(bytes.Clone(full[:first]), 17)
	long = append(append(long, make([]byte, 17)...), full[first+17:]...)
	nan := bytes.Clone(full)
	binary.LittleEndian.PutUint64(nan[len(nan)-8:], math.Float64bits(math.NaN()))
	for what, b := range map[string][]byte{"long name": long, "not a number": nan} {
		if _, _, err := DecodeHeavy(2, 4, b); !errors.Is(err, wire.ErrMalformed) {
			t.Errorf("%s: %v", what, err)
		}
	}
}

func FuzzDecodeHeavy(f *testing.F) {
	for _, h := range codecHeavies(f) {
		f.Add(encode(f, h))
	}
	f.Fuzz(func(t *testing.T, in []byte) {
		h, rest, err := DecodeHeavy(2, 4, in)
		if err != nil {
			return
		}
		if got := encode(t, h); !bytes.Equal(got, in[:len(in)-len(rest)]) {
			t.Fatalf("decode then encode changed %x to %x", in, got)
		}
		h.Add(Unit{1}, []float64{1, 2})
	})
}
