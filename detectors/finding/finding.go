// Package finding is what the detectors say about a stand: a condition with
// its level, its evidence and its threshold. It is a leaf.
//
// A Finding is not yet a message: whether somebody is told, and how often, is
// decided in alerts.
package finding

import (
	"saprolite/ingest/quantity"
)

// Kind is the kind of a finding, as in design 5.6.
type Kind string

const (
	StoreLow   Kind = "store-low"
	FeedSilent Kind = "feed-silent"
)

// Level is how far a condition has gone, in the house's words (design 5.6).
type Level string

const (
	DrawingDown Level = "drawing down" // less than 0.40 of the store left
	Low         Level = "low"          // less than 0.25
	NearlySpent Level = "nearly spent" // less than 0.10
	Spent       Level = "spent"        // less than 0.03, or a measured deficit past the limit
	Silent      Level = "silent"       // a source has stopped
	Blind       Level = "blind"        // stopped for so long that the account cannot be judged
)

// Rank orders levels: a higher rank is worse. An unknown level ranks 0.
func (l Level) Rank() int {
	switch l {
	case DrawingDown, Silent:
		return 1
	case Low:
		return 2
	case NearlySpent, Blind:
		return 3
	case Spent:
		return 4
	}
	return 0
}

// Evidence is one number behind a finding.
type Evidence struct {
	Name   string  // in words: "storage deficit"
	Value  float64 // NaN when unknown
	Low    float64 // 5 % bound, NaN when unknown
	High   float64 // 95 % bound, NaN when unknown
	Unit   string
	Source string // where the number came from
}

// Threshold is the value a finding was held against.
type Threshold struct {
	Value float64 // NaN when there is none
	Unit  string
	Basis string // where the threshold came from
}

// Finding is one episode of one kind at one stand, as the account sees it now.
type Finding struct {
	Stand string
	Kind  Kind
	Level Level
	Onset quantity.Day // first day of the episode
	Day   quantity.Day // the day it was judged on: the last closed day, or Ended
	Ended quantity.Day // first day it no longer holds; NoDay while it is open
	// Changed is the day on which Level, or that it is worth a message, was decided.
	Changed quantity.Day
	// Sources is how many independent sources agree; it sets CAP's certainty,
	// never its severity. Direct says the condition itself was seen.
	Sources int
	Direct  bool

	Headline   string
	Reason     string
	Evidence   []Evidence
	Threshold  Threshold
	FieldCheck string
	EndsWhen   string
}

// Open tells whether the episode still holds.
func (f Finding) Open() bool { return f.Ended == quantity.NoDay }
