package alerts

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"sync"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"github.com/google/go-cmp/cmp"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// shelf is Books in memory; refuse makes Put fail.
type shelf struct {
	mu     sync.Mutex
	values map[string][]byte
	rev    uint64
	refuse error
}

func (s *shelf) Get(_ context.Context, key string) ([]byte, uint64, bool, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	v, ok := s.values[key]
	return v, s.rev, ok, nil
}

func (s *shelf) Put(ctx context.Context, key string, data []byte) (uint64, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.refuse != nil {
		return 0, s.refuse
	}
	if err := ctx.Err(); err != nil {
		return 0, err
	}
	if s.values == nil {
		s.values = map[string][]byte{}
	}
	s.values[key] = slices.Clone(data)
	s.rev++
	return s.rev, nil
}

// stream is Source in memory: message number i+1 is the i-th.
type stream struct {
	mu   sync.Mutex
	all  []Message
	more chan struct{}
}

func newStream(ms ...Message) *stream { return &stream{all: ms, more: make(chan struct{}, 1)} }

func (s *stream) add(ms ...Message) {
	s.mu.Lock()
	s.all = append(s.all, ms...)
	s.mu.Unlock()
	select {
	case s.more <- struct{}{}:
	default:
	}
}

func (s *stream) Follow(ctx context.Context, after uint64, fn func(uint64, Message) error) error {
	for {
		s.mu.Lock()
		pending := slices.Clone(s.all[after:])
		s.mu.Unlock()
		for _, m := range pending {
			after++
			if err := fn(after, m); err != nil {
				return err
			}
		}
		select {
		case <-s.more:
		case <-ctx.Done():
			return nil
		}
	}
}

// sent is one call of Deliver.
type sent struct {
	At time.Duration // since the start of the test
	ID string
}

// door is a Destination that answers what answer says.
type door struct {
	start time.Time

	mu     sync.Mutex
	answer func(ctx context.Context, m Message) error
	sent   []sent
}

// set changes the answer while a courier works.
func (d *door) set(answer func(ctx context.Context, m Message) error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.answer = answer
}

func (d *door) Name() string { return "ranger-office" }

func (d *door) Deliver(ctx context.Context, m Message) error {
	d.mu.Lock()
	d.sent = append(d.sent, sent{time.Since(d.start), m.MessageID()})
	answer := d.answer
	d.mu.Unlock()
	if answer == nil {
		return nil
	}
	return answer(ctx, m)
}

func (d *door) calls() []sent {
	d.mu.Lock()
	defer d.mu.Unlock()
	return slices.Clone(d.sent)
}

func (d *door) ids() (ids []string) {
	for _, s := range d.calls() {
		ids = append(ids, s.ID)
	}
	return ids
}

func message(episode string, revision int, typ MsgType) Message {
	return Message{
		ID: episode, Revision: revision, MsgType: typ, Status: Actual, Told: true,
		Stand: "upper-beck", StandName: "Upper Beck", Kind: finding.StoreLow, Level: finding.Low,
		Onset: 100, Day: 101, Ended: quantity.NoDay,
		Evidence: []Evidence{{Name: "storage deficit", Value: 110, Low: Number(nan), High: Number(nan), Unit: "mm"}},
	}
}

var nan = func() float64 { z := 0.0; return z / z }()

// exact is a schedule without jitter, so that times can be written down.
func exact(s Schedule) Schedule { s.Early, s.Late = 0, 0; return s }

// office is a courier with its surroundings, in a synctest bubble.
type office struct {
	t      *testing.T
	door   *door
	source *stream
	books  *shelf
	opts   CourierOptions
	c      *Courier

	mu     sync.Mutex
	events []Event
	cancel context.CancelFunc
	done   chan error
}

func newOffice(t *testing.T, opts CourierOptions, ms ...Message) *office {
	o := &office{t: t, door: &door{start: time.Now()}, source: newStream(ms...), books: &shelf{}, opts: opts}
	o.opts.OnEvent = func(e Event) {
		o.mu.Lock()
		defer o.mu.Unlock()
		o.events = append(o.events, e)
	}
	return o
}

