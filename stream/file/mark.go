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
	text  string // of the mark, while it holds for len(bytes)
	of    int
}

// grow takes in content read at a position, if it is what comes next.
func (h *head) grow(pos int64, content []byte) {
	if pos == int64(len(h.bytes)) {
		h.bytes = append(h.bytes, content[:min(len(content), h.limit-len(h.bytes))]...)
	}
}

// mark is the text of the mark at present; m has the device and inode.
func (h *head) mark(m mark) string {
	if h.text == "" || h.of != len(h.bytes) {
		m.n, m.hash = len(h.bytes), hashOf(h.bytes)
		h.text, h.of = m.String(), m.n
	}
	return h.text
}

// begins reports whether content begins with the head.
func (h *head) begins(content []byte) bool { return bytes.HasPrefix(content, h.bytes) }
