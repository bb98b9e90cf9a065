package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"time"

	"github.com/rs/zerolog"

	"saprolite/alerts"
	"saprolite/cmd/saprolite/engine"
	"saprolite/config"
	"saprolite/detectors/finding"
	"saprolite/ingest/broker"
)

// keeper is the engine with its broker: it takes in the stream, holds what
// cannot be used, and keeps the books. One goroutine at a time drives it.
type keeper struct {
	broker *broker.Broker
	books  *broker.Books
	engine *engine.Engine
	log    zerolog.Logger

	cursorRev uint64 // revision of the cursor's book
	cursor    []byte // as saved last
	since     int    // messages since the last save
	saves     uint64
	saveTook  time.Duration // all of them together

	heldSaid map[string]time.Time // when the log last spoke of a source and code
	onHeld   func(engine.Held)    // if set, is called for each
}

// brokerOptions are the broker's, as the operator wrote them.
func brokerOptions(cfg *config.Config, log zerolog.Logger) broker.Options {
	o := broker.Options{Dir: cfg.Data, Log: log}
	if e := cfg.Broker.Embedded; e != nil {
		o.Listen, o.MaxStore = e.Listen, e.MaxStore
		if e.Relaxed {
			o.Durability = broker.Relaxed
		}
		for _, f := range cfg.Feeds {
			if f.Credentials.Set() {
				o.Feeds = append(o.Feeds, broker.Feed{Name: f.Name, Token: f.Credentials.Reveal()})
			}
		}
	}
	if r := cfg.Broker.Remote; r != nil {
		o.Remote = &broker.Remote{URLs: r.URLs, Credentials: r.Credentials}
	}
	return o
}

// newKeeper opens the books in a broker that this process owns.
func newKeeper(ctx context.Context, cfg *config.Config, reg *config.Register, b *broker.Broker, log zerolog.Logger) (*keeper, error) {
	books, err := b.Books(ctx)
	if err != nil {
		return nil, err
	}
	k := &keeper{broker: b, books: books, log: log, heldSaid: map[string]time.Time{}}
	opts := engineSetup(cfg, reg)
	opts.Shelf, opts.Record = shelf{ctx, books}, record{ctx, b}
	if k.engine, err = engine.New(opts); err != nil {
		return nil, err
	}
	if k.cursor, k.cursorRev, _, err = books.Get(ctx, engine.CursorKey); err != nil {
		return nil, err
	}
	return k, k.meet(ctx)
}

// meet holds the books against the stream that is there, before anything is
// published to it: an older copy that was put back may soon be longer again.
func (k *keeper) meet(ctx context.Context) error {
	state, err := k.broker.State(ctx, broker.Observations)
	if err != nil {
		return err
	}
	switch {
	case !state.Created.Equal(k.engine.Stream()):
		return k.restart(ctx, state.Created, broker.Replaced)
	case state.Last < k.engine.Cursor():
		return k.restart(ctx, state.Created, broker.Regressed)
	}
	return nil
}

// restart takes the stream in from its beginning. Repeating what is in the
// books changes nothing, and what was told is in ALERTS.
func (k *keeper) restart(ctx context.Context, created time.Time, why broker.GapReason) error {
	cursor := k.engine.Cursor()
	k.engine.Restart(created)
	if cursor == 0 {
		return nil // nothing was read: the books are new
	}
	what := "OBSERVATIONS is not the stream that the books were made from"
	if why == broker.Regressed {
		what = "OBSERVATIONS ends before what the books have read: an older copy of it was put back"
	}
	k.log.Error().Uint64("read_up_to", cursor).Time("created", created).Msg(what +
		". It is taken in again from its beginning; accounts and values in the books stay, and nothing is told twice." +
		" What the old stream held and the books do not is lost: where days are missing, send or load them again")
	k.since++ // so that the cursor is written whatever else has changed
	return k.save(ctx)
}

// missing takes note of messages of OBSERVATIONS that will not come.
func (k *keeper) missing(ctx context.Context, gap *broker.Gap) error {
	if gap.Reason == broker.Removed {
		k.log.Error().Uint64("from", gap.From).Uint64("to", gap.To).Msg(
			"messages were removed from OBSERVATIONS before they could be read; unless they were in the books before, their days are missing: send or load them again")
		return nil
	}
	state, err := k.broker.State(ctx, broker.Observations)
	if err != nil {
		return err
	}
	return k.restart(ctx, state.Created, gap.Reason)
}

// handle takes in one message of OBSERVATIONS and keeps what cannot be used
// in HELD.
func (k *keeper) handle(ctx context.Context, m broker.Msg) ([]alerts.Message, error) {
	out, err := k.engine.Handle(engine.Message{
		Subject: m.Subject, ContentType: m.Header.Get(engine.ContentType), Data: m.Data, Seq: m.Seq, Stored: m.Stored,
	})
	if err != nil {
		return out.Told, fmt.Errorf("take in message %d (%s): %w", m.Seq, m.Subject, err)
	}
	k.sayHeld(out.Held)
	for i, h := range out.Held {
		data, err := json.Marshal(h)
		if err != nil {
			return out.Told, fmt.Errorf("hold part of message %d: %w", m.Seq, err)
		}
		// The time tells it from the message that had this number in a stream
		// that has been replaced.
		id := fmt.Sprintf("held-%d-%d-%d", m.Seq, m.Stored.UnixNano(), i)
		if _, err := k.broker.Publish(ctx, h.Subject(), map[string]string{broker.IDHeader: id}, data); err != nil {
			return out.Told, fmt.Errorf("hold part of message %d: %w", m.Seq, err)
		}
	}
	k.since++
	return out.Told, nil
}

