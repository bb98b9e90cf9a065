package detectors

import (
	"fmt"
	"math"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// judgeSilence decides on feed-silent for the day just settled: rain, or
// anything evapotranspiration can be made of, has stopped coming. What never
// came is not silent; the register's check says what is missing there.
func (s *Stand) judgeSilence(rain, air bool) {
	st, set := &s.State, &s.opts.FeedSilent
	count(&st.NoRain, &st.HadRain, rain)
	count(&st.NoAir, &st.HadAir, air)
	days := s.silentFor()
	if days <= set.Days {
		s.close(&st.Silent, st.Day)
		return
	}
	level, since := finding.Silent, st.Day-quantity.Day(days)+1
	if days > set.BlindDays {
		level = finding.Blind
	}
	st.Silent.at(finding.FeedSilent, level, since, st.Day)
	st.Silent.worth(Always, st.Day)
}

func count(missing *int16, had *bool, here bool) {
	switch {
	case here:
		*missing, *had = 0, true
	case *had && *missing < math.MaxInt16:
		*missing++
	}
}

// silentFor is how many days in a row the account has been without rain or
// without air data, whichever is longer.
func (s *Stand) silentFor() int { return int(max(s.State.NoRain, s.State.NoAir)) }

// Blind tells whether the account cannot be judged for want of data, and
// since which day.
func (s *Stand) Blind() (since quantity.Day, blind bool) {
	days := s.silentFor()
	return s.State.Day - quantity.Day(days) + 1, days > s.opts.FeedSilent.BlindDays
}

func (s *Stand) feedSilent(e *Episode) finding.Finding {
	days := s.silentFor()
	what, from := "rain data", s.opts.RainFrom
	meanwhile := fmt.Sprintf("The account stands still at a deficit of %s: days without rain data neither dry nor wet a stand, and its true deficit is less and less known.", round(s.Today.Deficit))
	if s.State.NoAir > s.State.NoRain {
		what, from = "data on evapotranspiration", s.opts.AirFrom
		meanwhile = fmt.Sprintf("Rain is still credited and evapotranspiration taken as what the stand usually uses at this time of year; the deficit of %s is less and less known.", round(s.Today.Deficit))
		if s.Today.Still {
			meanwhile = fmt.Sprintf("The account stands still at a deficit of %s.", round(s.Today.Deficit))
		}
	}
	reason := fmt.Sprintf("Since %s none has come. %s", e.Onset, meanwhile)
	if e.Level == finding.Blind {
		reason += " What was told of the store before is neither confirmed nor cleared."
	}
	nan := math.NaN()
	return finding.Finding{
		Stand: s.opts.ID, Kind: finding.FeedSilent, Level: e.Level, Onset: e.Onset, Day: s.Today.Day, Ended: e.Ended, Changed: e.decided(),
		Sources: 1, Direct: true,
		Headline: fmt.Sprintf("No %s for %d days. They should come from %s.", what, days, from),
		Reason:   reason,
		Evidence: []finding.Evidence{
			{Name: "days without " + what, Value: float64(days), Low: nan, High: nan, Unit: "d", Source: from},
			{Name: "storage deficit as it is kept", Value: tenth(s.Today.Deficit), Low: nan, High: nan, Unit: "mm", Source: "water account"},
		},
		Threshold:  finding.Threshold{Value: float64(s.opts.FeedSilent.Days), Unit: "d", Basis: "days without data before a source counts as silent (feed-silent.days)"},
		FieldCheck: "Look at the logger's power and line, then at the gauge: blocked funnel, spider webs, full collector. Read out what the logger kept; late data are taken in and the account is made right.",
		EndsWhen:   "Ends on the first day with usable data again.",
	}
}
