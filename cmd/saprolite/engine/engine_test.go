package engine

import (
	"bytes"
	"fmt"
	"maps"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"saprolite/alerts"
	"saprolite/detectors/finding"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// Design 4.2: the same observations, known at the same times, in any order and
// repetition and with ticks anywhere in between, make the same pages, heads
// and days, to the bit, and leave the same alerts open.
func TestOrderDoesNotMatter(t *testing.T) {
	t.Parallel()
	const mostDelay = 15 // days
	var all []alerts.Message
	rapid.Check(t, func(t *rapid.T) {
		seed := rapid.Uint64().Draw(t, "seed")
		days := rapid.IntRange(20, 90).Draw(t, "days")
		r := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "order"), 2))
		list := history(firstDay, days, seed)
		end := (firstDay + quantity.Day(days+mostDelay)).Start(zone).Add(time.Duration(rapid.IntRange(0, 12).Draw(t, "blind at the end")) * wholeDay)
		if known := list[len(list)-1].Available; known.After(end) {
			end = known
		}

		inOrder := &alerts.Memory{}
		one, want := open(t, without("birchen", options(shelf{}, inOrder))), shelf{}
		take(t, one, stream(t, list, append(everyDay(firstDay, days), end))...)
		want.save(t, one)

		var events []event
		for _, o := range list {
			for range 1 + r.IntN(5)/4 {
				at := o.Available.Add(time.Duration(r.Float64() * r.Float64() * mostDelay * float64(wholeDay)))
				if at.After(end) {
					at = end
				}
				events = append(events, event{at, pack(t, o)})
			}
		}
		for range r.IntN(60) {
			at := firstDay.Start(zone).Add(time.Duration(r.IntN(days*24)) * time.Hour)
			events = append(events, event{at, tick(at)})
		}
		slices.SortStableFunc(events, func(a, b event) int { return a.at.Compare(b.at) })
		shuffled := &alerts.Memory{}
		other, got := open(t, without("birchen", options(shelf{}, shuffled))), shelf{}
		take(t, other, numbered(append(events, event{end, tick(end)}))...)
		got.save(t, other)

		if a, b := dailyFile(t, one), dailyFile(t, other); a != b {
			t.Fatalf("daily files differ:\n%s", firstDifference(a, b))
		}
		sameBooks(t, want, got)
		if diff := cmp.Diff(openIn(inOrder.Messages), openIn(shuffled.Messages)); diff != "" {
			t.Fatalf("open alerts (-in order +shuffled):\n%s", diff)
		}
		if diff := cmp.Diff(holds(other), openIn(shuffled.Messages)); diff != "" {
			t.Fatalf("open alerts (-account +record):\n%s", diff)
		}
		oncePerID(t, shuffled.Messages)
		all = append(all, shuffled.Messages...)
	})
	eventful(t, all)
}

// sameBooks holds that two shelves have the same books, save the cursor.
func sameBooks(t must, want, got shelf) {
	t.Helper()
	if a, b := slices.Sorted(maps.Keys(want)), slices.Sorted(maps.Keys(got)); !slices.Equal(a, b) {
		t.Fatalf("books %v, want %v", b, a)
	}
	for key := range want {
		if key != CursorKey && !bytes.Equal(want[key], got[key]) {
			t.Fatalf("book %s differs", key)
		}
	}
}

// An account needs rain data to begin; what came before then stays known.
func TestAccountBeginsWithRain(t *testing.T) {
	e := open(t, options(nil, &alerts.Memory{}))
	for d := firstDay; d < firstDay+10; d++ {
		take(t, e, pack(t, daily("mast-1", quantity.ReferenceEvapotranspiration, d, 4)), tick(d.End(zone).Add(7*time.Hour)))
	}
	if v, _ := e.Stand("ashlar"); v.Account != nil {
		t.Fatal("an account without rain data")
	}
	d := firstDay + 5
	take(t, e, pack(t, daily("gauge-1", quantity.Precipitation, d, 10)), tick(e.Now()))
	v, ok := e.Stand("ashlar")
	if !ok || v.Account == nil || v.Account.First() != d || v.Account.State.Day != firstDay+9 {
		t.Fatalf("account %+v, want it to begin on %s", v.Account, d)
	}
	if _, ok := e.Stand("nowhere"); ok {
		t.Error("a stand that is not registered")
	}
	// Rain of a day before moves the beginning.
	take(t, e, pack(t, daily("gauge-1", quantity.Precipitation, d-2, 10)), tick(e.Now()))
	if v, _ := e.Stand("ashlar"); v.Account.First() != d-2 {
		t.Errorf("account begins on %s, want %s", v.Account.First(), d-2)
	}
}

