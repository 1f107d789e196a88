package expr

import (
	"errors"
	"fmt"
	"strings"
	"testing"
)

// faultTests give every fault as "offset text: message ~ suggestion ~ allowed",
// with the message from its beginning and the last two only where there are any.
var faultTests = []struct {
	use    string // filter, value or estimate
	src    string
	faults []string
}{
	// syntax
	{"filter", ``, []string{"0 : the expression is empty"}},
	{"filter", " \n ", []string{"0 : the expression is empty"}},
	{"filter", `a > `, []string{"4 : the expression ends where a value is still expected"}},
	{"filter", `a b`, []string{"2 b: not expected here; a value, or an operator before it, is missing"}},
	{"filter", `a > > 1`, []string{"4 >: not expected here"}},
	{"filter", `a <> 1`, []string{"3 >: not expected here"}},
	{"filter", `(a > 1`, []string{"0 (: this bracket is never closed"}},
	{"filter", `a > 1)`, []string{"5 ): nothing is open that this bracket could close"}},
	{"filter", `(a > [1)`, []string{"7 ): nothing is open that this bracket could close"}},
	{"filter", `a = 1 & b ^ 2 == 4 | c`, []string{
		"2 =: no such operator ~ == ~ + - * / ** == != < <= > >= && || ! ?? in",
		"6 &: no such operator ~ && ~ + - * / ** == != < <= > >= && || ! ?? in",
		"10 ^: no such operator ~ ** ~ + - * / ** == != < <= > >= && || ! ?? in",
		"19 |: no such operator ~ || ~ + - * / ** == != < <= > >= && || ! ?? in"}},
	{"filter", `a ? b : c`, []string{"2 ?: no such operator ~ ~ + -", "6 :: no such operator ~ ~ + -"}},
	{"filter", `a?.b == 1`, []string{"1 ?.: no such operator ~ . ~ + -"}},
	{"filter", `a == 1; b`, []string{"6 ;: no such operator ~ ~ + -"}},
	{"filter", `a % 2 == 1`, []string{"2 %: no such operator ~ ~ + -"}},
	{"filter", `a == {b: 1}`, []string{"5 {: braces have no meaning here", "7 :: no such operator ~ ~ + -", "10 }: braces have no meaning here"}},
	{"filter", `a contains "x"`, []string{`2 contains: no operator of this name; a field of this name is written field("contains") ~ ~ + -`}},
	{"filter", `let x = 1`, []string{`0 let: no operator of this name`, `6 =: no such operator ~ == ~ + -`}},
	{"filter", `a == b"x"`, []string{`5 b"x": a text is written in quotes, without a letter before them`}},
	{"filter", `größe == "x" && a = 1`, []string{"20 =: no such operator ~ == ~ + -"}}, // bytes, not letters
	{"filter", `a == "x`, []string{"7 : a text that begins before here has no closing quote"}},
	{"filter", `a == "\q"`, []string{`7 q: invalid char escape`}},
	{"filter", `a @ b`, []string{"2 @: a character without meaning here"}},
	{"filter", `a > 1x`, []string{"5 x: a number must not run into a name"}},
	{"filter", `a > 99999999999999999999`, []string{"4 99999999999999999999: an integer of this size is written with a decimal point"}},
	{"filter", `a > 1e999`, []string{"4 1e999: the number is too large"}},
	{"filter", `a > 1__0`, []string{}},
	{"filter", `a > 0b12`, []string{"7 2: a number must not run into a name"}},
	{"filter", `a > 0x`, []string{"4 0x: no number is written like this"}},
	{"filter", `a. == 1`, []string{"1 .: a name must follow the dot"}},
	{"filter", `a ?? 0 > 1`, []string{"7 >: ?? beside another operator needs parentheses, as in (a ?? 0) + b"}},
	{"filter", `a > /* b`, []string{"8 : unclosed comment"}},
	{"filter", strings.Repeat("a", maxSource+1), []string{"0 : the expression has 16385 bytes; at most 16384 are read"}},

	// types over events
	{"filter", `5`, []string{"0 5: a number is no condition; compare it with something"}},
	{"filter", `"x"`, []string{`0 "x": a text is no condition; compare it with something`}},
	{"filter", `amount * 2`, []string{"0 amount * 2: a number is no condition"}},
	{"filter", `!(amount * 2) || "x" && (a ?? 3)`, []string{
		"2 amount * 2: a number is no condition", `17 "x": a text is no condition`, "25 a ?? 3: a number is no condition"}},
	{"filter", `1 == "x"`, []string{`0 1 == "x": a number is compared with a text, which is never true`}},
	{"filter", `(a > 1) == 1`, []string{`0 (a > 1) == 1: a condition is compared with a number, which is never true`}},
	{"filter", `(a ?? 0) == "x"`, []string{`0 (a ?? 0) == "x": a number is compared with a text, which is never true`}},
	{"filter", `a * (b + 1) == "x"`, []string{`0 a * (b + 1) == "x": a number is compared with a text, which is never true`}},
	{"filter", `a < true`, []string{`0 a < true: true and false have no order; compare them by == or !=`}},
	{"filter", `"x" + 1 > -"y" && abs("z") > 1`, []string{
		`0 "x": a text cannot be calculated with`, `11 "y": a text cannot be calculated with`, `22 "z": a text cannot be calculated with`}},
	{"filter", `(a ?? "x") + 1 > 2`, []string{`1 a ?? "x": a text cannot be calculated with`}},
	{"filter", `(a > 1 ?? "x") == "y"`, []string{`5 1 ?? "x": a text cannot stand for a number`}},
	{"filter", `((a > 1) ?? "x") == "y"`, []string{`1 (a > 1) ?? "x": a text cannot stand for a condition`}},
	{"filter", `a == null`, []string{"5 null: null is absent, and nothing compares with what is absent; ?? gives an absent value another ~ (a ?? 0)"}},
	{"filter", `a == nil`, []string{"5 nil: null is absent"}},
	{"filter", `0 < a < 5`, []string{"0 0 < a < 5: comparisons do not chain; join two of them by && ~ a < b && b < c"}},
	{"filter", `1 / 0 > a || sqrt(-1) > a || a / 0 > 1`, []string{
		"0 1 / 0: a division by zero", "13 sqrt(-1): no finite value", "29 a / 0: a division by zero"}},
	{"filter", `2 ** 5000 > a`, []string{"0 2 ** 5000: no finite value"}},
	{"filter", `a in b`, []string{`5 b: after in stands a list of texts or of numbers ~ ["a", "b"]`}},
	{"filter", `a in []`, []string{`5 []: after in stands a list of texts or of numbers`}},
	{"filter", `a in [1, "x"]`, []string{`5 [1, "x"]: a list holds texts or numbers, not both`}},
	{"filter", `a in [b, true, 1 / 0]`, []string{
		"6 b: only texts and numbers, written out, stand in a list", "9 true: only texts and numbers", "15 1 / 0: a division by zero"}},
	{"filter", `(a > 1) in [1] || a + 1 in ["x"] || "x" in [1]`, []string{
		"0 (a > 1) in [1]: a condition is in no such list", `18 a + 1 in ["x"]: a number is in no such list`, `36 "x" in [1]: a text is in no such list`}},
	{"filter", `a == [1]`, []string{"5 [1]: a list stands only after in"}},
	{"filter", `a[1:2] == 3`, []string{"3 :: no such operator"}},
	{"filter", `a[0] == 1 || a["b"].c == 1`, []string{
		`0 a[0]: no index can be taken; a field with an odd name is written field("…")`, `13 a["b"]: no index can be taken`}},
	{"filter", `min(a, 1).b == 1`, []string{"0 min(a, 1).b: only a field of the event has fields below it"}},
	{"filter", `a.b(1) == 1`, []string{"0 a.b(1): only functions can be called"}},
	{"filter", `abs(a, b) > 1 || min(a) > 1 || log() > 1`, []string{
		"0 abs(a, b): abs takes one argument, not 2", "17 min(a): min takes 2 arguments or more, not 1", "31 log(): log takes one argument, not 0"}},
	{"filter", `field() == 1 || field(a) == 1 || field("") == 1`, []string{
		`0 field(): field takes the name of a field, in quotes ~ field("odd name")`, "16 field(a): field takes", `33 field(""): field takes`}},
	{"filter", `sqr(a) > count("x" + 1)`, []string{
		"0 sqr: unknown function ~ sqrt ~ min, max, abs, log, exp, sqrt, field",
		"9 count: unknown function ~ ~ min, max, abs, log, exp, sqrt, field",
		`15 "x": a text cannot be calculated with`}},
	{"filter", `ln(a) > 1 || pow(a, 2) > 1 || avg(a) > 1`, []string{
		"0 ln: unknown function ~ log ~ min", "13 pow: unknown function ~ ** ~ min", "30 avg: unknown function ~ ~ min"}},
	{"filter", `mean(a) > 1`, []string{"0 mean(a): mean() is over units, and belongs in an estimate; here is one event"}},
	{"value", `"x"`, []string{`0 "x": a text cannot be tallied; a tally takes a number or a condition`}},
	{"value", `amount ?? "none"`, []string{`0 amount ?? "none": a text cannot be tallied`}},
	{"value", `amount +`, []string{"8 : the expression ends where a value is still expected"}},

	// estimates
	{"estimate", `mean(faer) / mean(vists)`, []string{
		"5 faer: unknown tally ~ fare ~ fare, visits, bought, slowest, count", "18 vists: unknown tally ~ visits ~ fare, visits, bought, slowest, count"}},
	{"estimate", `mean(nothing_like)`, []string{"5 nothing_like: unknown tally ~ ~ fare, visits, bought, slowest, count"}},
	{"estimate", `mean(log)`, []string{"5 log: log is a function; it takes one argument in parentheses"}},
	{"estimate", `fare / mean(visits)`, []string{"0 fare: a tally differs between units; an estimate takes its mean over them ~ mean(fare)"}},
	{"estimate", `faer`, []string{"0 faer: unknown tally ~ fare ~ fare, visits, bought, slowest, count"}},
	{"estimate", `3 + 4`, []string{"0 3 + 4: an estimate needs the mean of a score, as in mean(fare)"}},
	{"estimate", `mean(mean(fare))`, []string{"5 mean(fare): mean() inside mean(): a score is of one unit, and has no mean over units"}},
	{"estimate", `mean(2 + 3)`, []string{"0 mean(2 + 3): the mean of a constant; a score depends on a tally"}},
	{"estimate", `mean()`, []string{"0 mean(): mean takes one argument, not 0"}},
	{"estimate", `mean(fare, visits)`, []string{"0 mean(fare, visits): mean takes one argument, not 2"}},
	{"estimate", `men(fare) / man(vists)`, []string{
		"0 men: unknown function ~ mean ~ mean, log, exp, sqrt", "12 man: unknown function ~ mean ~ mean", "16 vists: unknown tally ~ visits ~ fare"}},
	{"estimate", `avg(fare)`, []string{"0 avg: unknown function ~ mean ~ mean, log, exp, sqrt"}},
	{"estimate", `max(mean(fare), 0)`, []string{"0 max(mean(fare), 0): max outside mean() is not smooth: the estimate would have no derivative everywhere, and so no standard error; it may stand inside mean()"}},
	{"estimate", `abs(mean(fare)) + min(mean(fare), 1)`, []string{"0 abs(mean(fare)): abs outside mean() is not smooth", "18 min(mean(fare), 1): min outside"}},
	{"estimate", `mean(fare) > 0`, []string{"0 mean(fare) > 0: > outside mean() is not smooth"}},
	{"estimate", `mean(fare) ?? 0`, []string{"0 mean(fare) ?? 0: ?? outside mean() is not smooth"}},
	{"estimate", `(mean(fare) && mean(visits)) + !mean(fare)`, []string{"1 mean(fare) && mean(visits): && outside", "31 !mean(fare): ! outside"}},
	{"estimate", `mean(fare) in [1]`, []string{"0 mean(fare) in [1]: in outside"}},
	{"estimate", `mean(fare) + true`, []string{"13 true: a mean is a number; true and false have a place inside mean() only"}},
	{"estimate", `mean(fare) / 0 + log(0) + log(-2) * mean(fare)`, []string{
		"0 mean(fare) / 0: a division by zero", "17 log(0): no finite value", "26 log(-2): no finite value"}},
	{"estimate", `(-2) ** mean(fare)`, []string{"0 (-2) ** mean(fare): a power whose exponent is not constant needs a base above zero"}},
	{"estimate", `mean(fare) - mean((fare))`, []string{"0 mean(fare) - mean((fare)): the estimate has the same value whatever the data"}},
	{"estimate", `2 * mean(fare) / mean(fare)`, []string{"0 2 * mean(fare) / mean(fare): the estimate has the same value whatever the data"}},
	{"estimate", `mean(fare) ** 0`, []string{"0 mean(fare) ** 0: the estimate has the same value whatever the data"}},
	{"estimate", `mean("x") + mean(order.total)`, []string{
		`5 "x": a text has no place in an estimate; tallies are numbers`, "17 order.total: a tally has a plain name, without dots"}},
	{"estimate", `mean(fare && bought) + mean(!fare) + mean(fare * 2 || bought)`, []string{
		"5 fare: a number is no condition; compare it with something ~ fare > 0", "29 fare: a number is no condition", "42 fare * 2: a number is no condition"}},
	{"estimate", `mean(0 < fare < 3)`, []string{"5 0 < fare < 3: comparisons do not chain"}},
	{"estimate", `mean(fare / 0)`, []string{"5 fare / 0: a division by zero"}},
	{"estimate", `mean(fare == null)`, []string{"13 null: null is absent"}},
	{"estimate", `mean(fare in ["x"])`, []string{`14 "x": a text has no place in an estimate`}},
	{"estimate", `field("fare")`, []string{`0 field: unknown function ~ ~ mean, log, exp, sqrt`, `6 "fare": a text has no place`}},
}

