package detectors

import (
	"bytes"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"github.com/fxamacker/cbor/v2"
	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"saprolite/detectors/climate"
	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

var nan = math.NaN()

// options is an invented stand.
func options() Options {
	return Options{
		ID: "ashlar", Site: climate.Site{Latitude: 36, Elevation: 400}, Coefficient: 1, CanopyStore: 0,
		StorageLimit: quantity.Millimetres(nan), ExtraWater: "none", YearStart: 1,
		StoreLow: StoreLow{Left: [4]float64{0.40, 0.25, 0.10, 0.03}, EnterDays: 3, LeaveDays: 7}, FeedSilent: FeedSilent{Days: 3, BlindDays: 10}, RainFrom: "gauge", AirFrom: "mast",
	}
}

var firstDay = quantity.DateOf(2031, time.January, 1)

// dry is a day without rain and with a given reference evapotranspiration.
func dry(d quantity.Day, et float64) Inputs { return wet(d, 0, et) }

func wet(d quantity.Day, rain, et float64) Inputs {
	in := NoInputs(d)
	in.Precipitation = quantity.Millimetres(rain)
	in.Weather.Given = quantity.Millimetres(et)
	return in
}

// season makes one day of an invented climate with dry summers; some days
// lack rain or air, some have greenness or measured evapotranspiration.
func season(d quantity.Day, seed uint64) Inputs {
	r := rand.New(rand.NewPCG(seed, uint64(d)))
	winter := math.Cos(2 * math.Pi * (float64(d.YearDay()) - 20) / 365)
	in := wet(d, 0, 2.5-2*winter)
	if r.Float64() < 0.3+0.28*winter {
		in.Precipitation = quantity.Millimetres(r.ExpFloat64() * 12)
	}
	if r.Float64() < 0.02 {
		in.Precipitation = quantity.Millimetres(nan)
	}
	if r.Float64() < 0.02 {
		in.Weather.Given = quantity.Millimetres(nan)
	}
	if d%5 == 0 {
		in.Greenness = quantity.Index(0.5 + 0.1*winter + 0.03*r.NormFloat64())
	}
	return in
}

func settle(s *Stand, to quantity.Day, day func(quantity.Day) Inputs) {
	for d := s.State.Day + 1; d <= to; d++ {
		in := day(d)
		s.Step(&in)
	}
}

func headBytes(t interface{ Fatal(...any) }, s *Stand) []byte {
	mode, err := cbor.CoreDetEncOptions().EncMode()
	if err != nil {
		t.Fatal(err)
	}
	b, err := mode.Marshal(s.Head())
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func decodeHead(t interface{ Fatal(...any) }, b []byte) Head {
	var h Head
	if err := cbor.Unmarshal(b, &h); err != nil {
		t.Fatal(err)
	}
	return h
}

// Design 4.3: restored equals never stopped, to the bit.
func TestRestoredEqualsNeverStopped(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		seed := rapid.Uint64().Draw(t, "seed")
		days := rapid.IntRange(1, 3000).Draw(t, "days")
		cut := rapid.IntRange(0, days).Draw(t, "cut")
		opts := options()
		if rapid.Bool().Draw(t, "configured") {
			opts.StorageLimit = 250
		}
		day := func(d quantity.Day) Inputs { return season(d, seed) }
		end := firstDay + quantity.Day(days)
		straight := New(opts, firstDay)
		settle(straight, end, day)

		s := New(opts, firstDay)
		settle(s, firstDay+quantity.Day(cut), day)
		s, err := Restore(opts, decodeHead(t, headBytes(t, s)))
		if err != nil {
			t.Fatal(err)
		}
		settle(s, end, day)
		if !bytes.Equal(headBytes(t, s), headBytes(t, straight)) {
			t.Fatalf("differs:\n%s", cmp.Diff(straight.Head(), s.Head()))
		}
	})
}

