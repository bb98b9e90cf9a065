package alerts

import (
	"errors"
	"fmt"
	"math"
	"strings"
	"time"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// Record is what has been told: the stream ALERTS, or memory in a hindcast.
type Record interface {
	// Last returns the last message of a stand and kind, and its place in the
	// record. Place 0 and no message: nothing was told yet.
	Last(stand string, kind finding.Kind) (m Message, place uint64, err error)
	// Append adds a message if the last of its stand and kind is still at
	// place after. Otherwise it returns an error that wraps ErrMoved.
	Append(m Message, after uint64) (place uint64, err error)
}

// ErrMoved says that something else was told in the meantime.
var ErrMoved = errors.New("the record has moved on")

// Stand is what a message says of its stand.
type Stand struct {
	ID, Name string
	Groups   []string
	Hectares float64 // NaN: unknown
}

// Wanted is what the account of a stand has to say after settling.
type Wanted struct {
	Open []finding.Finding // what holds on the last settled day
	Past []Passed          // what has ended, oldest first
	// News is the first day that closed with this settling: what was decided
	// before it comes from late data.
	News quantity.Day
	// Now is the time of the tick that closed it.
	Now time.Time
	// Account is asked for the numbers of the last settled day, for the
	// message that ends an episode; nil: there are none.
	Account Account
}

// Account is what the end of an episode tells of the stand's account.
type Account interface {
	Evidence() []finding.Evidence
	Doubt() string // in a sentence, what the account has missed; "" for nothing
}

// Passed is an episode that has ended.
type Passed struct {
	Kind         finding.Kind
	Worst        finding.Level
	Onset, Ended quantity.Day // Ended is the first day it no longer held
}

// Teller compares what is wanted with what was last told, and tells the
// difference. What was told is read from the record, never assumed; a copy
// saves reading, and a record that has moved on is read again.
type Teller struct {
	place  string
	status Status
	record Record
	told   map[subject]last
}

type subject struct {
	stand string
	kind  finding.Kind
}

type last struct {
	message Message
	place   uint64
}

// NewTeller returns a teller for a place, whose name goes into the ids.
func NewTeller(place string, record Record) *Teller {
	return &Teller{place: place, status: Actual, record: record, told: map[subject]last{}}
}

// Rehearse marks all further messages as an exercise: the forest is invented,
// or somebody tries whether mails arrive.
func (t *Teller) Rehearse() { t.status = Exercise }

// kinds is every kind a stand can be told of.
var kinds = [...]finding.Kind{finding.StoreLow, finding.FeedSilent}

// Tell brings the record up to what is wanted for one stand and returns the
// messages it added.
func (t *Teller) Tell(stand Stand, w Wanted) ([]Message, error) {
	var added []Message
	for _, kind := range kinds {
		for try := 0; ; try++ {
			more, err := t.tellKind(stand, kind, w)
			added = append(added, more...)
			if err == nil {
				break
			}
			// Whatever went wrong, the copy may be behind the record.
			delete(t.told, subject{stand.ID, kind})
			if !errors.Is(err, ErrMoved) || try == 3 {
				return added, fmt.Errorf("tell %s of stand %s: %w", kind, stand.ID, err)
			}
		}
	}
	return added, nil
}

func (t *Teller) tellKind(stand Stand, kind finding.Kind, w Wanted) ([]Message, error) {
	key := subject{stand.ID, kind}
	l, ok := t.told[key]
	if !ok {
		var err error
		if l.message, l.place, err = t.record.Last(stand.ID, kind); err != nil {
			return nil, err
		}
		t.told[key] = l
	}
	if w.Now.Before(l.message.Sent) {
		return nil, nil // a time that has been told of already: ticks are taken in again after a crash
	}
	var added []Message
	add := func(m Message) error {
		place, err := t.record.Append(m, t.told[key].place)
		if err != nil {
			return err
		}
		t.told[key] = last{m, place}
		added = append(added, m)
		return nil
	}
	open, isOpen := openOf(w.Open, kind)

	if l.place > 0 && l.message.Open() {
		if isOpen && open.Onset <= l.message.Day && wasTold(l.message) {
			if open.Level == l.message.Level {
				return nil, nil
			}
			return added, add(t.update(stand, l.message, open, w))
		}
		if err := add(t.cancel(l.message, w)); err != nil {
			return added, err
		}
	}
	for _, f := range w.Past {
		if f.Kind != kind || f.Onset <= t.told[key].covered() {
			continue
		}
		// Began and ended before anybody could be told: kept, not mailed.
		m := t.begin(stand, f.finding(), w)
		m.Told, m.Late = false, true
		if err := add(m); err != nil {
			return added, err
		}
		if err := add(t.cancel(m, w)); err != nil {
			return added, err
		}
	}
	if isOpen {
		return added, add(t.begin(stand, open, w))
	}
	return added, nil
}

func (p Passed) finding() finding.Finding {
	what := fmt.Sprintf("the store was %s at its worst", p.Worst)
	if p.Kind == finding.FeedSilent {
		what = "no data came"
	}
	return finding.Finding{
		Kind: p.Kind, Level: p.Worst, Onset: p.Onset, Day: p.Ended - 1, Ended: quantity.NoDay, Sources: 1,
		Headline:   fmt.Sprintf("Recorded: from %s to %s %s.", p.Onset, p.Ended-1, what),
		Reason:     "The data came in after it had passed, so nobody was told.",
		FieldCheck: "Nothing to look at: it has passed.",
		EndsWhen:   "It has ended.",
	}
}

// covered is the last day the record has spoken for: an episode that began on
// it or before is in the record, one that began later is not. Of an episode
// that was withdrawn nothing is left, from its own onset on.
func (l last) covered() quantity.Day {
	switch {
	case l.place == 0:
		return quantity.NoDay
	case l.message.EndedWhy == Corrected:
		return l.message.Onset - 1
	}
	return l.message.Day
}

// wasTold tells whether anybody was told of the episode of an open message:
// what had passed before it could be told begins with an Alert that was not,
// anything else with one that was.
func wasTold(m Message) bool { return m.Told || m.MsgType != Alert }

func openOf(list []finding.Finding, kind finding.Kind) (finding.Finding, bool) {
	for _, f := range list {
		if f.Kind == kind {
			return f, true
		}
	}
	return finding.Finding{}, false
}

// begin is the first message of an episode. One that was told before, ended,
// and now holds after all goes on with the next revision: so an id never
// comes twice.
func (t *Teller) begin(stand Stand, f finding.Finding, w Wanted) Message {
	m := t.fill(stand, f, w)
	m.ID, m.Revision, m.MsgType, m.Told = EpisodeID(t.place, stand.ID, f.Kind, f.Onset), 1, Alert, true
	m.Story = m.ID
	if l := t.told[subject{stand.ID, f.Kind}]; l.message.ID == m.ID || f.Onset <= l.covered() {
		before := l.message
		m.ID, m.Revision, m.Onset, m.Story = before.ID, before.Revision+1, before.Onset, before.Story
		m.Corrects = before.MessageID()
	}
	return m
}

// update says that the level has changed. A rise is told; a fall is recorded.
func (t *Teller) update(stand Stand, before Message, f finding.Finding, w Wanted) Message {
	m := t.fill(stand, f, w)
	m.ID, m.Revision, m.MsgType, m.Onset, m.Story = before.ID, before.Revision+1, Update, before.Onset, before.Story
	m.Told = f.Level.Rank() > before.Level.Rank()
	return m
}

// cancel ends an episode: over if the account says it held and has passed,
// corrected if later data say it did not hold. Whoever was told it began is
// told it ended.
func (t *Teller) cancel(before Message, w Wanted) Message {
	m := before
	m.Revision++
	m.MsgType, m.Urgency = Cancel, "Past"
	m.Sent = w.Now.UTC()
	m.Told = wasTold(before)
	doubt := ""
	if m.Told && w.Account != nil {
		m.Evidence, doubt = evidence(w.Account.Evidence()), w.Account.Doubt()
	}
	m.EndedWhy, m.Ended = Corrected, max(w.News, before.Day)
	worst := before.Level
	for _, f := range w.Past {
		if f.Kind == before.Kind && f.Onset <= before.Day && f.Ended > before.Onset {
			m.EndedWhy, m.Ended, worst = Over, f.Ended, f.Worst
		}
	}
	m.Day = m.Ended
	m.Late = m.EndedWhy == Corrected || !m.Told || m.Ended < w.News
	m.Corrects = ""
	if m.EndedWhy == Corrected {
		m.Corrects = before.MessageID()
		m.Headline = fmt.Sprintf("Withdrawn: by what is known now this did not hold (was: %s).", before.Level)
		m.Reason = sentences("What is known by now of the days before "+m.Ended.String()+" (later or revised data, or changed settings) does not bear it out. What was told is withdrawn.", doubt)
		m.FieldCheck, m.EndsWhen = "Nothing: what was told did not hold.", "It has ended."
		if m.Kind == finding.FeedSilent {
			m.Headline = "The data that were missing have come in; the account is made right."
			m.Reason = sentences("What did not come before "+m.Ended.String()+" is there now.", doubt)
			m.FieldCheck = "Why it came late: the logger's line and power."
		}
		return m
	}
	lasted := fmt.Sprintf("It lasted from %s to %s.", before.Onset, m.Ended-1)
	m.EndsWhen = "It has ended."
	switch m.Kind {
	case finding.FeedSilent:
		m.Headline = fmt.Sprintf("Data are coming again since %s.", m.Ended)
		m.FieldCheck = "Whether the logger kept what was not sent: late data are taken in and the account is made right."
	default:
		m.Headline = fmt.Sprintf("Over since %s: enough has come back to the store (at its worst: %s).", m.Ended, worst)
		m.FieldCheck = "What a dry spell does can show late: dead tops, thin crowns, bark beetles in the next season."
	}
	m.Reason = sentences(lasted, doubt)
	return m
}

func sentences(a, b string) string { return strings.TrimSpace(a + " " + strings.TrimSpace(b)) }

// fill writes what every message of a finding says.
func (t *Teller) fill(stand Stand, f finding.Finding, w Wanted) Message {
	m := Message{
		Status: t.status, Sent: w.Now.UTC(), Late: f.Changed < w.News,
		Stand: stand.ID, StandName: stand.Name, Groups: stand.Groups, Hectares: Number(stand.Hectares),
		Kind: f.Kind, Level: f.Level, Severity: severity(f.Level), Urgency: urgency(f.Level), Certainty: certainty(f),
		Day: f.Day, Onset: f.Onset, Ended: quantity.NoDay,
		Headline: f.Headline, Reason: f.Reason, FieldCheck: f.FieldCheck, Caution: Caution, EndsWhen: f.EndsWhen,
		Threshold: Threshold{Value: Number(f.Threshold.Value), Unit: f.Threshold.Unit, Basis: f.Threshold.Basis},
		Evidence:  evidence(f.Evidence),
	}
	if f.Threshold.Basis == "" {
		m.Threshold.Value = Number(math.NaN())
	}
	if m.Groups == nil {
		m.Groups = []string{}
	}
	return m
}

func evidence(list []finding.Evidence) []Evidence {
	out := make([]Evidence, 0, len(list))
	for _, e := range list {
		out = append(out, Evidence{Name: e.Name, Value: Number(e.Value), Low: Number(e.Low), High: Number(e.High), Unit: e.Unit, Source: e.Source})
	}
	return out
}

// severity is CAP's word for a level (design 5.6). For a stopped source it is
// how much of the account hangs on it.
func severity(l finding.Level) string {
	switch l {
	case finding.DrawingDown, finding.Silent:
		return "Minor"
	case finding.Low, finding.Blind:
		return "Moderate"
	case finding.NearlySpent:
		return "Severe"
	case finding.Spent:
		return "Extreme"
	}
	return "Unknown"
}

// urgency is CAP's word for how soon to act: our mapping.
func urgency(l finding.Level) string {
	switch l {
	case finding.DrawingDown:
		return "Future"
	case finding.Spent:
		return "Immediate"
	}
	return "Expected"
}

// certainty is CAP's word, set by the number of independent sources (methods,
// decisions: one Possible, two agreeing Likely, seen on the ground Observed).
func certainty(f finding.Finding) string {
	switch {
	case f.Direct:
		return "Observed"
	case f.Sources >= 2:
		return "Likely"
	}
	return "Possible"
}