func parseUse(use, src string) error {
	var err error
	switch use {
	case "filter":
		_, err = ParseFilter(src, &Fields{})
	case "value":
		_, err = ParseValue(src, &Fields{})
	case "estimate":
		_, err = ParseEstimate(src, scoreTallies)
	}
	return err
}

func TestFaults(t *testing.T) {
	for _, tt := range faultTests {
		err := parseUse(tt.use, tt.src)
		var got Errors
		errors.As(err, &got)
		if (err == nil) != (len(got) == 0) || len(got) != len(tt.faults) {
			t.Errorf("%s: %d faults, want %d: %v", tt.src, len(got), len(tt.faults), err)
			continue
		}
		for i, e := range got {
			parts := strings.Split(tt.faults[i], " ~")
			line := fmt.Sprintf("%d %s: %s", e.Offset, e.Text, e.Message)
			bad := !strings.HasPrefix(line, parts[0])
			bad = bad || len(parts) > 1 && strings.TrimSpace(parts[1]) != e.Suggestion
			bad = bad || len(parts) > 2 && !strings.HasPrefix(e.Allowed, parts[2][1:])
			if bad {
				t.Errorf("%s: %s ~ %s ~ %s, want %s", tt.src, line, e.Suggestion, e.Allowed, tt.faults[i])
			}
			if e.Offset+e.Length > len(tt.src) || tt.src[e.Offset:e.Offset+e.Length] != e.Text {
				t.Errorf("%s: %d+%d is not %s", tt.src, e.Offset, e.Length, e.Text)
			}
		}
	}
}

