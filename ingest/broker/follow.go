package broker

import (
	"context"
	"errors"
	"fmt"
	"time"

	"github.com/nats-io/nats.go/jetstream"
)

// Following says what to follow. Each is called for one message after the
// other, in order, from the goroutine that called Follow.
type Following struct {
	Stream   string
	Subjects []string // with wildcards, which must not overlap; none: all
	After    uint64   // the last sequence already known; 0: from the beginning
	// Created is State.Created of the stream that After was taken from, when
	// it is known. Another stream of the same name is read from its beginning.
	Created time.Time
	// Each takes a message. An error of it ends Follow, which returns it.
	Each func(Msg) error
	// Notice, if set, is told what does not end Follow: a *Gap, or an *Error
	// of an interruption after which Follow comes back by itself.
	Notice func(error)
}

// GapReason says why messages are missing.
type GapReason string

const (
	Removed   GapReason = "removed"   // purged, expired or lost from the stream before they were read
	Regressed GapReason = "regressed" // the stream is shorter than what was read from it: an older copy was put back
	Replaced  GapReason = "replaced"  // another stream has taken the name
)

// Gap is messages that will never come: those From to To of Stream. After
// Regressed and Replaced the stream is read again from its beginning, because
// its sequences mean other messages now; the receiver must bear repetition.
type Gap struct {
	Stream   string
	Reason   GapReason
	From, To uint64
}

func (g *Gap) Error() string {
	switch g.Reason {
	case Removed:
		return fmt.Sprintf("broker: %s: messages %d to %d were removed before they were read", g.Stream, g.From, g.To)
	case Regressed:
		return fmt.Sprintf("broker: %s ends before message %d although %d was read: an older copy of the store? Reading it from the beginning", g.Stream, g.From, g.To)
	default:
		return fmt.Sprintf("broker: %s is not the stream that was read up to %d. Reading it from the beginning", g.Stream, g.To)
	}
}

const (
	// A pull asks for this much at a time; one book must fit.
	pullMessages = 1000
	pullBytes    = 16 * mib
	// How soon a lost consumer is noticed: two heartbeats. With the defaults a
	// fail-over took 10 to 20 s instead of 8 (measured).
	pullExpiry    = 3 * time.Second
	pullHeartbeat = time.Second

	consumerGone = time.Minute // the server forgets a consumer nobody asks; common practice of the trade, no source
)

// Follow calls Each for every message of a stream after sequence After, now
// and as they come, until ctx ends (it returns the context's error), Each
// returns an error (it returns that), or the Broker is closed (code Closed).
// Whatever else happens, a consumer or the stream itself deleted, the server
// away for a day, it notices, comes back, and goes on after the last message.
// Nothing is skipped without a Gap, nothing comes twice but after a Gap.
func (b *Broker) Follow(ctx context.Context, f Following) error {
	r := &reading{Following: f, next: f.After + 1, live: true}
	return b.read(ctx, r)
}

// reading is a Following under way.
type reading struct {
	Following
	next uint64 // the sequence that comes next
	live bool   // go on at the end of the stream; else return there
	// sparse streams keep one message a subject: holes are no gaps.
	sparse bool
}

// stopped carries an error of Each through the machinery unharmed.
type stopped struct{ error }

func (b *Broker) read(ctx context.Context, r *reading) error {
	op := "following " + r.Stream
	wait := newBackoff()
	for {
		before := r.next
		err := b.attach(ctx, r)
		if err == nil {
			return nil
		}
		if own, ok := errors.AsType[stopped](err); ok {
			return own.error
		}
		if ctx.Err() != nil {
			return ctx.Err()
		}
		if err = b.wrap(op, err); errors.Is(err, ErrClosed) {
			return err
		}
		if !r.live && !errors.Is(err, ErrUnreachable) {
			return err
		}
		r.notice(err)
		if r.next != before {
			wait = newBackoff()
		}
		if err := wait.pause(ctx); err != nil {
			return err
		}
	}
}

