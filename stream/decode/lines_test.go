package decode

import (
	"bytes"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

func TestSplitLines(t *testing.T) {
	type line struct {
		text string
		at   int
	}
	const block = "\n{}\r\n  \t\r\n{ }\r\r\n\r\n x\nlast\r"
	want := []line{{"{}", 1}, {"{ }\r", 10}, {" x", 18}}
	for _, final := range []bool{false, true} {
		taken := len(block) - len("last\r")
		if final {
			want = append(want, line{"last", taken})
			taken = len(block)
		}
		lines := SplitLines([]byte(block), final)
		var got []line
		for l, at, ok := lines.Next(); ok; l, at, ok = lines.Next() {
			got = append(got, line{string(l), at})
		}
		if len(got) != len(want) {
			t.Fatalf("final %v: got %v, want %v", final, got, want)
		}
		for i := range want {
			if got[i] != want[i] {
				t.Errorf("final %v, line %d: got %v, want %v", final, i, got[i], want[i])
			}
		}
		if lines.Taken() != taken {
			t.Errorf("final %v: took %d, want %d", final, lines.Taken(), taken)
		}
	}
}

// However a stream is cut into blocks, its lines and their places are the same.
func TestSplitLinesInAnyBlocks(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		stream := []byte(rapid.StringMatching(`([a ]{0,3}\r?\n){0,20}[a ]{0,3}`).Draw(t, "stream"))
		var want []string
		at := 0
		for l := range strings.SplitSeq(string(stream), "\n") {
			if strings.Trim(l, " \r") != "" {
				want = append(want, strings.TrimSuffix(l, "\r"))
			}
		}
		i := 0
		var rest []byte
		for at < len(stream) || len(rest) > 0 {
			n := rapid.IntRange(min(1, len(stream)-at), len(stream)-at).Draw(t, "block")
			block := append(bytes.Clone(rest), stream[at:at+n]...)
			base := at - len(rest)
			at += n
			lines := SplitLines(block, at == len(stream))
			for l, offset, ok := lines.Next(); ok; l, offset, ok = lines.Next() {
				if i >= len(want) || string(l) != want[i] || !bytes.HasPrefix(stream[base+offset:], l) {
					t.Fatalf("line %d at %d: got %q, want %q", i, base+offset, l, want)
				}
				i++
			}
			rest = block[lines.Taken():]
		}
		if i != len(want) {
			t.Fatalf("got %d lines, want %d", i, len(want))
		}
	})
}
