package alerts

import (
	"encoding/json"
	"errors"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// life is one episode as the account will come to know it: known from the
// third day on, its level drawn for every five days.
type life struct {
	onset, ended int
	levels       []finding.Level
}

func (l life) level(n int) finding.Level {
	return l.levels[min((n-l.onset)/5, len(l.levels)-1)]
}

func (l life) worst(n int) (worst finding.Level) {
	for d := l.onset + 2; d < min(n, l.ended); d++ {
		if level := l.level(d); level.Rank() > worst.Rank() {
			worst = level
		}
	}
	return worst
}

const lastDay = 120

// lives draws episodes that follow each other within lastDay days or some
// way beyond.
var lives = rapid.Custom(func(t *rapid.T) (list []life) {
	level := rapid.SampledFrom([]finding.Level{finding.DrawingDown, finding.Low, finding.NearlySpent, finding.Spent})
	for next := rapid.IntRange(0, 20).Draw(t, "before"); next < lastDay; {
		ended := next + rapid.IntRange(3, 40).Draw(t, "days")
		list = append(list, life{next, ended, rapid.SliceOfN(level, 1, 8).Draw(t, "levels")})
		next = ended + rapid.IntRange(1, 20).Draw(t, "after")
	}
	return list
})

// known is what an account of these episodes wants once day n has closed, the
// tick before having closed day before.
func known(list []life, before, n int) Wanted {
	var account []any
	for _, l := range list {
		switch {
		case n >= l.ended:
			account = append(account, passed(l.worst(n), l.onset, l.ended))
		case n >= l.onset+2:
			account = append(account, low(l.level(n), l.onset, n))
		}
	}
	w := closing(n, account...)
	w.News = day(before + 1)
	return w
}

// days draws days that close with a tick; the days between are skipped.
var days = rapid.Custom(func(t *rapid.T) (list []int) {
	longest := rapid.SampledFrom([]int{1, 3, 30}).Draw(t, "longest step")
	for n := rapid.IntRange(0, 30).Draw(t, "first tick"); n < lastDay; n += rapid.IntRange(1, longest).Draw(t, "step") {
		list = append(list, n)
	}
	return list
})

type fataller interface {
	Helper()
	Fatalf(string, ...any)
}

// sameOpen holds the record's open episode against what was wanted.
func sameOpen(t fataller, record *Memory, w Wanted) {
	t.Helper()
	m, place, err := record.Last(ashlar.ID, finding.StoreLow)
	if err != nil {
		t.Fatalf("%v", err)
	}
	f, open := openOf(w.Open, finding.StoreLow)
	if told := place > 0 && m.Open(); told != open || open && (m.Level != f.Level || !wasTold(m)) {
		t.Fatalf("after %s: record open %v at %q, account %v at %q\n%v", w.Now, told, m.Level, open, f.Level, lines(record.Messages))
	}
}

// sound holds a record of one stand and kind, or of more whose episodes do not
// touch, against what every record must be: an episode begins with an Alert,
// goes on with Updates that change its level and ends with one Cancel that
// went to the same people; ids never come twice.
func sound(t fataller, list []Message) {
	t.Helper()
	seen := map[string]bool{}
	lastOf := map[subject]Message{}
	for i, m := range list {
		before, any := lastOf[subject{m.Stand, m.Kind}]
		open := any && before.Open()
		fail := func(why string) { t.Helper(); t.Fatalf("message %d: %s\n%v", i, why, lines(list[:i+1])) }
		switch {
		case !messageID.MatchString(m.MessageID()) || seen[m.MessageID()]:
			fail("its id " + m.MessageID() + " is not valid, or comes twice")
		case any && m.ID == before.ID && m.Revision != before.Revision+1, any && m.ID != before.ID && m.Revision != 1, !any && m.Revision != 1:
			fail("its revision does not count up by one")
		case (m.MsgType == Alert) == open:
			fail("an Alert within an episode, or something else outside")
		case open && m.ID != before.ID:
			fail("another episode began before this one ended")
		case m.MsgType == Update && (m.Level == before.Level || m.Told != (m.Level.Rank() > before.Level.Rank())):
			fail("an Update that changes nothing, tells a fall or hides a rise")
		case m.MsgType == Cancel && m.Told != wasTold(before):
			fail("the Cancel does not go where the Alert went")
		case open && !wasTold(before) && (m.MsgType != Cancel || m.EndedWhy != Over):
			fail("a recorded episode goes on")
		case (m.EndedWhy != "") != (m.MsgType == Cancel), (m.Ended != quantity.NoDay) != (m.MsgType == Cancel), m.MsgType == Cancel && m.Ended < m.Onset:
			fail("its end is wrong")
		case m.EndedWhy == Corrected && (m.Corrects != before.MessageID() || !m.Late):
			fail("it corrects something else")
		case any && m.Sent.Before(before.Sent):
			fail("it goes back in time")
		}
		seen[m.MessageID()], lastOf[subject{m.Stand, m.Kind}] = true, m
	}
}

// Without late data every episode comes to the record once, whatever days
// were skipped: those that were open on a tick are told, the others recorded.
func TestEveryEpisodeComesToTheRecordOnce(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		list, ticks := lives.Draw(t, "episodes"), days.Draw(t, "ticks")
		var record Memory
		teller := NewTeller("Hollin", &record)
		before := -1
		for _, n := range ticks {
			w := known(list, before, n)
			mustTell(t, teller, w)
			sameOpen(t, &record, w)
			for _, again := range []*Teller{teller, NewTeller("Hollin", &record)} {
				if added := mustTell(t, again, w); len(added) != 0 {
					t.Fatalf("said again: %v", lines(added))
				}
			}
			before = n
		}
		sound(t, record.Messages)
		type count struct{ told, alerts, cancels int }
		got, want := map[string]count{}, map[string]count{}
		for _, m := range record.Messages {
			c := got[m.ID]
			switch {
			case m.MsgType == Alert && m.Told:
				c.told++
				c.alerts++
			case m.MsgType == Alert:
				c.alerts++
			case m.MsgType == Cancel:
				c.cancels++
			}
			got[m.ID] = c
		}
		last := ticks[len(ticks)-1]
		for _, l := range list {
			var c count
			if slices.ContainsFunc(ticks, func(n int) bool { return n >= l.onset+2 && n < l.ended }) {
				c.told, c.alerts = 1, 1
			}
			if last >= l.ended {
				c.alerts, c.cancels = 1, 1
			}
			if c.alerts > 0 {
				want[EpisodeID("Hollin", ashlar.ID, finding.StoreLow, day(l.onset))] = c
			}
		}
		if diff := cmp.Diff(want, got, cmp.AllowUnexported(count{})); diff != "" {
			t.Fatalf("messages of each episode (-want +got):\n%s\n%v", diff, lines(record.Messages))
		}
	})
}

