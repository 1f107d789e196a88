package config

import (
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"
)

// text reads a scalar; ok is false, with a fault found, where there is none.
func (c *checker) text(n *node, what string) (string, bool) {
	switch {
	case n == nil:
		return "", false
	case n.kind == broken:
		return "", false
	case n.kind != scalar:
		c.fault(n, "%s is one value, not a list or a mapping", what)
		return "", false
	case strings.TrimSpace(n.text) == "":
		c.fault(n, "%s is empty", what)
		return "", false
	}
	return n.text, true
}

// list reads the entries of a list, which is not empty and has nothing twice.
func (c *checker) list(n *node, what string, read func(item *node, what string) (string, bool)) (out []string) {
	if n == nil {
		return nil
	}
	if n.kind != list || len(n.items) == 0 {
		c.fault(n, "%s is a list with at least one entry, as in [a, b]", what)
		return nil
	}
	for _, item := range n.items {
		text, ok := read(item, "an entry of "+what)
		if ok && slices.Contains(out, text) {
			c.fault(item, "`%s` stands twice in %s", text, what)
		} else if ok {
			out = append(out, text)
		}
	}
	return out
}

// choice reads one of a few words, and is def where there is none.
func (c *checker) choice(n *node, what, def string, words ...string) string {
	text, ok := c.text(n, what)
	if !ok {
		return def
	}
	if slices.Contains(words, text) {
		return text
	}
	c.fault(n, "`%s` is no value of %s", text, what).near(text, words)
	return def
}

func (c *checker) flag(n *node, what string) bool {
	return c.choice(n, what, "false", "true", "false") == "true"
}

// number reads a finite number between bounds, which a fault words as want.
func (c *checker) number(n *node, what, want string, within func(float64) bool) (float64, bool) {
	text, ok := c.text(n, what)
	if !ok {
		return 0, false
	}
	x, err := strconv.ParseFloat(strings.TrimSpace(text), 64)
	if err != nil || math.IsInf(x, 0) || !within(x) {
		c.fault(n, "`%s` is no value of %s", text, what).allow(want)
		return 0, false
	}
	return x, true
}

// count reads a whole number of at least 1; def stands where there is none.
func (c *checker) count(n *node, what string, def int) int {
	x, ok := c.number(n, what, "a whole number from 1 to 1000000000", func(x float64) bool {
		return x >= 1 && x <= 1e9 && x == math.Trunc(x)
	})
	if !ok {
		return def
	}
	return int(x)
}

// day is what `d` means in a duration.
const day = 24 * time.Hour

var days = regexp.MustCompile(`(\d+\.?\d*|\.\d+)d`)

// ParseDuration reads a Go duration in which days may stand too: 36h, 1d12h, 28d.
func ParseDuration(text string) (time.Duration, error) {
	hours := days.ReplaceAllStringFunc(text, func(d string) string {
		n, err := strconv.ParseFloat(strings.TrimSuffix(d, "d"), 64)
		if err != nil {
			return d
		}
		return strconv.FormatFloat(24*n, 'f', -1, 64) + "h"
	})
	return time.ParseDuration(hours)
}

// moment is the least duration above 0.
const moment = time.Nanosecond

const durationsAre = "a number with its unit (ms, s, m, h, d), as in 90s, 24h, 28d"

// duration reads a duration of at least least; def stands where there is none or it is wrong.
func (c *checker) duration(n *node, what string, least, def time.Duration) time.Duration {
	text, ok := c.text(n, what)
	if !ok {
		return def
	}
	d, err := ParseDuration(text)
	switch {
	case err != nil:
		c.fault(n, "`%s` is no duration", text).allow(durationsAre)
	case d < least && least == moment:
		c.fault(n, "%s is %s; it is more than 0s", what, text)
	case d < least:
		c.fault(n, "%s is %s; it is at least %s", what, text, FormatDuration(least))
	default:
		return d
	}
	return def
}

// FormatDuration writes a duration as a user would: 28d, 24h, 1m30s.
func FormatDuration(d time.Duration) string {
	if d >= 2*day && d%day == 0 {
		return strconv.FormatInt(int64(d/day), 10) + "d"
	}
	text := d.String()
	if strings.HasSuffix(text, "m0s") {
		text = strings.TrimSuffix(text, "0s")
	}
	if strings.HasSuffix(text, "h0m") {
		text = strings.TrimSuffix(text, "0m")
	}
	return text
}

var sizes = regexp.MustCompile(`^([0-9]+)(B|KiB|MiB|GiB)?$`)

// size reads a number of bytes between bounds; def stands where there is none.
func (c *checker) size(n *node, what string, least, most, def int64) int64 {
	text, ok := c.text(n, what)
	if !ok {
		return def
	}
	unit := map[string]int64{"": 1, "B": 1, "KiB": 1 << 10, "MiB": 1 << 20, "GiB": 1 << 30}
	parts := sizes.FindStringSubmatch(text)
	if parts == nil {
		c.fault(n, "`%s` is no size", text).allow("a whole number with its unit (B, KiB, MiB, GiB), as in 64KiB, 1MiB")
		return def
	}
	number, err := strconv.ParseInt(parts[1], 10, 64)
	if err != nil || number > most/unit[parts[2]] || number*unit[parts[2]] < least {
		c.fault(n, "%s is %s; it is between %s and %s", what, text, formatSize(least), formatSize(most))
		return def
	}
	return number * unit[parts[2]]
}

func formatSize(n int64) string {
	for _, unit := range []struct {
		name string
		size int64
	}{{"GiB", 1 << 30}, {"MiB", 1 << 20}, {"KiB", 1 << 10}} {
		if n >= unit.size && n%unit.size == 0 {
			return strconv.FormatInt(n/unit.size, 10) + unit.name
		}
	}
	return strconv.FormatInt(n, 10) + "B"
}

// instant reads a time, as Unix nanoseconds.
func (c *checker) instant(n *node, what string, def int64) int64 {
	text, ok := c.text(n, what)
	if !ok {
		return def
	}
	t, err := time.Parse(time.RFC3339Nano, text)
	if err != nil || t.Year() < 1700 || t.Year() > 2250 {
		c.fault(n, "`%s` is no time for %s", text, what).allow("RFC 3339, as in 2026-03-01T00:00:00Z")
		return def
	}
	return t.UnixNano()
}

// name checks what a fault, a label or a file name will show.
func (c *checker) name(n *node, what string, alphabet *regexp.Regexp, letters string) bool {
	text, ok := c.text(n, "the name of "+what)
	if !ok {
		return false
	}
	if !alphabet.MatchString(text) || len(text) > 100 {
		c.fault(n, "`%s` cannot be the name of %s", text, what).allow(letters)
		return false
	}
	return true
}

var (
	plainName  = regexp.MustCompile(`^[A-Za-z0-9][A-Za-z0-9_.-]*$`)
	identifier = regexp.MustCompile(`^[A-Za-z_][A-Za-z0-9_]*$`)
)

const (
	plainLetters      = "letters, digits, `-`, `_` and `.`, a letter or digit first, at most 100"
	identifierLetters = "letters, digits and `_`, no digit first, at most 100"
)

// field checks the dotted path of an event field.
func (c *checker) field(n *node, what string) (string, bool) {
	text, ok := c.text(n, what)
	if !ok {
		return "", false
	}
	for part := range strings.SplitSeq(text, ".") {
		if part == "" || strings.TrimSpace(part) != part {
			c.fault(n, "`%s` is no field of an event", text).allow("a name, or names joined by dots for a nested field, as in user.id")
			return "", false
		}
	}
	return text, true
}
