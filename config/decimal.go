package config

import (
	"errors"
	"math/bits"
	"strconv"
	"strings"
)

// Decimal is an exact non-negative decimal number: Coef / 10^Digits. It is
// kept without trailing zeros after the point, so equal numbers are equal
// values.
type Decimal struct {
	Coef   uint64
	Digits uint8
}

// Errors of ParseDecimal.
var (
	ErrDecimalSyntax = errors.New("not a plain non-negative decimal number such as 22 or 0.5")
	ErrDecimalRange  = errors.New("more digits than can be held exactly (18446744073709551615 in all, 18 after the point)")
)

// ParseDecimal reads a non-negative decimal number in JSON's number syntax,
// an exponent included. It never rounds.
func ParseDecimal(s string) (Decimal, error) {
	mantissa, exp := s, 0
	if i := strings.IndexAny(s, "eE"); i >= 0 {
		n, err := strconv.Atoi(s[i+1:])
		if err != nil || n > 400 || n < -400 {
			return Decimal{}, ErrDecimalSyntax
		}
		mantissa, exp = s[:i], n
	}
	whole, frac, point := strings.Cut(mantissa, ".")
	if whole == "" || (point && frac == "") || (len(whole) > 1 && whole[0] == '0') {
		return Decimal{}, ErrDecimalSyntax
	}
	digits := strings.TrimRight(whole+frac, "0")
	scale := len(frac) - exp - (len(whole) + len(frac) - len(digits))
	var coef uint64
	for _, c := range []byte(digits) {
		if c < '0' || c > '9' {
			return Decimal{}, ErrDecimalSyntax
		}
		hi, lo := bits.Mul64(coef, 10)
		sum, carry := bits.Add64(lo, uint64(c-'0'), 0)
		if hi != 0 || carry != 0 {
			return Decimal{}, ErrDecimalRange
		}
		coef = sum
	}
	return normalDecimal(coef, scale)
}

func normalDecimal(coef uint64, scale int) (Decimal, error) {
	if coef == 0 {
		return Decimal{}, nil
	}
	for scale < 0 {
		hi, lo := bits.Mul64(coef, 10)
		if hi != 0 {
			return Decimal{}, ErrDecimalRange
		}
		coef, scale = lo, scale+1
	}
	if scale > 18 {
		return Decimal{}, ErrDecimalRange
	}
	return Decimal{Coef: coef, Digits: uint8(scale)}, nil
}

// String returns the shortest plain decimal form.
func (d Decimal) String() string {
	s := strconv.FormatUint(d.Coef, 10)
	if d.Digits == 0 {
		return s
	}
	n := int(d.Digits)
	if len(s) <= n {
		s = strings.Repeat("0", n-len(s)+1) + s
	}
	return s[:len(s)-n] + "." + s[len(s)-n:]
}
