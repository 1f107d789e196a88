package checkpoint

import (
	"bufio"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"strconv"
	"strings"

	"github.com/klauspost/compress/s2"

	"stillwell/online/wire"
)

const (
	magic    = "SWCHECK\n"
	version  = 1
	headSize = 16
	tailSize = 16
	suffix   = ".checkpoint"
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

func checksum(b []byte) uint32 { return crc32.Checksum(b, castagnoli) }

func fileName(sequence uint64) string { return fmt.Sprintf("%016d%s", sequence, suffix) }

// parseName is the inverse of fileName; ok is false for every other name.
func parseName(name string) (sequence uint64, ok bool) {
	digits, found := strings.CutSuffix(name, suffix)
	sequence, err := strconv.ParseUint(digits, 10, 64)
	return sequence, found && err == nil && sequence > 0 && name == fileName(sequence)
}

// isLeftover recognises the temporary name of a file that was never completed: a
// dot, the name, and digits.
func isLeftover(name string) bool {
	full, digits, found := strings.Cut(name, suffix)
	_, err := strconv.ParseUint(digits, 10, 64)
	_, ok := parseName(strings.TrimPrefix(full, ".") + suffix)
	return found && err == nil && ok && strings.HasPrefix(name, ".")
}

// A fileWriter streams one checkpoint file.
type fileWriter struct {
	w       *bufio.Writer
	file    uint64
	at      int64
	scratch []byte
}

func newFileWriter(to io.Writer, sequence uint64, buffer int) (*fileWriter, error) {
	w := &fileWriter{w: bufio.NewWriterSize(to, buffer), file: sequence}
	head := append(make([]byte, 0, headSize), magic...)
	head = binary.LittleEndian.AppendUint32(head, version)
	head = binary.LittleEndian.AppendUint32(head, checksum(head))
	return w, w.write(head)
}

func (w *fileWriter) write(b []byte) error {
	n, err := w.w.Write(b)
	w.at += int64(n)
	return err
}

// page appends a page and returns its place.
func (w *fileWriter) page(data []byte) (place, error) {
	if n := s2.MaxEncodedLen(len(data)); cap(w.scratch) < n {
		w.scratch = make([]byte, n)
	}
	stored := s2.Encode(w.scratch[:cap(w.scratch)], data)
	if len(stored) >= len(data) {
		stored = data
	}
	return w.stored(stored, place{length: len(data), check: checksum(stored)})
}

// stored appends what page made at another time, and returns its new place.
func (w *fileWriter) stored(b []byte, p place) (place, error) {
	p.file, p.offset, p.stored = w.file, w.at, len(b)
	return p, w.write(b)
}

// finish appends the manifest and the tail.
func (w *fileWriter) finish(m *manifest) error {
	var body wire.Writer
	m.encode(&body)
	tail := binary.LittleEndian.AppendUint64(make([]byte, 0, tailSize), uint64(len(body.B)))
	tail = binary.LittleEndian.AppendUint32(tail, checksum(body.B))
	tail = binary.LittleEndian.AppendUint32(tail, checksum(tail))
	if err := w.write(body.B); err != nil {
		return err
	}
	if err := w.write(tail); err != nil {
		return err
	}
	return w.w.Flush()
}

// A source is a checkpoint file, open for reading.
type source struct {
	file File
	size int64
}

// read fills b from offset; an end of the file within it is damage.
func (s *source) read(b []byte, offset int64) error {
	n, err := s.file.ReadAt(b, offset)
	if n == len(b) {
		return nil
	}
	if errors.Is(err, io.EOF) {
		return fmt.Errorf("%w: ends at byte %d", ErrDamaged, offset+int64(n))
	}
	return err
}

// page reads and checks the stored bytes of a page, into buf if that is large enough.
func (s *source) page(p place, buf []byte) ([]byte, error) {
	if int64(p.stored) > s.size-p.offset {
		return nil, fmt.Errorf("%w: %d bytes at %d lie beyond the end at %d", ErrDamaged, p.stored, p.offset, s.size)
	}
	if cap(buf) < p.stored {
		buf = make([]byte, p.stored)
	}
	buf = buf[:p.stored]
	if err := s.read(buf, p.offset); err != nil {
		return nil, err
	}
	if c := checksum(buf); c != p.check {
		return nil, fmt.Errorf("%w: checksum of %d bytes at %d is %08x, not %08x", ErrDamaged, p.stored, p.offset, c, p.check)
	}
	return buf, nil
}

// expand turns the stored bytes of a page into its own, in memory of their own.
func (p place) expand(stored []byte) ([]byte, error) {
	if p.stored == p.length {
		return append(make([]byte, 0, p.length), stored...), nil
	}
	n, err := s2.DecodedLen(stored)
	if err == nil && n != p.length {
		err = fmt.Errorf("block of %d bytes, not %d", n, p.length)
	}
	if err != nil {
		return nil, fmt.Errorf("%w: %w", ErrDamaged, err)
	}
	b, err := s2.Decode(make([]byte, p.length), stored)
	if err != nil {
		return nil, fmt.Errorf("%w: %w", ErrDamaged, err)
	}
	return b, nil
}

// manifest reads and checks everything in the file but the pages' own checksums.
func (s *source) manifest(sequence uint64) (*manifest, error) {
	if s.size < headSize+tailSize {
		return nil, fmt.Errorf("%w: %d bytes are too few", ErrDamaged, s.size)
	}
	var head [headSize]byte
	var tail [tailSize]byte
	if err := s.read(head[:], 0); err != nil {
		return nil, err
	}
	if string(head[:8]) != magic || binary.LittleEndian.Uint32(head[12:]) != checksum(head[:12]) {
		return nil, fmt.Errorf("%w: does not begin as a checkpoint", ErrDamaged)
	}
	if v := binary.LittleEndian.Uint32(head[8:]); v != version {
		return nil, fmt.Errorf("%w: its format has version %d, this one reads %d", ErrVersion, v, version)
	}
	if err := s.read(tail[:], s.size-tailSize); err != nil {
		return nil, err
	}
	length := binary.LittleEndian.Uint64(tail[:])
	if binary.LittleEndian.Uint32(tail[12:]) != checksum(tail[:12]) || length > uint64(s.size-headSize-tailSize) {
		return nil, fmt.Errorf("%w: does not end as a checkpoint", ErrDamaged)
	}
	body := make([]byte, length) // no longer than the file
	begin := s.size - tailSize - int64(length)
	if err := s.read(body, begin); err != nil {
		return nil, err
	}
	if checksum(body) != binary.LittleEndian.Uint32(tail[8:]) {
		return nil, fmt.Errorf("%w: checksum of the manifest is wrong", ErrDamaged)
	}
	m, err := decodeManifest(body)
	if err != nil {
		return nil, fmt.Errorf("%w: manifest: %w", ErrDamaged, err)
	}
	if m.sequence != sequence {
		return nil, fmt.Errorf("%w: holds checkpoint %d", ErrDamaged, m.sequence)
	}
	return m, m.tiles(begin)
}
