package prometheus

import (
	"maps"
	"slices"
	"strings"
	"testing"
	"unicode/utf8"

	"pgregory.net/rapid"

	"stillwell/online"
)

func TestSegmentText(t *testing.T) {
	for _, tt := range []struct {
		seg  online.Segment
		want string
	}{
		{nil, ""},
		{online.Segment{}, ""},
		{online.Segment{{Field: "platform", Value: "web"}}, "platform=web"},
		{online.Segment{{Field: "platform", Value: "web"}, {Field: "country", Value: "NO"}}, "platform=web,country=NO"},
		{online.Segment{{Field: "platform", Value: ""}}, "platform="},
		{online.Segment{{Field: "ref", Value: "utm=x,y"}}, `ref=utm=x\,y`},
		{online.Segment{{Field: "path", Value: `C:\`}, {Field: "b", Value: ""}}, `path=C:\\,b=`},
		{online.Segment{{Field: "a=b,c", Value: "d"}}, `a\=b\,c=d`},
		{online.Segment{{Field: "port", Value: "Tromsø \"sør\"\n"}}, "port=Tromsø \"sør\"\n"},
	} {
		if got := string(appendSegment(nil, tt.seg)); got != tt.want {
			t.Errorf("%+v: %q, want %q", tt.seg, got, tt.want)
		}
	}
}

// hostile draws texts that are short, long, broken, or full of what separates.
var hostile = rapid.OneOf(
	rapid.StringOfN(rapid.SampledFrom([]rune{',', '=', '\\', 'a'}), 0, 6, -1),
	rapid.String(),
	rapid.Map(rapid.SliceOfN(rapid.Byte(), 0, 8), func(b []byte) string { return string(b) }),
	rapid.Map(rapid.SliceOfN(rapid.SampledFrom([]byte{0xff, 0xc3, 'a'}), 0, 4), func(b []byte) string { return string(b) }),
	rapid.Map(rapid.IntRange(200, 300), func(n int) string { return strings.Repeat("ø", n/2) + strings.Repeat("x", n%2) }),
)

// Whatever events say, labels are valid and short, and two sets of labels are one key only
// where they are equal.
func TestKeysOfHostileTexts(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		keys := map[string][]string{}
		fields := []string{hostile.Draw(t, "field"), hostile.Draw(t, "field")}
		for range rapid.IntRange(2, 12).Draw(t, "sets") {
			said := []string{hostile.Draw(t, "arm"), hostile.Draw(t, "value"), hostile.Draw(t, "value")}
			key := string(appendKey(nil, online.Segment{{Field: fields[0], Value: said[1]}, {Field: fields[1], Value: said[2]}}, "seat-map", said[0]))
			if was, known := keys[key]; known && !slices.Equal(was, said) {
				t.Fatalf("%q and %q are both %q", was, said, key)
			}
			keys[key] = said
			labels := splitKey([]byte(key))
			if len(labels) != 3 || labels[0] != "seat-map" || labels[1] != label(said[0]) {
				t.Fatalf("labels %q of %q", labels, said)
			}
			for _, l := range labels {
				if !utf8.ValidString(l) || len(l) > maxLabel {
					t.Fatalf("label %q of %q: %d bytes", l, said, len(l))
				}
			}
		}
	})
}

func TestLongLabelIsCutAtACharacter(t *testing.T) {
	whole := strings.Repeat("x", maxLabel)
	if got := label(whole); got != whole {
		t.Errorf("%d bytes became %q", len(whole), got)
	}
	// The mark is three bytes of an ellipsis and 16 of a hash: 237 are left, which is in the
	// midst of the 119th letter of two bytes.
	long := strings.Repeat("ø", 200)
	got := label(long)
	if want := strings.Repeat("ø", 118) + "…"; !strings.HasPrefix(got, want) || len(got) != len(want)+16 {
		t.Errorf("%q became %q", long, got)
	}
	if other := label(long + "x"); other == got {
		t.Errorf("two texts are one label, %q", got)
	}
	if got := label("caf\xe9"); !strings.HasPrefix(got, "caf\uFFFD…") || len(got) != 3+3+3+16 {
		t.Errorf("a broken text became %q", got)
	}
}

// A page with hostile names can be scraped, and its names come back as they were.
func TestPageOfHostileNames(t *testing.T) {
	s := newSink(t, Config{})
	names := []string{"", `"} 1`, "a\nstillwell_estimate 7", `back\slash`, "nul\x00", "caf\xe9", "caf\xe8", strings.Repeat("long", 1000), "{}", "港"}
	var all []online.Reading
	for _, arm := range names {
		for _, v := range names {
			all = append(all, mean(arm, 1, platform(v)))
		}
	}
	emit(s, all...)
	families, err := pedantic(s).Gather()
	if err != nil {
		t.Fatal(err)
	}
	got := map[string]bool{}
	for _, f := range families {
		if f.GetName() != "stillwell_estimate" {
			continue
		}
		for _, m := range f.GetMetric() {
			for _, l := range m.GetLabel() {
				if l.GetName() == "arm" {
					got[l.GetValue()] = true
				}
			}
		}
		if len(f.GetMetric()) != len(all) {
			t.Errorf("%d series of %d readings", len(f.GetMetric()), len(all))
		}
	}
	want := map[string]bool{}
	for _, n := range names {
		want[label(n)] = true
	}
	if !maps.Equal(got, want) {
		t.Errorf("arms %v, want %v", got, want)
	}
	if n := strings.Count(lines(t, s, "estimate"), "\n"); n != len(all) {
		t.Errorf("%d lines of text for %d readings: a name has broken out of its label", n, len(all))
	}
}
