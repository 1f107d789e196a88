package wire

import (
	"bytes"
	"encoding/hex"
	"errors"
	"flag"
	"math"
	"os"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// The bytes are worked out by hand from the layout in the package comment. 300 =
// 0b10_0101100 gives ac 02; 1.5 is 0x3ff8000000000000.
func TestLayout(t *testing.T) {
	var w Writer
	w.U8(0x7f)
	w.Bool(true)
	w.Bool(false)
	w.U64(300)
	w.U64(math.MaxUint64)
	w.I64(-1)
	w.I64(math.MinInt64)
	w.F64(1.5)
	w.Bytes([]byte{9, 8})
	w.String("é")
	w.F64s([]float64{math.Copysign(0, -1)})
	w.F64s(nil)
	want := "7f" + "01" + "00" + "ac02" + "ffffffffffffffffff01" + "01" + "ffffffffffffffffff01" +
		"000000000000f83f" + "020908" + "02c3a9" + "010000000000000080" + "00"
	if got := hex.EncodeToString(w.B); got != want {
		t.Fatalf("encoded\n%s, want\n%s", got, want)
	}
}

// The same cases every time, unless a seed is asked for.
func TestMain(m *testing.M) {
	flag.Parse()
	if f := flag.Lookup("rapid.seed"); f.Value.String() == "0" {
		f.Value.Set("7")
	}
	os.Exit(m.Run())
}

// op is one value of any kind, the same for writing, reading and writing again.
type op struct {
	kind int
	u    uint64
	b    []byte
	f    []float64
}

func genOp(t *rapid.T) op {
	bitsOf := func(u uint64) float64 { return math.Float64frombits(u) } // NaNs with payload too
	return op{
		kind: rapid.IntRange(0, 7).Draw(t, "kind"),
		u:    rapid.Uint64().Draw(t, "u"),
		b:    rapid.SliceOfN(rapid.Byte(), 0, 300).Draw(t, "b"),
		f:    rapid.SliceOfN(rapid.Map(rapid.Uint64(), bitsOf), 0, 20).Draw(t, "f"),
	}
}

func (o op) write(w *Writer) {
	switch o.kind {
	case 0:
		w.U8(uint8(o.u))
	case 1:
		w.Bool(o.u&1 == 1)
	case 2:
		w.U64(o.u)
	case 3:
		w.I64(int64(o.u))
	case 4:
		w.F64(math.Float64frombits(o.u))
	case 5:
		w.Bytes(o.b)
	case 6:
		w.String(string(o.b))
	case 7:
		w.F64s(o.f)
	}
}

func (o op) read(r *Reader) op {
	g := op{kind: o.kind}
	switch o.kind {
	case 0:
		g.u = uint64(r.U8())
	case 1:
		if r.Bool() {
			g.u = 1
		}
	case 2:
		g.u = r.U64()
	case 3:
		g.u = uint64(r.I64())
	case 4:
		g.u = math.Float64bits(r.F64())
	case 5:
		g.b = r.Bytes()
	case 6:
		g.b = []byte(r.String())
	case 7:
		g.f = r.F64s()
	}
	return g
}

func (o op) same(g op) bool {
	switch o.kind {
	case 0:
		return uint8(o.u) == uint8(g.u)
	case 1:
		return o.u&1 == g.u
	case 2, 3, 4:
		return o.u == g.u
	case 5, 6:
		return bytes.Equal(o.b, g.b)
	}
	if len(o.f) != len(g.f) {
		return false
	}
	for i := range o.f {
		if math.Float64bits(o.f[i]) != math.Float64bits(g.f[i]) {
			return false
		}
	}
	return true
}

// What is written is read back bit for bit, and no proper prefix is accepted.
func TestRoundTripAndTruncation(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		ops := rapid.SliceOfN(rapid.Custom(genOp), 1, 12).Draw(t, "ops")
		var w Writer
		for _, o := range ops {
			o.write(&w)
		}
		r := NewReader(w.B)
		for _, o := range ops {
			if g := o.read(r); !o.same(g) {
				t.Fatalf("wrote %+v, read %+v", o, g)
			}
		}
		if err := r.Done(); err != nil {
			t.Fatal(err)
		}
		for i := range w.B {
			r := NewReader(w.B[:i])
			for _, o := range ops {
				o.read(r)
			}
			if r.Done() == nil {
				t.Fatalf("accepted the first %d of %d bytes", i, len(w.B))
			}
		}
	})
}

