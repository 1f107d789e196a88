package config

import (
	"errors"
	"fmt"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// marked takes the marks « and » out of a text and says what they enclosed.
func marked(t *testing.T, text string) (plain string, at place, width int) {
	t.Helper()
	before, rest, ok := strings.Cut(text, "«")
	inside, after, closed := strings.Cut(rest, "»")
	if !ok || !closed {
		t.Fatalf("no marks in %q", text)
	}
	last := before[strings.LastIndex(before, "\n")+1:]
	return before + inside + after, place{1 + strings.Count(before, "\n"), 1 + len([]rune(last))}, len([]rune(inside))
}

const head = "stream: {file: {path: events.jsonl}, time: ts}\nstudies:\n  - name: seat-map\n    units: {key: passenger, follow_up: 1d}\n"

// TestPlaces: a fault stands where the mark is, in every way a text can be written.
func TestPlaces(t *testing.T) {
	estimates := "    estimates: {fares: {of: mean(fare)}}\n"
	for _, tt := range []struct{ name, text, message string }{
		{"key in a block", head + "    «tally»: {fare: {sum: amount}}\n" + estimates, "no key `tally`"},
		{"key in a flow", head + "    tallies: {fare: {sum: amount, «wen»: ms > 3}}\n" + estimates, "no key `wen`"},
		{"quoted key", head + "    tallies: {fare: {sum: amount, «\"wen\"»: ms > 3}}\n" + estimates, "no key `wen`"},
		{"plain in a flow", head + "    tallies: {fare: {sum: amount, when: ms «=» 3}}\n" + estimates, "no such operator"},
		{"plain in a block", head + "    tallies:\n      fare:\n        sum: amount\n        when: type == \"ticket\" «|» ms > 3   # remark\n" + estimates, "no such operator"},
		{"plain over two lines", head + "    tallies:\n      fare:\n        sum: amount\n        when: type == \"ticket\"\n            «|» ms > 3\n" + estimates, "no such operator"},
		{"plain over a blank line", head + "    tallies:\n      fare:\n        sum: amount\n        when: type == \"ticket\"\n\n\n            «|» ms > 3\n" + estimates, "no such operator"},
		{"plain over lines of a flow", head + "    tallies: {fare: {sum: amount,\n      when: type == \"ticket\"\n         «|» ms > 3}}\n" + estimates, "no such operator"},
		{"single quotes", head + "    tallies: {fare: {sum: amount, when: 'a == ''it''''s'' «|» b'}}\n" + estimates, "no such operator"},
		{"single quotes over lines", head + "    tallies: {fare: {sum: amount, when: 'a == 1\n\n      «|» b'}}\n" + estimates, "no such operator"},
		{"double quotes", head + "    tallies: {fare: {sum: amount, when: \"a == \\\"x\\\" «|» b\"}}\n" + estimates, "no such operator"},
		{"escapes", head + "    tallies: {fare: {sum: amount, when: \"a == 'x\\u00e9\\t\\x41\\U0001F6A2' «|» b\"}}\n" + estimates, "no such operator"},
		{"an escaped fault", head + "    tallies: {fare: {sum: amount, when: \"a «\\x7c» b\"}}\n" + estimates, "no such operator"},
		{"double quotes over lines", head + "    tallies: {fare: {sum: amount, when: \"a == 1\n      «|» b\"}}\n" + estimates, "no such operator"},
		{"an escaped line end", head + "    tallies: {fare: {sum: amount, when: \"a == 1 \\\n      «|» b\"}}\n" + estimates, "no such operator"},
		{"literal", head + "    tallies:\n      fare:\n        sum: amount\n        when: |\n          a == 1\n            «|» b\n" + estimates, "no such operator"},
		{"literal with a chomp", head + "    tallies:\n      fare:\n        sum: amount\n        when: |-\n\n          a == 1\n\n          «|» b\n" + estimates, "no such operator"},
		{"folded", head + "    tallies:\n      fare:\n        sum: amount\n        when: >\n          a == 1\n          «|» b\n" + estimates, "no such operator"},
		{"letters beyond ASCII", head + "    tallies: {fare: {sum: amount, when: 'né == \"été 🛳\" «|» b'}}\n" + estimates, "no such operator"},
		{"after letters beyond ASCII", head + "    about: Fähre 🛳\n    tallies: {fähre: {sum: amount}, fare: {sum: amount, «wen»: 1}}\n" + estimates, "no key `wen`"},
		{"over lines", head + "    tallies: {fare: {sum: amount}}\n    estimates:\n      fares:\n        of: mean(fare) + «mean(1 +»\n          2)\n", "mean of a constant"},
		{"at the end", head + "    tallies: {fare: {sum: 'amount +«'»}}\n" + estimates, "ends where"},
		{"in a list", head + "    tallies: {fare: {sum: amount}}\n    estimates: {fares: {of: mean(fare), contrast: difference, adjust: [a, «a»]}}\n", "twice"},
		{"a colon in a list", "stream: {kafka: {brokers: [127.0.0.1:9092, «harbour:x»], topics: [t]}, time: ts}\n" + head[strings.Index(head, "studies"):] + "    tallies: {fare: {sum: amount}}\n" + estimates, "no address"},
	} {
		text, at, width := marked(t, tt.text)
		for _, v := range []struct{ how, text string }{
			{"", text},
			{", Windows line ends", strings.ReplaceAll(text, "\n", "\r\n")},
			{", byte order mark", "\xef\xbb\xbf" + text},
		} {
			_, err := Parse("study.yaml", []byte(v.text))
			var faults Faults
			if !errors.As(err, &faults) {
				t.Errorf("%s%s: no faults: %v", tt.name, v.how, err)
				continue
			}
			found := false
			for _, f := range faults {
				found = found || strings.Contains(f.Message, tt.message) && f.Line == at.line && f.Column == at.column && f.Width == width
			}
			if !found {
				t.Errorf("%s%s: want %q at %d:%d over %d, got\n%v", tt.name, v.how, tt.message, at.line, at.column, width, err)
			}
		}
	}
}

// A written scalar says of each character where it put it.
type writtenScalar struct {
	text  strings.Builder // what goes into the file
	value []rune
	at    []place
	here  place
}

func (w *writtenScalar) write(s string) {
	w.text.WriteString(s)
	for _, r := range s {
		w.here.column++
		if r == '\n' {
			w.here = place{w.here.line + 1, 1}
		}
	}
}

// char writes one character of the value as the file spells it.
func (w *writtenScalar) char(r rune, spelt string) {
	w.value, w.at = append(w.value, r), append(w.at, w.here)
	w.write(spelt)
}

// TestPlacesOfEveryCharacter writes random texts in random styles and asks for the
// place of each character; the writer knows it.
func TestPlacesOfEveryCharacter(t *testing.T) {
	words := rapid.SliceOfN(rapid.SampledFrom([]string{"fare", "a", "é", "🛳", "==", "it's", `"x"`, `\`, "(b)", "&&", "1"}), 1, 8)
	rapid.Check(t, func(t *rapid.T) {
		st := rapid.SampledFrom([]style{plain, single, double, block}).Draw(t, "style")
		w := &writtenScalar{here: place{1, 1}}
		w.write(strings.Repeat("# é\n", rapid.IntRange(0, 3).Draw(t, "remarks")))
		flow := st != block && rapid.Bool().Draw(t, "flow")
		if flow {
			w.write("é: {before: [1, 'é'], text: ")
		} else {
			w.write("before: é\ntext: ")
		}
		list := words.Draw(t, "words")
		if st == plain {
			list = append([]string{"fare"}, list...) // begins with no sign of YAML
		}
		w.write(map[style]string{plain: "", single: "'", double: `"`, block: "|\n    "}[st])
		for i, word := range list {
			if i > 0 {
				w.gap(t, st)
			}
			for _, r := range word {
				w.spell(t, st, r)
			}
		}
		if st == block {
			w.char('\n', "\n")
		}
		w.write(map[style]string{plain: "", single: "'", double: `"`, block: ""}[st])
		w.write(map[bool]string{true: "}\n", false: "\nafter: x\n"}[flow])

		s := newSource("x", []byte(w.text.String()))
		root, faults := parseTree(s, []byte(w.text.String()))
		if len(faults) > 0 {
			t.Fatalf("%q: %v", w.text.String(), faults)
		}
		if flow {
			root = root.entries[0].value
		}
		n := root.find("text")
		if n == nil || n.text != string(w.value) {
			t.Fatalf("%q read as %+v, want %q", w.text.String(), n, string(w.value))
		}
		got := s.places(n)
		var want []place
		for i, r := range w.value {
			for range len(string(r)) {
				want = append(want, w.at[i])
			}
		}
		if len(got) != len(want)+1 || fmt.Sprint(got[:len(want)]) != fmt.Sprint(want) {
			t.Fatalf("%q: places\n%v, want\n%v", w.text.String(), got, want)
		}
	})
}

// gap writes a blank, or a line's end that stands for one (a newline in a literal).
func (w *writtenScalar) gap(t *rapid.T, st style) {
	switch {
	case !rapid.Bool().Draw(t, "fold"):
		w.char(' ', " ")
	case st == block:
		w.char('\n', "\n")
		w.write("    ")
	default:
		w.char(' ', "\n")
		w.write("      ")
	}
}

func (w *writtenScalar) spell(t *rapid.T, st style, r rune) {
	spelt := string(r)
	switch {
	case st == single && r == '\'':
		spelt = "''"
	case st == double && (r == '"' || r == '\\'):
		spelt = `\` + string(r)
	case st == double && rapid.IntRange(0, 3).Draw(t, "escape") == 0:
		spelt = fmt.Sprintf(`\U%08x`, r)
	}
	w.char(r, spelt)
}
