package config

import "fmt"

// Thresholds are when a condition is reached, by kind (design 5.6).
type Thresholds struct {
	StoreLow   StoreLow
	FeedSilent FeedSilent
}

// StoreLow is when a store is low.
type StoreLow struct {
	// Left is the fraction of the store left below which each level holds:
	// drawing down, low, nearly spent, spent; each less than the one before.
	Left      [4]float64
	EnterDays int // days in a row that a level must hold to be entered
	LeaveDays int // days in a row that it must not hold to be left
}

// FeedSilent is when a source that a stand depends on has stopped.
type FeedSilent struct {
	Days      int // days without a usable value before the source is silent
	BlindDays int // and before the stand's account can no longer be judged
}

// DefaultThresholds are those of the design. The levels are conventions, not
// measured (methods.md section K: 0.40 is where water begins to be short, 0.25
// about half of potential transpiration, 0.10 about closure); 0.03 is "spent"
// of its decisions; entering after 3 and leaving after 7 days took flapping
// from 14 to 1 a decade (section K). The days of silence are common practice of
// the trade, no source.
func DefaultThresholds() Thresholds {
	return Thresholds{
		StoreLow:   StoreLow{Left: [4]float64{0.40, 0.25, 0.10, 0.03}, EnterDays: 3, LeaveDays: 7},
		FeedSilent: FeedSilent{Days: 3, BlindDays: 10},
	}
}

// longestWait bounds every count of days: a season. Common practice, no source.
const longestWait = 120

func (l *loader) thresholds(top *section) Thresholds {
	t := DefaultThresholds()
	s, _ := top.open("thresholds")
	s.later = append([]string{"groups"}, laterKinds...)

	low, _ := s.open("store-low")
	levels := [...]string{"drawing_down", "low", "nearly_spent", "spent"}
	left := &t.StoreLow.Left
	for i, level := range levels {
		left[i] = low.number(level, left[i], share, above(0, "write the fraction of the store that is left"))
		if i > 0 && left[i] >= left[i-1] {
			low.complainAt(level, fmt.Sprintf("%s %v is not below %s %v", level, left[i], levels[i-1], left[i-1]), "each level leaves less than the one before; what is not written has its default")
		}
	}
	t.StoreLow.EnterDays = days(low, "enter_days", t.StoreLow.EnterDays)
	t.StoreLow.LeaveDays = days(low, "leave_days", t.StoreLow.LeaveDays)
	low.done()

	silent, _ := s.open("feed-silent")
	t.FeedSilent.Days = days(silent, "days", t.FeedSilent.Days)
	t.FeedSilent.BlindDays = days(silent, "blind_days", t.FeedSilent.BlindDays)
	if t.FeedSilent.BlindDays <= t.FeedSilent.Days {
		silent.complainAt("blind_days", fmt.Sprintf("blind_days %d is not above days %d", t.FeedSilent.BlindDays, t.FeedSilent.Days), "a stand is blind only after its source has been silent")
	}
	silent.done()
	s.done()
	return t
}

func days(s *section, name string, absent int) int {
	return s.whole(name, absent, between(1, longestWait, "days", "write whole days"))
}
