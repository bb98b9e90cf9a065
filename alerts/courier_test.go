package alerts

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"testing"
	"testing/synctest"
	"time"
)

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
		o := newOffice(t, CourierOptions{Schedule: exact(WebhookSchedule())}, message("sap-a", 1, Alert))
		o.door.answer = func(context.Context, Message) error { return errors.New("503") }
		o.open()
		time.Sleep(time.Minute) // two attempts, the next after 5 minutes
		o.source.add(message("sap-b", 1, Alert))
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