// heldSaidAgain is how soon the log says again that a source has something
// held for the same reason. Common practice of the trade, no source.
const heldSaidAgain = time.Hour

func (k *keeper) sayHeld(list []engine.Held) {
	for _, h := range list {
		if k.onHeld != nil {
			k.onHeld(h)
		}
		key := h.Source + " " + h.Code
		if now := time.Now(); now.Sub(k.heldSaid[key]) > heldSaidAgain {
			if len(k.heldSaid) >= mostHeldSaid {
				clear(k.heldSaid)
			}
			k.heldSaid[key] = now
			k.log.Warn().Str("feed", h.Feed).Str("source", h.Source).Str("code", h.Code).Uint64("message", h.Seq).Msg("held: " + h.Reason)
		}
	}
}

// mostHeldSaid bounds what is remembered of that: senders choose the names.
// Common practice of the trade, no source.
const mostHeldSaid = 1000

// A save is due after so many messages (design 3.7); the daemon also saves
// every half minute.
const saveAfter = 4096

const (
	oneBatch      = 1000     // books the broker writes all or none (broker.Books.Save)
	oneBatchBytes = 60 << 20 // a little below its bound in bytes
)

// save writes the changed books and, last, the cursor.
func (k *keeper) save(ctx context.Context) error {
	if k.since == 0 && !k.engine.Dirty() {
		return nil
	}
	began := time.Now()
	changed, err := k.engine.Changed()
	if err != nil {
		return fmt.Errorf("save books: %w", err)
	}
	entries := make([]broker.Entry, len(changed))
	size := 0
	for i, e := range changed {
		entries[i] = broker.Entry{Key: e.Key, Data: e.Data}
		size += len(e.Data)
	}
	if len(entries) > oneBatch || size > oneBatchBytes {
		e, err := k.engine.UnderWay(k.cursor)
		if err != nil {
			return fmt.Errorf("save books: %w", err)
		}
		if err := k.write(ctx, []broker.Entry{{Key: e.Key, Data: e.Data}}); err != nil {
			return err
		}
	}
	if err := k.write(ctx, entries); err != nil {
		return err
	}
	k.engine.Saved()
	k.since = 0
	k.saves++
	k.saveTook += time.Since(began)
	return k.tidy(ctx)
}

// write writes books of which the last is the cursor, if nobody else has
// written the cursor since.
func (k *keeper) write(ctx context.Context, entries []broker.Entry) error {
	last := &entries[len(entries)-1]
	last.ExpectRev = &k.cursorRev
	revs, err := k.books.Save(ctx, entries)
	if err != nil {
		return fmt.Errorf("save books: %w", err)
	}
	k.cursorRev, k.cursor = revs[len(revs)-1], last.Data
	return nil
}

// tidy makes room in OBSERVATIONS: what the books hold need not be kept there.
// Above seven tenths of its size the older half of it goes.
func (k *keeper) tidy(ctx context.Context) error {
	const above = 0.7
	state, err := k.broker.State(ctx, broker.Observations)
	if err != nil {
		return fmt.Errorf("tidy observations: %w", err)
	}
	if state.MaxBytes <= 0 || float64(state.Bytes) < above*float64(state.MaxBytes) {
		return nil
	}
	if k.engine.Cursor() <= state.First { // nothing that is there has been read yet
		return nil
	}
	middle := state.First + (k.engine.Cursor()-state.First)/2
	if err := k.broker.PurgeUpTo(ctx, broker.Observations, middle); err != nil {
		return fmt.Errorf("tidy observations: %w", err)
	}
	k.log.Info().Uint64("up_to", middle).Msg("observations that are in the books have made room for new ones")
	return nil
}

// shelf reads books for the engine.
type shelf struct {
	ctx   context.Context
	books *broker.Books
}

func (s shelf) Read(key string) ([]byte, error) {
	data, _, _, err := s.books.Get(s.ctx, key)
	return data, err
}

// record is stream ALERTS as the teller sees it.
type record struct {
	ctx    context.Context
	broker *broker.Broker
}

func alertSubject(stand string, kind finding.Kind) string {
	return "alert." + stand + "." + string(kind)
}

func (r record) Last(stand string, kind finding.Kind) (m alerts.Message, place uint64, err error) {
	msg, ok, err := r.broker.Last(r.ctx, broker.Alerts, alertSubject(stand, kind))
	if err != nil || !ok {
		return m, 0, err
	}
	if err := json.Unmarshal(msg.Data, &m); err != nil {
		return m, 0, fmt.Errorf("read what was told (%s, message %d): %w", msg.Subject, msg.Seq, err)
	}
	return m, msg.Seq, nil
}

func (r record) Append(m alerts.Message, after uint64) (uint64, error) {
	data, err := json.Marshal(m)
	if err != nil {
		return 0, err
	}
	place, err := r.broker.PublishExpect(r.ctx, alertSubject(m.Stand, m.Kind), data, m.MessageID(), after)
	if errors.Is(err, broker.ErrMoved) {
		return 0, alerts.ErrMoved
	}
	return place, err
}

// told is stream ALERTS as a courier sees it.
type told struct{ broker *broker.Broker }

func (t told) Follow(ctx context.Context, after uint64, fn func(seq uint64, m alerts.Message) error) error {
	err := t.broker.Follow(ctx, broker.Following{Stream: broker.Alerts, After: after, Each: func(msg broker.Msg) error {
		var m alerts.Message
		if err := json.Unmarshal(msg.Data, &m); err != nil {
			return fmt.Errorf("read alert message %d: %w", msg.Seq, err)
		}
		return fn(msg.Seq, m)
	}})
	if ctx.Err() != nil {
		return nil
	}
	return err
}
