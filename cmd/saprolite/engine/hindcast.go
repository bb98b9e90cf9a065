package engine

import (
	"cmp"
	"slices"
	"time"

	"saprolite/alerts"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// Hindcast runs an engine over a history without a broker: each observation
// becomes known when it says it did (by default at its end), an invented clock
// ticks every hour, and each day knows only what was available by then.
type Hindcast struct {
	engine  *Engine
	history []arrival
	first   quantity.Day // earliest day any observation speaks for
	last    quantity.Day // latest
}

type arrival struct {
	at   time.Time
	what observation.Observation
	src  *source
}

// NewHindcast returns a hindcast on an engine that nothing has happened to yet.
func NewHindcast(e *Engine) *Hindcast {
	return &Hindcast{engine: e, first: 1<<31 - 1, last: quantity.NoDay}
}

// Add takes an observation into the history. An observation that cannot be
// used is returned as held.
func (h *Hindcast) Add(o observation.Observation) *Held {
	src, ok := h.engine.sources[o.Source]
	if !ok {
		return &Held{Feed: LoadFeed, Source: o.Source, Code: heldUnregistered, Record: describe(o),
			Reason: "no stand draws on this source and the stands file does not list it"}
	}
	if code, reason := judge(o, src, time.Time{}); code != "" {
		return &Held{Feed: LoadFeed, Source: o.Source, Code: code, Reason: reason, Record: describe(o)}
	}
	if refused := src.book.Refuses(o); refused != nil {
		return &Held{Feed: LoadFeed, Source: o.Source, Code: heldNotKept, Reason: refused.Reason, Record: describe(o)}
	}
	at := o.Available
	in := o.In(src.setup.Offset)
	if at.IsZero() {
		at = in.End
	}
	h.first = min(h.first, quantity.DayOf(in.Start, src.setup.Offset))
	h.last = max(h.last, quantity.DayEndingAt(in.End, src.setup.Offset))
	h.history = append(h.history, arrival{at, o, src})
	return nil
}

// Days returns the first and last day the history speaks for.
func (h *Hindcast) Days() (first, last quantity.Day) { return h.first, h.last }

// Run lets the history happen up to the end of day to, which must have been
// the engine's Until. It calls told for each message and day after each day
// that a tick has moved past (progress); a history without observations does
// nothing.
func (h *Hindcast) Run(to quantity.Day, told func(alerts.Message) error, day func(quantity.Day) error) error {
	if len(h.history) == 0 {
		return nil
	}
	slices.SortStableFunc(h.history, func(a, b arrival) int {
		return cmp.Or(a.at.Compare(b.at), cmp.Compare(a.what.Source, b.what.Source))
	})
	e, next := h.engine, 0
	// A history whose first values became known late begins before them: no
	// stand-day closes earlier than its data, so nothing is lost by that.
	now := h.history[0].at.Truncate(time.Hour)
	for {
		for next < len(h.history) && !h.history[next].at.After(now) {
			a := h.history[next]
			if err := e.add(a.what, a.src); err != nil {
				return err
			}
			next++
		}
		messages, err := e.Tick(now)
		if err != nil {
			return err
		}
		for _, m := range messages {
			if err := told(m); err != nil {
				return err
			}
		}
		if now.Hour() == 0 && day != nil {
			if err := day(quantity.DayOf(now, 0) - 1); err != nil {
				return err
			}
		}
		if e.allClosed(to) {
			return nil
		}
		now = now.Add(time.Hour)
	}
}

// allClosed tells whether day to has closed at every stand.
func (e *Engine) allClosed(to quantity.Day) bool {
	for _, s := range e.stands {
		if e.lastClosed(e.now, s.setup.Offset) < to {
			return false
		}
	}
	return true
}