// revised draws what is wanted tick by tick, with late data that change the
// whole account now and then.
var revised = rapid.Custom(func(t *rapid.T) (list []Wanted) {
	account, before := lives.Draw(t, "episodes"), -1
	for _, n := range days.Draw(t, "ticks") {
		if rapid.IntRange(0, 4).Draw(t, "late data") == 0 {
			account = lives.Draw(t, "episodes with late data")
		}
		list = append(list, known(account, before, n))
		before = n
	}
	return list
})

// Whatever late data do to the account, the record stays sound and ends each
// tick with what holds.
func TestRecordFollowsRevisedAccounts(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var record Memory
		teller := NewTeller("Hollin", &record)
		for _, w := range revised.Draw(t, "wanted") {
			mustTell(t, teller, w)
			sameOpen(t, &record, w)
		}
		sound(t, record.Messages)
	})
}

// A crash between any two messages, and a replay from any tick before it, give
// the record of a run that was never interrupted, byte for byte.
func TestReplayAfterACrashAddsNothing(t *testing.T) {
	crashed := errors.New("the power is gone")
	rapid.Check(t, func(t *rapid.T) {
		list := revised.Draw(t, "wanted")
		var straight Memory
		teller := NewTeller("Hollin", &straight)
		for _, w := range list {
			mustTell(t, teller, w)
		}
		record := &broken{Memory: &Memory{}, left: rapid.IntRange(0, len(straight.Messages)).Draw(t, "messages before the crash"), err: crashed}
		teller = NewTeller("Hollin", record)
		at := 0
		for ; at < len(list); at++ {
			if _, err := teller.Tell(ashlar, list[at]); errors.Is(err, crashed) {
				break
			} else if err != nil {
				t.Fatal(err)
			}
		}
		record.left = -1 // the power is back
		teller = NewTeller("Hollin", record)
		for _, w := range list[rapid.IntRange(0, min(at, len(list)-1)).Draw(t, "replay from tick"):] {
			mustTell(t, teller, w)
		}
		want, got := written(t, straight.Messages), written(t, record.Messages)
		if diff := cmp.Diff(want, got); diff != "" {
			t.Fatalf("record (-never stopped +replayed):\n%s", diff)
		}
	})
}

// written is the record as it is kept; what is read back says the same.
func written(t *rapid.T, list []Message) (out []string) {
	for _, m := range list {
		data, err := json.Marshal(m)
		if err != nil {
			t.Fatal(err)
		}
		var back Message
		if err := json.Unmarshal(data, &back); err != nil {
			t.Fatal(err)
		}
		again, err := json.Marshal(back)
		if err != nil {
			t.Fatal(err)
		}
		if string(again) != string(data) {
			t.Fatalf("%s\nread back and written again is\n%s", data, again)
		}
		out = append(out, string(data))
	}
	return out
}
