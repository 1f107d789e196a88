package checkpoint

import (
	"bytes"
	"errors"
	"strings"
	"testing"

	"stillwell/online/wire"
)

// The bytes are written out from the layout in the package comment.
func TestManifestLayout(t *testing.T) {
	m := &manifest{
		sequence: 300, fallback: 7, candidate: 0, recent: []uint64{298, 299}, written: 5, meta: []byte("at"),
		pages: map[string]place{
			"pier/2": {file: 300, offset: 16, stored: 3, length: 3, check: 9},
			"pier/1": {file: 290, offset: 20, stored: 2, length: 130, check: 1 << 31},
		},
	}
	var w wire.Writer
	m.encode(&w)
	want := "\xac\x02" + "\x07" + "\x00" + "\x02\xaa\x02\xab\x02" + "\x05" + "\x02at" +
		"\x02\xa2\x02\x0a" + "\x02" +
		"\x00\x06pier/1" + "\x00\x14\x02\x80\x01\x80\x80\x80\x80\x08" +
		"\x05\x012" + "\x01\x10\x03\x00\x09"
	if string(w.B) != want {
		t.Errorf("encoded\n%x, want\n%x", w.B, want)
	}
	if _, err := decodeManifest(w.B); err != nil {
		t.Error(err)
	}
}

func TestManifestRefusals(t *testing.T) {
	const (
		head  = "\x09\x00\x00\x00\x00\x00" // checkpoint 9, nothing kept, no meta
		files = "\x02\x02\x07"             // 2 and 9
		ok    = "\x00\x01a\x00\x10\x01\x00\x05"
		okB   = "\x00\x01b\x01\x10\x01\x00\x05"
		huge  = "\xff\xff\xff\xff\xff\xff\xff\xff\xff\x01"
	)
	if _, err := decodeManifest([]byte(head + files + "\x02" + ok + okB)); err != nil {
		t.Fatal(err)
	}
	long := strings.Repeat("n", 100)
	for _, tt := range []struct{ name, in, want string }{
		{"no sequence", "\x00\x00\x00\x00\x00\x00" + "\x00\x00", "no sequence"},
		{"falls back on itself", "\x09\x09\x00\x00\x00\x00" + "\x00\x00", "not older"},
		{"candidate to come", "\x09\x00\x0a\x00\x00\x00" + "\x00\x00", "not older"},
		{"recent itself", "\x09\x00\x00\x01\x09\x00\x00" + "\x00\x00", "recent checkpoint 9"},
		{"recent twice", "\x09\x00\x00\x02\x08\x08\x00\x00" + "\x00\x00", "recent checkpoint 8"},
		{"many recent", "\x09\x00\x00" + huge + "\x00\x00\x00\x00", "18446744073709551615 elements"},
		{"file twice", head + "\x02\x02\x00" + "\x02" + ok + okB, "file list"},
		{"file to come", head + "\x02\x02\x08" + "\x02" + ok + okB, "file list"},
		{"file that wraps", head + "\x02\x02" + huge + "\x02" + ok + okB, "file list"},
		{"many files", head + huge + "\x00", "18446744073709551615 elements"},
		{"file in vain", head + files + "\x01" + ok, "no page lies in file 9"},
		{"many pages", head + files + huge + ok + okB, "18446744073709551615 elements"},
		{"page without name", head + files + "\x02" + "\x00\x00\x00\x10\x01\x00\x05" + okB, "out of order"},
		{"page twice", head + files + "\x02" + ok + "\x01\x00\x01\x10\x01\x00\x05", "out of order"},
		{"pages in another order", head + files + "\x02" + okB + ok, "out of order"},
		{"name that shares more than it says", head + files + "\x02" + ok + "\x00\x02ab\x01\x10\x01\x00\x05", "out of order"},
		{"name that shares too much", head + files + "\x02" + ok + "\x02\x01b\x01\x10\x01\x00\x05", "name of 2"},
		{"name that is too long", head + files + "\x01" + "\x00\x81\x08" + strings.Repeat("n", MaxName+1) + "\x00\x10\x01\x00\x05", "1025 bytes"},
		{"names that grow", head + files + "\x0c" + grow(long, 12), "name of 1009"},
		{"page in no file", head + files + "\x02" + ok + "\x00\x01b\x02\x10\x01\x00\x05", "file 2 of 2"},
		{"page in the head", head + files + "\x02" + ok + "\x00\x01b\x01\x0f\x01\x00\x05", "cannot be"},
		{"page beyond all files", head + files + "\x02" + ok + "\x00\x01b\x01" + huge + "\x01\x00\x05", "cannot be"},
		{"page too large", head + files + "\x02" + ok + "\x00\x01b\x01\x10\x81\x80\x80\x20\x00\x05", "cannot be"},
		{"page that expands too far", head + files + "\x02" + ok + "\x00\x01b\x01\x10\x01\x80\x80\x80\x20\x05", "cannot be"},
		{"checksum of 33 bits", head + files + "\x02" + ok + "\x00\x01b\x01\x10\x01\x00\x80\x80\x80\x80\x10", "32 bits"},
		{"more to come", head + files + "\x02" + ok + okB + "\x00", "left over"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			_, err := decodeManifest([]byte(tt.in))
			if !errors.Is(err, wire.ErrMalformed) || !strings.Contains(err.Error(), tt.want) {
				t.Errorf("error %v, want %q", err, tt.want)
			}
		})
	}
}

// grow makes n pages, each with a name that is longer than the one before by that much.
func grow(by string, n int) string {
	var w wire.Writer
	for i := range n {
		w.U64(uint64(max(0, i*(len(by)+1)-1)))
		if i > 0 {
			w.String("o" + by)
		} else {
			w.String(by)
		}
		w.B = append(w.B, "\x00\x10\x01\x00\x05"...)
	}
	return string(w.B)
}

// A byte between head and manifest that belongs to no page is under no checksum.
func TestTiles(t *testing.T) {
	m := &manifest{sequence: 1, pages: map[string]place{}}
	pages := []byte("harbour, pier")
	for name, at := range map[string][2]int{"a": {0, 8}, "b": {8, 13}, "empty": {8, 8}} {
		b := pages[at[0]:at[1]]
		m.pages[name] = place{1, headSize + int64(at[0]), len(b), len(b), checksum(b)}
	}
	try := func(pages []byte) error {
		var w wire.Writer
		m.encode(&w)
		b := seal(pages, w.B)
		_, err := (&source{memFile{bytes.NewReader(b)}, int64(len(b))}).manifest(1)
		return err
	}
	if err := try(pages); err != nil {
		t.Fatal(err)
	}
	if err := try([]byte("harbour, pier!")); !errors.Is(err, ErrDamaged) {
		t.Errorf("a byte after the last page: %v", err)
	}
	m.pages["b"] = place{1, headSize + 9, 4, 4, 0}
	if err := try(pages); !errors.Is(err, ErrDamaged) {
		t.Errorf("a byte between two pages: %v", err)
	}
}