func TestErrorText(t *testing.T) {
	err := parseUse("estimate", "mean(faer) + min(mean(visits), 3)")
	const want = "offset 5: `faer`: unknown tally; did you mean fare? (allowed: fare, visits, bought, slowest, count)\n" +
		"offset 13: `min(mean(visits), 3)`: min outside mean() is not smooth: the estimate would have no derivative everywhere, " +
		"and so no standard error; it may stand inside mean(), over the tallies of one unit"
	if err == nil || err.Error() != want {
		t.Errorf("got %v\nwant %s", err, want)
	}
	var first *Error
	if !errors.As(err, &first) || first.Offset != 5 {
		t.Errorf("the first single error is %v", first)
	}
}

func TestNearest(t *testing.T) {
	for _, tt := range []struct{ name, allowed, want string }{
		{"faer", "fare visits", "fare"},
		{"Fare", "fare visits", "fare"},
		{"vists", "fare visits", "visits"},
		{"visit", "fare visits", "visits"},
		{"fair", "fare visits", ""}, // two letters of four
		{"follow_pu", "follow_up follow", "follow_up"},
		{"x", "y z", ""},
		{"", "a b", ""},
		{"ab", "abc ab", "ab"},
		{"fares", "fare fared", "fare"}, // the first of equals
		{"größe", "grösse größen", "größen"},
		{"kafka", "", ""},
	} {
		if got := Nearest(tt.name, strings.Fields(tt.allowed)); got != tt.want {
			t.Errorf("nearest to %q of %q is %q, want %q", tt.name, tt.allowed, got, tt.want)
		}
	}
	// "CA" to "ABC" is 3 for the restricted distance (Boytsov 2011, JEA 16:1.1, from memory).
	if d := editDistance([]rune("ca"), []rune("abc")); d != 3 {
		t.Errorf("distance of ca and abc is %d, want 3", d)
	}
}

func TestValidName(t *testing.T) {
	for name, want := range map[string]bool{
		"fare": true, "count": true, "min": true, "any": true, "if": true, "mean": true, "größe": true, "_x1": true,
		"": false, "in": false, "not": false, "null": false, "true": false, "1st": false, "odd name": false, "a.b": false,
	} {
		if got := ValidName(name); got != want {
			t.Errorf("ValidName(%q) = %v", name, got)
		}
		_, err := ParseEstimate("mean("+name+")", []Tally{{Name: name}})
		if want && err != nil {
			t.Errorf("a tally called %q: %v", name, err)
		}
	}
}
