package wire

import (
	"bytes"
	"time"

	"saprolite/ingest/quantity"
)

// Times are accepted between these years only: no forest record is older, and
// nanoseconds since 1970 fit 64 bits from 1678 to 2262 (time.Time.UnixNano).
const (
	firstYear = 1800
	lastYear  = 2199
)

func inRange(t time.Time) bool {
	y := t.Year()
	return y >= firstYear && y <= lastYear
}

// readTime reads an RFC 3339 instant or date. A date is returned as its UTC
// midnight.
func readTime(field string, b []byte) (t time.Time, isDate bool, p *Problem) {
	const dateLength = len(time.DateOnly)
	if len(b) == dateLength {
		d, ok := readDate(b)
		if !ok {
			return t, false, problem(BadTime, field, "%s is not a date; write it like 2016-07-01", brief(b))
		}
		t, isDate = d.Start(0), true
	} else if err := t.UnmarshalText(b); err != nil {
		hint := ""
		if len(b) > dateLength && bytes.IndexByte(b[dateLength:], 'Z') < 0 && !bytes.ContainsAny(b[dateLength:], "+-") {
			hint = " (it names no offset from UTC)"
		}
		return t, false, problem(BadTime, field, "%s is neither an instant nor a date%s; write 2016-07-01T06:00:00Z, 2016-07-01T06:00:00+02:00 or 2016-07-01", brief(b), hint)
	}
	if t = t.UTC(); !inRange(t) {
		return t, false, problem(BadTime, field, "%s lies outside the years %d to %d; check the date", brief(b), firstYear, lastYear)
	}
	return t, isDate, nil
}

// readDate reads YYYY-MM-DD, a day that exists.
func readDate(b []byte) (quantity.Day, bool) {
	digits := func(b []byte) (n int) {
		for _, c := range b {
			if c < '0' || c > '9' {
				return -1
			}
			n = n*10 + int(c-'0')
		}
		return n
	}
	if b[4] != '-' || b[7] != '-' {
		return 0, false
	}
	y, m, d := digits(b[:4]), digits(b[5:7]), digits(b[8:])
	if y < 0 || m < 1 || m > 12 || d < 1 {
		return 0, false
	}
	day := quantity.DateOf(y, time.Month(m), d)
	_, month, dom := day.Date() // a day past the end of its month moves on
	return day, int(month) == m && dom == d
}