// Design 4.2: late data settle to the same account as data that were there
// from the start, however old they are.
func TestLateDataEqualsInTime(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		seed := rapid.Uint64().Draw(t, "seed")
		days := rapid.IntRange(2, 3000).Draw(t, "days")
		late := firstDay + quantity.Day(rapid.IntRange(0, days-1).Draw(t, "late"))
		end := firstDay + quantity.Day(days)
		before := func(d quantity.Day) Inputs { return season(d, seed) }
		after := func(d quantity.Day) Inputs {
			in := season(d, seed)
			if d == late {
				in.Precipitation = 80
			}
			return in
		}
		straight := New(options(), firstDay)
		settle(straight, end, after)

		s := New(options(), firstDay)
		settle(s, end, before)
		if rapid.Bool().Draw(t, "restored in between") {
			var err error
			if s, err = Restore(options(), decodeHead(t, headBytes(t, s))); err != nil {
				t.Fatal(err)
			}
		}
		if next := s.Rewind(late); next > late {
			t.Fatalf("rewound to %s, after the late day %s", next, late)
		}
		settle(s, end, after)
		if !bytes.Equal(headBytes(t, s), headBytes(t, straight)) {
			t.Fatalf("differs:\n%s", cmp.Diff(straight.Head(), s.Head()))
		}
	})
}

// Design 3.7: a head is under 64 KB, after 40 years too.
func TestHeadStaysSmall(t *testing.T) {
	s := New(options(), firstDay)
	settle(s, firstDay+40*365, func(d quantity.Day) Inputs { return season(d, 3) })
	if n := len(headBytes(t, s)); n > 64<<10 {
		t.Errorf("head has %d bytes after 40 years", n)
	} else {
		t.Logf("head has %d bytes after 40 years, %d checkpoints", n, len(s.Head().Checkpoints))
	}
}

func TestStepAllocatesNothing(t *testing.T) {
	s := New(options(), firstDay)
	settle(s, firstDay+400, func(d quantity.Day) Inputs { return season(d, 3) })
	n := testing.AllocsPerRun(200, func() {
		in := season(s.State.Day+1, 3)
		s.Step(&in)
	})
	base := testing.AllocsPerRun(200, func() { in := season(s.State.Day+1, 3); _ = in })
	if n > base {
		t.Errorf("%g allocations a day, %g of them the test's", n, base)
	}
}

// Design 4.6: a day without rain data neither dries nor wets the stand.
func TestMissingIsNotZero(t *testing.T) {
	s := New(options(), firstDay)
	settle(s, firstDay+9, func(d quantity.Day) Inputs { return dry(d, 4) })
	before := s.Today.Deficit
	in := NoInputs(s.State.Day + 1)
	in.Weather.Given = 4
	s.Step(&in)
	if s.Today.Deficit != before || !s.Today.Still || !math.IsNaN(float64(s.Today.Flux.ActualET)) {
		t.Errorf("without rain data: deficit %v, was %v; still %v", s.Today.Deficit, before, s.Today.Still)
	}
}

// Rain that is known is not lost for want of air data: evapotranspiration is
// the stand's own of the days before, and such days do not count as known.
func TestEvapotranspirationMissing(t *testing.T) {
	s := New(options(), firstDay)
	settle(s, firstDay+99, func(d quantity.Day) Inputs { return dry(d, 4) })
	before, known := s.Today.Deficit, s.Running().Known
	in := NoInputs(s.State.Day + 1)
	in.Precipitation = 30
	s.Step(&in)
	if want := before - 30 + 4; math.Abs(float64(s.Today.Deficit-want)) > 1e-9 || s.Today.Still || s.Today.Basis.String() != "own-mean" {
		t.Errorf("deficit %v, want %v; still %v, basis %s", s.Today.Deficit, want, s.Today.Still, s.Today.Basis)
	}
	if s.Running().Known != known {
		t.Error("the day counts as known")
	}
	// Measured evapotranspiration has a short store's restraint in it already.
	opts := options()
	opts.StorageLimit = 100
	tower := New(opts, firstDay)
	settle(tower, firstDay+89, func(d quantity.Day) Inputs {
		in := wet(d, 0, 4)
		in.ActualET = 1
		return in
	})
	in = NoInputs(tower.State.Day + 1)
	in.Precipitation = 0
	tower.Step(&in)
	if got := float64(tower.Today.Flux.ActualET); math.Abs(got-1) > 1e-6 {
		t.Errorf("without the tower %g mm, want its mean of 1", got)
	}
	fresh := New(options(), firstDay)
	in = NoInputs(firstDay)
	in.Precipitation = 30
	fresh.Step(&in)
	if !fresh.Today.Still {
		t.Error("an account that never had air data moves")
	}
}

