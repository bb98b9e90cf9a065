package daybook

import (
	"bytes"
	"errors"
	"math"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// shelf is a Shelf in memory.
type shelf map[string][]byte

func (s shelf) Read(key string) ([]byte, error) { return s[key], nil }

func (s shelf) put(t interface{ Fatal(...any) }, b *Book) {
	entries, err := b.Changed()
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		s[e.Key] = e.Data
	}
	b.Saved()
}

func open(t interface{ Fatal(...any) }, o Options) *Book {
	b, err := Open(o)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

var nan = math.NaN()

// rainAt is a reading of rain: hours from the first midnight of 2031, in the
// source's own time at offset.
func rainAt(offset time.Duration, from, hours, mm float64) observation.Observation {
	midnight := quantity.DateOf(2031, time.January, 1).Start(offset)
	start := midnight.Add(time.Duration(from * float64(time.Hour)))
	return observation.Observation{Source: "gauge", Quantity: quantity.Precipitation, Start: start,
		End: start.Add(time.Duration(hours * float64(time.Hour))), Value: mm, SD: nan, Flag: observation.Pass,
		Available: start.Add(24 * time.Hour)}
}

func day(t *testing.T, b *Book, q quantity.Quantity, d quantity.Day) observation.DayValue {
	t.Helper()
	v, ok, err := b.Day(q, d)
	if err != nil || !ok {
		t.Fatalf("day %s of %s: ok %v, err %v", d, q, ok, err)
	}
	return v
}

// The expected values are arithmetic on the readings given.
func TestFold(t *testing.T) {
	const offset = 9 * time.Hour
	first := quantity.DateOf(2031, time.January, 1)
	t.Run("a total is summed, an interval across midnight is split by time", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset})
		for _, o := range []observation.Observation{rainAt(offset, 3, 1, 2), rainAt(offset, 10, 6, 5), rainAt(offset, 22, 6, 9)} {
			if _, err := b.Add(o); err != nil {
				t.Fatal(err)
			}
		}
		if v := day(t, b, quantity.Precipitation, first); v.Value != 2+5+9*2.0/6 {
			t.Errorf("first day %g, want 10", v.Value)
		}
		if v := day(t, b, quantity.Precipitation, first+1); v.Value != 9*4.0/6 {
			t.Errorf("second day %g, want 6", v.Value)
		}
	})
	t.Run("an interval that ends at midnight belongs to the day that ends", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset})
		change, err := b.Add(rainAt(offset, 23, 1, 4))
		if err != nil || change != (Change{Any: true, First: first, Last: first}) {
			t.Errorf("changed %+v, %v", change, err)
		}
	})
	t.Run("a gap in a total of a known interval makes the day suspect", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset, Interval: 12 * time.Hour})
		if _, err := b.Add(rainAt(offset, 0, 12, 4)); err != nil {
			t.Fatal(err)
		}
		if v := day(t, b, quantity.Precipitation, first); v.Known() || v.Value != 4 {
			t.Errorf("half a day of rain: %+v, want suspect", v)
		}
		if _, err := b.Add(rainAt(offset, 12, 12, 1)); err != nil {
			t.Fatal(err)
		}
		if v := day(t, b, quantity.Precipitation, first); !v.Known() || v.Value != 5 {
			t.Errorf("whole day of rain: %+v, want 5", v)
		}
	})
	t.Run("hours without a reading are not dry hours", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset})
		for hour := range 24 {
			if v, ok, err := b.Day(quantity.Precipitation, first); err != nil || ok && v.Known() {
				t.Fatalf("after %d hours: %+v, %v", hour, v, err)
			}
			if _, err := b.Add(rainAt(offset, float64(hour), 1, 0.5)); err != nil {
				t.Fatal(err)
			}
		}
		if v := day(t, b, quantity.Precipitation, first); !v.Known() || v.Value != 12 {
			t.Errorf("%+v, want 12", v)
		}
	})
	t.Run("a failed part of a total makes the day suspect", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset})
		bad := rainAt(offset, 5, 1, 300)
		bad.Flag = observation.Fail
		for _, o := range []observation.Observation{rainAt(offset, 3, 1, 2), bad} {
			if _, err := b.Add(o); err != nil {
				t.Fatal(err)
			}
		}
		if v := day(t, b, quantity.Precipitation, first); v.Known() {
			t.Errorf("%+v, want not known", v)
		}
	})
	t.Run("a mean is weighted by time, an extreme is the extreme", func(t *testing.T) {
		b := open(t, Options{Source: "mast", Offset: offset})
		for _, q := range []quantity.Quantity{quantity.AirTemperature, quantity.AirTemperatureMin, quantity.AirTemperatureMax} {
			for _, r := range []struct{ from, hours, v float64 }{{0, 6, 4}, {6, 18, 12}} {
				o := rainAt(offset, r.from, r.hours, r.v)
				o.Source, o.Quantity = "mast", q
				if _, err := b.Add(o); err != nil {
					t.Fatal(err)
				}
			}
		}
		for q, want := range map[quantity.Quantity]float64{quantity.AirTemperature: 10, quantity.AirTemperatureMin: 4, quantity.AirTemperatureMax: 12} {
			if v := day(t, b, q, first); v.Value != want {
				t.Errorf("%s %g, want %g", q, v.Value, want)
			}
		}
	})
	t.Run("a reading of exactly the day outweighs one that overlaps it", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset, Interval: 24 * time.Hour})
		for _, o := range []observation.Observation{rainAt(offset, 0, 24, 7), rainAt(offset, -2, 24, 40)} {
			if _, err := b.Add(o); err != nil {
				t.Fatal(err)
			}
		}
		if v := day(t, b, quantity.Precipitation, first); v.Value != 7 || !v.Known() {
			t.Errorf("%+v, want 7", v)
		}
	})
	t.Run("a day known as missing does not hide the hours that came after all", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset})
		missing := rainAt(offset, 0, 24, nan)
		missing.Flag = observation.Missing
		if _, err := b.Add(missing); err != nil {
			t.Fatal(err)
		}
		for hour := range 24 {
			if _, err := b.Add(rainAt(offset, float64(hour), 1, 1)); err != nil {
				t.Fatal(err)
			}
		}
		if v := day(t, b, quantity.Precipitation, first); !v.Known() || v.Value != 24 {
			t.Errorf("%+v, want 24", v)
		}
	})
	t.Run("known missing is missing, not zero", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset})
		o := rainAt(offset, 0, 24, nan)
		o.Flag = observation.Missing
		if _, err := b.Add(o); err != nil {
			t.Fatal(err)
		}
		if v := day(t, b, quantity.Precipitation, first); v.Known() || v.Flag != observation.Missing || v.Value == 0 {
			t.Errorf("%+v", v)
		}
	})
	t.Run("what is longer than two days is refused with a reason", func(t *testing.T) {
		b := open(t, Options{Source: "gauge", Offset: offset})
		_, err := b.Add(rainAt(offset, 0, 8*24, 30))
		var refused *Refusal
		if !errors.As(err, &refused) || !strings.Contains(refused.Reason, "composites") {
			t.Errorf("got %v", err)
		}
	})
}

