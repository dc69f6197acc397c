package wire

import (
	"fmt"
	"strings"
	"time"

	"tailbell/monitor"
)

// ParseTime reads an RFC 3339 date-time with its offset. Fractions are cut to
// the microsecond. A leap second (RFC 3339, 5.7: 23:59:60 UTC on 30 June or 31
// December) is the second that follows it. The year as written must lie in
// 0001 to 9998, so that every zone can write the moment. The error says what
// is wrong and how to mend it.
func ParseTime(text string) (monitor.Instant, error) {
	at, ok := parseTime([]byte(text))
	if !ok {
		return 0, fmt.Errorf("%s", whyNoTime(text))
	}
	return at, nil
}

const shortestTime = len("2026-03-02T00:00:00Z")

// parseTime is ParseTime without words.
func parseTime(b []byte) (monitor.Instant, bool) {
	if len(b) < shortestTime || b[4] != '-' || b[7] != '-' || b[10]|0x20 != 't' || b[13] != ':' || b[16] != ':' {
		return 0, false
	}
	century, year, month, day := pair(b, 0), pair(b, 2), pair(b, 5), pair(b, 8)
	hour, minute, second := pair(b, 11), pair(b, 14), pair(b, 17)
	if century|year|month|day|hour|minute|second < 0 {
		return 0, false
	}
	year += century * 100
	if year < 1 || year > 9998 || month < 1 || month > 12 || day < 1 || day > daysIn(year, month) ||
		hour > 23 || minute > 59 || second > 60 {
		return 0, false
	}
	micros, i := fraction(b, 19)
	offset, ok := offsetMinutes(b, i)
	if i < 0 || !ok {
		return 0, false
	}
	seconds := (daysFromCivil(year, month, day)*24+hour)*3600 + (minute-offset)*60 + second
	if second == 60 && !endsHalfYear(seconds) {
		return 0, false
	}
	return monitor.Instant(seconds)*1e6 + monitor.Instant(micros), true
}

// pair returns the number of the two digits at i, or -1.
func pair(b []byte, i int) int {
	hi, lo := b[i]-'0', b[i+1]-'0'
	if hi > 9 || lo > 9 {
		return -1
	}
	return int(hi)*10 + int(lo)
}

// fraction reads an optional fraction of a second at i, in microseconds, and
// returns where it ends, or -1 for a point without digits.
func fraction(b []byte, i int) (micros, end int) {
	if b[i] != '.' {
		return 0, i
	}
	i++
	first, scale := i, 100_000
	for i < len(b) && b[i]-'0' <= 9 {
		micros += int(b[i]-'0') * scale
		scale /= 10
		i++
	}
	if i == first {
		return 0, -1
	}
	return micros, i
}

// offsetMinutes reads the offset that must end the text at i.
func offsetMinutes(b []byte, i int) (int, bool) {
	if i < 0 || i >= len(b) {
		return 0, false
	}
	if b[i]|0x20 == 'z' {
		return 0, i+1 == len(b)
	}
	if len(b) != i+6 || b[i+3] != ':' || (b[i] != '+' && b[i] != '-') {
		return 0, false
	}
	hours, minutes := pair(b, i+1), pair(b, i+4)
	if hours|minutes < 0 || hours > 23 || minutes > 59 {
		return 0, false
	}
	if b[i] == '-' {
		return -(hours*60 + minutes), true
	}
	return hours*60 + minutes, true
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

// daysFromCivil returns the days since 1970-01-01 of a date in the proleptic
// Gregorian calendar: years are counted from 1 March, so that the leap day
// comes last.
func daysFromCivil(year, month, day int) int {
	if month <= 2 {
		year, month = year-1, month+12
	}
	return 365*year + year/4 - year/100 + year/400 + (153*(month-3)+2)/5 + day - 1 - 719468
}

// endsHalfYear reports whether the second is the first of January or July.
func endsHalfYear(seconds int) bool {
	t := time.Unix(int64(seconds), 0).UTC()
	return t.Day() == 1 && (t.Month() == time.January || t.Month() == time.July) &&
		t.Hour() == 0 && t.Minute() == 0 && t.Second() == 0
}

// whyNoTime says what is wrong with a text that parseTime refuses.
func whyNoTime(text string) string {
	const like = "write it like 2026-03-02T14:30:00+01:00"
	quoted := fmt.Sprintf("%q", clip(text))
	switch {
	case text == "":
		return "the time is empty; " + like
	case len(text) == 10 && text[4] == '-':
		return quoted + " is a date without time and offset; " + like
	case len(text) > 10 && text[10] == ' ':
		return quoted + " has a space where RFC 3339 has a T; " + like
	case strings.Contains(text, ","):
		return quoted + " has a comma; fractions of a second follow a point"
	case strings.HasPrefix(text, "0000-"), strings.HasPrefix(text, "9999-"):
		return quoted + " is out of range; years from 0001 to 9998 can be held"
	case len(text) > 19 && text[17:19] == "60":
		return quoted + " is no leap second; they fall at 23:59:60 UTC on 30 June or 31 December only"
	case len(text) >= 19 && !strings.ContainsAny(text[19:], "zZ+-"):
		return quoted + " has no offset, so it names no moment; " + like
	}
	return quoted + " is no RFC 3339 time with an offset; " + like
}

// AppendTime appends the moment in UTC as RFC 3339, with a fraction only if
// there is one. It must lie in the years 0000 to 9999.
func AppendTime(dst []byte, at monitor.Instant) []byte {
	const day = 86400 * 1_000_000
	days := int(at / day)
	micros := int(at % day)
	if micros < 0 {
		days, micros = days-1, micros+day
	}
	year, month, date := civilFromDays(days)
	seconds := micros / 1_000_000
	dst = appendPair(appendPair(dst, year/100), year%100)
	dst = appendPair(append(dst, '-'), month)
	dst = appendPair(append(dst, '-'), date)
	dst = appendPair(append(dst, 'T'), seconds/3600)
	dst = appendPair(append(dst, ':'), seconds/60%60)
	dst = appendPair(append(dst, ':'), seconds%60)
	if rest := micros % 1_000_000; rest != 0 {
		dst = append(dst, '.')
		for scale := 100_000; rest > 0; scale /= 10 {
			dst = append(dst, '0'+byte(rest/scale))
			rest %= scale
		}
	}
	return append(dst, 'Z')
}

func appendPair(dst []byte, n int) []byte {
	return append(dst, '0'+byte(n/10), '0'+byte(n%10))
}

// civilFromDays is the inverse of daysFromCivil. It counts in eras of 400
// years of 146,097 days, from 1 March of the year 0.
func civilFromDays(days int) (year, month, day int) {
	days += 719468
	era := days / 146097
	if days < 0 {
		era = (days - 146096) / 146097
	}
	days -= era * 146097
	yearOfEra := (days - days/1460 + days/36524 - days/146096) / 365
	dayOfYear := days - (365*yearOfEra + yearOfEra/4 - yearOfEra/100)
	month = (5*dayOfYear + 2) / 153
	day = dayOfYear - (153*month+2)/5 + 1
	year = yearOfEra + era*400
	if month < 10 {
		return year, month + 3, day
	}
	return year + 1, month - 9, day
}
