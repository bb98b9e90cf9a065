package quantity

import (
	"fmt"
	"time"
)

// Day is a stand-day or source-day: the number of days since 1970-01-01 in a
// fixed offset from UTC (mean local solar time; never civil time, no summer
// time). The offset belongs to the stand or source, not to the Day.
type Day int32

// NoDay marks "no such day" where a Day is optional.
const NoDay Day = -1 << 31

const dayLength = 24 * time.Hour

// DayOf returns the day that instant t falls into at the given fixed offset.
// An instant exactly at midnight belongs to the day that begins.
func DayOf(t time.Time, offset time.Duration) Day {
	s := t.Unix() + int64(offset/time.Second)
	d := s / 86400
	if s%86400 < 0 {
		d--
	}
	return Day(d)
}

// DayEndingAt is DayOf for the end of an interval: an interval that ends at
// midnight belongs to the day that ends there (methods J.1: interval-end
// stamps belong to the interval).
func DayEndingAt(t time.Time, offset time.Duration) Day {
	return DayOf(t.Add(-1), offset)
}

// Start returns the instant at which d begins at the given fixed offset.
func (d Day) Start(offset time.Duration) time.Time {
	return time.Unix(int64(d)*86400, 0).UTC().Add(-offset)
}

// End returns the instant at which d ends (exclusive) at the given offset.
func (d Day) End(offset time.Duration) time.Time { return (d + 1).Start(offset) }

// Date returns year, month and day of month.
func (d Day) Date() (year int, month time.Month, day int) { return d.utc().Date() }

// Year returns the calendar year.
func (d Day) Year() int { return d.utc().Year() }

// YearDay returns the day of the year, 1 to 366.
func (d Day) YearDay() int { return d.utc().YearDay() }

// String writes the day as an RFC 3339 date, and NoDay as the empty string.
func (d Day) String() string {
	if d == NoDay {
		return ""
	}
	return d.utc().Format(time.DateOnly)
}

// MarshalText writes the day as a date (JSON).
func (d Day) MarshalText() ([]byte, error) { return []byte(d.String()), nil }

// UnmarshalText reads a date; the empty string is NoDay.
func (d *Day) UnmarshalText(b []byte) error {
	if len(b) == 0 {
		*d = NoDay
		return nil
	}
	p, err := ParseDay(string(b))
	if err != nil {
		return err
	}
	*d = p
	return nil
}

func (d Day) utc() time.Time { return time.Unix(int64(d)*86400, 0).UTC() }

// ParseDay reads a date written YYYY-MM-DD.
func ParseDay(s string) (Day, error) {
	t, err := time.Parse(time.DateOnly, s)
	if err != nil {
		return NoDay, fmt.Errorf("%q is not a date (want YYYY-MM-DD)", s)
	}
	return Day(t.Unix() / 86400), nil
}

// DateOf returns the Day of a calendar date.
func DateOf(year int, month time.Month, day int) Day {
	return DayOf(time.Date(year, month, day, 0, 0, 0, 0, time.UTC), 0)
}
