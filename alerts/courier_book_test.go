package alerts

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"saprolite/detectors/finding"
)

// With a full book the stream itself is the queue: nothing is lost, the book
// stays small, and the rest follows when the destination is back.
func TestFullBookLeavesTheRestInTheStream(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		var ms []Message
		for i := range 150 {
			m := message(fmt.Sprintf("sap-%04d", i), 1, Alert)
			m.Reason = string(make([]byte, 2000)) // 12 kB as JSON
			ms = append(ms, m)
		}
		o := newOffice(t, CourierOptions{Schedule: exact(MailSchedule())}, ms...)
		o.door.answer = func(context.Context, Message) error { return errors.New("connection refused") }
		o.open()
		time.Sleep(3 * time.Hour)
		if size := len(o.books.values["destination.ranger-office"]); size > 512<<10 {
			t.Errorf("book of %d bytes", size)
		}
		if b := o.stored(); b.Cursor >= 100 || len(b.Dead) != 0 {
			t.Errorf("cursor %d, dead %d: want the stream to wait", b.Cursor, len(b.Dead))
		}
		o.door.set(nil)
		before := len(o.door.ids())
		time.Sleep(24 * time.Hour)
		o.close()
		got := o.door.ids()[before:]
		slices.Sort(got)
		var want []string
		for _, m := range ms {
			want = append(want, m.MessageID())
		}
		wantEqual(t, "delivered", got, want)
	})
}

func TestFilter(t *testing.T) {
	at := func(level finding.Level) func(*Message) { return func(m *Message) { m.Level = level } }
	with := func(m Message, change ...func(*Message)) Message {
		for _, c := range change {
			c(&m)
		}
		return m
	}
	recorded := func(m *Message) { m.Told = false }
	road := func(m *Message) { m.Groups = []string{"north", "forest-road"} }
	silent := func(m *Message) { m.Kind, m.Level = finding.FeedSilent, finding.Silent }
	for name, c := range map[string]struct {
		filter Filter
		in     []Message
		want   []string
	}{
		"all": {Filter{}, []Message{message("sap-a", 1, Alert), with(message("sap-b", 1, Alert), silent)},
			[]string{"sap-a-0001", "sap-b-0001"}},
		"recorded only": {Filter{}, []Message{with(message("sap-a", 1, Alert), recorded), message("sap-b", 1, Alert)},
			[]string{"sap-b-0001"}},
		"kind": {Filter{Kinds: []finding.Kind{finding.FeedSilent}}, []Message{message("sap-a", 1, Alert), with(message("sap-b", 1, Alert), silent)},
			[]string{"sap-b-0001"}},
		"group": {Filter{Groups: []string{"forest-road"}}, []Message{message("sap-a", 1, Alert), with(message("sap-b", 1, Alert), road)},
			[]string{"sap-b-0001"}},
		"level": {Filter{Levels: []finding.Level{finding.NearlySpent, finding.Spent}},
			[]Message{message("sap-a", 1, Alert), with(message("sap-b", 1, Alert), at(finding.Spent))},
			[]string{"sap-b-0001"}},
		"whoever was told hears the rest": {Filter{Levels: []finding.Level{finding.NearlySpent, finding.Spent}}, []Message{
			message("sap-a", 1, Alert), // low: not told
			with(message("sap-a", 2, Update), at(finding.NearlySpent)),
			with(message("sap-a", 3, Update), at(finding.DrawingDown)),
			with(message("sap-a", 4, Cancel), at(finding.DrawingDown)),
			with(message("sap-b", 1, Alert), at(finding.DrawingDown)),
			with(message("sap-b", 2, Cancel), at(finding.DrawingDown)), // never told: no end to tell
		}, []string{"sap-a-0002", "sap-a-0003", "sap-a-0004"}},
	} {
		t.Run(name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				o := newOffice(t, CourierOptions{Schedule: MailSchedule(), Filter: c.filter})
				o.open()
				for _, m := range c.in { // one by one, so that each is delivered before the next
					o.source.add(m)
					time.Sleep(time.Second)
				}
				o.close()
				wantEqual(t, "delivered", o.door.ids(), c.want)
				b := o.stored()
				wantEqual(t, "cursor", b.Cursor, uint64(len(c.in)))
				for _, m := range c.in {
					if _, open := b.Known[m.ID]; open && m.MsgType == Cancel {
						t.Errorf("%s ended but is still kept as open", m.ID)
					}
				}
			})
		})
	}
}

func TestClockPutBackDoesNotHoldMessages(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: exact(WebhookSchedule())}, message("sap-a", 1, Alert))
		var ahead atomic.Int64 // of the true time; a year at first
		ahead.Store(int64(365 * 24 * time.Hour))
		o.opts.Now = func() time.Time { return time.Now().Add(time.Duration(ahead.Load())) }
		o.door.answer = func(context.Context, Message) error { return errors.New("503") }
		o.open()
		time.Sleep(time.Minute)
		ahead.Store(0)
		o.door.set(nil)
		time.Sleep(10 * time.Minute)
		o.close()
		wantEqual(t, "pending", len(o.stored().Pending), 0)
	})
}

func TestNewCourierRefuses(t *testing.T) {
	bad := exact(MailSchedule())
	bad.Delays = nil
	for name, opts := range map[string]CourierOptions{
		"no delays":       {Schedule: bad},
		"unknown level":   {Schedule: MailSchedule(), Filter: Filter{Levels: []finding.Level{"severe"}}},
		"negative jitter": {Schedule: Schedule{Delays: []time.Duration{0}, Early: -1}},
		"busy repeat":     {Schedule: Schedule{Delays: []time.Duration{0}, GiveUpAfter: time.Hour}},
	} {
		if _, err := NewCourier(&door{}, newStream(), &shelf{}, opts); err == nil {
			t.Errorf("%s: no error", name)
		}
	}
}

func TestBookThatCannotBeReadStopsTheCourier(t *testing.T) {
	for name, data := range map[string]string{
		"not JSON":      `{"version":1,`,
		"newer":         `{"version":2}`,
		"wrong episode": `{"version":1,"pending":{"sap-a":{"message":{"id":"sap-b"}}}}`,
	} {
		books := &shelf{values: map[string][]byte{"destination.ranger-office": []byte(data)}}
		c, err := NewCourier(&door{}, newStream(), books, CourierOptions{Schedule: MailSchedule()})
		if err != nil {
			t.Fatal(err)
		}
		if err := c.Run(context.Background()); err == nil {
			t.Errorf("%s: Run returned no error", name)
		}
	}
}
