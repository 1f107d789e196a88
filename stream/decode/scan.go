package decode

import (
	"encoding/binary"
	"math/bits"
	"unicode/utf16"
	"unicode/utf8"
)

// Eight bytes are looked at as one word. The tests below set the top bit of a
// byte that fits; a borrow may set some above the first one as well, so only the
// lowest set bit, the first byte in the text, means anything.
const (
	each    = 0x0101010101010101 // times b: the byte b in all eight places
	topBits = 0x80 * each
)

func load8(s []byte, p int) uint64 { return binary.LittleEndian.Uint64(s[p : p+8]) }

// peek returns the byte at p, and 0, which is legal nowhere, past the end.
func peek(s []byte, p int) byte {
	if p < len(s) {
		return s[p]
	}
	return 0
}

const spaceSet = 1<<' ' | 1<<'\t' | 1<<'\n' | 1<<'\r' // JSON's white space

// skipSpace returns the first position from p on that is not white space.
func skipSpace(s []byte, p int) int {
	for p < len(s) && s[p] <= ' ' && uint64(spaceSet)>>s[p]&1 != 0 {
		p++
	}
	return p
}

// scanPlain returns the first position from p on where a JSON string needs
// attention: a quote, a backslash, a control character or a byte beyond ASCII;
// or the length of s.
func scanPlain(s []byte, p int) int {
	for p+8 <= len(s) {
		w := load8(s, p)
		t := w ^ 2*each // puts the quote next to the control characters
		b := w ^ '\\'*each
		if m := ((t-0x21*each)&^t | (b-each)&^b | w) & topBits; m != 0 {
			return p + bits.TrailingZeros64(m)>>3
		}
		p += 8
	}
	for p < len(s) {
		if c := s[p]; c < ' ' || c == '"' || c == '\\' || c >= utf8.RuneSelf {
			break
		}
		p++
	}
	return p
}

const notUTF8 = "the text is not valid UTF-8"

// scanText finds the closing quote of a JSON string, from p somewhere inside it,
// and checks every character on the way. If why is not empty, end is the place of
// a fault. escaped says that the text needs unescape.
func scanText(s []byte, p int) (end int, escaped bool, kind FaultKind, why string) {
	for {
		p = scanPlain(s, p)
		switch c := peek(s, p); {
		case c == '"':
			return p, escaped, 0, ""
		case c == '\\':
			escaped = true
			n, kind, why := scanEscape(s[p:])
			if why != "" {
				return p, escaped, kind, why
			}
			p += n
		case c >= utf8.RuneSelf:
			r, n := utf8.DecodeRune(s[p:])
			if r == utf8.RuneError && n == 1 {
				return p, escaped, UTF8, notUTF8
			}
			p += n
		case p == len(s):
			return p, escaped, Syntax, "the line ends inside a string"
		default:
			return p, escaped, Syntax, "a control character in a string; write it as an escape"
		}
	}
}

// scanEscape checks the escape at the start of s and returns its length. A
// surrogate must be half of a pair: alone it stands for no character.
func scanEscape(s []byte) (n int, kind FaultKind, why string) {
	switch peek(s, 1) {
	case '"', '\\', '/', 'b', 'f', 'n', 'r', 't':
		return 2, 0, ""
	case 'u':
		r := hex4(s)
		switch {
		case r < 0:
			return 0, Syntax, `\u must be followed by four hexadecimal digits`
		case !utf16.IsSurrogate(r):
			return 6, 0, ""
		case utf16.DecodeRune(r, hex4(s[6:])) == utf8.RuneError:
			return 0, UTF8, "a surrogate escape without its other half"
		}
		return 12, 0, ""
	}
	return 0, Syntax, "an unknown escape in a string"
}

// hex4 reads the escape \uXXXX at the start of s, or returns -1.
func hex4(s []byte) rune {
	if len(s) < 6 || s[0] != '\\' || s[1] != 'u' {
		return -1
	}
	var r rune
	for _, c := range s[2:6] {
		switch {
		case '0' <= c && c <= '9':
			c -= '0'
		case 'a' <= c|0x20 && c|0x20 <= 'f':
			c = (c | 0x20) - 'a' + 10
		default:
			return -1
		}
		r = r<<4 | rune(c)
	}
	return r
}

// unescape appends to dst the characters of a string that scanText has passed.
func unescape(dst, s []byte) []byte {
	for i := 0; i < len(s); {
		if s[i] != '\\' {
			dst = append(dst, s[i])
			i++
			continue
		}
		c := s[i+1]
		switch c {
		case 'b':
			c = '\b'
		case 'f':
			c = '\f'
		case 'n':
			c = '\n'
		case 'r':
			c = '\r'
		case 't':
			c = '\t'
		case 'u':
			r := hex4(s[i:])
			i += 6
			if utf16.IsSurrogate(r) {
				r = utf16.DecodeRune(r, hex4(s[i:]))
				i += 6
			}
			dst = utf8.AppendRune(dst, r)
			continue
		}
		dst = append(dst, c)
		i += 2
	}
	return dst
}
