package alerts

import (
	"context"
	"encoding/json"
	"fmt"
	"strings"
	"time"

	"saprolite/detectors/finding"
)

const (
	bookVersion = 1

	// The broker takes values up to 1 MiB (nats.md section 4). Pending messages
	// get a quarter of that; when they fill it, the courier stops following and
	// ALERTS itself is the queue. The last message taken may pass the mark by
	// its own size.
	pendingBytes = 256 << 10

	// A dead letter is under 1 KiB, so 400 of them stay clear of the 1 MiB.
	deadLetters = 400

	reasonBytes = 400 // of a dead letter's reason; enough for a server's answer

	bookTimeout = 10 * time.Second // for one write; common practice of the trade, no source
)

// book is what a destination remembers: the value of "destination.<name>".
type book struct {
	Version     int                `json:"version"`
	Cursor      uint64             `json:"cursor"`  // last stream number taken or passed over
	Pending     map[string]*parcel `json:"pending"` // by episode id: at most one message an episode
	Dead        []DeadLetter       `json:"dead"`
	Known       map[string]int     `json:"known"` // open episodes that went here, with the last revision taken
	LastSuccess time.Time          `json:"last_success,omitzero"`
}

// parcel is one message on its way.
type parcel struct {
	Seq      uint64    `json:"seq"`
	Message  Message   `json:"message"`
	Attempts int       `json:"attempts"`         // that failed
	Unknown  int       `json:"unknown"`          // of these, with unknown outcome
	Waiting  time.Time `json:"waiting"`          // since when the episode has something to tell
	First    time.Time `json:"first,omitzero"`   // first attempt of this message
	Next     time.Time `json:"next"`             // not before
	Reason   string    `json:"reason,omitempty"` // of the last failure

	size int // of Message as JSON
}

// DeadLetter is a message that was refused for good or given up. The message
// itself is in ALERTS under Seq.
type DeadLetter struct {
	Seq       uint64       `json:"seq"`
	MessageID string       `json:"message_id"`
	MsgType   MsgType      `json:"msg_type"`
	Stand     string       `json:"stand"`
	Kind      finding.Kind `json:"kind"`
	Attempts  int          `json:"attempts"`
	Reason    string       `json:"reason"`
	Died      time.Time    `json:"died"`
}

// loadBook reads the book under key; none yet is an empty one.
func loadBook(ctx context.Context, books Books, key string) (*book, error) {
	b := &book{Version: bookVersion}
	data, _, ok, err := books.Get(ctx, key)
	if err != nil {
		return nil, fmt.Errorf("reading book %s: %w", key, err)
	}
	if ok {
		if err := json.Unmarshal(data, b); err != nil {
			return nil, fmt.Errorf("book %s cannot be read; restore it from a backup, or remove it to begin anew with every message still in ALERTS: %w", key, err)
		}
		if b.Version != bookVersion {
			return nil, fmt.Errorf("book %s is version %d, this program knows version %d; run the program that wrote it", key, b.Version, bookVersion)
		}
	}
	if b.Pending == nil {
		b.Pending = map[string]*parcel{}
	}
	if b.Known == nil {
		b.Known = map[string]int{}
	}
	for id, p := range b.Pending {
		if p == nil || p.Message.ID != id {
			return nil, fmt.Errorf("book %s: the pending message under %q is not of that episode", key, id)
		}
		if err := p.weigh(); err != nil {
			return nil, err
		}
	}
	return b, nil
}

// save stores the book. It is not cut short by a stop of the daemon: an
// outcome that is known must be written.
func (b *book) save(ctx context.Context, books Books, key string) error {
	data, err := json.Marshal(b)
	if err != nil {
		return fmt.Errorf("writing book %s: %w", key, err)
	}
	ctx, cancel := context.WithTimeout(context.WithoutCancel(ctx), bookTimeout)
	defer cancel()
	if _, err := books.Put(ctx, key, data); err != nil {
		return fmt.Errorf("writing book %s: %w", key, err)
	}
	return nil
}

// full tells whether no further message should be taken for now.
func (b *book) full() bool {
	n := 0
	for _, p := range b.Pending {
		n += p.size
	}
	return n >= pendingBytes
}

// due returns the pending message to try now, the one that came first, or nil
// and how long to wait for the next. A time further away than any schedule
// could have set means that the clock was put back since: it is due.
func (b *book) due(now time.Time, furthest time.Duration) (*parcel, time.Duration) {
	var first *parcel
	wait := furthest
	for _, p := range b.Pending {
		left := p.Next.Sub(now)
		if left > 0 && left <= furthest {
			wait = min(wait, left)
			continue
		}
		if first == nil || p.Seq < first.Seq {
			first = p
		}
	}
	return first, wait
}

// bury moves a pending message to the dead letters and returns the oldest one
// when it had to make room.
func (b *book) bury(p *parcel, now time.Time) (forgotten *DeadLetter) {
	delete(b.Pending, p.Message.ID)
	if len(b.Dead) >= deadLetters {
		oldest := b.Dead[0]
		forgotten = &oldest
		b.Dead = b.Dead[1:]
	}
	b.Dead = append(b.Dead, DeadLetter{
		Seq: p.Seq, MessageID: p.Message.MessageID(), MsgType: p.Message.MsgType,
		Stand: p.Message.Stand, Kind: p.Message.Kind,
		Attempts: p.Attempts, Reason: p.Reason, Died: now,
	})
	return forgotten
}

func (p *parcel) weigh() error {
	data, err := json.Marshal(p.Message)
	if err != nil {
		return fmt.Errorf("message %s cannot be written: %w", p.Message.MessageID(), err)
	}
	p.size = len(data)
	return nil
}

// shorten cuts a reason to reasonBytes of valid text.
func shorten(s string) string {
	if len(s) > reasonBytes {
		s = s[:reasonBytes-3] + "..."
	}
	return strings.ToValidUTF8(s, "")
}
