package file

import (
	"io/fs"
	"reflect"
	"slices"
	"testing"
	"time"
)

type infoAt struct {
	fs.FileInfo
	time int64
}

func (i infoAt) ModTime() time.Time { return time.Unix(i.time, 0) }

// Each list is from the oldest to the newest; every two of it compare so, both ways round.
func TestOlder(t *testing.T) {
	for what, list := range map[string][]relative{
		"times kept":         {{info: infoAt{time: 1}, packed: true, tag: []int{3}}, {info: infoAt{time: 2}, packed: true, tag: []int{2}}, {info: infoAt{time: 3}, tag: []int{1}}},
		"counting up":        {{info: infoAt{time: 1}, packed: true, tag: []int{1}}, {info: infoAt{time: 2}, tag: []int{2}}, {info: infoAt{time: 3}, tag: []int{3}}},
		"compressed late":    {{info: infoAt{time: 3}, packed: true, tag: []int{2}}, {info: infoAt{time: 2}, tag: []int{1}}},
		"dates, late":        {{info: infoAt{time: 3}, packed: true, tag: []int{20260301}}, {info: infoAt{time: 2}, tag: []int{20260302}}},
		"names do not tell":  {{info: infoAt{time: 3}, packed: true}, {info: infoAt{time: 2}, tag: []int{1}}},
		"one not compressed": {{info: infoAt{time: 1}, tag: []int{3}}, {info: infoAt{time: 2}, packed: true, tag: []int{2}}, {info: infoAt{time: 3}, tag: []int{1}}},
		"one instant":        {{info: infoAt{}, tag: []int{3}}, {info: infoAt{}, tag: []int{2}}, {info: infoAt{}, tag: []int{1}}},
		"one instant, dates": {{info: infoAt{}, tag: []int{2026, 3, 1}}, {info: infoAt{}, tag: []int{2026, 3, 1, 1}}, {info: infoAt{}, tag: []int{2026, 3, 2}}},
	} {
		for i := range list {
			for k := range list {
				if got, want := older(list[i], list[k]), compareInts(i, k); got != want {
					t.Errorf("%s: %d and %d compare as %d, want %d", what, i, k, got, want)
				}
			}
		}
		shuffled := slices.Clone(list)
		slices.Reverse(shuffled)
		slices.SortStableFunc(shuffled, older)
		if !reflect.DeepEqual(shuffled, list) {
			t.Errorf("%s: sorted to %v", what, shuffled)
		}
	}
}

func compareInts(a, b int) int { return min(1, max(-1, a-b)) }

func TestTagOf(t *testing.T) {
	for name, want := range map[string][]int{
		"quay.jsonl.1":                        {1},
		"quay.jsonl-20260301":                 {20260301},
		"quay-2026-03-01T10:00:00.123Z.jsonl": {2026, 3, 1, 10, 0, 0, 123},
		"quay.2.jsonl":                        {2},
		"quay.jsonl":                          nil,
		"quay2.jsonl":                         nil,
		"quay-errors.jsonl":                   nil,
		"quay.jsonl.1.tmp":                    nil,
		"quay.jsonl.old":                      nil,
		"quay.jsonl.99999999999999999999":     nil,
		"pier.jsonl.1":                        nil,
	} {
		if got := tagOf("quay.jsonl", name); !reflect.DeepEqual(got, want) {
			t.Errorf("%s: %v, want %v", name, got, want)
		}
	}
}
