package detectors

import (
	"fmt"
	"slices"

	"saprolite/detectors/ledger"
	"saprolite/detectors/stat"
	"saprolite/ingest/quantity"
)

// Schema numbers the meaning of State and of the daily step. It goes up
// whenever either changes: stands then settle again from their pages.
const Schema = 1

// State is all a stand remembers from one day to the next, apart from its
// closed years and episodes.
type State struct {
	_ struct{} `cbor:",toarray"`

	Day      quantity.Day // last settled day
	Store    ledger.Store
	Anchored bool  // the store has been seen full, and the account has missed little since
	Unseen   int16 // days of rain the account has missed since then
	Usual    habit
	Year     YearSoFar // without its peaks: these only grow within a year, so one copy serves all checkpoints
	Years    int       // closed years so far
	Episodes int       // closed episodes so far

	Levels  [4]hold
	Low     Episode // running store-low; Onset NoDay: none
	Silent  Episode // running feed-silent
	NoRain  int16   // days in a row without rain data, up to now
	NoAir   int16   // days in a row without any evapotranspiration
	HadRain bool
	HadAir  bool

	Greenness    quantity.Index // last accepted
	GreennessDay quantity.Day
	Green95      stat.P2        // of everything accepted
	FullGreen    quantity.Index // the 95th percentile as of the last year's end; NaN: none yet
}

// Head is a stand as it is kept: where it is, what it has closed, and the
// checkpoints from which it can settle again.
type Head struct {
	_ struct{} `cbor:",toarray"`

	Schema      uint16
	First       quantity.Day // the account's first day
	Now         State
	Today       Account // of Now.Day
	Peaks       [weeks]uint16
	Years       []Year
	Episodes    []Episode
	Checkpoints []State // by day, before Now
}

const (
	dailyFor   = 60   // days with a checkpoint each (methods J.3)
	monthlyGap = 32   // days between the next ones
	monthlyFor = 1096 // days, three years
)

// checkpoints keeps past states in rings: one a day, one every 32 days, and
// one a year for ever (methods J.3).
type checkpoints struct {
	daily   [dailyFor]State
	monthly [monthlyFor/monthlyGap + 1]State
	yearly  []State
}

func newCheckpoints() *checkpoints {
	c := &checkpoints{}
	for i := range c.daily {
		c.daily[i].Day = quantity.NoDay
	}
	for i := range c.monthly {
		c.monthly[i].Day = quantity.NoDay
	}
	return c
}

func slot(d quantity.Day, n int) int {
	return int(((int64(d) % int64(n)) + int64(n)) % int64(n))
}

func (c *checkpoints) keep(s *State, yearEnds bool) {
	c.daily[slot(s.Day, dailyFor)] = *s
	if s.Day%monthlyGap == 0 {
		c.monthly[slot(s.Day/monthlyGap, len(c.monthly))] = *s
	}
	if yearEnds {
		c.yearly = append(c.yearly, *s)
	}
}

// all returns every checkpoint of days before now, sorted.
func (c *checkpoints) all(now quantity.Day) []State {
	var list []State
	add := func(s State) {
		if s.Day != quantity.NoDay && s.Day < now {
			list = append(list, s)
		}
	}
	for _, s := range c.daily {
		add(s)
	}
	for _, s := range c.monthly {
		add(s)
	}
	for _, s := range c.yearly {
		add(s)
	}
	slices.SortFunc(list, func(a, b State) int { return int(a.Day) - int(b.Day) })
	return slices.CompactFunc(list, func(a, b State) bool { return a.Day == b.Day })
}

// before returns the last checkpoint before day, nil if there is none.
func (c *checkpoints) before(day quantity.Day) (last *State) {
	for _, list := range [][]State{c.daily[:], c.monthly[:], c.yearly} {
		for i := range list {
			if d := list[i].Day; d != quantity.NoDay && d < day && (last == nil || d > last.Day) {
				last = &list[i]
			}
		}
	}
	return last
}

// forget drops checkpoints of day and later.
func (c *checkpoints) forget(day quantity.Day) {
	for i := range c.daily {
		if c.daily[i].Day >= day {
			c.daily[i].Day = quantity.NoDay
		}
	}
	for i := range c.monthly {
		if c.monthly[i].Day >= day {
			c.monthly[i].Day = quantity.NoDay
		}
	}
	c.yearly = slices.DeleteFunc(c.yearly, func(s State) bool { return s.Day >= day })
}

// Head returns what must be kept to go on later as if never stopped.
func (s *Stand) Head() Head {
	return Head{
		Schema: Schema, First: s.first, Now: s.State, Today: s.Today, Peaks: s.peaks,
		Years: orNone(s.years), Episodes: orNone(s.episodes), Checkpoints: s.past.all(s.State.Day),
	}
}

// orNone gives an empty list one form: what was taken back is written in the
// same bytes as what never was.
func orNone[T any](list []T) []T {
	if len(list) == 0 {
		return nil
	}
	return list
}

// Restore makes a stand from its head. A head of another schema is refused:
// the stand must settle again from its pages.
func Restore(opts Options, h Head) (*Stand, error) {
	if h.Schema != Schema {
		return nil, fmt.Errorf("stand %s: head has schema %d, this program has %d: settle again", opts.ID, h.Schema, Schema)
	}
	if len(h.Years) < h.Now.Years || len(h.Episodes) < h.Now.Episodes {
		return nil, fmt.Errorf("stand %s: head is incomplete: settle again", opts.ID)
	}
	s := New(opts, h.First)
	s.State, s.Today, s.peaks = h.Now, h.Today, h.Peaks
	s.years, s.episodes = h.Years, h.Episodes
	for i := range h.Checkpoints {
		c := &h.Checkpoints[i]
		s.past.keep(c, beginsYear(c.Day+1, opts.YearStart))
	}
	s.past.keep(&s.State, beginsYear(s.State.Day+1, opts.YearStart))
	s.refreshLimit()
	return s, nil
}

// Rewind takes the stand back to the nearest checkpoint before day, or to
// before its first day, and returns the next day to settle.
func (s *Stand) Rewind(day quantity.Day) quantity.Day {
	if day > s.State.Day {
		return s.State.Day + 1
	}
	last := s.past.before(day)
	if last == nil {
		*s = *New(s.opts, s.first)
		return s.first
	}
	at := *last
	y := Year{YearSoFar: at.Year, Peaks: s.peaks}
	if at.Years < len(s.years) {
		y.Peaks = s.years[at.Years].Peaks
	}
	y.rewind(at.Day)
	s.peaks = y.Peaks
	s.State = at
	s.years, s.episodes = s.years[:at.Years:at.Years], s.episodes[:at.Episodes:at.Episodes]
	s.past.forget(at.Day + 1)
	s.refreshLimit()
	return at.Day + 1
}