func (o *office) open() {
	o.t.Helper()
	c, err := NewCourier(o.door, o.source, o.books, o.opts)
	if err != nil {
		o.t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	o.c, o.cancel, o.done = c, cancel, make(chan error, 1)
	go func() { o.done <- c.Run(ctx) }()
}

func (o *office) close() {
	o.t.Helper()
	o.cancel()
	if err := <-o.done; err != nil {
		o.t.Fatalf("Run: %v", err)
	}
}

func (o *office) kinds() (ks []EventKind) {
	o.mu.Lock()
	defer o.mu.Unlock()
	for _, e := range o.events {
		ks = append(ks, e.Kind)
	}
	return ks
}

func (o *office) stored() *book {
	o.t.Helper()
	b, err := loadBook(context.Background(), o.books, "destination.ranger-office")
	if err != nil {
		o.t.Fatal(err)
	}
	return b
}

func wantEqual(t *testing.T, what string, got, want any) {
	t.Helper()
	if d := cmp.Diff(want, got); d != "" {
		t.Errorf("%s (-want +got):\n%s", what, d)
	}
}

// The waits are those of the Standard Webhooks example, as reliability.md
// section 3 gives them; their sum is the give-up time 75.6 h of its case 13.
func TestWebhookScheduleIsFollowed(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: exact(WebhookSchedule())}, message("sap-a", 1, Alert))
		o.door.answer = func(context.Context, Message) error { return errors.New("503") }
		o.open()
		time.Sleep(200 * time.Hour)
		o.close()
		var want []sent
		at := time.Duration(0)
		for _, wait := range []string{"0s", "5s", "5m", "30m", "2h", "5h", "10h", "14h", "20h", "24h"} {
			d, err := time.ParseDuration(wait)
			if err != nil {
				t.Fatal(err)
			}
			at += d
			want = append(want, sent{at, "sap-a-0001"})
		}
		wantEqual(t, "attempts", o.door.calls(), want)
		wantEqual(t, "last attempt", at, 75*time.Hour+35*time.Minute+5*time.Second)
		b := o.stored()
		if len(b.Pending) != 0 || len(b.Dead) != 1 {
			t.Fatalf("pending %d, dead %d; want 0 and 1", len(b.Pending), len(b.Dead))
		}
		wantEqual(t, "attempts of the dead letter", b.Dead[0].Attempts, 10)
		wantEqual(t, "status", o.c.Status().Dead, 1)
	})
}

// RFC 5321 section 4.5.4.1: give up after 4 to 5 days, 30 minutes or more
// between tries (after the two early ones of a local relay).
func TestMailScheduleGivesUpWithinFiveDays(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: MailSchedule()}, message("sap-a", 1, Alert))
		o.door.answer = func(context.Context, Message) error { return &Undeliverable{Err: errors.New("451")} }
		o.open()
		time.Sleep(10 * 24 * time.Hour)
		o.close()
		calls := o.door.calls()
		last := calls[len(calls)-1].At
		if last < 4*24*time.Hour || last > 5*24*time.Hour {
			t.Errorf("last attempt after %v, want between 4 and 5 days", last)
		}
		for i := 3; i < len(calls); i++ {
			if gap := calls[i].At - calls[i-1].At; gap < 30*time.Minute {
				t.Errorf("attempts %d and %d are %v apart, want at least 30 min", i, i+1, gap)
			}
		}
		wantEqual(t, "dead", len(o.stored().Dead), 1)
	})
}

func TestLaterRevisionReplacesWaitingOne(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: exact(WebhookSchedule())},
			message("sap-a", 1, Alert), message("sap-b", 1, Alert))
		o.door.answer = func(context.Context, Message) error { return errors.New("503") }
		o.open()
		time.Sleep(time.Minute) // two attempts each, the next after 5 minutes
		o.source.add(message("sap-a", 2, Update))
		o.source.add(message("sap-a", 3, Cancel))
		time.Sleep(time.Second)
		if got := o.c.Status(); got.Pending != 2 || !got.OldestPending.Equal(o.door.start) {
			t.Errorf("status %+v: want 2 pending, the oldest since the start", got)
		}
		o.door.set(nil)
		time.Sleep(time.Hour)
		o.close()
		ids := o.door.ids()
		got := ids[len(ids)-2:]
		slices.Sort(got)
		wantEqual(t, "delivered", got, []string{"sap-a-0003", "sap-b-0001"})
		if slices.Index(ids, "sap-a-0003") < slices.Index(ids, "sap-a-0001") {
			t.Errorf("sent in the order %v", ids)
		}
		wantEqual(t, "pending", len(o.stored().Pending), 0)
	})
}

