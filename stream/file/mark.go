package file

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
)

// headSize is how much of a file, behind the header if it has one, tells it from others.
const headSize = 1 << 10

// A mark tells one file from another. As text it is
//
//	1:device:inode:n:hash
//
// where 1 is the version of the format, the numbers are decimal, and hash is the
// first 16 bytes, in hexadecimal, of the SHA-256 of the first n bytes of content.
type mark struct {
	device, inode uint64
	n             int
	hash          [16]byte
}

func (m mark) String() string {
	return fmt.Sprintf("1:%d:%d:%d:%x", m.device, m.inode, m.n, m.hash)
}

func parseMark(text string) (mark, error) {
	var m mark
	var hash string
	_, err := fmt.Sscanf(text, "1:%d:%d:%d:%s", &m.device, &m.inode, &m.n, &hash)
	if err == nil {
		var b []byte
		if b, err = hex.DecodeString(hash); err == nil {
			copy(m.hash[:], b)
		}
	}
	if err != nil || m.n < 0 || m.String() != text {
		return mark{}, fmt.Errorf("mark %q of a position is not one of a file: the state comes from another kind of source or another version, begin with a new one", text)
	}
	return m, nil
}

func hashOf(head []byte) (h [16]byte) {
	sum := sha256.Sum256(head)
	copy(h[:], sum[:])
	return h
}

// matches reports whether content that starts with head is that of the marked file.
func (m mark) matches(head []byte) bool {
	return m.n <= len(head) && hashOf(head[:m.n]) == m.hash
}

// A head is the start of a file's content, as far as it is known and of use.
type head struct {
	bytes []byte
	limit int    // no more bytes than this
	text  string // the mark by so many bytes
	of    int
}

// grow takes in content read at a position, if it is what comes next.
func (h *head) grow(pos int64, content []byte) {
	if pos == int64(len(h.bytes)) {
		h.bytes = append(h.bytes, content[:min(len(content), h.limit-len(h.bytes))]...)
	}
}

// mark is the mark of a file with the device and inode of id, by n bytes of the head.
func (h *head) mark(id mark, n int) mark {
	id.n, id.hash = n, hashOf(h.bytes[:n])
	return id
}

// fullMark is the text of the mark by the whole head; it is made once for each length.
func (h *head) fullMark(id mark) string {
	if n := len(h.bytes); h.text == "" || h.of != n {
		h.text, h.of = h.mark(id, n).String(), n
	}
	return h.text
}

// begins reports whether content begins with the head.
func (h *head) begins(content []byte) bool { return bytes.HasPrefix(content, h.bytes) }
