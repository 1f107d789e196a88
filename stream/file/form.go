package file

import (
	"bytes"
	"errors"
	"io"

	"github.com/klauspost/compress/gzip"
	"github.com/klauspost/compress/zstd"
)

// A form is how content is packed.
type form string

const (
	plain    form = "plain"
	gzipForm form = "gzip"
	zstdForm form = "zstd"
)

var (
	magics = []struct {
		form  form
		bytes []byte
		mask  byte // of the first byte
	}{
		{gzipForm, []byte{0x1f, 0x8b, 0x08}, 0xff},       // RFC 1952, section 2.3.1
		{zstdForm, []byte{0x28, 0xb5, 0x2f, 0xfd}, 0xff}, // RFC 8878, section 3.1.1
		{zstdForm, []byte{0x50, 0x2a, 0x4d, 0x18}, 0xf0}, // RFC 8878, section 3.1.2, skippable frame
	}
	byteOrderMark = []byte("\ufeff")
)

const magicSize = 4

// sniff tells the form by the first bytes. sure is false if more of them could
// tell otherwise.
func sniff(b []byte) (f form, sure bool) {
	if len(b) == 0 {
		return plain, false
	}
	for _, m := range magics {
		if n := min(len(b), len(m.bytes)); b[0]&m.mask == m.bytes[0] && bytes.Equal(b[1:n], m.bytes[1:n]) {
			if n < len(m.bytes) {
				return plain, false
			}
			return m.form, true
		}
	}
	return plain, true
}

// maxWindow bounds what a zstd frame may make us keep; it is what the format's
// reference program accepts unasked.
const maxWindow = 128 << 20

// unpack returns the content of raw, decompressed by goroutines of its own that
// have ended when stop returns. With eager, content is passed on as it comes.
func unpack(f form, raw io.Reader, eager bool) (content io.Reader, stop func()) {
	switch f {
	case gzipForm:
		z, err := gzip.NewReader(raw)
		if err != nil {
			return broken{err}, func() {}
		}
		a := readAhead(z, eager)
		return a, a.stop
	case zstdForm:
		// One goroutine decodes whatever the number of cores: the others have work too.
		z, err := zstd.NewReader(raw, zstd.WithDecoderMaxWindow(maxWindow), zstd.WithDecoderConcurrency(1))
		if err != nil {
			return broken{err}, func() {}
		}
		a := readAhead(z, eager)
		return a, func() { a.stop(); z.Close() }
	}
	return raw, func() {}
}

// broken is content that cannot be had.
type broken struct{ err error }

func (b broken) Read([]byte) (int, error) {
	if errors.Is(b.err, io.EOF) {
		return 0, io.ErrUnexpectedEOF // a header cut short
	}
	return 0, b.err
}
