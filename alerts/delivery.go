package alerts

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"time"

	"saprolite/detectors/finding"
)

// A Destination is one place a message is brought to: a list of mail
// addresses, a webhook.
//
// Deliver returns nil only when the other side has taken the message. An error
// that is (or wraps) *Undeliverable says what may be done about it; any other
// error counts as temporary. Deliver must return soon after ctx is done, and
// must send the same message under the same id (Message.MessageID) every time:
// after a crash it is asked to deliver a message again that may have arrived.
type Destination interface {
	Name() string // [a-z0-9][a-z0-9_-]{0,63}, unique among destinations
	Deliver(ctx context.Context, m Message) error
}

// Books is where a Courier keeps its book: one value a key, the last one wins.
type Books interface {
	// Get returns the value of key, with ok false when there is none.
	Get(ctx context.Context, key string) (data []byte, rev uint64, ok bool, err error)
	// Put stores the value durably before it returns.
	Put(ctx context.Context, key string, data []byte) (rev uint64, err error)
}

// Source is the stream of messages, oldest first, each with its number in the
// stream.
type Source interface {
	// Follow calls fn for every message whose number is greater than after, and
	// then for those to come, until ctx is done or fn returns an error. fn may
	// block. Follow returns nil only when ctx is done.
	Follow(ctx context.Context, after uint64, fn func(seq uint64, m Message) error) error
}

// Undeliverable says why a delivery failed and what may be done about it. Its
// zero kind is temporary: try again by the schedule.
type Undeliverable struct {
	Permanent  bool          // the other side will never take this message: no retry
	Unknown    bool          // it may have been taken; another try may make a copy
	RetryAfter time.Duration // the other side asked for at least this wait, 0 if it did not
	Err        error
}

func (u *Undeliverable) Error() string {
	switch {
	case u.Permanent:
		return fmt.Sprintf("refused for good: %v", u.Err)
	case u.Unknown:
		return fmt.Sprintf("outcome unknown: %v", u.Err)
	}
	return fmt.Sprintf("not now: %v", u.Err)
}

func (u *Undeliverable) Unwrap() error { return u.Err }

// asUndeliverable sorts any delivery error; what is not marked is temporary.
func asUndeliverable(err error) *Undeliverable {
	if u, ok := errors.AsType[*Undeliverable](err); ok {
		return u
	}
	return &Undeliverable{Err: err}
}

// Filter chooses which messages a destination gets. Its zero value is all.
type Filter struct {
	Kinds  []finding.Kind  // any of these; empty: every kind
	Groups []string        // a stand in any of these; empty: every stand
	Levels []finding.Level // any of these; empty: every level
}

// passes tells whether m goes to the destination. known says that an earlier
// message of the episode went there: then the later ones follow at any level,
// for whoever was told "low" must also be told "drawing down" and "over".
func (f Filter) passes(m Message, known bool) bool {
	if len(f.Kinds) > 0 && !slices.Contains(f.Kinds, m.Kind) {
		return false
	}
	if len(f.Groups) > 0 && !slices.ContainsFunc(f.Groups, func(g string) bool { return slices.Contains(m.Groups, g) }) {
		return known // a stand may leave its group while an episode is open
	}
	return known || len(f.Levels) == 0 || slices.Contains(f.Levels, m.Level)
}

// EventKind is what happened to a message on its way.
type EventKind string

const (
	EventDelivered  EventKind = "delivered"
	EventRetry      EventKind = "retry"      // failed, will be tried again at Next
	EventDead       EventKind = "dead"       // refused for good or given up
	EventSuperseded EventKind = "superseded" // a later revision took its place before it was delivered
	EventForgotten  EventKind = "forgotten"  // fell off the full dead list; ALERTS still has it
)

// Event is one thing that happened to one message at one destination, for
// logs and metrics.
type Event struct {
	Kind        EventKind
	Destination string
	MessageID   string
	Seq         uint64    // number in the stream
	Attempt     int       // 1 for the first; 0 when none was made
	Next        time.Time // for EventRetry
	Err         error     // for EventRetry and EventDead
}
