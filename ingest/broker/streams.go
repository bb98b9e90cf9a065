package broker

import (
	"context"
	"errors"
	"fmt"
	"time"

	"github.com/nats-io/nats.go/jetstream"
)

// The streams, and the stream behind the bucket of books.
const (
	Observations = "OBSERVATIONS" // obs.<feed>.<source> and clock.tick, in the order they became known
	Held         = "HELD"         // held.>: what could not be used, with the reason
	Alerts       = "ALERTS"       // alert.<stand>.<kind>: what was told; outbox and audit trail
	BooksStream  = "KV_BOOKS"

	booksBucket  = "BOOKS"
	booksSubject = "$KV.BOOKS."
)

// heldFor is how long held observations wait for somebody to look: a season.
// Common practice of the trade, no source.
const heldFor = 90 * 24 * time.Hour

// layout is the configuration of the streams in a store of maxStore bytes
// (0: unbounded, a remote server's own limits hold). Shares: observations
// half, books seven twentieths, held one twentieth. ALERTS has no limit and
// so the tenth that is left, and all the others leave empty: a full
// OBSERVATIONS must not silence an alert.
func layout(maxStore int64, replicas int) []jetstream.StreamConfig {
	share := func(twentieths int64) int64 {
		if maxStore == 0 {
			return -1
		}
		return maxStore / 20 * twentieths
	}
	replicas = max(replicas, 1)
	direct := replicas == 1 // a direct read from a replica may be behind
	return []jetstream.StreamConfig{
		{
			Name: Observations, Subjects: []string{"obs.>", "clock.>"},
			Storage: jetstream.FileStorage, Compression: jetstream.S2Compression,
			Discard: jetstream.DiscardNew, MaxBytes: share(10), MaxMsgSize: maxMessage,
			AllowAtomicPublish: true, AllowDirect: direct, Replicas: replicas,
		},
		{
			Name: Held, Subjects: []string{"held.>"},
			Storage: jetstream.FileStorage, Compression: jetstream.S2Compression,
			Discard: jetstream.DiscardOld, MaxBytes: share(1), MaxAge: heldFor, MaxMsgSize: maxMessage,
			// Held again after a crash, an observation has the id it had before;
			// an hour covers a restart, an id costs about 140 bytes of memory (measured).
			Duplicates: time.Hour, AllowDirect: direct, Replicas: replicas,
		},
		{
			Name: Alerts, Subjects: []string{"alert.>"},
			Storage: jetstream.FileStorage, Compression: jetstream.S2Compression,
			Discard: jetstream.DiscardNew, MaxMsgSize: maxMessage,
			AllowDirect: direct, Replicas: replicas,
		},
		{
			// A bucket as any NATS tool knows it, and atomic batches besides.
			// Not compressed: books are, and reading them is twice as fast (measured).
			Name: BooksStream, Subjects: []string{booksSubject + ">"},
			Storage: jetstream.FileStorage, Compression: jetstream.NoCompression,
			Discard: jetstream.DiscardNew, MaxBytes: share(7), MaxMsgSize: maxBook, MaxMsgsPerSubject: 1,
			AllowAtomicPublish: true, AllowDirect: direct, AllowRollup: true, DenyDelete: true, Replicas: replicas,
		},
	}
}

// ensureStreams creates or updates every stream. A stream is never made
// smaller than what it holds.
func (b *Broker) ensureStreams(ctx context.Context, all []jetstream.StreamConfig) error {
	for _, c := range all {
		op := "setting up stream " + c.Name
		one, cancel := context.WithTimeout(ctx, connectWithin+answerWithin)
		s, err := b.js.Stream(one, c.Name)
		if err == nil && c.MaxBytes > 0 {
			c.MaxBytes = max(c.MaxBytes, int64(s.CachedInfo().State.Bytes))
		}
		if err == nil || errors.Is(err, jetstream.ErrStreamNotFound) {
			_, err = b.js.CreateOrUpdateStream(one, c)
		}
		cancel()
		if err != nil {
			err = b.wrap(op, err)
			if full, ok := errors.AsType[*Error](err); ok && full.Code == Full {
				full.Hint = "allow the store more room (broker.embedded.max_store, or the account's limit on a remote server)"
			}
			return err
		}
	}
	return nil
}

// stream is the handle of a stream, asked for once.
func (b *Broker) stream(ctx context.Context, name string) (jetstream.Stream, error) {
	b.mu.Lock()
	s, ok := b.streams[name]
	b.mu.Unlock()
	if ok {
		return s, nil
	}
	s, err := b.js.Stream(ctx, name)
	if err != nil {
		return nil, err
	}
	b.mu.Lock()
	defer b.mu.Unlock()
	if b.streams == nil {
		b.streams = map[string]jetstream.Stream{}
	}
	b.streams[name] = s
	return s, nil
}

func (b *Broker) info(ctx context.Context, name string) (*jetstream.StreamInfo, error) {
	s, err := b.stream(ctx, name)
	if err != nil {
		return nil, err
	}
	return s.Info(ctx)
}

// State is what a stream holds.
type State struct {
	Messages uint64
	Bytes    uint64
	MaxBytes int64  // the stream's own limit, -1 when it has none
	First    uint64 // sequence of the oldest message; Last+1 when all were removed
	Last     uint64 // sequence of the newest message ever stored
	// Created tells one incarnation of a stream from another. A cursor is
	// good for the incarnation it was taken from.
	Created time.Time
}

// State asks for a stream's state. Codes: NotFound, Unreachable.
func (b *Broker) State(ctx context.Context, stream string) (State, error) {
	op := "asking for the state of " + stream
	info, err := b.info(ctx, stream)
	if err != nil {
		return State{}, b.wrap(op, err)
	}
	return State{
		Messages: info.State.Msgs, Bytes: info.State.Bytes, MaxBytes: info.Config.MaxBytes,
		First: info.State.FirstSeq, Last: info.State.LastSeq, Created: info.Created,
	}, nil
}

// PurgeUpTo removes the messages of a stream up to and with sequence seq.
func (b *Broker) PurgeUpTo(ctx context.Context, stream string, seq uint64) error {
	op := fmt.Sprintf("removing %s up to %d", stream, seq)
	if seq == 0 {
		return nil
	}
	s, err := b.stream(ctx, stream)
	if err == nil {
		err = s.Purge(ctx, jetstream.WithPurgeSequence(seq+1))
	}
	return b.wrap(op, err)
}