// A day closes at six of the stand's own morning; what is settled is told, and
// a value of an open day settles nothing.
func TestDayClosesAtSix(t *testing.T) {
	e := open(t, options(nil, &alerts.Memory{}))
	take(t, e, pack(t, daily("gauge-1", quantity.Precipitation, firstDay, 10)), pack(t, daily("mast-1", quantity.ReferenceEvapotranspiration, firstDay, 4)))
	settled := func() (list []string) {
		for _, v := range e.Stands() {
			if v.Account != nil {
				list = append(list, v.Setup.Info.ID+" "+v.Account.State.Day.String())
			}
		}
		return list
	}
	six := firstDay.End(0).Add(6 * time.Hour) // UTC
	for _, c := range []struct {
		at   time.Time
		want []string
	}{
		{six.Add(-2*time.Hour - time.Second), nil},
		{six.Add(-2 * time.Hour), []string{"cobble 2031-09-01"}}, // two hours east
		{six.Add(-time.Hour), []string{"ashlar 2031-09-01", "birchen 2031-09-01", "cobble 2031-09-01"}},
	} {
		take(t, e, tick(c.at))
		if diff := cmp.Diff(c.want, settled()); diff != "" {
			t.Errorf("settled at %s (-want +got):\n%s", c.at, diff)
		}
	}
	before := e.Counts()
	take(t, e, pack(t, daily("gauge-1", quantity.Precipitation, firstDay+1, 3)))
	if !e.Unsettled() {
		t.Error("new data and nothing to settle")
	}
	take(t, e, tick(six.Add(time.Hour)))
	if after := e.Counts(); after.StandDays != before.StandDays || after.Resettled != 0 || e.Unsettled() {
		t.Errorf("a value of an open day: %+v, before %+v", after, before)
	}
}

// manyStands is an engine with n stands that draw on the same sources, half a
// year settled.
func manyStands(t must, n int) *Engine {
	opts := options(nil, &alerts.Memory{})
	like := opts.Stands[0]
	opts.Stands = nil
	for i := range n {
		like.Info.ID = fmt.Sprintf("stand-%04d", i)
		like.Options.ID = like.Info.ID
		opts.Stands = append(opts.Stands, like)
	}
	e := open(t, opts)
	take(t, e, loaded(t, history(firstDay, 180, 3))...)
	take(t, e, tick((firstDay + 180).Start(zone).Add(7*time.Hour)))
	return e
}

func TestQuietTickAllocatesNothing(t *testing.T) {
	e := manyStands(t, 20)
	at := e.Now()
	n := testing.AllocsPerRun(10, func() {
		at = at.Add(time.Minute)
		told, err := e.Tick(at)
		if err != nil || len(told) > 0 {
			t.Fatal(told, err)
		}
	})
	if n > 0 {
		t.Errorf("%g allocations in a tick in which nothing happens", n)
	}
	if days := e.Counts().StandDays; days != 20*180 {
		t.Errorf("%d stand-days settled, want 20 x 180", days)
	}
}

// The count of what was told is of what people were told.
func TestCountsWhatWasTold(t *testing.T) {
	record := &alerts.Memory{}
	e := open(t, options(nil, record))
	take(t, e, tick((firstDay + 260).Start(zone)))
	take(t, e, loaded(t, history(firstDay, 260, 3))...)
	take(t, e, tick((firstDay + 260).Start(zone).Add(7*time.Hour)))
	want := map[finding.Kind]uint64{}
	for _, m := range record.Messages {
		if m.Told {
			want[m.Kind]++
		}
	}
	if count(record.Messages, func(m alerts.Message) bool { return !m.Told }) == 0 {
		t.Error("nothing was only recorded")
	}
	if diff := cmp.Diff(want, e.Counts().Told); diff != "" {
		t.Errorf("counted as told (-want +got):\n%s", diff)
	}
}

// A tick in which nothing happens, with 1000 stands.
func BenchmarkQuietTick(b *testing.B) {
	e := manyStands(b, 1000)
	at := e.Now()
	b.ReportAllocs()
	for b.Loop() {
		at = at.Add(time.Millisecond)
		if _, err := e.Tick(at); err != nil {
			b.Fatal(err)
		}
	}
}

// One stand settled again over a year, from its pages.
func BenchmarkSettleYear(b *testing.B) {
	opts := options(nil, &alerts.Memory{})
	opts.Stands = opts.Stands[:1]
	e := open(b, opts)
	const days = 365
	take(b, e, loaded(b, history(firstDay, days, 3))...)
	take(b, e, tick((firstDay + days).Start(zone).Add(7*time.Hour)))
	o := daily("gauge-1", quantity.Precipitation, firstDay+1, 0)
	src := e.sources["gauge-1"]
	before := e.Counts().StandDays
	b.ReportAllocs()
	n := 0
	for b.Loop() {
		n++
		o.Value, o.Available = float64(n%2), o.Available.Add(time.Second)
		o.Flag = observation.NotEvaluated
		if err := e.add(o, src); err != nil {
			b.Fatal(err)
		}
		if _, err := e.Tick(e.Now()); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(e.Counts().StandDays-before), "ns/stand-day")
}