func (r *reading) notice(err error) {
	if r.Notice != nil {
		r.Notice(err)
	}
}

// attach reads through one consumer until something ends it. nil: the end of
// the stream was reached and wanted.
func (b *Broker) attach(ctx context.Context, r *reading) error {
	asking, cancel := context.WithTimeout(ctx, answerWithin)
	defer cancel()
	info, err := b.info(asking, r.Stream)
	if err != nil {
		return err
	}
	r.meet(info)
	c, err := b.js.CreateConsumer(asking, r.Stream, jetstream.ConsumerConfig{
		FilterSubjects:    r.Subjects,
		DeliverPolicy:     jetstream.DeliverByStartSequencePolicy,
		OptStartSeq:       r.next,
		AckPolicy:         jetstream.AckNonePolicy,
		MemoryStorage:     true,
		Replicas:          1,
		InactiveThreshold: consumerGone,
	})
	if err != nil {
		return err
	}
	defer b.forget(ctx, r.Stream, c.CachedInfo().Name)
	if !r.live && c.CachedInfo().NumPending == 0 {
		return nil
	}
	messages, err := c.Messages(
		jetstream.PullMaxMessagesWithBytesLimit(pullMessages, pullBytes),
		jetstream.PullExpiry(pullExpiry),
		jetstream.PullHeartbeat(pullHeartbeat),
		jetstream.WithMessagesErrOnMissingHeartbeat(true),
	)
	if err != nil {
		return err
	}
	defer messages.Stop()
	for delivered := uint64(1); ; delivered++ {
		m, err := messages.Next(jetstream.NextContext(ctx))
		if err != nil {
			return err
		}
		meta, err := m.Metadata()
		if err != nil {
			return err
		}
		if meta.Sequence.Consumer != delivered {
			return &Error{Code: Unreachable, Op: "following " + r.Stream,
				Err: fmt.Errorf("message %d of the consumer came as number %d", meta.Sequence.Consumer, delivered)}
		}
		seq := meta.Sequence.Stream
		if seq > r.next && len(r.Subjects) == 0 && !r.sparse {
			r.notice(&Gap{Stream: r.Stream, Reason: Removed, From: r.next, To: seq - 1})
		}
		r.next = seq + 1
		if err := r.Each(Msg{
			Subject: m.Subject(), Header: Header(m.Headers()), Data: m.Data(),
			Seq: seq, Stored: meta.Timestamp, Pending: meta.NumPending,
		}); err != nil {
			return stopped{err}
		}
		if !r.live && meta.NumPending == 0 {
			return nil
		}
	}
}

// meet holds the cursor against the stream that is there.
func (r *reading) meet(info *jetstream.StreamInfo) {
	state, known := info.State, r.next-1
	switch {
	case !r.Created.IsZero() && !r.Created.Equal(info.Created):
		if known > 0 {
			r.notice(&Gap{Stream: r.Stream, Reason: Replaced, From: 1, To: known})
		}
		r.next = 1
	case state.LastSeq < known:
		r.notice(&Gap{Stream: r.Stream, Reason: Regressed, From: state.LastSeq + 1, To: known})
		r.next = 1
	}
	r.Created = info.Created
	if state.FirstSeq > r.next {
		if !r.sparse {
			r.notice(&Gap{Stream: r.Stream, Reason: Removed, From: r.next, To: state.FirstSeq - 1})
		}
		r.next = state.FirstSeq
	}
}

// forget removes a consumer; when that fails the server does it by itself.
func (b *Broker) forget(ctx context.Context, stream, name string) {
	if b.nc.IsClosed() || !b.nc.IsConnected() {
		return
	}
	ctx, cancel := context.WithTimeout(context.WithoutCancel(ctx), pingWithin)
	defer cancel()
	_ = b.js.DeleteConsumer(ctx, stream, name)
}