func TestLaterAvailableWins(t *testing.T) {
	b := open(t, Options{Source: "gauge"})
	first := quantity.DateOf(2031, time.January, 1)
	raw, corrected := rainAt(0, 0, 24, 3), rainAt(0, 0, 24, 7)
	corrected.Available = corrected.Available.Add(40 * 24 * time.Hour)
	for i, o := range []observation.Observation{corrected, raw, corrected} {
		change, err := b.Add(o)
		if err != nil || change.Any != (i == 0) || change.Outdated != (i == 1) {
			t.Errorf("add %d: %+v, err %v", i, change, err)
		}
	}
	if v := day(t, b, quantity.Precipitation, first); v.Value != 7 {
		t.Errorf("%g, want the corrected 7", v.Value)
	}
}

// Design 4.2 and 4.3: the same observations in any order and repetition, with
// the book put down and taken up anywhere, give the same pages to the bit.
func TestOrderRepetitionAndRestoreDoNotMatter(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		const offset = -7 * time.Hour
		one := rapid.Custom(func(t *rapid.T) observation.Observation {
			from := float64(rapid.IntRange(-40, 40*24).Draw(t, "from"))
			hours := rapid.SampledFrom([]float64{0, 1, 6, 24, 30}).Draw(t, "hours")
			if rapid.Bool().Draw(t, "whole day") {
				from, hours = math.Floor(from/24)*24, 24
			}
			o := rainAt(offset, from, hours, float64(rapid.IntRange(0, 50).Draw(t, "mm"))/10)
			o.Available = o.Available.Add(time.Duration(rapid.IntRange(0, 3).Draw(t, "days")) * 24 * time.Hour).Add(time.Duration(rapid.IntRange(0, 1999).Draw(t, "ms")) * time.Millisecond)
			o.Flag = rapid.SampledFrom([]observation.Flag{observation.Pass, observation.NotEvaluated, observation.Fail}).Draw(t, "flag")
			return o
		})
		list := rapid.SliceOfN(one, 1, 60).Draw(t, "observations")
		interval := rapid.SampledFrom([]time.Duration{0, time.Hour}).Draw(t, "interval")
		opts := Options{Source: "gauge", Offset: offset, Interval: interval}

		straight := shelf{}
		b := open(t, opts)
		for _, o := range list {
			if _, err := b.Add(o); err != nil {
				t.Fatal(err)
			}
		}
		straight.put(t, b)

		mixed := append(rapid.Permutation(list).Draw(t, "order"), rapid.SliceOf(rapid.SampledFrom(list)).Draw(t, "again")...)
		cut := rapid.IntRange(0, len(mixed)).Draw(t, "cut")
		other := shelf{}
		opts.Shelf = other
		b = open(t, opts)
		for i, o := range mixed {
			if i == cut {
				other.put(t, b)
				b = open(t, opts)
			}
			if _, err := b.Add(o); err != nil {
				t.Fatal(err)
			}
		}
		other.put(t, b)
		if len(other) != len(straight) {
			t.Fatalf("%d parts, want %d", len(other), len(straight))
		}
		for key, want := range straight {
			if !bytes.Equal(other[key], want) {
				t.Fatalf("%s differs", key)
			}
		}
	})
}

