package engine

import (
	"fmt"
	"time"

	"saprolite/alerts"
	"saprolite/detectors"
	"saprolite/ingest/quantity"
)

// Outcome is what a message led to.
type Outcome struct {
	Held []Held
	Told []alerts.Message
}

// A stand-day closes at six in the morning of the next day, so that what is
// sent once a night has arrived (methods J.3, convention).
const closesAfter = 6 * time.Hour

// lastClosed is the last day that has closed by now at an offset from UTC.
func (e *Engine) lastClosed(now time.Time, offset time.Duration) quantity.Day {
	d := quantity.DayOf(now.Add(-closesAfter), offset) - 1
	if e.opts.Until != quantity.NoDay {
		d = min(d, e.opts.Until)
	}
	return d
}

// Tick moves time on: days close, stands settle, and what has changed is
// told. A tick that is not later than the last only settles what has come in,
// a second later, so that no two settlings have the same time: the teller knows
// by it what has been told already.
func (e *Engine) Tick(now time.Time) ([]alerts.Message, error) {
	before := e.now
	switch {
	case now.After(e.now):
		e.now = now
	case len(e.fresh) > 0:
		e.now = e.now.Add(time.Second)
	}
	e.counts.Ticks++
	var told []alerts.Message
	for _, s := range e.stands {
		more, err := e.settle(s, before)
		told = append(told, more...)
		if err != nil {
			return told, err
		}
	}
	clear(e.fresh)
	for _, m := range told {
		if m.Told {
			e.counts.Told[m.Kind]++
		}
	}
	return told, nil
}

// settle brings one stand up to the last closed day: from the nearest
// checkpoint before the first changed day, or from where it is. before is the
// time of the tick before.
func (e *Engine) settle(s *stand, before time.Time) ([]alerts.Message, error) {
	closed := e.lastClosed(e.now, s.setup.Offset)
	if s.account != nil && s.account.State.Day >= closed && len(e.fresh) == 0 {
		return nil, nil
	}
	first, ok := s.firstRain()
	if !ok || first > closed {
		return nil, nil
	}
	news := first
	if !before.IsZero() {
		news = max(first, e.lastClosed(before, s.setup.Offset)+1)
	}
	moved, err := e.settleDays(s, first, closed)
	if err != nil || !moved {
		return nil, err
	}
	s.changed = true
	return e.tell(s, news)
}

func (e *Engine) settleDays(s *stand, first, closed quantity.Day) (moved bool, err error) {
	index := s.vegetationIndex()
	switch {
	case s.account == nil || first < s.account.First() || index != s.index:
		if s.account != nil {
			e.counts.Resettled++
		}
		s.account, s.index = detectors.New(s.setup.Options, first), index
		moved = true
	default:
		from := closed + 1
		for _, d := range s.draws {
			if day, ok := e.fresh[d.Source]; ok {
				from = min(from, day)
			}
		}
		if from <= s.account.State.Day {
			s.account.Rewind(from)
			e.counts.Resettled++
			moved = true
		}
	}
	for d := s.account.State.Day + 1; d <= closed; d++ {
		in, err := s.inputs(d)
		if err != nil {
			return moved, fmt.Errorf("settle stand %s on %s: %w", s.setup.Info.ID, d, err)
		}
		s.account.Step(&in)
		e.counts.StandDays++
		moved = true
	}
	return moved, nil
}

// tell lets the teller compare what the account says with what was told.
func (e *Engine) tell(s *stand, news quantity.Day) ([]alerts.Message, error) {
	e.passed = e.passed[:0]
	for _, p := range s.account.Past() {
		e.passed = append(e.passed, alerts.Passed{Kind: p.Kind, Worst: p.Worst, Onset: p.Onset, Ended: p.Ended})
	}
	return e.teller.Tell(s.setup.Info, alerts.Wanted{Open: s.account.Findings(), Past: e.passed, News: news, Now: e.now, Account: s.account})
}

// firstRain is the first day on which any of the stand's rain sources has
// anything to say: there the account begins.
func (s *stand) firstRain() (first quantity.Day, ok bool) {
	for _, d := range s.draws {
		if d.Quantity != quantity.Precipitation {
			continue
		}
		if span, has := d.book.Has(d.Quantity); has && (!ok || span.First < first) {
			first, ok = span.First, true
		}
	}
	return first, ok
}

// vegetationIndex is the draw whose vegetation index is taken: the first
// whose source has ever sent one. One index serves a stand (design 5.5).
func (s *stand) vegetationIndex() int {
	for i, d := range s.draws {
		if !isVegetationIndex(d.Quantity) {
			continue
		}
		if _, has := d.book.Has(d.Quantity); has {
			return i
		}
	}
	return -1
}

// inputs collects what the stand's sources know of a day, each quantity from
// the first in order of preference that knows it.
func (s *stand) inputs(d quantity.Day) (detectors.Inputs, error) {
	in := detectors.NoInputs(d)
	var have quantity.Quantity
	for i := range s.draws {
		w := &s.draws[i]
		if w.Quantity == have || isVegetationIndex(w.Quantity) && i != s.index {
			continue
		}
		v, ok, err := w.book.Day(w.Quantity, d)
		if err != nil {
			return in, err
		}
		if ok && v.Known() {
			in.Set(w.Quantity, v.Value*w.Scale+w.Add, w.From)
			have = w.Quantity
		}
	}
	return in, nil
}
