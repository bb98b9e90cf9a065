package detectors

import (
	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// Episode is one stretch of days over which a condition held at a stand.
type Episode struct {
	_ struct{} `cbor:",toarray"`

	Kind  finding.Kind
	Onset quantity.Day // NoDay: there is none
	Ended quantity.Day // first day it no longer held; NoDay while it is open
	Level finding.Level
	Since quantity.Day // first day at Level
	Worst finding.Level
	// Changed is the day on which Level was decided: hysteresis makes it later
	// than Since.
	Changed quantity.Day
	Eased   bool // the last change was to a lesser level, whose own condition has not held since
	// Unusual says why the episode is worth a message; "" while it is not.
	// Once it is, it stays so to its end (design 5.6). Noted is the day it
	// became so.
	Unusual Unusual
	Noted   quantity.Day
}

var noEpisode = Episode{Onset: quantity.NoDay, Ended: quantity.NoDay, Since: quantity.NoDay, Changed: quantity.NoDay, Noted: quantity.NoDay}

// Open tells whether the episode is going on.
func (e *Episode) Open() bool { return e.Onset != quantity.NoDay && e.Ended == quantity.NoDay }

// Unusual is why a condition is worth a message (design 5.6).
type Unusual string

const (
	FewYears Unusual = "few-years" // fewer than five years known: the level alone decides
	Seldom   Unusual = "seldom"    // not reached in most of the stand's own years
	Early    Unusual = "early"     // at least 21 days earlier than in 4 of 5 years
	Carried  Unusual = "carried"   // the same, because it held when the hydrological year began
	Beyond   Unusual = "beyond"    // deeper than 4 of 5 years reach at their worst
	Always   Unusual = "always"    // a stopped source is never ordinary
)

// at moves the episode to a level as decided on day d, opening it if need be;
// since is the first day on which the level's condition held.
func (e *Episode) at(kind finding.Kind, level finding.Level, since, d quantity.Day) {
	if !e.Open() {
		*e = Episode{Kind: kind, Onset: since, Ended: quantity.NoDay, Noted: quantity.NoDay}
	}
	if e.Level != level {
		e.Eased = level.Rank() < e.Level.Rank()
		e.Level, e.Since, e.Changed = level, since, d
	}
	if level.Rank() > e.Worst.Rank() {
		e.Worst = level
	}
}

// worth notes why the episode is worth a message, from day d on.
func (e *Episode) worth(why Unusual, d quantity.Day) {
	if why == "" {
		return
	}
	if e.Unusual == "" {
		e.Noted = d
	}
	e.Unusual = why
}

// decided is the day on which what a message would say was decided.
func (e *Episode) decided() quantity.Day { return max(e.Changed, e.Noted) }

// close ends a running episode on day d, the first on which it does not hold,
// and keeps it if it was worth a message.
func (s *Stand) close(e *Episode, d quantity.Day) {
	if !e.Open() {
		return
	}
	e.Ended = d
	if e.Unusual != "" {
		s.episodes = append(s.episodes, *e)
		s.State.Episodes = len(s.episodes)
	}
	*e = noEpisode
}

// Past returns the stand's closed episodes that were worth a message, by the
// day they ended.
func (s *Stand) Past() []Episode { return s.episodes }

// Findings returns what holds on the last settled day and is worth a message.
func (s *Stand) Findings() []finding.Finding {
	var list []finding.Finding
	if e := &s.State.Low; e.Open() && e.Unusual != "" {
		list = append(list, s.storeLow(e))
	}
	if e := &s.State.Silent; e.Open() {
		list = append(list, s.feedSilent(e))
	}
	return list
}

// Level is the level the store is at by hysteresis, unusual or not; "" when
// none holds or the limit is unknown.
func (s *Stand) Level() finding.Level { return s.State.Low.Level }
