package engine

import (
	"fmt"
	"hash/fnv"
	"maps"
	"slices"
	"time"

	"github.com/fxamacker/cbor/v2"

	"saprolite/detectors"
	"saprolite/ingest/daybook"
	"saprolite/ingest/quantity"
)

// CursorKey is the key of the book that says how far the stream has been
// taken in. It is written last, so a crash in between repeats work and loses
// none.
const CursorKey = "cursor"

// HeadKey is the key of a stand's head.
func HeadKey(stand string) string { return "head." + stand }

// cursorBook is what CursorKey holds.
type cursorBook struct {
	_ struct{} `cbor:",toarray"`

	Seq uint64
	Now int64 // Unix seconds of the last tick; 0 before the first
	// Fresh is what had come in since that tick and waits for the next.
	Fresh map[string]quantity.Day
	// Unsaved is what may have reached pages but not heads, while a save of
	// several batches is under way: those stands settle again.
	Unsaved map[string]quantity.Day
	// Stream is when the stream was created that Seq is of, in Unix
	// nanoseconds; 0: not known.
	Stream int64
}

// HeadBook is a stand as it is kept.
type HeadBook struct {
	_ struct{} `cbor:",toarray"`

	Fingerprint uint64 // of the stand's setup
	Head        detectors.Head
	Index       int // of the vegetation index taken, in the setup's draws; -1: none
}

// encoding writes heads deterministically: the same state is the same bytes.
var encoding = func() cbor.EncMode {
	mode, err := cbor.CoreDetEncOptions().EncMode()
	if err != nil {
		panic(err) // constant options: cannot happen
	}
	return mode
}()

// fingerprint changes when anything changes that a stand's past depends on.
func (s *StandSetup) fingerprint(sources map[string]*source) (uint64, error) {
	type from struct {
		Draw             Draw
		Offset, Interval time.Duration
	}
	var draws []from
	for _, d := range s.Draws {
		src := sources[d.Source].setup
		draws = append(draws, from{d, src.Offset, src.Interval})
	}
	data, err := encoding.Marshal([]any{detectors.Schema, s.Options, s.Offset, draws})
	if err != nil {
		return 0, fmt.Errorf("fingerprint of stand %s: %w", s.Info.ID, err)
	}
	h := fnv.New64a()
	h.Write(data)
	return h.Sum64(), nil
}

// DecodeHead reads a stand's head as it is kept under HeadKey.
func DecodeHead(data []byte) (HeadBook, error) {
	var h HeadBook
	err := cbor.Unmarshal(data, &h)
	return h, err
}

// DecodeCursor reads how far the books are from what CursorKey holds; nil data
// is 0.
func DecodeCursor(data []byte) (uint64, error) {
	var c cursorBook
	if len(data) == 0 {
		return 0, nil
	}
	err := cbor.Unmarshal(data, &c)
	return c.Seq, err
}

// readBooks reads cursor and heads. A head that another setup or program made
// is left: its stand settles again from its pages at the next tick.
func (e *Engine) readBooks() error {
	if e.opts.Shelf == nil {
		return nil
	}
	data, err := e.opts.Shelf.Read(CursorKey)
	if err != nil {
		return err
	}
	if len(data) > 0 {
		var c cursorBook
		if err := cbor.Unmarshal(data, &c); err != nil {
			return fmt.Errorf("%s: %w", CursorKey, err)
		}
		e.cursor = c.Seq
		if c.Now != 0 {
			e.now = time.Unix(c.Now, 0).UTC()
		}
		if c.Stream != 0 {
			e.stream = time.Unix(0, c.Stream).UTC()
		}
		for id, d := range c.Fresh {
			earliest(e.fresh, id, d)
		}
		for id, d := range c.Unsaved {
			earliest(e.fresh, id, d)
		}
		maps.Copy(e.unsaved, e.fresh)
	}
	for _, s := range e.stands {
		data, err := e.opts.Shelf.Read(HeadKey(s.setup.Info.ID))
		if err != nil {
			return err
		}
		if len(data) == 0 {
			continue
		}
		h, err := DecodeHead(data)
		if err != nil || h.Fingerprint != s.hash {
			continue
		}
		account, err := detectors.Restore(s.setup.Options, h.Head)
		if err != nil {
			continue // another schema: made again from the pages
		}
		s.account, s.index = account, h.Index
	}
	return nil
}

// Changed returns the books that changed since Saved, in the order in which
// they must be written: pages and heads, the cursor last. Where they do not
// fit one atomic batch, UnderWay must be written before.
func (e *Engine) Changed() ([]daybook.Entry, error) {
	var entries []daybook.Entry
	for _, id := range slices.Sorted(maps.Keys(e.sources)) {
		more, err := e.sources[id].book.Changed()
		if err != nil {
			return nil, err
		}
		entries = append(entries, more...)
	}
	for _, s := range e.stands {
		if !s.changed {
			continue
		}
		data, err := encoding.Marshal(HeadBook{Fingerprint: s.hash, Head: s.account.Head(), Index: s.index})
		if err != nil {
			return nil, fmt.Errorf("head of stand %s: %w", s.setup.Info.ID, err)
		}
		entries = append(entries, daybook.Entry{Key: HeadKey(s.setup.Info.ID), Data: data})
	}
	last, err := e.cursorEntry()
	if err != nil {
		return nil, err
	}
	return append(entries, last), nil
}

// UnderWay is the entry to write before entries that need several batches: it
// leaves the cursor where it was saved last and says what may be half done.
func (e *Engine) UnderWay(saved []byte) (daybook.Entry, error) {
	var c cursorBook
	if len(saved) > 0 {
		if err := cbor.Unmarshal(saved, &c); err != nil {
			return daybook.Entry{}, fmt.Errorf("%s: %w", CursorKey, err)
		}
	}
	c.Unsaved = e.unsaved
	data, err := encoding.Marshal(c)
	return daybook.Entry{Key: CursorKey, Data: data}, err
}

func (e *Engine) cursorEntry() (daybook.Entry, error) {
	c := cursorBook{Seq: e.cursor, Fresh: e.fresh}
	if !e.now.IsZero() {
		c.Now = e.now.Unix()
	}
	if !e.stream.IsZero() {
		c.Stream = e.stream.UnixNano()
	}
	data, err := encoding.Marshal(c)
	if err != nil {
		return daybook.Entry{}, fmt.Errorf("%s: %w", CursorKey, err)
	}
	return daybook.Entry{Key: CursorKey, Data: data}, nil
}

// keepInMemory is how many days before the last tick pages stay in memory.
const keepInMemory = 70 // days: beyond the daily checkpoints, detectors

// Saved says that what Changed returned has been written.
func (e *Engine) Saved() {
	keep := quantity.DayOf(e.now, 0) - keepInMemory
	for _, src := range e.sources {
		src.book.Saved()
		src.book.Trim(keep)
	}
	for _, s := range e.stands {
		s.changed = false
	}
	clear(e.unsaved)
	maps.Copy(e.unsaved, e.fresh)
}

// Dirty tells whether there is anything to save beside the cursor.
func (e *Engine) Dirty() bool { return len(e.unsaved) > 0 || e.Settled() }

// Settled tells whether stands have settled since the last save.
func (e *Engine) Settled() bool {
	return slices.ContainsFunc(e.stands, func(s *stand) bool { return s.changed })
}
