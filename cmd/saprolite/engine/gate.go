package engine

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"time"

	"saprolite/detectors"
	"saprolite/ingest/daybook"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
	"saprolite/ingest/wire"
)

// LoadFeed is the feed of the operator's own history loads. It may speak for
// every source, and its observations became known when they say they did.
const LoadFeed = "load"

// Subjects and content types of stream OBSERVATIONS.
const (
	TickSubject = "clock.tick"
	ContentType = "Content-Type"
	TypeCSV     = "text/csv"
	TypeSenML   = "application/senml+json"
)

// Message is one message of stream OBSERVATIONS.
type Message struct {
	Subject     string
	ContentType string // "" means SenML JSON
	Data        []byte
	Seq         uint64
	Stored      time.Time // when the broker took it
}

// Held is something that could not be used, with the reason and what to do.
type Held struct {
	Feed   string `json:"feed"`
	Source string `json:"source"`
	Code   string `json:"code"`
	Reason string `json:"reason"`
	Seq    uint64 `json:"message"`          // the number, in OBSERVATIONS, of the message it came in
	Record string `json:"record,omitempty"` // what it was about: the record or line, as far as it could be read
}

// Subject is where it goes in stream HELD.
func (h Held) Subject() string { return "held." + h.Feed + "." + h.Source }

// Codes of what the gate holds, beside those of wire.
const (
	heldUnregistered = "unregistered-source"
	heldWrongFeed    = "wrong-feed"
	heldOutOfRange   = "out-of-range"
	heldFuture       = "future"
	heldNotKept      = "not-kept"
)

// ahead is how far beyond the last tick, or beyond the time at which the broker
// took it, an observation may lie before its clock is wrong (reliability.md
// case 9; methods I holds 10 minutes, ticks are hourly and ours may be late).
// The broker's time counts where no tick came in between: a remote broker goes
// on taking observations while the daemon, whose clock it is, is down.
const ahead = 24 * time.Hour

// Handle takes in one message: an observation, a pack of them, or a tick. It
// returns what has to be held and what was told. The error is the engine's
// own trouble, never the message's: a message that cannot be used is held.
func (e *Engine) Handle(m Message) (Outcome, error) {
	var out Outcome
	var err error
	switch {
	case m.Seq != 0 && m.Seq <= e.cursor:
		return out, nil // taken in before
	case m.Subject == TickSubject:
		var now time.Time
		if now, err = parseTick(m.Data); err != nil {
			out.hold("clock", "tick", wire.Unreadable, err.Error(), m.Seq, string(m.Data))
			break
		}
		out.Told, err = e.Tick(now)
		if err != nil {
			return out, err
		}
	default:
		if err = e.take(m, &out); err != nil {
			return out, err
		}
	}
	e.counts.Held += uint64(len(out.Held))
	e.cursor = max(e.cursor, m.Seq)
	return out, nil
}

func (out *Outcome) hold(feed, source string, code wire.Code, reason string, seq uint64, record string) {
	const longest = 500 // bytes of a record kept beside the reason; the message itself stays in OBSERVATIONS
	if len(record) > longest {
		record = strings.ToValidUTF8(record[:longest], "") + "..."
	}
	out.Held = append(out.Held, Held{Feed: feed, Source: source, Code: string(code), Reason: reason, Seq: seq, Record: record})
}

// take reads a message of observations.
func (e *Engine) take(m Message, out *Outcome) error {
	feed, id, ok := splitSubject(m.Subject)
	if !ok {
		out.hold("unknown", "unknown", wire.Unreadable, fmt.Sprintf("subject %q is not obs.<feed>.<source> with ids of [a-z0-9][a-z0-9_-]{0,63}", m.Subject), m.Seq, "")
		return nil
	}
	src, ok := e.sources[id]
	if !ok {
		out.hold(feed, id, heldUnregistered, fmt.Sprintf("no stand draws on source %q and the register does not list it; add it to the stands file, or correct the id", id), m.Seq, string(m.Data))
		return nil
	}
	if src.setup.Feed != "" && feed != src.setup.Feed && feed != LoadFeed {
		out.hold(feed, id, heldWrongFeed, fmt.Sprintf("source %q belongs to feed %q; change \"feed\" in the stands file, or send it there", id, src.setup.Feed), m.Seq, string(m.Data))
		return nil
	}
	if m.ContentType == TypeCSV {
		return e.takeCSV(m, feed, src, out)
	}
	return e.takeSenML(m, feed, src, out)
}

func (e *Engine) takeCSV(m Message, feed string, src *source, out *Outcome) error {
	if len(m.Data) > wire.MaxCSVPost {
		out.hold(feed, src.setup.ID, wire.TooLarge, fmt.Sprintf("a CSV post of %d bytes; send it in parts of at most %d", len(m.Data), wire.MaxCSVPost), m.Seq, "")
		return nil
	}
	r, err := wire.NewCSVReader(bytes.NewReader(m.Data), m.Subject)
	if err != nil {
		out.hold(feed, src.setup.ID, codeOf(err), err.Error(), m.Seq, string(m.Data))
		return nil
	}
	for {
		o, err := r.Next()
		if errors.Is(err, io.EOF) {
			return nil
		}
		if err != nil {
			out.hold(feed, src.setup.ID, codeOf(err), err.Error(), m.Seq, lineOf(m.Data, r.Line()))
			continue
		}
		if o.Source != src.setup.ID {
			out.hold(feed, src.setup.ID, wire.BadSource, fmt.Sprintf("row speaks of source %q, the subject of %q; send each source's rows under its own subject", o.Source, src.setup.ID), m.Seq, describe(o))
			continue
		}
		if o.Available.IsZero() && feed != LoadFeed {
			o.Available = m.Stored
		}
		if err := e.keep(o, m, feed, src, out); err != nil {
			return err
		}
	}
}

