package checkpoint

import (
	"bytes"
	"encoding/binary"
	"maps"
	"slices"
	"testing"

	"stillwell/online/wire"
)

// seal puts head, tail and checksums around pages and a manifest.
func seal(pages, manifest []byte) []byte {
	b := binary.LittleEndian.AppendUint32([]byte(magic), version)
	b = binary.LittleEndian.AppendUint32(b, checksum(b))
	b = append(append(b, pages...), manifest...)
	at := len(b)
	b = binary.LittleEndian.AppendUint64(b, uint64(len(manifest)))
	b = binary.LittleEndian.AppendUint32(b, checksum(manifest))
	return binary.LittleEndian.AppendUint32(b, checksum(b[at:]))
}

func seeds(f *testing.F, add func(pages, manifest []byte)) {
	d := newDisk()
	s := openSmall(f, d)
	if _, err := s.Load(); err != nil {
		f.Fatal(err)
	}
	if _, err := run(s, 0); err != nil {
		f.Fatal(err)
	}
	for _, name := range slices.Sorted(maps.Keys(d.now)) {
		n := d.now[name]
		body := int(binary.LittleEndian.Uint64(n.data[len(n.data)-tailSize:]))
		begin := len(n.data) - tailSize - body
		add(n.data[headSize:begin], n.data[begin:len(n.data)-tailSize])
	}
	add(nil, nil)
}

// What decodes encodes to the same bytes, and every truncation is refused.
func FuzzManifest(f *testing.F) {
	seeds(f, func(_, manifest []byte) { f.Add(manifest) })
	f.Fuzz(func(t *testing.T, in []byte) {
		m, err := decodeManifest(in)
		if err != nil {
			return
		}
		var w wire.Writer
		m.encode(&w)
		if !bytes.Equal(w.B, in) {
			t.Fatalf("decode then encode changed\n%x to\n%x", in, w.B)
		}
		if len(in) > 300 {
			return
		}
		for i := range in {
			if _, err := decodeManifest(in[:i]); err == nil {
				t.Fatalf("accepted the first %d of %d bytes", i, len(in))
			}
		}
	})
}

// A file from anywhere is refused or restored, and a restored one can be gone on
// from. Checksums are made right, to get behind them.
func FuzzLoad(f *testing.F) {
	seeds(f, func(pages, manifest []byte) { f.Add(pages, manifest, true) })
	f.Add([]byte("SWCHECK\n"), []byte{}, false)
	f.Fuzz(func(t *testing.T, pages, manifest []byte, sealed bool) {
		b := pages
		if sealed {
			b = seal(pages, manifest)
			if m, err := decodeManifest(manifest); err == nil {
				for name, p := range m.pages { // give each page its checksum
					if end := p.offset + int64(p.stored); p.file == m.sequence && end <= int64(len(b)) {
						p.check = checksum(b[p.offset:end])
						m.pages[name] = p
					}
				}
				var w wire.Writer
				m.encode(&w)
				b = seal(pages, w.B)
			}
		}
		d := newDisk()
		d.now[fileName(1)] = &inode{b, len(b)}
		s := openSmall(t, d)
		snap, err := s.Load()
		if err != nil {
			return
		}
		if err := s.Commit(snap.Meta, []Page{{"z", nil}}, nil); err != nil {
			t.Fatal(err)
		}
		want := state{}
		for name, data := range snap.Pages {
			want[name] = string(data)
		}
		mustBe(t, d, 2, want.with([]Page{{"z", nil}}, nil))
	})
}
