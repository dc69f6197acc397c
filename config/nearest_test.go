package config

import "testing"

func TestNearest(t *testing.T) {
	keys := keysOf[indicatorPlace]
	for word, want := range map[string]string{
		"serie": "series", "Series": "series", "plimit": "p_limit", "hroizon": "horizon", "settel": "settle", "widnows": "windows", "nmae": "name",
		"PORT": "", "colour": "", "": "", "x": "",
	} {
		if got, found := nearest(word, keys); got != want || found != (want != "") {
			t.Errorf("%q: %q, want %q", word, got, want)
		}
	}
}

func TestDistance(t *testing.T) {
	for _, test := range []struct {
		a, b string
		want int
	}{{"", "", 0}, {"", "abc", 3}, {"abc", "", 3}, {"kitten", "sitting", 3}, {"ab", "ba", 1}, {"abcd", "acbd", 1}, {"same", "same", 0}} {
		if got := distance(test.a, test.b); got != test.want {
			t.Errorf("%q, %q: %d, want %d", test.a, test.b, got, test.want)
		}
	}
}