func (e *Engine) takeSenML(m Message, feed string, src *source, out *Outcome) error {
	list, problems := wire.DecodeSenML(m.Data, wire.SenMLOptions{Source: src.setup.ID, Received: m.Stored, Interval: src.setup.Interval, Unit: src.setup.Unit})
	for _, p := range problems {
		out.hold(feed, src.setup.ID, p.Code, p.Error(), m.Seq, string(m.Data))
	}
	for _, o := range list {
		o.Available = m.Stored
		if err := e.keep(o, m, feed, src, out); err != nil {
			return err
		}
	}
	return nil
}

// lineOf is the text of a line, counted from 1.
func lineOf(data []byte, n int) string {
	for line := range bytes.Lines(data) {
		if n--; n == 0 {
			return string(bytes.TrimRight(line, "\r\n"))
		}
	}
	return ""
}

func codeOf(err error) wire.Code {
	var p *wire.Problem
	if errors.As(err, &p) {
		return p.Code
	}
	return wire.Unreadable
}

// keep judges one value by itself and puts it into its source's daybook.
func (e *Engine) keep(o observation.Observation, m Message, feed string, src *source, out *Outcome) error {
	now := e.now
	if !now.IsZero() && m.Stored.After(now) {
		now = m.Stored
	}
	code, reason := judge(o, src, now)
	if code != "" {
		out.hold(feed, src.setup.ID, wire.Code(code), reason, m.Seq, describe(o))
		return nil
	}
	err := e.add(o, src)
	var refused *daybook.Refusal
	if errors.As(err, &refused) {
		out.hold(feed, src.setup.ID, heldNotKept, refused.Reason, m.Seq, describe(o))
		return nil
	}
	return err
}

// judge judges one value by itself: is it possible, and has its time come by
// now (zero: not known)? Judging a series is quality's matter.
func judge(o observation.Observation, src *source, now time.Time) (code, reason string) {
	info, ok := o.Quantity.Info()
	if !ok {
		return string(wire.UnknownQuantity), fmt.Sprintf("unknown quantity %q", o.Quantity)
	}
	possible := Range{info.Lo, info.Hi}
	if r, ok := src.setup.Ranges[o.Quantity]; ok {
		possible = r
	}
	if o.Flag != observation.Missing && !(o.Value >= possible.Lo && o.Value <= possible.Hi) {
		return heldOutOfRange, fmt.Sprintf("%s %.6g %s cannot be: possible is %g to %g; check unit and sign", o.Quantity, o.Value, info.Unit, possible.Lo, possible.Hi)
	}
	if end := o.In(src.setup.Offset).End; !now.IsZero() && end.After(now.Add(ahead)) {
		return heldFuture, fmt.Sprintf("ends %s, more than a day ahead of the clock (%s); check the logger's clock and the year", end.UTC().Format(time.RFC3339), now.UTC().Format(time.RFC3339))
	}
	return "", ""
}

// add puts an observation into its book and marks what it changes.
func (e *Engine) add(o observation.Observation, src *source) error {
	if o.Available.IsZero() {
		o.Available = o.In(src.setup.Offset).End
	}
	change, err := src.book.Add(o)
	if err != nil {
		return err
	}
	e.counts.Observations++
	if change.Outdated {
		e.counts.Outdated++
	}
	if change.Any && (isVegetationIndex(o.Quantity) || slices.Contains(detectors.Draws[:], o.Quantity)) {
		earliest(e.fresh, src.setup.ID, change.First)
		earliest(e.unsaved, src.setup.ID, change.First)
	}
	return nil
}

func earliest(days map[string]quantity.Day, source string, d quantity.Day) {
	if old, ok := days[source]; !ok || d < old {
		days[source] = d
	}
}

func describe(o observation.Observation) string {
	return fmt.Sprintf("%s %s %s..%s %g", o.Source, o.Quantity, o.Start.UTC().Format(time.RFC3339), o.End.UTC().Format(time.RFC3339), o.Value)
}

// splitSubject takes obs.<feed>.<source> apart.
func splitSubject(subject string) (feed, source string, ok bool) {
	parts := strings.Split(subject, ".")
	if len(parts) != 3 || parts[0] != "obs" || observation.ValidID(parts[1]) != nil || observation.ValidID(parts[2]) != nil {
		return "", "", false
	}
	return parts[1], parts[2], true
}

// EncodeTick is the body of a tick.
func EncodeTick(now time.Time) []byte { return []byte(now.UTC().Format(time.RFC3339)) }

func parseTick(data []byte) (time.Time, error) {
	now, err := time.Parse(time.RFC3339, string(data))
	if err != nil {
		return time.Time{}, fmt.Errorf("tick %q is not an RFC 3339 time", data)
	}
	return now.UTC(), nil
}
