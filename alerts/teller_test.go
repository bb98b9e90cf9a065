package alerts

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"regexp"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

var ashlar = Stand{ID: "ashlar", Name: "Ashlar Ridge", Groups: []string{"upper"}, Hectares: math.NaN()}

// day counts days from an invented spring.
func day(n int) quantity.Day { return quantity.DateOf(2031, time.March, 1) + quantity.Day(n) }

// low is a finding as the account has it once day n has closed.
func low(level finding.Level, onset, n int) finding.Finding {
	return finding.Finding{
		Stand: ashlar.ID, Kind: finding.StoreLow, Level: level, Onset: day(onset), Day: day(n), Ended: quantity.NoDay, Changed: day(n),
		Sources: 1, Headline: "Store " + string(level) + ".", Reason: "Little rain.", FieldCheck: "Look at the crowns.", EndsWhen: "Ends when half of it is back.",
		Threshold: finding.Threshold{Value: 75, Unit: "mm", Basis: "a quarter left"},
		Evidence:  []finding.Evidence{{Name: "storage deficit", Value: 80, Low: math.NaN(), High: math.NaN(), Unit: "mm", Source: "water account"}},
	}
}

func passed(worst finding.Level, onset, ended int) Passed {
	return Passed{Kind: finding.StoreLow, Worst: worst, Onset: day(onset), Ended: day(ended)}
}

// books is an account whose deficit on day n is n mm.
type books int

func (b books) Evidence() []finding.Evidence {
	return []finding.Evidence{{Name: "storage deficit", Value: float64(b), Low: math.NaN(), High: math.NaN(), Unit: "mm", Source: "water account"}}
}

func (books) Doubt() string { return "" }

// closing is what is wanted by the tick that closes day n, the one before
// having closed day n-1. What is given is what holds, or what has passed.
func closing(n int, account ...any) Wanted {
	w := Wanted{News: day(n), Now: day(n).End(0).Add(6 * time.Hour), Account: books(n)}
	for _, a := range account {
		switch a := a.(type) {
		case finding.Finding:
			w.Open = append(w.Open, a)
		case Passed:
			w.Past = append(w.Past, a)
		}
	}
	return w
}

// line is a message in a few words: "Alert 1 low since 3 told".
func line(m Message) string {
	s := fmt.Sprintf("%s %d %s since %d", m.MsgType, m.Revision, m.Level, m.Onset-day(0))
	if m.Told {
		s += " told"
	}
	if m.Late {
		s += " late"
	}
	if m.MsgType == Cancel {
		s += fmt.Sprintf(" %s on %d", m.EndedWhy, m.Ended-day(0))
	}
	return s
}

func lines(list []Message) (out []string) {
	for _, m := range list {
		out = append(out, line(m))
	}
	return out
}

func mustTell(t interface {
	Helper()
	Fatal(...any)
}, teller *Teller, w Wanted) []Message {
	t.Helper()
	added, err := teller.Tell(ashlar, w)
	if err != nil {
		t.Fatal(err)
	}
	return added
}

