package quantity

import (
	"testing"
	"time"

	"pgregory.net/rapid"
)

func TestDayHoldsItsInstants(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		at := time.Unix(rapid.Int64Range(-5e9, 7e9).Draw(t, "unix"), rapid.Int64Range(0, 999_999_999).Draw(t, "nano"))
		offset := time.Duration(rapid.IntRange(-12*60, 14*60).Draw(t, "minutes")) * time.Minute
		d := DayOf(at, offset)
		if at.Before(d.Start(offset)) || !at.Before(d.End(offset)) {
			t.Fatalf("%s at %s is not within %s..%s", at, offset, d.Start(offset), d.End(offset))
		}
		if got := DayOf(d.Start(offset), offset); got != d {
			t.Fatalf("day %d starts on day %d", d, got)
		}
		if got := DayEndingAt(d.End(offset), offset); got != d {
			t.Fatalf("what ends with day %d belongs to day %d", d, got)
		}
		if back, err := ParseDay(d.String()); err != nil || back != d {
			t.Fatalf("day %d written %q is read as %d (%v)", d, d, back, err)
		}
	})
}

func TestDayText(t *testing.T) {
	if got := DateOf(1970, time.January, 1); got != 0 { // Unix epoch
		t.Errorf("1970-01-01 is day %d", got)
	}
	if got := DateOf(2000, time.March, 1) - DateOf(2000, time.February, 28); got != 2 { // 2000 is a leap year (Gregorian rule)
		t.Errorf("29 February 2000 is missing: %d days", got)
	}
	var d Day
	if err := d.UnmarshalText(nil); err != nil || d != NoDay || d.String() != "" {
		t.Errorf("empty text: %d %q, %v", d, d, err)
	}
	for _, s := range []string{"2015-02-29", "2015-2-9", "15-02-2015", "2015-02-01T00:00:00Z"} {
		if _, err := ParseDay(s); err == nil {
			t.Errorf("%q is read as a date", s)
		}
	}
}
