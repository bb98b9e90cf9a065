package engine

import (
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"saprolite/alerts"
	"saprolite/detectors/finding"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// Data older than all checkpoints but the yearly ones settle to what they would
// have been in time, and so do data from before the account began.
func TestOldDataSettleAsInTime(t *testing.T) {
	t.Parallel()
	const days = 4 * 365
	list := history(firstDay, days, 5)
	late := daily("gauge-1", quantity.Precipitation, firstDay+200, 90)
	late.Available = late.End.Add(90 * time.Minute)
	before := daily("gauge-1", quantity.Precipitation, firstDay-3, 40)
	end := (firstDay + days + 30).Start(zone)
	for name, o := range map[string]observation.Observation{"three and a half years late": late, "from before the account": before} {
		t.Run(name, func(t *testing.T) {
			inTime, want := open(t, options(shelf{}, &alerts.Memory{})), shelf{}
			take(t, inTime, pack(t, o))
			take(t, inTime, stream(t, list, []time.Time{end, end.Add(time.Hour)})...)
			want.save(t, inTime)

			e, got := open(t, options(shelf{}, &alerts.Memory{})), shelf{}
			messages := stream(t, list, append(everyDay(firstDay, days), end))
			take(t, e, messages...)
			without := dailyFile(t, e)
			take(t, e, pack(t, o), tick(end.Add(time.Hour)))
			got.save(t, e)
			a, b := dailyFile(t, inTime), dailyFile(t, e)
			if a != b {
				t.Errorf("daily files differ:\n%s", firstDifference(a, b))
			}
			if b == without {
				t.Error("the late value changed nothing")
			}
			sameBooks(t, want, got)
		})
	}
}

// drought is daily rain and evapotranspiration such that ashlar, whose store
// holds 150 mm, draws down 4 mm a day from the second day on.
func drought(d quantity.Day) []observation.Observation {
	rain := 0.0
	if d == firstDay {
		rain = 20
	}
	return []observation.Observation{daily("gauge-1", quantity.Precipitation, d, rain), daily("mast-1", quantity.ReferenceEvapotranspiration, d, 4)}
}

// Design 4.9: a correction that overturns an alert ends it with a message that
// says so.
func TestOverturnedAlertIsWithdrawn(t *testing.T) {
	record := &alerts.Memory{}
	o := options(nil, record)
	o.Stands = o.Stands[:1]
	e := open(t, o)
	d := firstDay
	for ; len(record.Messages) == 0; d++ {
		if d > firstDay+60 {
			t.Fatal("no alert in 60 days without rain")
		}
		for _, o := range drought(d) {
			take(t, e, pack(t, o))
		}
		take(t, e, tick(d.End(zone).Add(7*time.Hour)))
	}
	began := record.Messages[0]
	if began.Kind != finding.StoreLow || began.MsgType != alerts.Alert || !began.Told || began.Late {
		t.Fatalf("first message %+v", began)
	}
	// The logger had stuck: there was a storm three weeks ago.
	storm := daily("gauge-1", quantity.Precipitation, d-21, 80)
	storm.Available = e.Now()
	told := take(t, e, pack(t, storm), tick(e.Now().Add(time.Hour)))
	if len(told) != 1 {
		t.Fatalf("told %d messages, want one: %+v", len(told), told)
	}
	m := told[0]
	if m.MsgType != alerts.Cancel || m.EndedWhy != alerts.Corrected || !m.Told || !m.Late || m.Corrects != began.MessageID() || m.ID != began.ID || m.Revision != 2 || m.Ended != d {
		t.Errorf("message %+v\nwant the withdrawal of %s on %s", m, began.MessageID(), d)
	}
	if len(openIn(record.Messages)) != 0 {
		t.Error("something is still open")
	}
	if got := e.Counts().Told[finding.StoreLow]; got != 2 {
		t.Errorf("%d counted as told, want 2", got)
	}
}

// Design 4.9: a history that is loaded into a running daemon is recorded and
// not mailed; what is still true today is told once.
func TestLoadedPastIsRecorded(t *testing.T) {
	const days = 400
	record := &alerts.Memory{}
	e := open(t, options(shelf{}, record))
	start := (firstDay + days).Start(zone).Add(7 * time.Hour)
	take(t, e, tick(start))
	if told := take(t, e, loaded(t, history(firstDay, days, 5))...); len(told) > 0 {
		t.Fatalf("told %d messages before a tick", len(told))
	}
	take(t, e, tick(start.Add(time.Hour)))
	past, now := 0, 0
	for _, m := range record.Messages {
		switch {
		case m.MsgType == alerts.Alert && m.Told:
			now++
			if _, held := holds(e)[subject{m.Stand, m.Kind}]; !held || !m.Late {
				t.Errorf("told of %s of %s, which is past, or not as late", m.Kind, m.Stand)
			}
		case m.Told:
			t.Errorf("told of the past: %+v", m)
		case m.MsgType == alerts.Cancel:
			past++
			if !m.Late || m.EndedWhy != alerts.Over || m.Ended > firstDay+days {
				t.Errorf("recorded %+v", m)
			}
		}
	}
	if past == 0 || now == 0 {
		t.Errorf("%d past episodes recorded, %d told: not much of a test", past, now)
	}
	if diff := cmp.Diff(holds(e), openIn(record.Messages)); diff != "" {
		t.Errorf("open alerts (-account +record):\n%s", diff)
	}
	oncePerID(t, record.Messages)
	before := len(record.Messages)
	take(t, e, tick(start.Add(2*time.Hour)))
	// Loaded again, nothing is new.
	take(t, e, loaded(t, history(firstDay, days, 5))...)
	take(t, e, tick(start.Add(3*time.Hour)))
	if n := len(record.Messages) - before; n > 0 {
		t.Errorf("%d messages more for the same history", n)
	}
}

// Two ticks of the same time settle twice, at different times.
func TestTickOfTheSameTime(t *testing.T) {
	e := open(t, options(nil, &alerts.Memory{}))
	at := firstDay.End(zone).Add(7 * time.Hour)
	take(t, e, pack(t, daily("gauge-1", quantity.Precipitation, firstDay, 3)), tick(at), tick(at))
	if !e.Now().Equal(at) {
		t.Errorf("now %s after a tick with nothing new, want %s", e.Now(), at)
	}
	take(t, e, pack(t, daily("mast-1", quantity.ReferenceEvapotranspiration, firstDay, 3)), tick(at.Add(-time.Hour)))
	if !e.Now().Equal(at.Add(time.Second)) {
		t.Errorf("now %s after an earlier tick with something new, want a second after %s", e.Now(), at)
	}
	if v, _ := e.Stand("ashlar"); v.Account.Today.Still {
		t.Error("what came in was not settled")
	}
}