func TestPermanentFailureIsDeadWithoutRetry(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: MailSchedule()}, message("sap-a", 1, Alert), message("sap-b", 1, Alert))
		o.door.answer = func(_ context.Context, m Message) error {
			if m.ID == "sap-a" {
				return fmt.Errorf("relay: %w", &Undeliverable{Permanent: true, Err: errors.New("550 no such mailbox")})
			}
			return nil
		}
		o.open()
		time.Sleep(30 * 24 * time.Hour)
		o.close()
		wantEqual(t, "attempts", o.door.ids(), []string{"sap-a-0001", "sap-b-0001"})
		wantEqual(t, "events", o.kinds(), []EventKind{EventDead, EventDelivered})
		b := o.stored()
		if len(b.Dead) != 1 || b.Dead[0].Seq != 1 || b.Dead[0].Reason != "refused for good: 550 no such mailbox" {
			t.Errorf("dead letters %+v", b.Dead)
		}
	})
}

// reliability.md section 2, case 11: copies <= 2.
func TestUnknownOutcomeMakesAtMostTwoCopies(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: MailSchedule()}, message("sap-a", 1, Alert))
		o.door.answer = func(context.Context, Message) error { return &Undeliverable{Unknown: true, Err: errors.New("silence")} }
		o.open()
		time.Sleep(30 * 24 * time.Hour)
		o.close()
		wantEqual(t, "sent", o.door.ids(), []string{"sap-a-0001", "sap-a-0001"})
		wantEqual(t, "dead", len(o.stored().Dead), 1)
	})
}

func TestRetryAfterIsHonoured(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: exact(WebhookSchedule())}, message("sap-a", 1, Alert))
		o.door.answer = func(context.Context, Message) error {
			if len(o.door.calls()) == 1 {
				return &Undeliverable{RetryAfter: 90 * time.Minute, Err: errors.New("429")}
			}
			return nil
		}
		o.open()
		time.Sleep(24 * time.Hour)
		o.close()
		wantEqual(t, "attempts", o.door.calls(), []sent{{0, "sap-a-0001"}, {90 * time.Minute, "sap-a-0001"}})
	})
}

func TestRestartResumesFromTheBook(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: exact(WebhookSchedule())},
			message("sap-a", 1, Alert), message("sap-b", 1, Alert))
		o.door.answer = func(_ context.Context, m Message) error {
			if m.ID == "sap-b" {
				return errors.New("503")
			}
			return nil
		}
		o.open()
		time.Sleep(time.Minute) // a delivered; b failed at 0 s and 5 s, next at 5 min 5 s
		o.close()
		o.source.add(message("sap-c", 1, Alert)) // while nobody works
		time.Sleep(time.Minute)
		o.open()
		time.Sleep(5 * time.Minute)
		o.close()
		wantEqual(t, "attempts", o.door.calls(), []sent{
			{0, "sap-a-0001"}, {0, "sap-b-0001"}, {5 * time.Second, "sap-b-0001"},
			{2 * time.Minute, "sap-c-0001"},
			{5*time.Minute + 5*time.Second, "sap-b-0001"}, // the stored time, not anew from the restart
		})
		b := o.stored()
		wantEqual(t, "cursor", b.Cursor, uint64(3))
		wantEqual(t, "failed attempts kept", b.Pending["sap-b"].Attempts, 3)
		if v := b.Pending["sap-b"].Message.Evidence[0].Low; v.Known() {
			t.Errorf("an unknown bound came back from the book as %v", v)
		}
	})
}

