package engine

import (
	"fmt"
	"slices"
	"time"

	"saprolite/alerts"
	"saprolite/detectors"
	"saprolite/detectors/finding"
	"saprolite/ingest/daybook"
	"saprolite/ingest/quantity"
)

// Options are what an engine is made of.
type Options struct {
	Place   string // goes into the ids of messages
	Stands  []StandSetup
	Sources []SourceSetup
	Shelf   daybook.Shelf // nil: everything stays in memory
	Record  alerts.Record // what was told
	// Until is the last day that may close; NoDay: no bound.
	Until quantity.Day
}

// StandSetup is a stand, its settings, and where its data come from.
type StandSetup struct {
	Info    alerts.Stand
	Options detectors.Options
	Offset  time.Duration // of the stand's day from UTC
	Draws   []Draw
}

// Draw says that a stand takes a quantity from a source. Draws of the same
// quantity come in order of preference; of vegetation indices the first whose
// source has ever sent one is taken.
type Draw struct {
	_ struct{} `cbor:",toarray"`

	Quantity quantity.Quantity
	Source   string
	// Scale and Add move the source's value to the stand: value*Scale + Add.
	Scale, Add float64
	From       string `cbor:"-"` // the source in words; changes nothing
}

// SourceSetup is a source that may speak.
type SourceSetup struct {
	ID       string
	Feed     string // "": any feed
	Offset   time.Duration
	Interval time.Duration
	Unit     string // of SenML records that give none
	// Ranges replaces the gross range of a quantity for this source.
	Ranges map[quantity.Quantity]Range
}

// Range is what is possible, in the canonical unit, ends included.
type Range struct{ Lo, Hi float64 }

// Engine keeps the books of all sources and stands.
type Engine struct {
	opts    Options
	teller  *alerts.Teller
	sources map[string]*source
	stands  []*stand
	byID    map[string]*stand

	now    time.Time // of the last tick
	cursor uint64    // last message taken in
	stream time.Time // when the stream was created that cursor is of; zero: not known
	// fresh is the first changed day of each source since the last tick,
	// unsaved the same since the last save.
	fresh, unsaved map[string]quantity.Day
	passed         []alerts.Passed // scratch

	counts Counts
}

type source struct {
	setup SourceSetup
	book  *daybook.Book
}

type stand struct {
	setup   StandSetup
	hash    uint64
	account *detectors.Stand // nil until there is rain data
	draws   []drawn          // in the order of setup.Draws
	index   int              // in draws, of the vegetation index taken; -1: none
	changed bool             // since the last save
}

type drawn struct {
	Draw
	book *daybook.Book
}

// Counts are totals since the engine was made.
type Counts struct {
	Observations uint64 // taken into a daybook
	Outdated     uint64 // of these, said something else than is known and were not newer
	Held         uint64
	Ticks        uint64
	StandDays    uint64 // settled, again ones too
	Resettled    uint64 // stands that went back to a checkpoint
	Told         map[finding.Kind]uint64
}

// New opens the books of all sources and stands.
func New(opts Options) (*Engine, error) {
	e := &Engine{
		opts:    opts,
		teller:  alerts.NewTeller(opts.Place, opts.Record),
		sources: map[string]*source{},
		byID:    map[string]*stand{},
		fresh:   map[string]quantity.Day{},
		unsaved: map[string]quantity.Day{},
		counts:  Counts{Told: map[finding.Kind]uint64{}},
	}
	for _, s := range opts.Sources {
		book, err := daybook.Open(daybook.Options{Source: s.ID, Offset: s.Offset, Interval: s.Interval, Shelf: opts.Shelf})
		if err != nil {
			return nil, fmt.Errorf("open books: %w", err)
		}
		e.sources[s.ID] = &source{setup: s, book: book}
	}
	for _, setup := range opts.Stands {
		s := &stand{setup: setup, index: -1}
		for _, d := range setup.Draws {
			src := e.sources[d.Source]
			if src == nil {
				return nil, fmt.Errorf("stand %s draws %s from source %q, which is not registered", setup.Info.ID, d.Quantity, d.Source)
			}
			s.draws = append(s.draws, drawn{d, src.book})
		}
		var err error
		if s.hash, err = setup.fingerprint(e.sources); err != nil {
			return nil, err
		}
		e.stands = append(e.stands, s)
		e.byID[setup.Info.ID] = s
	}
	if err := e.readBooks(); err != nil {
		return nil, fmt.Errorf("open books: %w", err)
	}
	return e, nil
}

// Rehearse marks all further messages as an exercise.
func (e *Engine) Rehearse() { e.teller.Rehearse() }

// Now returns the time of the last tick; zero before the first.
func (e *Engine) Now() time.Time { return e.now }

// Cursor returns the sequence of the last message taken in.
func (e *Engine) Cursor() uint64 { return e.cursor }

// Stream tells the stream that Cursor is of from another of its name: it is
// the time at which it was created; zero when that is not known.
func (e *Engine) Stream() time.Time { return e.stream }

// Restart takes the stream created at that time in from its beginning: another
// one has taken the name, or an older copy of it was put back, and sequences
// mean other messages now. Accounts, pages and the clock stay as they are.
func (e *Engine) Restart(stream time.Time) { e.cursor, e.stream = 0, stream }

// Counts returns the totals since the engine was made.
func (e *Engine) Counts() Counts { return e.counts }

// Unsettled tells whether data have come in since the last tick.
func (e *Engine) Unsettled() bool { return len(e.fresh) > 0 }

// View is a stand as it is now.
type View struct {
	Setup   *StandSetup
	Account *detectors.Stand // nil: no rain data yet
	// Index is the vegetation index taken, "" for none.
	Index quantity.Quantity
}

// Stands returns a view of every stand, in the register's order.
func (e *Engine) Stands() []View {
	views := make([]View, len(e.stands))
	for i, s := range e.stands {
		views[i] = s.view()
	}
	return views
}

// Stand returns the view of one stand.
func (e *Engine) Stand(id string) (View, bool) {
	s, ok := e.byID[id]
	if !ok {
		return View{}, false
	}
	return s.view(), true
}

func (s *stand) view() View {
	v := View{Setup: &s.setup, Account: s.account}
	if s.index >= 0 {
		v.Index = s.draws[s.index].Quantity
	}
	return v
}

func isVegetationIndex(q quantity.Quantity) bool {
	return slices.Contains(detectors.VegetationIndices[:], q)
}

// Until sets the last day that may close.
func (e *Engine) Until(d quantity.Day) { e.opts.Until = d }