// What rain is missing here and there is the year's completeness, no more
// (methods B.1).
func TestScatteredGapsLeaveTheYears(t *testing.T) {
	s := New(options(), firstDay)
	settle(s, firstDay+8*365+2, func(d quantity.Day) Inputs {
		in := season(d, 5)
		if d%25 == 0 {
			in.Precipitation = quantity.Millimetres(nan)
		}
		return in
	})
	if n := len(s.maxima()); n != 8 {
		t.Errorf("%d complete years of 8 with 8 %% of days missing", n)
	}
}

// After a long gap in the rain the deficit is a guess until the store has
// been seen full: the year's maximum does not count, and messages say so.
func TestLongGapUnanchors(t *testing.T) {
	opts := options()
	opts.StorageLimit = 100
	s := New(opts, firstDay)
	settle(s, firstDay+5, func(d quantity.Day) Inputs { return wet(d, 9, 1) })
	settle(s, firstDay+40, func(d quantity.Day) Inputs {
		in := NoInputs(d)
		in.Weather.Given = 3
		return in
	})
	settle(s, firstDay+90, func(d quantity.Day) Inputs { return dry(d, 3) })
	f := s.Findings()
	if s.State.Anchored || s.State.Unseen != 35 || len(f) != 1 || !strings.Contains(f[0].Reason, "Rain data of 35 days are missing") {
		t.Fatalf("anchored %v, missed %d days, findings %+v", s.State.Anchored, s.State.Unseen, f)
	}
	if s.Running().Anchored {
		t.Error("a maximum of a guessed deficit counts")
	}
	settle(s, firstDay+100, func(d quantity.Day) Inputs { return wet(d, 60, 1) })
	if !s.State.Anchored || s.State.Unseen != 0 {
		t.Errorf("after refilling: anchored %v, missed %d days", s.State.Anchored, s.State.Unseen)
	}
}

// With a limit of 100 mm, no stress before half of it and 2 mm a day, the
// days follow from methods H.1 by counting: a level is entered on the third
// day in a row of a chance of 0.5 or more, and left on the seventh of less
// than 0.2, which is more than 0.101 above its threshold.
func TestStoreLowLevels(t *testing.T) {
	opts := options()
	opts.StorageLimit = 100
	s := New(opts, firstDay)
	in := wet(firstDay, 10, 0)
	s.Step(&in)
	type step struct {
		Day   int
		Level finding.Level
	}
	var got []step
	last := finding.Level("")
	for d := 1; d < 200; d++ {
		in := dry(s.State.Day+1, 0)
		in.ActualET = 1 + 1e-9 // measured: 1 mm a day whatever the store, and a hair so that rounding decides nothing
		if d > 120 {
			in.Precipitation = 3 // refills 2 mm a day
		}
		s.Step(&in)
		level := finding.Level("")
		if f := s.Findings(); len(f) > 0 {
			level = f[0].Level
		}
		if level != last {
			got = append(got, step{d, level})
			last = level
		}
	}
	// Falling: the share left on day d is 1 - d/100. From day 121 on the
	// deficit falls from 120 by 2 mm a day: on day d it is 360 - 2d mm.
	want := []step{
		{62, finding.DrawingDown}, // 0.40 on day 60
		{77, finding.Low},
		{92, finding.NearlySpent},
		{99, finding.Spent},
		{143, finding.NearlySpent}, // more than 0.131 from day 137 on
		{147, finding.Low},         // more than 0.201 from 141 on
		{154, finding.DrawingDown}, // more than 0.351 from 148 on
		{162, ""},                  // more than 0.501 from 156 on
	}
	if diff := cmp.Diff(want, got); diff != "" {
		t.Errorf("levels (-want +got):\n%s", diff)
	}
	past := s.Past()
	if len(past) != 1 || past[0].Worst != finding.Spent || past[0].Onset != firstDay+60 || past[0].Ended != firstDay+162 || past[0].Unusual != FewYears {
		t.Errorf("closed episodes %+v", past)
	}
}

