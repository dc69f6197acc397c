package wire

import (
	"testing"
	testquick "testing/quick"
	"time"

	"tailbell/monitor"
)

// Valid and invalid vectors of the JSON Schema Test Suite,
// draft2020-12/optional/format/date-time.json (MIT licence), those without an
// expected moment here among the invalid ones.
func TestParseTime(t *testing.T) {
	for text, want := range map[string]string{
		"1963-06-19T08:30:06.283185Z":       "1963-06-19T08:30:06.283185Z",
		"1963-06-19T08:30:06Z":              "1963-06-19T08:30:06Z",
		"1937-01-01T12:00:27.87+00:20":      "1937-01-01T11:40:27.87Z",
		"1990-12-31T15:59:50.123-08:00":     "1990-12-31T23:59:50.123Z",
		"1998-12-31T23:59:60Z":              "1999-01-01T00:00:00Z",
		"1998-12-31T15:59:60.123-08:00":     "1999-01-01T00:00:00.123Z",
		"2015-07-01T05:29:60+05:30":         "2015-07-01T00:00:00Z",
		"1963-06-19t08:30:06.283185z":       "1963-06-19T08:30:06.283185Z",
		"2026-03-02T00:00:00-00:00":         "2026-03-02T00:00:00Z",
		"0001-01-01T00:00:00+23:59":         "0000-12-31T00:01:00Z",
		"9998-12-31T23:59:59.999999Z":       "9998-12-31T23:59:59.999999Z",
		"1969-12-31T23:59:59.9999999Z":      "1969-12-31T23:59:59.999999Z",
		"2026-03-02T00:00:00.1234567+01:00": "2026-03-01T23:00:00.123456Z",
		"1998-12-31T23:59:61Z":              "",
		"1998-12-31T23:58:60Z":              "",
		"1998-12-31T22:59:60Z":              "",
		"1998-12-31T23:59:60-01:00":         "",
		"1998-03-31T23:59:60Z":              "",
		"1990-02-31T15:59:59.123-08:00":     "",
		"1990-12-31T15:59:59-24:00":         "",
		"1990-12-31T24:00:00Z":              "",
		"1990-12-31T23:60:00Z":              "",
		"1963-06-19T08:30:06.28123+01:00Z":  "",
		"06/19/1963 08:30:06 PST":           "",
		"2013-350T01:01:01":                 "",
		"1963-6-19T08:30:06.283185Z":        "",
		"1963-06-1T00:00:00Z":               "",
		"1963-06-1৪T00:00:00Z":              "",
		"1963-06-11৪:00:00Z":                "",
		"1963-06-19":                        "",
		"1963-06-19T08:30:06":               "",
		"1963-06-19 08:30:06Z":              "",
		"1963-06-19T08:30:06,5Z":            "",
		"1963-06-19T08:30:06.Z":             "",
		"1963-06-19T08:30:06+0100":          "",
		"1963-06-19T08:30:06+01":            "",
		"0000-01-01T00:00:00Z":              "",
		"9999-01-01T00:00:00Z":              "",
		"":                                  "",
	} {
		at, err := ParseTime(text)
		if (err == nil) != (want != "") {
			t.Errorf("ParseTime(%q) = %v, %v; want %q", text, at, err, want)
			continue
		}
		if err == nil && at.Time().Format(time.RFC3339Nano) != want {
			t.Errorf("ParseTime(%q) = %s; want %s", text, at.Time().Format(time.RFC3339Nano), want)
		}
		if err == nil && FormatTime(at) != want {
			t.Errorf("FormatTime of %q = %s; want %s", text, FormatTime(at), want)
		}
	}
}

// Every day of the range, against time.Date; the year 0 is only written.
func TestDaysFromCivil(t *testing.T) {
	day := time.Date(0, 1, 1, 0, 0, 0, 0, time.UTC)
	for ; day.Year() < 9999; day = day.AddDate(0, 0, 1) {
		if got := daysFromCivil(day.Year(), int(day.Month()), day.Day()); day.Year() > 0 && int64(got)*86400 != day.Unix() {
			t.Fatalf("%s is day %d, not %d", day.Format(time.DateOnly), day.Unix()/86400, got)
		}
		if y, m, d := civilFromDays(int(day.Unix() / 86400)); y != day.Year() || m != int(day.Month()) || d != day.Day() {
			t.Fatalf("day %d is %s, not %d-%d-%d", day.Unix()/86400, day.Format(time.DateOnly), y, m, d)
		}
	}
}

func TestTimeRoundTrip(t *testing.T) {
	first, last := int64(-62135596800e6), int64(253370764799999999)
	roundTrip := func(n int64) bool {
		at := monitor.Instant(first + int64(uint64(n)%uint64(last-first)))
		text := FormatTime(at)
		back, err := ParseTime(text)
		return err == nil && back == at && text == at.Time().Format(time.RFC3339Nano)
	}
	if err := testquick.Check(roundTrip, &testquick.Config{MaxCount: 20_000}); err != nil {
		t.Error(err)
	}
}

func TestWhyNoTime(t *testing.T) {
	for text, want := range map[string]string{
		"2026-03-02":                `"2026-03-02" is a date without time and offset; write it like 2026-03-02T14:30:00+01:00`,
		"2026-03-02 14:30:00+01:00": `"2026-03-02 14:30:00+01:00" has a space where RFC 3339 has a T; write it like 2026-03-02T14:30:00+01:00`,
		"2026-03-02T14:30:00":       `"2026-03-02T14:30:00" has no offset, so it names no moment; write it like 2026-03-02T14:30:00+01:00`,
		"2026-03-02T14:30:60Z":      `"2026-03-02T14:30:60Z" is no leap second; they fall at 23:59:60 UTC on 30 June or 31 December only`,
		"9999-03-02T14:30:00Z":      `"9999-03-02T14:30:00Z" is out of range; years from 0001 to 9998 can be held`,
		"yesterday":                 `"yesterday" is no RFC 3339 time with an offset; write it like 2026-03-02T14:30:00+01:00`,
	} {
		if _, err := ParseTime(text); err == nil || err.Error() != want {
			t.Errorf("ParseTime(%q): %v\nwant %s", text, err, want)
		}
	}
}
