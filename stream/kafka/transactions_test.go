package kafka

import (
	"fmt"
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// Producers write transactions that interleave; a plain account of which of them were aborted is the reference.
func TestTransactions(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		type span struct {
			producer, first, last int64
			aborted               bool
		}
		type entry struct {
			offset int64
			value  string
			txn    *span // nil: outside of any
		}
		var log []byte
		var starts []int // where in log each batch begins
		var bases []int64
		var entries []entry
		var spans []*span
		open := map[int64]*span{}
		offset := int64(0)
		for range rapid.IntRange(1, 30).Draw(t, "steps") {
			producer := rapid.Int64Range(1, 3).Draw(t, "producer")
			starts, bases = append(starts, len(log)), append(bases, offset)
			in := open[producer]
			switch {
			case in != nil && rapid.Bool().Draw(t, "ends"):
				in.last, in.aborted = offset, rapid.Bool().Draw(t, "aborts")
				log = marker(log, offset, producer, !in.aborted)
				delete(open, producer)
				offset++
			default:
				tb := testBatch{base: offset, producer: producer, attributes: rapid.SampledFrom(codecs).Draw(t, "codec")}
				if in != nil || rapid.Bool().Draw(t, "transactional") {
					if in == nil {
						in = &span{producer: producer, first: offset, last: math.MaxInt64}
						open[producer] = in
						spans = append(spans, in)
					}
					tb.attributes |= transactionBit
				} else if rapid.Bool().Draw(t, "no id") {
					tb.producer = -1
				}
				for range rapid.IntRange(1, 3).Draw(t, "records") {
					v := fmt.Sprint("v", offset)
					tb.values = append(tb.values, []byte(v))
					entries = append(entries, entry{offset, v, in})
					offset++
				}
				log = tb.append(log)
			}
		}
		// A broker serves up to the first transaction under way, and names the aborted ones that reach into
		// what it serves.
		stable := offset
		for _, in := range open {
			stable = min(stable, in.first)
		}
		next := rapid.Int64Range(0, stable).Draw(t, "next")
		k := max(0, len(bases)-1)
		for k > 0 && bases[k] > next {
			k--
		}
		end := len(log)
		for i, base := range bases {
			if base >= stable {
				end = starts[i]
				break
			}
		}
		var gone []aborted
		for _, s := range spans {
			if s.aborted && s.last >= next && s.first < stable {
				gone = append(gone, aborted{s.producer, s.first})
			}
		}
		var want []string
		for _, e := range entries {
			if e.offset >= next && e.offset < stable && (e.txn == nil || !e.txn.aborted) {
				want = append(want, e.value)
			}
		}
		var got []string
		if starts[k] < end {
			messages, d, err := decode(log[starts[k]:end], next, gone...)
			if err != nil || d.next != max(stable, next) {
				t.Fatalf("next %d, want %d: %v", d.next, stable, err)
			}
			for _, m := range messages {
				got = append(got, m.value)
			}
		}
		if !slices.Equal(got, want) {
			t.Fatalf("from %d to %d, aborted %v:\ngot  %v\nwant %v", next, stable, gone, got, want)
		}
	})
}