func TestMovedOffsetIsRefused(t *testing.T) {
	s := shelf{}
	b := open(t, Options{Source: "gauge", Offset: time.Hour, Shelf: s})
	if _, err := b.Add(rainAt(time.Hour, 0, 24, 3)); err != nil {
		t.Fatal(err)
	}
	s.put(t, b)
	if _, err := Open(Options{Source: "gauge", Offset: 2 * time.Hour, Shelf: s}); !errors.Is(err, ErrOffset) {
		t.Errorf("got %v, want ErrOffset", err)
	}
}

func TestTrimReadsAgain(t *testing.T) {
	s := shelf{}
	b := open(t, Options{Source: "gauge", Shelf: s})
	if _, err := b.Add(rainAt(0, 0, 24, 3)); err != nil {
		t.Fatal(err)
	}
	late := quantity.DateOf(2040, time.June, 1)
	b.Trim(late)
	if len(b.pages) != 1 {
		t.Fatal("an unsaved page was let go")
	}
	s.put(t, b)
	b.Trim(late)
	if len(b.pages) != 0 {
		t.Fatal("a saved old page was kept")
	}
	if v := day(t, b, quantity.Precipitation, quantity.DateOf(2031, time.January, 1)); v.Value != 3 {
		t.Errorf("%g, want 3", v.Value)
	}
}

func BenchmarkAddDaily(b *testing.B) {
	book := open(b, Options{Source: "gauge"})
	o := rainAt(0, 0, 24, 3)
	for b.Loop() {
		o.Start, o.End = o.End, o.End.Add(24*time.Hour)
		if o.Start.Year() > 2060 {
			o = rainAt(0, 0, 24, 3)
		}
		if _, err := book.Add(o); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkDay(b *testing.B) {
	book := open(b, Options{Source: "gauge"})
	if _, err := book.Add(rainAt(0, 0, 24, 3)); err != nil {
		b.Fatal(err)
	}
	d := quantity.DateOf(2031, time.January, 1)
	b.ReportAllocs()
	for b.Loop() {
		if _, ok, _ := book.Day(quantity.Precipitation, d); !ok {
			b.Fatal("no value")
		}
	}
}
