package wire

import (
	"tailbell/config"
)

// MaxEvents is the largest count of events and the largest revision: 2^53, up
// to which every JSON implementation can hold whole numbers exactly.
const MaxEvents = 1 << 53

// whole reads a whole number from 0 to MaxEvents, in any of JSON's ways to
// write it (3, 3.0, 3e0). The text must be a JSON number.
func whole(text []byte) (int64, bool) {
	if n, ok := quickWhole(text); ok {
		return n, true
	}
	d, err := decimal(text)
	if err != nil || d.Digits > 0 || d.Coef > MaxEvents {
		return 0, false
	}
	return int64(d.Coef), true
}

// quickWhole reads plain digits, up to fifteen.
func quickWhole(text []byte) (int64, bool) {
	if len(text) == 0 || len(text) > 15 || (text[0] == '0' && len(text) > 1) {
		return 0, false
	}
	var n int64
	for _, c := range text {
		if c-'0' > 9 {
			return 0, false
		}
		n = n*10 + int64(c-'0')
	}
	return n, true
}

// decimal reads a JSON number exactly. Minus zero is zero.
func decimal(text []byte) (config.Decimal, error) {
	if len(text) > 0 && text[0] == '-' {
		d, err := config.ParseDecimal(string(text[1:]))
		if err == nil && d.Coef != 0 {
			err = config.ErrDecimalSyntax
		}
		return d, err
	}
	return config.ParseDecimal(string(text))
}

// quickDecimal reads digits with an optional fraction, up to eighteen digits.
func quickDecimal(text []byte) (config.Decimal, bool) {
	if len(text) == 0 || len(text) > 18 || text[0] == '.' || text[len(text)-1] == '.' ||
		(text[0] == '0' && len(text) > 1 && text[1] != '.') {
		return config.Decimal{}, false
	}
	var coef uint64
	point := -1
	for i, c := range text {
		if c == '.' && point < 0 {
			point = i
			continue
		}
		if c-'0' > 9 {
			return config.Decimal{}, false
		}
		coef = coef*10 + uint64(c-'0')
	}
	if point < 0 || coef == 0 {
		return config.Decimal{Coef: coef}, true
	}
	digits := len(text) - 1 - point
	for digits > 0 && coef%10 == 0 {
		coef, digits = coef/10, digits-1
	}
	return config.Decimal{Coef: coef, Digits: uint8(digits)}, true
}

// PlainWhole reads a whole number written as up to fifteen plain digits; false
// for any other text, which may be a number still.
func PlainWhole(text []byte) (int64, bool) { return quickWhole(text) }

// PlainDecimal reads a decimal written as up to eighteen plain digits with an
// optional fraction; false for any other text, which may be a number still.
func PlainDecimal(text []byte) (config.Decimal, bool) { return quickDecimal(text) }
