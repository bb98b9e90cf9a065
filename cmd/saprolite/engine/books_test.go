package engine

import (
	"bytes"
	"fmt"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"saprolite/alerts"
	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

const brokenDays = 95 // days of the history that restarts are tried on: the end of a dry season

// straight is a run that was never stopped.
type straight struct {
	messages []Message
	record   *alerts.Memory
	books    shelf
	daily    string
}

func runStraight(t must, seed uint64) straight {
	t.Helper()
	s := straight{record: &alerts.Memory{}, books: shelf{}}
	list := history(firstDay, brokenDays, seed)
	settled := list[len(list)-1].Available.Add(30 * wholeDay) // after everything is known
	s.messages = stream(t, list, append(everyDay(firstDay, brokenDays), settled))
	e := open(t, without("birchen", options(shelf{}, s.record)))
	take(t, e, s.messages...)
	s.books.save(t, e)
	s.daily = dailyFile(t, e)
	return s
}

// Design 4.3 and section 3: stopped at any message and restored, or killed at
// any message with the books of some time before, or killed between two parts
// of a save: the account ends as if never stopped and nothing is told twice.
func TestRestoredEqualsNeverStopped(t *testing.T) {
	t.Parallel()
	var runs []straight
	var all []alerts.Message
	for seed := range uint64(3) {
		runs = append(runs, runStraight(t, seed+3))
		all = append(all, runs[seed].record.Messages...)
	}
	if eventful(t, all); t.Failed() {
		return
	}
	rapid.Check(t, func(t *rapid.T) {
		want := runs[rapid.IntRange(0, len(runs)-1).Draw(t, "history")]
		books, record := shelf{}, &alerts.Memory{}
		restart := func() *Engine { return open(t, without("birchen", options(books, record))) }
		e, exact := restart(), true
		for range rapid.IntRange(1, 4).Draw(t, "stops") {
			at := rapid.IntRange(int(e.Cursor()), len(want.messages)).Draw(t, "messages before")
			take(t, e, want.messages[e.Cursor():at]...)
			switch rapid.SampledFrom([]string{"saved", "killed", "killed while saving"}).Draw(t, "stopped") {
			case "saved":
				books.save(t, e)
			case "killed while saving":
				exact = false
				entries, err := e.Changed()
				if err != nil {
					t.Fatal(err)
				}
				under, err := e.UnderWay(books[CursorKey])
				if err != nil {
					t.Fatal(err)
				}
				books[under.Key] = under.Data
				for _, entry := range entries[:rapid.IntRange(0, len(entries)).Draw(t, "parts written")] {
					books[entry.Key] = entry.Data
				}
			}
			e = restart()
		}
		take(t, e, want.messages[e.Cursor():]...)
		books.save(t, e)

		if got := dailyFile(t, e); got != want.daily {
			t.Fatalf("daily file differs:\n%s", firstDifference(want.daily, got))
		}
		sameBooks(t, want.books, books)
		if !bytes.Equal(books[CursorKey], want.books[CursorKey]) {
			t.Fatal("the cursor differs")
		}
		if exact {
			if diff := cmp.Diff(jsonLines(t, want.record.Messages), jsonLines(t, record.Messages)); diff != "" {
				t.Fatalf("record (-never stopped +restored):\n%s", diff)
			}
			return
		}
		// Pages that were written know data before the ticks that are taken in
		// again: what they change may be told at another hour, or not at all
		// where it is taken back at once.
		oncePerID(t, record.Messages)
		if diff := cmp.Diff(openIn(want.record.Messages), openIn(record.Messages)); diff != "" {
			t.Fatalf("open alerts (-never stopped +restored):\n%s", diff)
		}
	})
}

// A stand whose setup has changed settles again from its pages' first day, as
// if it had always been so; what that changes in the past is recorded, and
// only what holds now is told.
func TestChangedSetupSettlesAgain(t *testing.T) {
	books, record := shelf{}, &alerts.Memory{}
	const days = 400 // to the second dry season
	list := history(firstDay, days, 5)
	messages := stream(t, list, everyDay(firstDay, days))
	e := open(t, options(books, record))
	take(t, e, messages...)
	books.save(t, e)
	before := len(record.Messages)
	eventful(t, record.Messages)

	changed := func(s shelf, r alerts.Record) Options {
		o := options(s, r)
		o.Stands[0].Options.StorageLimit = 400 // was 150
		return o
	}
	e = open(t, changed(books, record))
	if v, _ := e.Stand("ashlar"); v.Account != nil {
		t.Fatal("the account of the old setup goes on")
	}
	if v, _ := e.Stand("cobble"); v.Account == nil {
		t.Fatal("an account whose setup is the same was given up")
	}
	at := e.Now().Add(time.Hour)
	told := take(t, e, tick(at))

	fresh := open(t, changed(nil, &alerts.Memory{}))
	take(t, fresh, append(messages, tick(at))...)
	if a, b := dailyFile(t, fresh), dailyFile(t, e); a != b {
		t.Errorf("daily files differ:\n%s", firstDifference(a, b))
	}
	if diff := cmp.Diff(holds(fresh), openIn(record.Messages)); diff != "" {
		t.Errorf("open alerts (-account +record):\n%s", diff)
	}
	oncePerID(t, record.Messages)
	if len(told) == 0 {
		t.Fatal("the change changed nothing")
	}
	for _, m := range record.Messages[before:] {
		if m.Stand != "ashlar" || m.Kind != finding.StoreLow {
			t.Errorf("message about %s of %s, which did not change", m.Kind, m.Stand)
		}
		if m.MsgType == alerts.Cancel && (m.Ended < m.Onset || m.Ended > quantity.DayOf(at, zone)) {
			t.Errorf("%s: began %s, ended %s", m.MessageID(), m.Onset, m.Ended)
		}
	}
	// Told again by the same setup, nothing is said.
	books.save(t, e)
	e = open(t, changed(books, record))
	if told := take(t, e, tick(at.Add(time.Hour))); len(told) > 0 {
		t.Errorf("said again: %+v", told)
	}
}

// A head that cannot be read, or that another schema made, is made again.
func TestUnreadableHeadIsMadeAgain(t *testing.T) {
	books, record := shelf{}, &alerts.Memory{}
	e := open(t, options(books, record))
	take(t, e, stream(t, history(firstDay, 100, 3), everyDay(firstDay, 100))...)
	books.save(t, e)
	want := dailyFile(t, e)
	good := books[HeadKey("ashlar")]
	h, err := DecodeHead(good)
	if err != nil {
		t.Fatal(err)
	}
	h.Head.Schema++
	other, err := encoding.Marshal(h)
	if err != nil {
		t.Fatal(err)
	}
	for name, data := range map[string][]byte{"rubbish": []byte("rubbish"), "another schema": other} {
		t.Run(name, func(t *testing.T) {
			books[HeadKey("ashlar")] = data
			e := open(t, options(books, record))
			if told := take(t, e, tick(e.Now().Add(time.Hour))); len(told) > 0 {
				t.Errorf("told %+v", told)
			}
			if got := dailyFile(t, e); got != want {
				t.Errorf("daily file differs:\n%s", firstDifference(want, got))
			}
			books.save(t, e)
			if !bytes.Equal(books[HeadKey("ashlar")], good) {
				t.Error("the head was not made again as it was")
			}
		})
	}
}

// The cursor comes last, after everything it speaks for.
func TestCursorIsWrittenLast(t *testing.T) {
	e := open(t, options(shelf{}, &alerts.Memory{}))
	if e.Dirty() {
		t.Error("dirty before anything happened")
	}
	take(t, e, stream(t, history(firstDay, 40, 3), everyDay(firstDay, 70))...)
	entries, err := e.Changed()
	if err != nil {
		t.Fatal(err)
	}
	var order string
	for _, entry := range entries {
		order += fmt.Sprintf("%.4s ", entry.Key)
	}
	want := "sour page sour page sour page sour page head head head curs "
	if order != want || !e.Dirty() {
		t.Errorf("order of the books %s, want %s; dirty %v", order, want, e.Dirty())
	}
	e.Saved()
	if entries, err = e.Changed(); err != nil || len(entries) != 1 || entries[0].Key != CursorKey || e.Dirty() {
		t.Errorf("after the save: %d books, %v; dirty %v", len(entries), err, e.Dirty())
	}
}

// A stand that draws from a source that is not registered is a mistake of
// whoever wired it.
func TestUnregisteredDrawIsRefused(t *testing.T) {
	o := options(nil, &alerts.Memory{})
	o.Stands[0].Draws = append(o.Stands[0].Draws, Draw{Quantity: quantity.NDVI, Source: "sat-9", Scale: 1})
	if _, err := New(o); err == nil {
		t.Error("no error")
	}
}