// years settles whole years that each reach a deficit on a day of the year.
func years(s *Stand, n int, deepest quantity.Millimetres, from int) {
	for range n {
		begin := s.State.Day + 1
		for s.State.Day+1 < begin+365 || !beginsYear(s.State.Day+1, 1) {
			d := int(s.State.Day + 1 - begin)
			in := dry(s.State.Day+1, 0)
			in.ActualET = 0
			switch {
			case d >= from && d < from+100:
				in.ActualET = deepest / 100
			case d >= 340:
				in.Precipitation = 100
			}
			s.Step(&in)
		}
	}
}

// Design 5.6: what comes every dry season is no message; what does not, is.
func TestUnusual(t *testing.T) {
	fresh := func(ordinary quantity.Millimetres) *Stand {
		opts := options()
		opts.StorageLimit = 200
		s := New(opts, firstDay)
		in := wet(firstDay, 50, 0)
		s.Step(&in)
		years(s, 6, ordinary, 150)
		return s
	}
	run := func(s *Stand, deepest quantity.Millimetres, from int) (Unusual, bool) {
		before := len(s.Past())
		years(s, 1, deepest, from)
		past := s.Past()[before:]
		if len(past) == 0 {
			return "", false
		}
		return past[0].Unusual, true
	}
	t.Run("as every year", func(t *testing.T) {
		if why, told := run(fresh(130), 130, 150); told {
			t.Errorf("told: %s", why)
		}
	})
	t.Run("a level seldom reached", func(t *testing.T) {
		if why, told := run(fresh(130), 170, 150); !told || why != Seldom {
			t.Errorf("told %v: %q", told, why)
		}
	})
	t.Run("thirty days early", func(t *testing.T) {
		if why, told := run(fresh(130), 130, 120); !told || why != Early {
			t.Errorf("told %v: %q", told, why)
		}
	})
	t.Run("ten days early is not early", func(t *testing.T) {
		if why, told := run(fresh(130), 130, 140); told {
			t.Errorf("told: %s", why)
		}
	})
	t.Run("deeper than ever at the same level", func(t *testing.T) {
		if why, told := run(fresh(130), 140, 150); !told || why != Beyond {
			t.Errorf("told %v: %q", told, why)
		}
	})
	t.Run("before five years the level alone decides", func(t *testing.T) {
		opts := options()
		opts.StorageLimit = 200
		s := New(opts, firstDay)
		in := wet(firstDay, 50, 0)
		s.Step(&in)
		years(s, 1, 130, 150)
		if past := s.Past(); len(past) != 1 || past[0].Unusual != FewYears {
			t.Errorf("closed episodes %+v", past)
		}
	})
}