// What each settling adds to the record. The expected lines follow from
// design 4.9, 5.6 and 5.7.
func TestTell(t *testing.T) {
	const (
		drawing = finding.DrawingDown
		lower   = finding.Low
		nearly  = finding.NearlySpent
	)
	steps := func(w ...Wanted) []Wanted { return w }
	for _, c := range []struct {
		name string
		w    []Wanted
		want []string
	}{
		{"begins, and is over", steps(
			closing(1), closing(5, low(lower, 3, 5)), closing(6, low(lower, 3, 6)), closing(20, passed(lower, 3, 20)), closing(21, passed(lower, 3, 20))),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told over on 20"}},
		{"a rise is told, a fall is recorded, a second rise is told", steps(
			closing(5, low(drawing, 3, 5)), closing(9, low(nearly, 3, 9)), closing(12, low(lower, 3, 12)), closing(14, low(nearly, 3, 14))),
			[]string{"Alert 1 drawing down since 3 told", "Update 2 nearly spent since 3 told", "Update 3 low since 3", "Update 4 nearly spent since 3 told"}},
		{"a fall before the end: the end is told all the same", steps(
			closing(5, low(lower, 3, 5)), closing(9, low(drawing, 3, 9)), closing(12, passed(lower, 3, 12))),
			[]string{"Alert 1 low since 3 told", "Update 2 drawing down since 3", "Cancel 3 drawing down since 3 told over on 12"}},
		{"passed before it could be told: recorded once", steps(
			closing(30, passed(lower, 3, 10), passed(nearly, 12, 25)), closing(31, passed(lower, 3, 10), passed(nearly, 12, 25))),
			[]string{"Alert 1 low since 3 late", "Cancel 2 low since 3 late over on 10", "Alert 1 nearly spent since 12 late", "Cancel 2 nearly spent since 12 late over on 25"}},
		{"what has passed is recorded, what still holds is told once", steps(
			closing(30, passed(lower, 3, 10), low(lower, 22, 30)), closing(31, passed(lower, 3, 10), low(lower, 22, 31))),
			[]string{"Alert 1 low since 3 late", "Cancel 2 low since 3 late over on 10", "Alert 1 low since 22 told"}},
		{"late data: it never held", steps(
			closing(5, low(lower, 3, 5)), closing(9)),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told late corrected on 9"}},
		{"late data: it was over earlier than known", steps(
			closing(5, low(lower, 3, 5)), closing(20, passed(lower, 3, 11))),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told late over on 11"}},
		{"a late alert ends in time", steps(
			closing(30, func() finding.Finding { f := low(lower, 3, 30); f.Changed = day(5); return f }()), closing(40, passed(lower, 3, 40))),
			[]string{"Alert 1 low since 3 told late", "Cancel 2 low since 3 told over on 40"}},
		{"withdrawn, and holds after all: the same episode goes on", steps(
			closing(5, low(lower, 3, 5)), closing(9), closing(12, low(nearly, 3, 12)), closing(20, passed(nearly, 3, 20))),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told late corrected on 9", "Alert 3 nearly spent since 3 told", "Cancel 4 nearly spent since 3 told over on 20"}},
		{"withdrawn, and holds since a day before: the same episode goes on", steps(
			closing(5, low(lower, 3, 5)), closing(9), closing(12, low(lower, 2, 12))),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told late corrected on 9", "Alert 3 low since 3 told"}},
		{"withdrawn: what passed instead is recorded, what holds instead is told", steps(
			closing(5, low(lower, 3, 5)), closing(30, passed(drawing, 8, 15), low(lower, 25, 30)), closing(31, passed(drawing, 8, 15), low(lower, 25, 31))),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told late corrected on 30",
				"Alert 1 drawing down since 8 late", "Cancel 2 drawing down since 8 late over on 15", "Alert 1 low since 25 told"}},
		{"ended, and late data join it to the one before: the last goes on", steps(
			closing(5, low(lower, 3, 5)), closing(9, passed(lower, 3, 9)), closing(15, passed(lower, 3, 9), low(lower, 13, 15)),
			closing(20, passed(lower, 3, 9), passed(lower, 13, 20)), closing(25, low(lower, 3, 25))),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told over on 9", "Alert 1 low since 13 told",
				"Cancel 2 low since 13 told over on 20", "Alert 3 low since 13 told"}},
		{"another one the day the last was over", steps(
			closing(5, low(lower, 3, 5)), closing(30, passed(lower, 3, 9), low(nearly, 20, 30))),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told late over on 9", "Alert 1 nearly spent since 20 told"}},
		{"ticks that are told again say nothing", steps(
			closing(2), closing(5, low(lower, 3, 5)), closing(9, low(nearly, 3, 9)), closing(2), closing(5, low(lower, 3, 5)), closing(8, low(lower, 3, 8)),
			closing(9, low(nearly, 3, 9)), closing(10, low(nearly, 3, 10))),
			[]string{"Alert 1 low since 3 told", "Update 2 nearly spent since 3 told"}},
		{"an account made again from its first day withdraws today, not then", steps(
			closing(50, low(lower, 3, 50)), func() Wanted { w := closing(51); w.News = day(0); return w }()),
			[]string{"Alert 1 low since 3 told", "Cancel 2 low since 3 told late corrected on 50"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			var record Memory
			teller := NewTeller("Hollin", &record)
			var added []Message
			for _, w := range c.w {
				added = append(added, mustTell(t, teller, w)...)
			}
			if diff := cmp.Diff(c.want, lines(record.Messages)); diff != "" {
				t.Errorf("record (-want +got):\n%s", diff)
			}
			if diff := cmp.Diff(c.want, lines(added)); diff != "" {
				t.Errorf("returned (-want +got):\n%s", diff)
			}
			sound(t, record.Messages)
		})
	}
}

// What the table above cannot show of the messages.
func TestTellCarriesTheEvidence(t *testing.T) {
	var record Memory
	teller := NewTeller("Hollin", &record)
	mustTell(t, teller, closing(5, low(finding.Low, 3, 5)))
	mustTell(t, teller, closing(9))
	mustTell(t, teller, closing(12, low(finding.Spent, 3, 12)))
	mustTell(t, teller, closing(30, passed(finding.Spent, 3, 28), passed(finding.Low, 29, 30)))
	began, withdrawn, again, ended, recorded := record.Messages[0], record.Messages[1], record.Messages[2], record.Messages[3], record.Messages[4]
	wantEqual(t, "evidence at the start", float64(began.Evidence[0].Value), 80.0) // the finding's
	wantEqual(t, "evidence at the end", float64(withdrawn.Evidence[0].Value), 9.0)
	wantEqual(t, "evidence of what nobody was told", len(recorded.Evidence), 0)
	wantEqual(t, "corrects nothing", began.Corrects, "")
	wantEqual(t, "corrects", withdrawn.Corrects, began.MessageID())
	wantEqual(t, "corrects the withdrawal", again.Corrects, withdrawn.MessageID())
	wantEqual(t, "over corrects nothing", ended.Corrects, "")
	wantEqual(t, "urgency at the end", ended.Urgency, "Past")
	wantEqual(t, "day of the end", ended.Day, ended.Ended)
	wantEqual(t, "severity at the end", ended.Severity, "Extreme") // the level's, design 5.6
	wantEqual(t, "story", ended.Story, began.ID)
	wantEqual(t, "stand", again.StandName, "Ashlar Ridge")
	wantEqual(t, "sent", again.Sent, closing(12).Now)
}

func TestKindsAreToldApart(t *testing.T) {
	var record Memory
	teller := NewTeller("Hollin", &record)
	silent := low(finding.Silent, 4, 7)
	silent.Kind, silent.Direct = finding.FeedSilent, true
	mustTell(t, teller, closing(5, low(finding.Low, 3, 5)))
	mustTell(t, teller, closing(7, low(finding.Low, 3, 7), silent))
	mustTell(t, teller, closing(8, silent, passed(finding.Low, 3, 8)))
	want := []string{"Alert 1 low since 3 told", "Alert 1 silent since 4 told", "Cancel 2 low since 3 told over on 8"}
	if diff := cmp.Diff(want, lines(record.Messages)); diff != "" {
		t.Errorf("record (-want +got):\n%s", diff)
	}
	wantEqual(t, "certainty of what was seen", record.Messages[1].Certainty, "Observed")
	wantEqual(t, "certainty of one source", record.Messages[0].Certainty, "Possible")
}

// A record that somebody else has written is read again.
func TestMovedRecordIsReadAgain(t *testing.T) {
	var record Memory
	first, second := NewTeller("Hollin", &record), NewTeller("Hollin", &record)
	mustTell(t, first, closing(5, low(finding.Low, 3, 5)))
	mustTell(t, second, closing(6, low(finding.NearlySpent, 3, 6)))
	mustTell(t, first, closing(7, low(finding.Spent, 3, 7)))
	mustTell(t, second, closing(8, passed(finding.Spent, 3, 8)))
	if added := mustTell(t, first, closing(8, passed(finding.Spent, 3, 8))); len(added) != 0 {
		t.Errorf("said again: %v", lines(added))
	}
	want := []string{"Alert 1 low since 3 told", "Update 2 nearly spent since 3 told", "Update 3 spent since 3 told", "Cancel 4 spent since 3 told over on 8"}
	if diff := cmp.Diff(want, lines(record.Messages)); diff != "" {
		t.Errorf("record (-want +got):\n%s", diff)
	}
}

// A record that moves on under every try is given up with an error.
func TestRecordThatNeverRestsIsAnError(t *testing.T) {
	moving := &broken{Memory: &Memory{}, err: fmt.Errorf("append: %w", ErrMoved)}
	if _, err := NewTeller("Hollin", moving).Tell(ashlar, closing(5, low(finding.Low, 3, 5))); !errors.Is(err, ErrMoved) {
		t.Errorf("error %v, want ErrMoved", err)
	}
	if moving.tries < 2 {
		t.Errorf("%d tries, want it tried again", moving.tries)
	}
}

// A crash within the record of an episode that nobody was told of, and then
// late data by which it still holds: it is told.
func TestHalfRecordedEpisodeThatHoldsIsTold(t *testing.T) {
	var record Memory
	if _, err := NewTeller("Hollin", &broken{Memory: &record, left: 1, err: errors.New("crash")}).Tell(ashlar, closing(30, passed(finding.Low, 3, 29))); err == nil {
		t.Fatal("no crash")
	}
	mustTell(t, NewTeller("Hollin", &record), closing(30, low(finding.Low, 3, 30)))
	want := []string{"Alert 1 low since 3 late", "Cancel 2 low since 3 late corrected on 30", "Alert 3 low since 3 told"}
	if diff := cmp.Diff(want, lines(record.Messages)); diff != "" {
		t.Errorf("record (-want +got):\n%s", diff)
	}
}

// broken is a record that takes a number of messages and then only answers
// with err.
type broken struct {
	*Memory
	left, tries int
	err         error
}

func (b *broken) Append(m Message, after uint64) (uint64, error) {
	if b.left == 0 {
		b.tries++
		return 0, b.err
	}
	b.left--
	return b.Memory.Append(m, after)
}

// The expected id was made by other means:
//
//	printf 'Hollin\0ashlar\0store-low\0002031-08-04' | sha256sum | cut -d' ' -f1 | xxd -r -p | base32 | tr A-Z a-z | cut -c1-26
func TestIDs(t *testing.T) {
	id := EpisodeID("Hollin", "ashlar", finding.StoreLow, quantity.DateOf(2031, time.August, 4))
	wantEqual(t, "episode id", id, "sap-uanslvli3blcc43oel6gf646ta")
	m := Message{ID: id, Revision: 7}
	wantEqual(t, "message id", m.MessageID(), id+"-0007")
	for _, other := range []string{
		EpisodeID("Hollins", "ashlar", finding.StoreLow, quantity.DateOf(2031, time.August, 4)),
		EpisodeID("Hollin", "ashlar-2", finding.StoreLow, quantity.DateOf(2031, time.August, 4)),
		EpisodeID("Hollin", "ashlar", finding.FeedSilent, quantity.DateOf(2031, time.August, 4)),
		EpisodeID("Hollin", "ashlar", finding.StoreLow, quantity.DateOf(2031, time.August, 5)),
		EpisodeID("Holli", "nashlar", finding.StoreLow, quantity.DateOf(2031, time.August, 4)),
	} {
		if other == id {
			t.Errorf("two episodes are both called %s", id)
		}
	}
}

// messageID is what may stand as Nats-Msg-Id, webhook-id, CAP identifier and
// left part of a Message-ID (reliability.md section 3).
var messageID = regexp.MustCompile(`^sap-[a-z2-7]{26}-[0-9]{4,}$`)

// The keys of design 5.7, in its order.
func TestMessageJSON(t *testing.T) {
	var record Memory
	mustTell(t, NewTeller("Hollin", &record), closing(5, low(finding.Low, 3, 5)))
	data, err := json.Marshal(record.Messages[0])
	if err != nil {
		t.Fatal(err)
	}
	want := []string{"id", "revision", "msg_type", "status", "sent", "told", "late", "stand", "stand_name", "groups", "hectares", "kind", "level",
		"severity", "urgency", "certainty", "day", "onset", "ended", "ended_why", "headline", "reason", "evidence", "threshold", "field_check",
		"caution", "ends_when", "corrects", "story"}
	if diff := cmp.Diff(want, keysOf(t, data)); diff != "" {
		t.Errorf("keys (-want +got):\n%s", diff)
	}
	var loose struct {
		Sent, Day, Onset, Ended string
		Hectares                *float64
		Evidence, Threshold     json.RawMessage
	}
	if err := json.Unmarshal(data, &loose); err != nil {
		t.Fatal(err)
	}
	wantEqual(t, "sent", loose.Sent, "2031-03-07T06:00:00Z")
	wantEqual(t, "day", loose.Day, "2031-03-06")
	wantEqual(t, "onset", loose.Onset, "2031-03-04")
	wantEqual(t, "ended", loose.Ended, "")
	wantEqual(t, "unknown hectares are null", loose.Hectares == nil, true)
	wantEqual(t, "evidence", string(loose.Evidence), `[{"name":"storage deficit","value":80,"low":null,"high":null,"unit":"mm","source":"water account"}]`)
	wantEqual(t, "threshold", string(loose.Threshold), `{"value":75,"unit":"mm","basis":"a quarter left"}`)
}

// keysOf returns the keys of a JSON object in the order they stand in.
func keysOf(t *testing.T, data []byte) (keys []string) {
	t.Helper()
	d := json.NewDecoder(bytes.NewReader(data))
	if _, err := d.Token(); err != nil {
		t.Fatal(err)
	}
	for d.More() {
		key, err := d.Token()
		if err != nil {
			t.Fatal(err)
		}
		keys = append(keys, key.(string))
		var value json.RawMessage
		if err := d.Decode(&value); err != nil {
			t.Fatal(err)
		}
	}
	return keys
}