func TestRefusals(t *testing.T) {
	huge := []byte{0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0x01}
	for _, tt := range []struct {
		name string
		in   []byte
		read func(*Reader)
		want string
	}{
		{"no byte", nil, func(r *Reader) { r.U8() }, "at byte 0 of 0: ends before a byte"},
		{"bool", []byte{2}, func(r *Reader) { r.Bool() }, "2 is neither"},
		{"open varint", []byte{0x80, 0x80}, func(r *Reader) { r.U64() }, "ends within an integer"},
		{"65 bits", append(bytes.Repeat([]byte{0xff}, 9), 2), func(r *Reader) { r.U64() }, "exceeds 64 bits"},
		{"11 bytes", append(bytes.Repeat([]byte{0xff}, 10), 1), func(r *Reader) { r.U64() }, "exceeds 64 bits"},
		{"padded zero", []byte{0x80, 0}, func(r *Reader) { r.U64() }, "more than it needs"},
		{"padded signed", []byte{0x81, 0}, func(r *Reader) { r.I64() }, "more than it needs"},
		{"float", make([]byte, 7), func(r *Reader) { r.F64() }, "8 bytes needed, 7 remain"},
		{"bytes", []byte{3, 1, 2}, func(r *Reader) { r.Bytes() }, "at byte 1 of 3: 3 elements"},
		{"huge bytes", huge, func(r *Reader) { r.Bytes() }, "18446744073709551615 elements"},
		{"huge floats", huge, func(r *Reader) { r.F64s() }, "18446744073709551615 elements of 8"},
		// 2^61 * 8 wraps around to 0 in 64 bits.
		{"wrapping", append([]byte{0x80, 0x80, 0x80, 0x80, 0x80, 0x80, 0x80, 0x80, 0x20}, 1), func(r *Reader) { r.Count(8) }, "2305843009213693952 elements"},
		{"floats one short", append([]byte{2}, make([]byte, 15)...), func(r *Reader) { r.F64s() }, "2 elements of 8"},
		{"left over", []byte{1, 2, 3}, func(r *Reader) { r.U8() }, "at byte 1 of 3: 2 bytes left over"},
		{"caller's own", []byte{1}, func(r *Reader) { r.Fail("version %d", 9) }, "version 9"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			r := NewReader(tt.in)
			tt.read(r)
			err := r.Done()
			if !errors.Is(err, ErrMalformed) || !strings.Contains(err.Error(), tt.want) {
				t.Errorf("error %v, want %q", err, tt.want)
			}
		})
	}
}

// The first fault stays, and everything after it is zero.
func TestFaultSticks(t *testing.T) {
	r := NewReader([]byte{2, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1})
	r.Bool()
	first := r.Err()
	if first == nil {
		t.Fatal("accepted 2 as a bool")
	}
	if r.U8() != 0 || r.U64() != 0 || r.I64() != 0 || r.F64() != 0 || r.Bool() || r.Bytes() != nil ||
		r.String() != "" || r.F64s() != nil || r.Count(1) != 0 || r.Remaining() != 0 {
		t.Error("a value after the fault is not zero")
	}
	r.Fail("later")
	if r.Done() != first {
		t.Errorf("fault replaced: %v, then %v", first, r.Done())
	}
}

// Appending to what Bytes returned must not write into the input behind it.
func TestBytesAreCapped(t *testing.T) {
	in := []byte{1, 7, 8}
	b := NewReader(in).Bytes()
	_ = append(b, 99)
	if in[2] != 8 {
		t.Error("append to a result changed the input")
	}
}

func TestNoAllocations(t *testing.T) {
	w := Writer{B: make([]byte, 0, 256)}
	xs, bs := []float64{1, 2, 3}, []byte("harbour")
	if n := testing.AllocsPerRun(100, func() {
		w.B = w.B[:0]
		w.U64(1 << 40)
		w.I64(-5)
		w.F64(2)
		w.Bytes(bs)
		w.F64s(xs)
		r := NewReader(w.B)
		r.U64()
		r.I64()
		r.F64()
		r.Bytes()
		for range r.Count(8) {
			r.F64()
		}
		if r.Done() != nil {
			t.Error(r.Err())
		}
	}); n != 0 {
		t.Errorf("%g allocations, want none", n)
	}
}

// kinds say what is read: whatever decodes must encode to the same bytes.
func FuzzReader(f *testing.F) {
	var w Writer
	w.U64(300)
	w.I64(-70000)
	w.F64(1.5)
	w.Bytes([]byte("pier"))
	w.F64s([]float64{1, 2})
	w.Bool(true)
	f.Add([]byte{2, 3, 4, 5, 7, 1}, w.B)
	f.Add([]byte{6}, []byte{0x81, 0x00, 1})
	f.Fuzz(func(t *testing.T, kinds, in []byte) {
		r := NewReader(in)
		var again Writer
		for _, k := range kinds {
			o := op{kind: int(k % 8)}
			g := o.read(r)
			if r.Err() != nil {
				return
			}
			g.write(&again)
		}
		if read := in[:len(in)-r.Remaining()]; !bytes.Equal(again.B, read) {
			t.Fatalf("decode then encode changed %x to %x", read, again.B)
		}
	})
}