func TestOutcomeThatCannotBeWrittenIsSentAgainUnderTheSameID(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: MailSchedule()}, message("sap-a", 1, Alert))
		full := errors.New("no space left")
		o.door.answer = func(context.Context, Message) error {
			o.books.mu.Lock()
			defer o.books.mu.Unlock()
			if o.books.rev == 0 {
				t.Error("tried before the book was written")
			}
			o.books.refuse = full
			return nil
		}
		o.open()
		if err := <-o.done; !errors.Is(err, full) {
			t.Fatalf("Run returned %v, want %v", err, full)
		}
		o.cancel()
		o.books.refuse = nil
		o.door.answer = nil
		o.open()
		time.Sleep(time.Minute)
		o.close()
		wantEqual(t, "sent", o.door.ids(), []string{"sap-a-0001", "sap-a-0001"})
		wantEqual(t, "pending", len(o.stored().Pending), 0)
	})
}

func TestOneAtATimeInOrderOfArrival(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		var ms []Message
		var want []string
		for i := range 200 {
			ms = append(ms, message(fmt.Sprintf("sap-%03d", 199-i), 1, Alert))
			want = append(want, ms[i].MessageID())
		}
		o := newOffice(t, CourierOptions{Schedule: MailSchedule()}, ms...)
		busy := 0
		o.door.answer = func(context.Context, Message) error {
			if busy++; busy != 1 {
				t.Errorf("%d deliveries at once", busy)
			}
			time.Sleep(time.Second)
			busy--
			return nil
		}
		o.open()
		time.Sleep(time.Hour)
		o.close()
		wantEqual(t, "order", o.door.ids(), want)
	})
}

func TestHungDestinationTimesOutAndLosesNothing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: exact(MailSchedule())}, message("sap-a", 1, Alert))
		o.door.answer = func(ctx context.Context, _ Message) error {
			<-ctx.Done()
			return ctx.Err()
		}
		o.open()
		time.Sleep(time.Minute)
		o.door.set(nil)
		time.Sleep(time.Hour)
		o.close()
		// 30 s until the time-out, then the schedule's 1 minute.
		wantEqual(t, "attempts", o.door.calls(), []sent{{0, "sap-a-0001"}, {90 * time.Second, "sap-a-0001"}})
		wantEqual(t, "events", o.kinds(), []EventKind{EventRetry, EventDelivered})
	})
}

func TestStop(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		o := newOffice(t, CourierOptions{Schedule: MailSchedule()}, message("sap-a", 1, Alert))
		o.door.answer = func(ctx context.Context, _ Message) error {
			<-ctx.Done()
			return ctx.Err()
		}
		o.open()
		time.Sleep(time.Second)
		began := time.Now()
		o.close()
		wantEqual(t, "time to stop with a hung delivery", time.Since(began), 5*time.Second)
		wantEqual(t, "a cut-short attempt counts", o.stored().Pending["sap-a"].Attempts, 0)

		o.door.answer = func(context.Context, Message) error { time.Sleep(3 * time.Second); return nil }
		o.open()
		time.Sleep(time.Second)
		o.close() // the answer comes within the grace
		wantEqual(t, "pending after an answer within the grace", len(o.stored().Pending), 0)
		wantEqual(t, "last success", o.stored().LastSuccess, time.Now().UTC())
	})
}

func TestEndOfTheStreamIsAnError(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		gone := errors.New("stream deleted")
		c, err := NewCourier(&door{}, sourceFunc(func() error { return gone }), &shelf{}, CourierOptions{Schedule: MailSchedule()})
		if err != nil {
			t.Fatal(err)
		}
		if err := c.Run(context.Background()); !errors.Is(err, gone) {
			t.Errorf("Run returned %v, want %v", err, gone)
		}
	})
}

type sourceFunc func() error

func (f sourceFunc) Follow(context.Context, uint64, func(uint64, Message) error) error { return f() }

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
		"level": {Filter{MinLevel: finding.NearlySpent},
			[]Message{message("sap-a", 1, Alert), with(message("sap-b", 1, Alert), at(finding.Spent))},
			[]string{"sap-b-0001"}},
		"whoever was told hears the rest": {Filter{MinLevel: finding.NearlySpent}, []Message{
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
		"unknown level":   {Schedule: MailSchedule(), Filter: Filter{MinLevel: "severe"}},
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
