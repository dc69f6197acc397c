package config

import (
	"encoding/json"
	"errors"
	"math/big"
	"testing"

	"pgregory.net/rapid"
)

func TestParseDecimal(t *testing.T) {
	good := map[string]Decimal{
		"0": {}, "0.0": {}, "0e300": {}, "22": {22, 0}, "22.0": {22, 0}, "0.5": {5, 1}, "0.050": {5, 2}, "1e3": {1000, 0},
		"1.5E+1": {15, 0}, "125e-2": {125, 2}, "18446744073709551615": {18446744073709551615, 0},
		"0.000000000000000001": {1, 18}, "100e-20": {1, 18}, "1000": {1000, 0},
	}
	for text, want := range good {
		if got, err := ParseDecimal(text); err != nil || got != want {
			t.Errorf("ParseDecimal(%q) = %+v, %v, want %+v", text, got, err, want)
		}
	}
	bad := map[string]error{
		"": ErrDecimalSyntax, "-1": ErrDecimalSyntax, "+1": ErrDecimalSyntax, "01": ErrDecimalSyntax, ".5": ErrDecimalSyntax, "1.": ErrDecimalSyntax,
		"1e": ErrDecimalSyntax, "1e1.5": ErrDecimalSyntax, "1x": ErrDecimalSyntax, "1_0": ErrDecimalSyntax, "NaN": ErrDecimalSyntax, "0x1": ErrDecimalSyntax,
		"1e999": ErrDecimalSyntax, " 1": ErrDecimalSyntax, "1..2": ErrDecimalSyntax, "-0": ErrDecimalSyntax,
		"18446744073709551616": ErrDecimalRange, "1e20": ErrDecimalRange, "0.0000000000000000001": ErrDecimalRange,
	}
	for text, want := range bad {
		if got, err := ParseDecimal(text); !errors.Is(err, want) {
			t.Errorf("ParseDecimal(%q) = %+v, %v, want %v", text, got, err, want)
		}
	}
}

// TestDecimalAgainstRat compares with math/big on random JSON numbers.
func TestDecimalAgainstRat(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		text := rapid.StringMatching(`(0|[1-9][0-9]{0,20})(\.[0-9]{1,20})?([eE][+-]?[0-9]{1,2})?`).Draw(t, "text")
		if !json.Valid([]byte(text)) {
			t.Fatalf("the generator made %q", text)
		}
		want, ok := new(big.Rat).SetString(text)
		if !ok {
			t.Fatalf("math/big can't read %q", text)
		}
		got, err := ParseDecimal(text)
		scaled := new(big.Int).Mul(want.Num(), new(big.Int).Exp(big.NewInt(10), big.NewInt(18), nil))
		fits := new(big.Int).Rem(scaled, want.Denom()).Sign() == 0
		if err != nil {
			// It may be refused only if it has more than 18 places or doesn't fit.
			places, whole := decimalPlaces(want)
			if fits && whole.IsUint64() && places <= 18 {
				t.Fatalf("%q is refused: %v", text, err)
			}
			return
		}
		back, ok := new(big.Rat).SetString(got.String())
		if !ok || back.Cmp(want) != 0 {
			t.Fatalf("%q became %s", text, got)
		}
		if again, err := ParseDecimal(got.String()); err != nil || again != got {
			t.Fatalf("%s is not kept: %v, %v", got, again, err)
		}
	})
}

// decimalPlaces returns the least number of places that hold v exactly, up to
// 60, and v times that power of ten.
func decimalPlaces(v *big.Rat) (places int, whole *big.Int) {
	x := new(big.Rat).Set(v)
	for ; places < 60 && !x.IsInt(); places++ {
		x.Mul(x, big.NewRat(10, 1))
	}
	return places, x.Num()
}
