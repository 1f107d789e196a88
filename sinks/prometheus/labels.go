package prometheus

import (
	"bytes"
	"crypto/sha256"
	"fmt"
	"strings"
	"unicode/utf8"

	"stillwell/online"
)

// maxLabel bounds the value of a label, in bytes. Segments are what events say: without a
// bound, one of a mebibyte would be repeated in every series on the page.
const maxLabel = 256

// between stands between the labels of a key. It occurs in no valid UTF-8.
const between = 0xff

// appendKey writes the values of labels, the segment's last. Equal keys are equal labels.
func appendKey(dst []byte, seg online.Segment, values ...string) []byte {
	for _, v := range values {
		at := len(dst)
		dst = append(tidy(append(dst, v...), at), between)
	}
	return appendSegment(dst, seg)
}

// splitKey is the values of the labels that a key was made of.
func splitKey(key []byte) []string { return strings.Split(string(key), string([]byte{between})) }

// appendSegment writes field=value pairs joined by commas; nothing for everyone.
func appendSegment(dst []byte, seg online.Segment) []byte {
	at := len(dst)
	for i, p := range seg {
		if i > 0 {
			dst = append(dst, ',')
		}
		dst = append(appendEscaped(dst, p.Field, `\,=`), '=')
		dst = appendEscaped(dst, p.Value, `\,`)
	}
	return tidy(dst, at)
}

// appendEscaped writes s with a backslash before each of the special bytes.
func appendEscaped(dst []byte, s, special string) []byte {
	for i := range len(s) {
		if strings.IndexByte(special, s[i]) >= 0 {
			dst = append(dst, '\\')
		}
		dst = append(dst, s[i])
	}
	return dst
}

// tidy makes a label's value of what dst holds from at on: valid UTF-8 of at most maxLabel
// bytes. What has to be changed for that ends in a hash of what it was, so that two values do not
// become one series.
func tidy(dst []byte, at int) []byte {
	v := dst[at:]
	if len(v) <= maxLabel && utf8.Valid(v) {
		return dst
	}
	mark := sha256.Sum256(v)
	end := fmt.Sprintf("…%x", mark[:8])
	v = bytes.ToValidUTF8(v, []byte("\uFFFD"))
	cut := min(len(v), maxLabel-len(end))
	for cut < len(v) && cut > 0 && !utf8.RuneStart(v[cut]) {
		cut--
	}
	return append(append(dst[:at], v[:cut]...), end...)
}

// label is s as the value of a label.
func label(s string) string {
	if len(s) <= maxLabel && utf8.ValidString(s) {
		return s
	}
	return string(tidy([]byte(s), 0))
}
