package decode

import (
	"math"
	"math/big"
	"strconv"
	"unsafe"
)

// A decimal is a number as it is written: mant times ten to the exp.
type decimal struct {
	mant uint64 // its first 19 significant digits
	exp  int    // saturates at +-maxExp
	neg  bool
	cut  bool // further digits, not all zero, lie beyond mant
}

const (
	maxDigits = 19      // as many always fit a uint64
	maxExp    = 1 << 30 // beyond any exponent of use; sums of a few do not overflow
)

// A form says which grammar a number obeys.
type form uint8

const (
	notNumber form = iota
	loose          // as people and tables write: +5, 007, .5, 5.
	strict         // JSON's
)

// scanDecimal reads the number at p and returns where it ends. What follows it
// is the caller's to judge.
func scanDecimal(s []byte, p int) (d decimal, end int, f form) {
	f = strict
	switch peek(s, p) {
	case '-':
		d.neg = true
		p++
	case '+':
		f = loose
		p++
	}
	start := p
	for p < len(s) && s[p]-'0' <= 9 {
		d.mant = d.mant*10 + uint64(s[p]-'0')
		p++
	}
	whole := p - start
	digits := whole
	if whole == 0 || whole > 1 && s[start] == '0' {
		f = loose
	}
	if p < len(s) && s[p] == '.' {
		p++
		point := p
		for p < len(s) && s[p]-'0' <= 9 {
			d.mant = d.mant*10 + uint64(s[p]-'0')
			p++
		}
		d.exp = point - p
		digits += p - point
		if p == point {
			f = loose
		}
	}
	if digits == 0 {
		return d, p, notNumber
	}
	if digits > maxDigits {
		d.mant, d.exp, d.cut = longMantissa(s[start:p])
	}
	if peek(s, p)|0x20 == 'e' {
		exp, q := scanExponent(s, p+1)
		if q < 0 {
			return d, p, notNumber
		}
		d.exp += exp
		p = q
	}
	return d, p, f
}

// scanExponent reads what follows the e; end is negative if no digit does.
func scanExponent(s []byte, p int) (exp, end int) {
	sign := 1
	switch peek(s, p) {
	case '-':
		sign = -1
		p++
	case '+':
		p++
	}
	start := p
	for p < len(s) && s[p]-'0' <= 9 {
		if exp < maxExp/16 {
			exp = exp*10 + int(s[p]-'0')
		} else {
			exp = maxExp
		}
		p++
	}
	if p == start {
		return 0, -1
	}
	return sign * exp, p
}

// longMantissa reads digits, with at most one point among them, of which there
// are too many for a uint64.
func longMantissa(s []byte) (mant uint64, exp int, cut bool) {
	kept, fraction := 0, false
	for _, c := range s {
		switch {
		case c == '.':
			fraction = true
			continue
		case kept < maxDigits:
			mant = mant*10 + uint64(c-'0')
			if mant > 0 {
				kept++
			}
			if fraction {
				exp--
			}
		default:
			cut = cut || c != '0'
			if !fraction {
				exp++
			}
		}
	}
	return mant, exp, cut
}

var exactPow10 = [...]float64{
	1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11,
	1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22,
}

// float returns the float64 nearest to d, ties to even, infinite beyond the
// largest. text is the number as scanDecimal read it.
//
// Where mantissa and power of ten are both exact, one operation rounds once
// (Clinger 1990, PLDI 25:92); strconv does the rest.
func (d decimal) float(text []byte) float64 {
	if d.mant < 1<<53 { // and so not cut, which takes 19 digits
		f := float64(d.mant)
		if d.neg {
			f = -f
		}
		switch {
		case d.exp == 0 || d.mant == 0:
			return f
		case 0 < d.exp && d.exp < len(exactPow10):
			return f * exactPow10[d.exp]
		case -len(exactPow10) < d.exp && d.exp < 0:
			return f / exactPow10[-d.exp]
		}
	}
	if d.overflows(text) { // strconv would say so in an error that it allocates
		if d.neg {
			return math.Inf(-1)
		}
		return math.Inf(1)
	}
	f, _ := strconv.ParseFloat(unsafe.String(unsafe.SliceData(text), len(text)), 64)
	return f
}

// beyondMax are the 309 digits of 2^1024 - 2^970, halfway between the largest
// float64 and the next power of two: from there on numbers round to infinity.
var beyondMax = func() string {
	one := big.NewInt(1)
	top := new(big.Int).Lsh(one, 1024)
	return top.Sub(top, new(big.Int).Lsh(one, 970)).String()
}()

// overflows tells whether d, whose mant is not 0, rounds to infinity.
func (d decimal) overflows(text []byte) bool {
	lead := d.exp + decimalLen(d.mant) // the number is 0.ddd times ten to the lead
	if lead != len(beyondMax) {
		return lead > len(beyondMax)
	}
	i := 0
	for _, c := range text { // digit by digit, from the first that is not 0
		if c|0x20 == 'e' || i == len(beyondMax) {
			break
		}
		if c-'0' > 9 || i == 0 && c == '0' {
			continue
		}
		if c != beyondMax[i] {
			return c > beyondMax[i]
		}
		i++
	}
	// All digits agree: short of the bound unless those that lack are zeros.
	for ; i < len(beyondMax); i++ {
		if beyondMax[i] != '0' {
			return false
		}
	}
	return true
}

// decimalLen is the number of decimal digits of n.
func decimalLen(n uint64) int {
	digits := 0
	for ; n > 0; n /= 10 {
		digits++
	}
	return digits
}
