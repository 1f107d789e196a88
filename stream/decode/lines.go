package decode

import "bytes"

// Lines walks over the lines of a block; SplitLines makes one.
type Lines struct {
	block []byte
	next  int
	final bool
}

// SplitLines cuts a block into lines. Lines end in '\n'; one '\r' before it is
// dropped too. What follows the last '\n' is left alone, for more of it may come,
// unless final says that nothing will: then it is a line as well.
func SplitLines(block []byte, final bool) Lines {
	return Lines{block: block, final: final}
}

// Next returns the next line that is more than white space, without its ending,
// and where in the block it starts. ok is false when no such line is left.
func (l *Lines) Next() (line []byte, offset int, ok bool) {
	for l.next < len(l.block) {
		offset = l.next
		line = l.block[offset:]
		if n := bytes.IndexByte(line, '\n'); n >= 0 {
			line = line[:n:n]
			l.next += n + 1
		} else if l.final {
			l.next = len(l.block)
		} else {
			break
		}
		if n := len(line); n > 0 && line[n-1] == '\r' {
			line = line[:n-1]
		}
		if skipSpace(line, 0) < len(line) {
			return line, offset, true
		}
	}
	return nil, 0, false
}

// Taken is the number of bytes of the block that Next has gone past: once Next
// has returned false, what remains after them is an incomplete line.
func (l *Lines) Taken() int { return l.next }
