package decode

import (
	"math"
	"math/big"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// checkNumber compares with strconv, which takes JSON's numbers and the loose ones
// alike, and more that neither form allows.
func checkNumber(t interface{ Fatalf(string, ...any) }, text string) {
	d, end, form := scanDecimal([]byte(text), 0)
	if form == notNumber || end != len(text) {
		t.Fatalf("%q: form %d, end %d", text, form, end)
	}
	want, err := strconv.ParseFloat(text, 64)
	if err != nil && !math.IsInf(want, 0) {
		t.Fatalf("%q: the oracle fails: %v", text, err)
	}
	if got := d.float([]byte(text)); math.Float64bits(got) != math.Float64bits(want) {
		t.Fatalf("%q: got %v, want %v", text, got, want)
	}
}

func TestNumbersAgreeWithStrconv(t *testing.T) {
	gen := rapid.OneOf(
		rapid.StringMatching(`[+-]?[0-9]{1,25}(\.[0-9]{0,25})?([eE][+-]?[0-9]{1,3})?`),
		rapid.StringMatching(`-?0?\.0{0,330}[0-9]{1,40}(e[0-9]{1,3})?`),
		rapid.StringMatching(`[1-9][0-9]{300,320}(\.[0-9]{0,5})?`),
		rapid.StringMatching(`[0-9]{1,3}\.[0-9]{2}`),
		rapid.StringMatching(`9007199254740[0-9]{3}(e-?[0-9]{1,2})?`),
		rapid.Map(rapid.Float64(), func(f float64) string { return strconv.FormatFloat(f, 'g', -1, 64) }),
		rapid.Map(rapid.Float64(), func(f float64) string { return strconv.FormatFloat(f, 'f', 3, 64) }),
	).Filter(func(s string) bool { return !strings.Contains(s, "Inf") && s != "NaN" })
	rapid.Check(t, func(t *rapid.T) {
		for range 50 {
			checkNumber(t, gen.Draw(t, "number"))
		}
	})
}

// Around the point from which numbers round to infinity, written in many ways.
func TestNumbersAroundTheLargest(t *testing.T) {
	for delta := int64(-2); delta <= 2; delta++ {
		n, _ := new(big.Int).SetString(beyondMax, 10)
		digits := n.Add(n, big.NewInt(delta)).String()
		for _, text := range []string{
			digits, "-" + digits, "+000" + digits, digits + ".000", digits + "e0", digits + "E-0", digits + ".5",
			"0." + digits + "e309", "0.00" + digits + "e+311", digits[:1] + "." + digits[1:] + "e308", digits + "000e-3", digits[:200] + "." + digits[200:] + "e109",
		} {
			checkNumber(t, text)
		}
	}
	for _, text := range []string{
		"1e308", "1.8e308", "1e309", "17e307", "18e307", "1.7976931348623157e308", "1.7976931348623158e308", "1.7976931348623159e308",
		"0.000018e313", "1e400", "-1e400", "1e99999999999999999999", "1e-99999999999999999999", "0e99999999999", "-0", "-0.0e5", "00000000000000000000000000000000000012",
		"4.9e-324", "2.4703282292062327e-324", "2.4703282292062328e-324", "2.2250738585072011e-308", "9007199254740993", "9007199254740992.99999999999999999999",
		"1e22", "1e23", "123456789012345678e5", "8.5e-22", "1e-23", "0." + strings.Repeat("0", 400) + "1e401", "1" + strings.Repeat("0", 400) + "e-400",
	} {
		checkNumber(t, text)
	}
}

// Exponents of any length, beyond what an int holds.
func TestNumbersWithLongExponents(t *testing.T) {
	for n := range 80 {
		for _, digit := range []string{"0", "1", "4", "9"} {
			for _, mantissa := range []string{"1e", "1e-", "0e", "-12.5e+"} {
				checkNumber(t, mantissa+strings.Repeat(digit, n+1))
				checkNumber(t, mantissa+"1"+strings.Repeat(digit, n+1))
			}
		}
	}
}

func TestNumberForms(t *testing.T) {
	for text, want := range map[string]form{
		"0": strict, "-0": strict, "10": strict, "0.5": strict, "-1.25e-3": strict, "1E+5": strict, "0e0": strict,
		"+1": loose, "007": loose, "-01": loose, ".5": loose, "-.5": loose, "5.": loose, "5.e3": loose, "00": loose,
		"": notNumber, "-": notNumber, "+": notNumber, ".": notNumber, "e5": notNumber, ".e5": notNumber, "1e": notNumber, "1e+": notNumber, "x": notNumber, "--1": notNumber, "NaN": notNumber,
	} {
		if _, _, got := scanDecimal([]byte(text), 0); got != want {
			t.Errorf("%q: got form %d, want %d", text, got, want)
		}
	}
}