func TestFeedSilent(t *testing.T) {
	s := New(options(), firstDay)
	settle(s, firstDay+5, func(d quantity.Day) Inputs { return wet(d, 5, 1) })
	levels := map[int]finding.Level{}
	for i := 1; i <= 14; i++ {
		in := NoInputs(s.State.Day + 1)
		in.Weather.Given = 2
		s.Step(&in)
		for _, f := range s.Findings() {
			levels[i] = f.Level
			if f.Onset != firstDay+6 {
				t.Errorf("day %d: onset %s, want %s", i, f.Onset, firstDay+6)
			}
		}
	}
	for i := 1; i <= 14; i++ {
		want := finding.Level("")
		switch {
		case i > 10:
			want = finding.Blind
		case i > 3:
			want = finding.Silent
		}
		if levels[i] != want {
			t.Errorf("day %d without rain data: %q, want %q", i, levels[i], want)
		}
	}
	if since, blind := s.Blind(); !blind || since != firstDay+6 {
		t.Errorf("blind %v since %s", blind, since)
	}
	in := wet(s.State.Day+1, 0, 2)
	s.Step(&in)
	if f := s.Findings(); len(f) != 0 {
		t.Errorf("still %+v after data came", f)
	}
}

func TestLimit(t *testing.T) {
	settled := func(change func(*Options), n int) *Stand {
		opts := options()
		change(&opts)
		s := New(opts, firstDay)
		in := wet(firstDay, 50, 0)
		s.Step(&in)
		years(s, n, 130, 150)
		return s
	}
	for _, c := range []struct {
		name   string
		change func(*Options)
		years  int
		known  bool
		basis  string
	}{
		{"too few years", func(*Options) {}, 4, false, "unknown: 4 complete years of annual maxima, needs 5"},
		{"enough years", func(*Options) {}, 5, true, "once-in-20-years deficit from 5 complete years, measured evapotranspiration"},
		{"configured", func(o *Options) { o.StorageLimit = 90 }, 5, true, "configured"},
		{"extra water", func(o *Options) { o.StorageLimit, o.ExtraWater = 90, "known" }, 5, false, "unknown: extra water is known; the account is what rain alone explains"},
		{"young", func(o *Options) { o.Established = 2028 }, 6, false, "unknown: roots still deepening, planted 2028"},
	} {
		t.Run(c.name, func(t *testing.T) {
			l := settled(c.change, c.years).Limit()
			if l.Known() != c.known || l.Basis != c.basis {
				t.Errorf("known %v, basis %q; want %v, %q", l.Known(), l.Basis, c.known, c.basis)
			}
		})
	}
}

// An account that has never seen its store full does not count its years.
func TestNeverFullIsNotComplete(t *testing.T) {
	s := New(options(), firstDay)
	settle(s, firstDay+6*365, func(d quantity.Day) Inputs { return dry(d, 1) })
	if l := s.Limit(); l.Known() {
		t.Errorf("limit %v from years that never saw the store full", l)
	}
}

func TestYearDay(t *testing.T) {
	for _, c := range []struct {
		day    quantity.Day
		start  int
		begins bool
	}{
		{quantity.DateOf(2032, time.March, 1), 60, true},
		{quantity.DateOf(2032, time.February, 29), 60, false},
		{quantity.DateOf(2032, time.February, 29), 59, false},
		{quantity.DateOf(2031, time.March, 1), 60, true},
		{quantity.DateOf(2032, time.October, 1), 274, true},
		{quantity.DateOf(2031, time.October, 1), 274, true},
		{quantity.DateOf(2032, time.January, 1), 1, true},
	} {
		if got := beginsYear(c.day, c.start); got != c.begins {
			t.Errorf("%s begins the year of day %d: %v", c.day, c.start, got)
		}
	}
}

func BenchmarkStep(b *testing.B) {
	s := New(options(), firstDay)
	var days [365]Inputs
	for i := range days {
		days[i] = season(firstDay+quantity.Day(i), 3)
		w := &days[i].Weather
		w.Given = quantity.Millimetres(nan)
		w.TMin, w.TMax, w.RHMean, w.Wind2m, w.Solar = 8, 21, 60, 2, 18
	}
	b.ReportAllocs()
	for i := 0; b.Loop(); i++ {
		if i%(20*365) == 0 {
			s = New(options(), firstDay) // a stand with up to 20 years behind it
		}
		in := &days[i%365]
		in.Weather.Day = s.State.Day + 1
		s.Step(in)
	}
}
