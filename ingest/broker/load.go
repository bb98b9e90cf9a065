package broker

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"strings"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/synadia-io/orbit.go/jetstreamext"
)

const (
	// A batch of the server holds at most 1000 messages (stream.go,
	// streamDefaultMaxAtomicBatchSize).
	batchMessages = 1000
	// Bytes in one batch of a load: larger ones are not faster (measured).
	loadBytes = 16 * mib
	// Bytes in one batch of books: half of what the server lets wait before a
	// stream (stream.go, streamDefaultMaxQueueBytes: 128 MiB).
	booksBytes = 64 * mib

	batchWithin  = 30 * time.Second // to store one batch: 64 MiB at 2 MiB/s, a slow card; common practice of the trade, no source
	loadPatience = 2 * time.Minute  // of one batch, over all attempts; common practice of the trade, no source
)

// headerRoom is what a batch adds to each message's header.
const headerRoom = 128

// atomically stores messages of one stream, all or none, and returns the
// sequence of the last; they have consecutive sequences.
func (b *Broker) atomically(ctx context.Context, all []*nats.Msg) (last uint64, err error) {
	ctx, cancel := context.WithTimeout(ctx, batchWithin)
	defer cancel()
	ack, err := jetstreamext.PublishMsgBatch(ctx, b.js, all)
	if err != nil {
		return 0, err
	}
	return ack.Sequence, nil
}

// Loader stores many messages in OBSERVATIONS in few atomic batches, which
// are as durable as single messages and much faster. It is for one goroutine.
type Loader struct {
	b       *Broker
	ctx     context.Context
	waiting []*nats.Msg
	bytes   int

	messages, stored uint64
	last             uint64
}

// Load begins to load. The context holds for the Loader's life; when it ends,
// what was not flushed is not stored.
func (b *Broker) Load(ctx context.Context) (*Loader, error) {
	if _, err := b.info(ctx, Observations); err != nil {
		return nil, b.wrap("beginning to load", err)
	}
	return &Loader{b: b, ctx: ctx}, nil
}

// Add takes one message for an obs. or clock. subject, and stores what waits
// when a batch is full. The caller leaves data unchanged until the next Flush.
// Message ids are not taken: one that is known already would refuse its whole
// batch.
//
// Codes: Invalid, TooLarge (this message only), and those of Flush; the message
// was not taken then.
func (l *Loader) Add(subject string, header map[string]string, data []byte) error {
	op := "loading " + subject
	if !strings.HasPrefix(subject, "obs.") && !strings.HasPrefix(subject, "clock.") {
		return invalid(op, "expected a subject that begins with obs. or clock.")
	}
	if header[IDHeader] != "" {
		return invalid(op, "header %s: a batch takes no message ids", IDHeader)
	}
	m, err := message(op, subject, header, data)
	if err != nil {
		return err
	}
	size := m.Size() + headerRoom
	if size > maxMessage {
		return &Error{Code: TooLarge, Op: op, Err: fmt.Errorf("%d bytes, at most %d are taken", m.Size(), maxMessage-headerRoom)}
	}
	if len(l.waiting) == batchMessages || l.bytes+size > loadBytes {
		if err := l.Flush(); err != nil {
			return err
		}
	}
	l.waiting = append(l.waiting, m)
	l.bytes += size
	return nil
}

// Flush stores what waits. When the broker does not answer it tries again,
// for two minutes. A batch whose answer was lost may then be stored twice, so
// what is loaded must bear repetition, as observations do.
//
// Codes: Full, Unreachable; nothing of the failed batch is stored then
// (Unreachable: that is not known), it still waits, and Flush may be called
// again.
func (l *Loader) Flush() error {
	if len(l.waiting) == 0 {
		return nil
	}
	op := fmt.Sprintf("loading %d messages", len(l.waiting))
	giveUp := time.Now().Add(loadPatience)
	for wait := newBackoff(); ; {
		last, err := l.b.atomically(l.ctx, l.waiting)
		if err == nil {
			l.last = last
			break
		}
		err = l.b.wrap(op, err)
		if !errors.Is(err, ErrUnreachable) || time.Now().After(giveUp) || wait.pause(l.ctx) != nil {
			return err
		}
	}
	l.messages += uint64(len(l.waiting))
	l.stored += uint64(l.bytes - len(l.waiting)*headerRoom)
	clear(l.waiting)
	l.waiting, l.bytes = l.waiting[:0], 0
	return nil
}

// Stored says how much was stored so far, with subjects and headers, and the
// sequence of the last message.
func (l *Loader) Stored() (messages, bytes, last uint64) { return l.messages, l.stored, l.last }

// backoff waits longer each time: 50 ms doubling to 2 s, each less up to a
// third, so that many do not come back at the same moment. Common practice of
// the trade, no source.
type backoff struct{ next time.Duration }

func newBackoff() *backoff { return &backoff{50 * time.Millisecond} }

func (w *backoff) pause(ctx context.Context) error {
	d := w.next - rand.N(w.next/3)
	w.next = min(2*w.next, 2*time.Second)
	return pause(ctx, d)
}
