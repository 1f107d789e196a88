package decode

import (
	"math"
	"math/bits"

	"stillwell/online/expr"
)

// A TimeSpec says how times are written.
type TimeSpec uint8

const (
	RFC3339     TimeSpec = iota
	UnixSeconds          // numbers, since the start of 1970 in UTC
	UnixMillis
	UnixMicros
	UnixNanos
)

// UnixTime is the spec of numbers that count s, ms, us or ns.
func UnixTime(unit string) (spec TimeSpec, ok bool) {
	switch unit {
	case "s":
		return UnixSeconds, true
	case "ms":
		return UnixMillis, true
	case "us":
		return UnixMicros, true
	case "ns":
		return UnixNanos, true
	}
	return 0, false
}

// Faults of times are shared and must not be changed. They name no byte, since
// the place of the field in its line is no longer known.
var (
	errNoTime   = &Fault{BadTime, -1, "the event has no time"}
	errTimeText = &Fault{BadTime, -1, "the time is not a string, want RFC 3339 as in 2026-03-03T06:21:38.098Z"}
	errTimeForm = &Fault{BadTime, -1, "the time is not RFC 3339, want for example 2026-03-03T06:21:38.098Z"}
	errTimeZone = &Fault{BadTime, -1, "the time does not end in Z or an offset such as +01:00"}
	errTimeDate = &Fault{BadTime, -1, "no such date or time of day"}
	errTimeLeap = &Fault{BadTime, -1, "a second 60 other than at 23:59 UTC"}
	errTimeUnix = &Fault{BadTime, -1, "the time is not a number, want one of Unix time"}
	errTimeSpan = &Fault{OutOfRange, -1, "the time is outside the years 1677 to 2262"}
)

// ParseTime reads a time as nanoseconds since the start of 1970 in UTC. Digits
// beyond the nanosecond are cut off, toward the past.
//
// RFC 3339 is taken with T, t or a space between date and time, any number of
// digits of the second, Z, z or an offset. A leap second, 23:59:60 UTC, is the start
// of the second after it, without its fraction: Unix time has no other place for
// it, and so no event of that second comes after one of the next.
//
// Unix times are read from the digits as written, not by way of a float64, and may
// stand in a string.
//
//	in      v of a decoder of this package; its text is not kept
//	error   BadTime or OutOfRange; shared, not to be changed
//	cost    no allocation
func ParseTime(v expr.Value, spec TimeSpec) (nanos int64, err *Fault) {
	switch {
	case v.Kind == expr.Absent:
		return 0, errNoTime
	case spec != RFC3339 && (v.Kind == expr.Number || v.Kind == expr.Text):
		return parseUnix(v.Text, spec)
	case spec != RFC3339:
		return 0, errTimeUnix
	case v.Kind != expr.Text:
		return 0, errTimeText
	}
	return parseRFC3339(v.Text)
}

func parseUnix(s []byte, spec TimeSpec) (int64, *Fault) {
	d, end, form := scanDecimal(s, 0)
	if form == notNumber || end < len(s) {
		return 0, errTimeUnix
	}
	if d.mant == 0 {
		return 0, nil
	}
	exp := d.exp // of a nanosecond
	switch spec {
	case UnixSeconds:
		exp += 9
	case UnixMillis:
		exp += 6
	case UnixMicros:
		exp += 3
	}
	whole, rest := d.mant, d.cut
	switch {
	case exp > maxDigits:
		return 0, errTimeSpan
	case exp > 0:
		var over uint64
		if over, whole = bits.Mul64(whole, pow10(exp)); over != 0 {
			return 0, errTimeSpan
		}
	case exp < -maxDigits:
		whole, rest = 0, true
	case exp < 0:
		rest = rest || whole%pow10(-exp) != 0
		whole /= pow10(-exp)
	}
	if !d.neg {
		if whole > math.MaxInt64 {
			return 0, errTimeSpan
		}
		return int64(whole), nil
	}
	if rest {
		whole++
	}
	if whole > 1<<63 {
		return 0, errTimeSpan
	}
	return -int64(whole), nil
}

