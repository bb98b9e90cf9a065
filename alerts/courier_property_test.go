package alerts

import (
	"context"
	"errors"
	"fmt"
	"testing"
	"time"

	"pgregory.net/rapid"
)

// Whatever the destination answers, and however often the daemon dies between
// a delivery and its entry in the book: the last told message of every episode
// is delivered or a dead letter; revisions of one episode arrive in order; and
// a message arrives a second time only when a write was lost or its outcome
// was not heard.
func TestEveryEpisodeIsToldAtLeastOnce(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		steps := rapid.SliceOfN(rapid.IntRange(0, 5), 1, 20).Draw(t, "steps")
		answers := rapid.SliceOfN(rapid.IntRange(0, 9), 1, 30).Draw(t, "answers")
		rapid.SyncTest(t, func(t *rapid.T) { tell(t, steps, answers) })
	})
}

func tell(t *rapid.T, steps, answers []int) {
	source, books := newStream(), &shelf{}
	arrived := map[string]int{} // message id -> times
	doubtful := map[string]bool{}
	lastRevision := map[string]int{}
	lost := errors.New("power cut")
	n := 0
	d := &door{start: time.Now()}
	d.answer = func(_ context.Context, m Message) error {
		a := answers[n%len(answers)]
		n++
		if n > 2*len(answers) {
			a = 0 // in the end the destination is well
		}
		switch a {
		case 1, 2, 3:
			return errors.New("503")
		case 4:
			return &Undeliverable{Permanent: true, Err: errors.New("550")}
		case 5:
			doubtful[m.MessageID()] = true
			arrived[m.MessageID()]++
			return &Undeliverable{Unknown: true, Err: errors.New("silence")}
		case 6: // taken, but the entry in the book is lost
			doubtful[m.MessageID()] = true
			books.mu.Lock()
			books.refuse = lost
			books.mu.Unlock()
		}
		if m.Revision < lastRevision[m.ID] {
			t.Errorf("%s arrived after revision %d", m.MessageID(), lastRevision[m.ID])
		}
		lastRevision[m.ID] = m.Revision
		arrived[m.MessageID()]++
		return nil
	}
	run := func(d1 time.Duration) {
		c, err := NewCourier(d, source, books, CourierOptions{Schedule: WebhookSchedule()})
		if err != nil {
			t.Fatal(err)
		}
		ctx, cancel := context.WithTimeout(context.Background(), d1)
		defer cancel()
		if err := c.Run(ctx); err != nil && !errors.Is(err, lost) {
			t.Fatalf("Run: %v", err)
		}
		books.refuse = nil
	}
	revision := map[string]int{}
	for i, s := range steps {
		ep := fmt.Sprintf("sap-%d", s%3)
		revision[ep]++
		typ := Update
		if revision[ep] == 1 {
			typ = Alert
		}
		if s >= 3 && i == len(steps)-1 {
			typ = Cancel
		}
		source.add(message(ep, revision[ep], typ))
		if s%2 == 0 {
			run(time.Duration(s+1) * time.Minute)
		}
	}
	stored := func() *book {
		b, err := loadBook(context.Background(), books, "destination.ranger-office")
		if err != nil {
			t.Fatal(err)
		}
		return b
	}
	// Each run ends at the latest with a crash, of which there are no more than answers.
	for range 2*len(answers) + 1 {
		run(80 * time.Hour)
		if b := stored(); len(b.Pending) == 0 && b.Cursor == uint64(len(steps)) {
			break
		}
	}
	b := stored()
	if len(b.Pending) != 0 {
		t.Errorf("%d still pending", len(b.Pending))
	}
	dead := map[string]bool{}
	for _, l := range b.Dead {
		dead[l.MessageID] = true
	}
	for ep, rev := range revision {
		id := message(ep, rev, Update).MessageID()
		if arrived[id] == 0 && !dead[id] {
			t.Errorf("%s neither arrived nor is a dead letter", id)
		}
	}
	for id, times := range arrived {
		if times > 1 && !doubtful[id] {
			t.Errorf("%s arrived %d times", id, times)
		}
	}
}
