package engine

import (
	"encoding/json"
	"slices"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"saprolite/alerts"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// cast runs a hindcast up to the end of day to; NoDay: of the history.
func cast(t must, list []observation.Observation, to quantity.Day) (*Engine, []alerts.Message) {
	t.Helper()
	record := &alerts.Memory{}
	e := open(t, options(nil, record))
	h := NewHindcast(e)
	for _, o := range list {
		if held := h.Add(o); held != nil {
			t.Fatalf("held: %+v", held)
		}
	}
	if to == quantity.NoDay {
		_, to = h.Days()
	}
	e.Until(to)
	var told []alerts.Message
	if err := h.Run(to, func(m alerts.Message) error { told = append(told, m); return nil }, nil); err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(jsonLines(t, record.Messages), jsonLines(t, told)); diff != "" {
		t.Fatalf("messages (-record +called):\n%s", diff)
	}
	return e, told
}

// until is the observations of days up to and including last.
func until(list []observation.Observation, last quantity.Day) (out []observation.Observation) {
	for _, o := range list {
		if quantity.DayEndingAt(o.End, zone) <= last {
			out = append(out, o)
		}
	}
	return out
}

// Design 5.8: a history cut at a day gives the same lines up to that day as
// the whole one, though values come late and are revised.
func TestNoPeeking(t *testing.T) {
	t.Parallel()
	const days = 270
	first := quantity.DateOf(2031, time.March, 20)
	list := history(first, days, 8)
	_, whole := cast(t, list, quantity.NoDay)
	eventful(t, whole)
	lines := jsonLines(t, whole)
	rapid.Check(t, func(t *rapid.T) {
		last := first + quantity.Day(rapid.IntRange(0, days-1).Draw(t, "cut"))
		e, told := cast(t, until(list, last), last)
		n := 0
		for n < len(whole) && !whole[n].Sent.After(e.Now()) {
			n++
		}
		if diff := cmp.Diff(lines[:n], jsonLines(t, told)); diff != "" {
			t.Fatalf("lines up to %s (-whole +cut):\n%s", last, diff)
		}
	})
}

// Design 4.4: the same history, one message after the other with a tick every
// hour, gives the daily file of the hindcast byte for byte, and the same lines.
func TestHindcastEqualsLive(t *testing.T) {
	t.Parallel()
	const days = 8 * 365 // enough years for a storage limit from them
	list := history(firstDay, days, 8)
	h, cut := cast(t, list, quantity.NoDay)
	eventful(t, cut)

	record := &alerts.Memory{}
	live := open(t, options(nil, record))
	var hourly []time.Time
	for at := list[0].Available.Truncate(time.Hour); !at.After(h.Now()); at = at.Add(time.Hour) {
		hourly = append(hourly, at)
	}
	inTime := slices.DeleteFunc(slices.Clone(list), func(o observation.Observation) bool { return o.Available.After(h.Now()) })
	take(t, live, stream(t, inTime, hourly)...)

	a, b := dailyFile(t, h), dailyFile(t, live)
	if a != b {
		t.Errorf("daily files differ:\n%s", firstDifference(a, b))
	}
	if diff := cmp.Diff(jsonLines(t, cut), jsonLines(t, record.Messages)); diff != "" {
		t.Errorf("lines (-hindcast +live):\n%s", diff)
	}
	v, _ := h.Stand("birchen")
	if !v.Account.Limit().Known() {
		t.Errorf("after %d days the limit is %q", days, v.Account.Limit().Basis)
	}

	// The same rows as the operator loads them, all at once: the same days.
	at := options(nil, &alerts.Memory{})
	at.Until = v.Account.State.Day
	once := open(t, at)
	take(t, once, loaded(t, inTime)...)
	take(t, once, tick(h.Now()))
	if c := dailyFile(t, once); a != c {
		t.Errorf("daily file of a load differs:\n%s", firstDifference(a, c))
	}
	if diff := cmp.Diff(holds(h), holds(once)); diff != "" {
		t.Errorf("what holds (-hindcast +load):\n%s", diff)
	}
}

// What cannot be used is handed back; without anything there is nothing to run.
func TestHindcastHolds(t *testing.T) {
	e := open(t, options(nil, &alerts.Memory{}))
	h := NewHindcast(e)
	for _, c := range []struct {
		o    observation.Observation
		code string
	}{
		{daily("gauge-9", quantity.Precipitation, firstDay, 3), heldUnregistered},
		{daily("gauge-1", quantity.Precipitation, firstDay, -3), heldOutOfRange},
	} {
		held := h.Add(c.o)
		if held == nil || held.Code != c.code {
			t.Errorf("held %+v, want %s", held, c.code)
		}
	}
	if first, last := h.Days(); first <= last {
		t.Errorf("days %s to %s of nothing", first, last)
	}
	if err := h.Run(firstDay, func(alerts.Message) error { t.Error("told"); return nil }, nil); err != nil || !e.Now().IsZero() {
		t.Errorf("ran over nothing: %v, now %s", err, e.Now())
	}
}

// A line of a hindcast is the message of design 5.7.
func TestLinesAreMessages(t *testing.T) {
	_, told := cast(t, history(firstDay, 60, 8), quantity.NoDay)
	if len(told) == 0 {
		t.Fatal("nothing told")
	}
	for _, line := range jsonLines(t, told) {
		var m alerts.Message
		if err := json.Unmarshal([]byte(line), &m); err != nil || m.Caution != alerts.Caution || m.FieldCheck == "" || m.EndsWhen == "" || m.Headline == "" || m.Reason == "" {
			t.Errorf("line lacks something to read (%v): %s", err, line)
		}
	}
}