// pow10 is ten to the n, for n up to 19.
func pow10(n int) uint64 {
	p := uint64(1)
	for ; n > 0; n-- {
		p *= 10
	}
	return p
}

func parseRFC3339(s []byte) (int64, *Fault) {
	const shape = "0000-00-00T00:00:00"
	if len(s) < len(shape) {
		return 0, errTimeForm
	}
	if s[4] != '-' || s[7] != '-' || s[10]|0x20 != 't' && s[10] != ' ' || s[13] != ':' || s[16] != ':' {
		return 0, errTimeForm
	}
	century, yy, month, day := two(s, 0), two(s, 2), two(s, 5), two(s, 8)
	hour, minute, second := two(s, 11), two(s, 14), two(s, 17)
	if century|yy|month|day|hour|minute|second < 0 {
		return 0, errTimeForm
	}
	year := 100*century + yy
	if month < 1 || month > 12 || day < 1 || day > daysIn(year, month) || hour > 23 || minute > 59 || second > 60 {
		return 0, errTimeDate
	}
	p, nanos := len(shape), int64(0)
	if peek(s, p) == '.' {
		unit := int64(1e8)
		for p++; p < len(s) && s[p]-'0' <= 9; p++ {
			nanos += int64(s[p]-'0') * unit
			unit /= 10
		}
		if s[p-1] == '.' {
			return 0, errTimeForm
		}
	}
	east, err := parseZone(s[p:])
	if err != nil {
		return 0, err
	}
	if second == 60 {
		utc := ((hour*60+minute-east)%(24*60) + 24*60) % (24 * 60)
		if utc != 23*60+59 {
			return 0, errTimeLeap
		}
		nanos = 0
	}
	return join(daysSince1970(year, month, day)*86400+int64(hour*3600+(minute-east)*60+second), nanos)
}

// parseZone reads the end of a time as minutes east of Greenwich.
func parseZone(s []byte) (east int, err *Fault) {
	if len(s) == 1 && s[0]|0x20 == 'z' {
		return 0, nil
	}
	if len(s) != len("+00:00") || s[0] != '+' && s[0] != '-' || s[3] != ':' {
		return 0, errTimeZone
	}
	hours, minutes := two(s, 1), two(s, 4)
	switch {
	case hours|minutes < 0:
		return 0, errTimeZone
	case hours > 23 || minutes > 59:
		return 0, errTimeDate
	case s[0] == '-':
		return -(60*hours + minutes), nil
	}
	return 60*hours + minutes, nil
}

// two reads two digits, or returns a negative number.
func two(s []byte, p int) int {
	tens, ones := s[p]-'0', s[p+1]-'0'
	if tens > 9 || ones > 9 {
		return -1
	}
	return int(tens)*10 + int(ones)
}

func daysIn(year, month int) int {
	switch month {
	case 2:
		if year%4 == 0 && (year%100 != 0 || year%400 == 0) {
			return 29
		}
		return 28
	case 4, 6, 9, 11:
		return 30
	}
	return 31
}

// daysSince1970 counts days in the Gregorian calendar. Years run from March here,
// so that the day that leap years add is the last.
func daysSince1970(year, month, day int) int64 {
	month -= 3
	if month < 0 {
		month += 12
		year--
	}
	year += 400                                 // keeps the divisions positive in the year 0
	leap := year/4 - year/100 + year/400        // days added so far
	before := (153*month + 2) / 5               // days of the months before: 31, 30, 31, 30, 31 and again
	const epoch = 365*2369 + 592 - 23 + 5 + 306 // of 1 January 1970 on the same count
	return int64(365*year + leap + before + day - 1 - epoch)
}

// join adds seconds and a fraction, where int64 can hold the sum.
func join(seconds, nanos int64) (int64, *Fault) {
	const second = 1_000_000_000
	if seconds < 0 { // the first second of the range starts below it
		seconds++
		nanos -= second
	}
	if seconds > math.MaxInt64/second || seconds < math.MinInt64/second {
		return 0, errTimeSpan
	}
	seconds *= second
	if sum := seconds + nanos; (sum > seconds) == (nanos > 0) {
		return sum, nil
	}
	return 0, errTimeSpan
}
