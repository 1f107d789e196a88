package prometheus

import (
	"fmt"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// A table against a plain list of what came: the first to come stay, and those that must.
func TestTableAgainstAList(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		max := rapid.IntRange(1, 5).Draw(t, "max")
		tab := newTable(max, -1)
		var kept, out []string
		said := map[string]int{}
		for i := range rapid.IntRange(0, 40).Draw(t, "calls") {
			key := fmt.Sprintf("key-%d", rapid.IntRange(0, 9).Draw(t, "key"))
			must := rapid.IntRange(0, 4).Draw(t, "must") == 0
			was := slices.Contains(kept, key)
			if !was && (must || !slices.Contains(out, key) && len(kept) < max) {
				kept = append(kept, key)
				out = slices.DeleteFunc(out, func(k string) bool { return k == key })
			} else if !was && !slices.Contains(out, key) {
				out = append(out, key)
			}
			v := tab.at([]byte(key), must)
			if (v != nil) != slices.Contains(kept, key) {
				t.Fatalf("%s has a place: %v, want the other", key, v != nil)
			}
			if v == nil {
				continue
			}
			if last, ok := said[key]; ok && *v != last || !ok && *v != -1 {
				t.Fatalf("%s holds %d, want %d (known: %v)", key, *v, last, ok)
			}
			*v, said[key] = i, i
		}
		var got []string
		for _, r := range tab.rows {
			got = append(got, r.labels...)
		}
		if !slices.Equal(got, kept) || tab.dropped != len(out) {
			t.Fatalf("kept %v and dropped %d, want %v and %v", got, tab.dropped, kept, out)
		}
	})
}
