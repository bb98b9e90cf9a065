package detectors

import (
	"fmt"
	"math"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// hold is hysteresis in days for one level: how long its condition has held,
// or has not.
type hold struct {
	_ struct{} `cbor:",toarray"`

	In, Out int16
	On      bool
	Since   quantity.Day // first day of the run that entered it
}

// stepped moves the hysteresis by one day.
func (h *hold) step(day quantity.Day, p float64, set *StoreLow) {
	const enter, leave = 0.5, 0.2 // chance of the condition, methods H.1
	switch {
	case !h.On && p >= enter:
		h.In++
		if int(h.In) >= set.EnterDays {
			*h = hold{On: true, Since: day - quantity.Day(h.In) + 1}
		}
	case !h.On:
		h.In = 0
	case p < leave:
		h.Out++
		if int(h.Out) >= set.LeaveDays {
			*h = hold{}
		}
	default:
		h.Out = 0
	}
}

// leftSD is the standard deviation of the share of the store left beyond what
// the account itself knows (methods C.2 and H.1: structural sd of f).
const leftSD = 0.12

// chanceBelow is the chance that the share left is at most threshold (methods
// H.1), with the account's own interval to join leftSD once it is carried.
func chanceBelow(threshold, left float64) float64 {
	return 0.5 * math.Erfc((left-threshold)/(leftSD*math.Sqrt2))
}

// levels in the order of StoreLow.Left.
var levels = [4]finding.Level{finding.DrawingDown, finding.Low, finding.NearlySpent, finding.Spent}

// judgeStore decides on store-low for the day just settled. A day on which
// the account stood still decides nothing: what held goes on holding.
func (s *Stand) judgeStore() {
	st, set := &s.State, &s.opts.StoreLow
	if s.Today.Still || !s.limit.Known() {
		return
	}
	left := s.Left()
	worst := -1
	for i := range st.Levels {
		st.Levels[i].step(st.Day, chanceBelow(set.Left[i], left), set)
		if st.Levels[i].On {
			worst = i
		}
	}
	if worst < 0 {
		s.close(&st.Low, st.Day)
		return
	}
	st.Low.at(finding.StoreLow, levels[worst], st.Levels[worst].Since, st.Day)
	if st.Low.Unusual == "" || st.Low.Changed == st.Day {
		st.Low.worth(s.unusual(worst), st.Day)
	}
}

const (
	yearsToJudge = 5    // design 5.6: before five years are known the level alone decides
	earlierDays  = 21   // design 5.6
	most         = 0.5  // design 5.6: "most of the stand's own years"
	fourOfFive   = 0.80 // design 5.6
)

// unusual tells why a level is worth a message at this stand, or "" when it
// comes in most years and not early (design 5.6).
func (s *Stand) unusual(level int) Unusual {
	st := &s.State
	needed := quantity.Millimetres(1-s.opts.StoreLow.Left[level]) * s.limit.Value
	since := int(st.Levels[level].Since - st.Year.Start) // negative: since before the year began
	if !st.Year.Whole {                                  // the first, partial year: count from where a whole one would begin
		since += daysIntoYear(st.Year.Start, s.opts.YearStart)
	}
	var years, reached, later, shallower int
	for i := range s.years {
		y := &s.years[i]
		if !y.Complete() {
			continue
		}
		years++
		first, ok := y.firstReached(needed)
		if ok {
			reached++
		}
		if !ok || first >= max(0, since)+earlierDays {
			later++
		}
		if y.Max < s.Today.Deficit {
			shallower++
		}
	}
	n := float64(years)
	switch {
	case years < yearsToJudge:
		return FewYears
	case float64(reached) < most*n:
		return Seldom
	case float64(later) >= fourOfFive*n && since < 0:
		return Carried
	case float64(later) >= fourOfFive*n:
		return Early
	case float64(shallower) >= fourOfFive*n:
		return Beyond
	}
	return ""
}

// daysIntoYear is how many days after the hydrological year's start d lies.
func daysIntoYear(d quantity.Day, start int) int { return (yearDay(d) - start + 365) % 365 }

// why says the reason of an Unusual in a sentence.
func (s *Stand) why(u Unusual) string {
	n := len(s.maxima())
	switch u {
	case FewYears:
		return fmt.Sprintf("Only %d complete years of this stand are known (5 are needed to tell what is usual here), so the level alone decides.", n)
	case Seldom:
		return fmt.Sprintf("This level was not reached in most of the %d complete years known.", n)
	case Early:
		return fmt.Sprintf("This level came at least 21 days earlier than in 4 of 5 of the %d complete years known.", n)
	case Carried:
		return fmt.Sprintf("The store did not refill: this level already held when the hydrological year began, as in fewer than 1 of 5 of the %d complete years known.", n)
	case Beyond:
		return fmt.Sprintf("The deficit is deeper than 4 of 5 of the %d complete years known reached at their worst.", n)
	}
	return ""
}

// storeLow says what a store-low episode has to say today.
func (s *Stand) storeLow(e *Episode) finding.Finding {
	a := &s.Today
	left := s.Left()
	threshold := s.opts.StoreLow.Left[e.Level.Rank()-1]
	headline := fmt.Sprintf("Store %s: %s used of the %s it can give, %s left.", e.Level, round(a.Deficit), round(s.limit.Value), percent(left))
	reason := fmt.Sprintf("At this level since %s, drawn down since %s. %s", e.Since, e.Onset, s.why(e.Unusual))
	if e.Eased {
		headline = fmt.Sprintf("Store recovering from %s: %s used of the %s it can give, %s left.", e.Worst, round(a.Deficit), round(s.limit.Value), percent(left))
		reason = fmt.Sprintf("Counted as %s since %s: a level is left only after %d days well above it. Drawn down since %s. %s", e.Level, e.Changed, s.opts.StoreLow.LeaveDays, e.Onset, s.why(e.Unusual))
	}
	if a.Basis.Measured && a.Deficit >= s.limit.Value {
		reason += " The deficit by measured evapotranspiration has passed the storage limit."
	}
	if !s.State.Anchored {
		reason += fmt.Sprintf(" The account began on %s as if the store were full and has not seen it full since: the true deficit can be larger.", s.first)
	}
	f := finding.Finding{
		Stand: s.opts.ID, Kind: finding.StoreLow, Level: e.Level, Onset: e.Onset, Day: a.Day, Ended: e.Ended, Changed: e.decided(),
		Sources: 1, Headline: headline, Reason: reason,
		Evidence: s.Evidence(),
		Threshold: finding.Threshold{
			Value: (1 - threshold) * float64(s.limit.Value), Unit: "mm",
			Basis: fmt.Sprintf("%s: less than %.0f %% of the store left; limit %s", e.Level, threshold*100, s.limit.Basis),
		},
		FieldCheck: "Look at the crowns from a safe place: wilting or rolled leaves, early yellowing or leaf fall, thin tops. A predawn water potential of a few trees tells how near to harm they are. Compare the rain gauge with a neighbour.",
		EndsWhen: fmt.Sprintf("Ends when more than about %.0f %% of the store has been back for %d days.",
			100*(s.opts.StoreLow.Left[0]+0.101), s.opts.StoreLow.LeaveDays), // 0.101: chanceBelow falls under 0.2, 0.8416 x 0.12
	}
	return f
}

// Evidence is the account's numbers of the last settled day.
func (s *Stand) Evidence() []finding.Evidence {
	a, nan := &s.Today, math.NaN()
	return []finding.Evidence{
		{Name: "storage deficit", Value: float64(a.Deficit), Low: nan, High: nan, Unit: "mm", Source: "water account, evapotranspiration " + orUnknown(a.Basis.String())},
		{Name: "storage limit", Value: float64(s.limit.Value), Low: float64(s.limit.Low), High: float64(s.limit.High), Unit: "mm", Source: s.limit.Basis},
		{Name: "share of store left", Value: math.Max(0, s.Left()), Low: nan, High: nan, Unit: "1", Source: "1 - deficit / limit"},
		{Name: "rain on the day", Value: float64(a.Precipitation), Low: nan, High: nan, Unit: "mm", Source: s.opts.RainFrom},
	}
}

func round(v quantity.Millimetres) string { return fmt.Sprintf("%.0f mm", float64(v)) }

func percent(share float64) string { return fmt.Sprintf("%.0f %%", 100*math.Max(0, share)) }

func orUnknown(s string) string {
	if s == "" {
		return "unknown"
	}
	return s
}
