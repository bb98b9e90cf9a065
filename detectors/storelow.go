package detectors

import (
	"fmt"
	"math"
	"strings"

	"saprolite/detectors/finding"
	"saprolite/detectors/ledger"
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

// enter and leave are the chances of a level's condition at which it is
// entered and left (methods H.1).
const enter, leave = 0.5, 0.2

// step moves the hysteresis by one day.
func (h *hold) step(day quantity.Day, p float64, set *StoreLow) {
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
// the account stood still, or went on without data for too long, decides
// nothing: what held goes on holding.
func (s *Stand) judgeStore() {
	st, set := &s.State, &s.opts.StoreLow
	if _, blind := s.Blind(); blind || s.Today.Still || !s.limit.Known() {
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
	// Only while the level's own condition holds: a store that is refilling
	// is told of no more.
	if chanceBelow(set.Left[worst], left) >= enter {
		if st.Low.Eased { // it holds again, without having been left
			st.Low.Eased, st.Low.Since = false, st.Day
		}
		if st.Low.Unusual == "" || st.Low.Changed == st.Day {
			st.Low.worth(s.unusual(worst), st.Day)
		}
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
	needed := s.depth(levels[level])
	since := int(st.Levels[level].Since - st.Year.Start) // negative: since before the year began
	if !st.Year.Whole {                                  // the first, partial year: count from where a whole one would begin
		since += daysIntoYear(st.Year.Start, s.opts.YearStart)
	}
	var years, reached, later, shallower int
	for i := range s.years {
		y := &s.years[i]
		if !s.counts(y) {
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

// why says in a sentence what is unusual, with the stand's own years.
func (s *Stand) why(e *Episode) string {
	needed := s.depth(e.Level)
	var n, reached, shallower, began int
	earliest := math.MaxInt
	for i := range s.years {
		y := &s.years[i]
		if !s.counts(y) {
			continue
		}
		n++
		if first, ok := y.firstReached(needed); ok {
			reached++
			earliest = min(earliest, first)
			if first == 0 {
				began++
			}
		}
		if y.Max < s.Today.Deficit {
			shallower++
		}
	}
	known := fmt.Sprintf("the %d complete years known", n)
	switch e.Unusual {
	case FewYears:
		return fmt.Sprintf("What is usual here is told from %d complete years on, of which there are %d; until then the level alone decides.", yearsToJudge, n)
	case Beyond:
		return fmt.Sprintf("The deficit is deeper than %d of %s reached at their worst.", shallower, known)
	case Carried:
		return fmt.Sprintf("The store has not refilled since the dry season before: %d of %s began like this.", began, known)
	}
	if reached == 0 {
		return fmt.Sprintf("None of %s came to this level.", known)
	}
	if e.Unusual == Seldom {
		return fmt.Sprintf("Only %d of %s came to this level.", reached, known)
	}
	start := s.State.Year.Start + quantity.Day(earliest)
	_, month, day := start.Date()
	return fmt.Sprintf("This is early: in %d of %s the store came to this level, at the earliest about %d %s.", reached, known, day, month)
}

// depth is the deficit at which a level begins.
func (s *Stand) depth(l finding.Level) quantity.Millimetres {
	return quantity.Millimetres(1-s.opts.StoreLow.Left[l.Rank()-1]) * s.limit.Value
}

// storeLow says what a store-low episode has to say today.
func (s *Stand) storeLow(e *Episode) finding.Finding {
	a := &s.Today
	used := fmt.Sprintf("%s used of the %s it can give, %s left.", round(a.Deficit), round(s.limit.Value), percent(s.Left()))
	if !s.opts.configuredLimit() {
		used = fmt.Sprintf("%s used of about %s, %s left.", round(a.Deficit), round(s.limit.Value), percent(s.Left()))
	}
	headline := fmt.Sprintf("Store %s: %s", e.Level, used)
	reason := "At this level since " + e.Since.String()
	if e.Onset != e.Since {
		reason += ", and in this episode since " + e.Onset.String()
	}
	if e.Eased {
		headline = fmt.Sprintf("Store back to %s: %s", e.Level, used)
		reason = fmt.Sprintf("Was %s at its worst in this episode, which began on %s", e.Worst, e.Onset)
	}
	reason += ". " + s.why(e)
	if a.Basis.Measured && a.Deficit >= s.limit.Value {
		reason += " The deficit by measured evapotranspiration has passed the storage limit."
	}
	if !s.opts.configuredLimit() {
		reason += fmt.Sprintf(" About, because the limit is the deficit to expect once in %d years: the store may hold more.", ledger.ReturnPeriod)
	}
	return finding.Finding{
		Stand: s.opts.ID, Kind: finding.StoreLow, Level: e.Level, Onset: e.Onset, Day: a.Day, Ended: e.Ended, Changed: e.decided(),
		Sources: 1, Headline: headline, Reason: strings.TrimSpace(reason + " " + s.Doubt()),
		Evidence: s.Evidence(),
		Threshold: finding.Threshold{
			Value: tenth(s.depth(e.Level)), Unit: "mm",
			Basis: fmt.Sprintf("%s begins with less than %.0f %% of the limit left; the limit is %s", e.Level, 100*s.opts.StoreLow.Left[e.Level.Rank()-1], s.limit.Basis),
		},
		FieldCheck: "Look at the crowns from a safe place: wilting or rolled leaves, early yellowing or leaf fall, thin tops. A predawn water potential of a few trees tells how near to harm they are. Compare the rain gauge with a neighbour.",
		EndsWhen: fmt.Sprintf("Ends when more than %.0f %% of the limit has been left for %d days in a row.",
			100*(s.opts.StoreLow.Left[0]+0.101), s.opts.StoreLow.LeaveDays), // 0.101: chanceBelow falls under 0.2, 0.8416 x 0.12
	}
}

// Doubt says in a sentence what the account has missed, if it has.
func (s *Stand) Doubt() string {
	switch {
	case s.State.Unseen > 0:
		return fmt.Sprintf("Rain data of %d days are missing since the store was last seen full: the true deficit can be larger or smaller.", s.State.Unseen)
	case !s.State.Anchored:
		return fmt.Sprintf("The account began on %s as if the store were full and has not seen it full since: the true deficit can be larger.", s.first)
	}
	return ""
}

// Evidence is the account's numbers of the last settled day.
func (s *Stand) Evidence() []finding.Evidence {
	a, nan := &s.Today, math.NaN()
	list := []finding.Evidence{
		{Name: "storage deficit", Value: tenth(a.Deficit), Low: nan, High: nan, Unit: "mm", Source: "water account, evapotranspiration " + orUnknown(a.Basis.String())},
		{Name: "storage limit", Value: tenth(s.limit.Value), Low: tenth(s.limit.Low), High: tenth(s.limit.High), Unit: "mm", Source: s.limit.Basis},
		{Name: "left of the store", Value: math.Round(1000*math.Max(0, s.Left())) / 10, Low: nan, High: nan, Unit: "%", Source: "100 x (1 - deficit / limit)"},
		{Name: "rain on the day", Value: tenth(a.Precipitation), Low: nan, High: nan, Unit: "mm", Source: orUnknown(a.From.Rain)},
	}
	if n := s.State.Unseen; n > 0 {
		list = append(list, finding.Evidence{Name: "days without rain data since the store was full", Value: float64(n), Low: nan, High: nan, Unit: "d", Source: s.opts.RainFrom})
	}
	return list
}

// tenth rounds to 0.1 mm, as a message shows it.
func tenth(v quantity.Millimetres) float64 { return math.Round(float64(v)*10) / 10 }

func round(v quantity.Millimetres) string { return fmt.Sprintf("%.0f mm", float64(v)) }

func percent(share float64) string { return fmt.Sprintf("%.0f %%", 100*math.Max(0, share)) }

func orUnknown(s string) string {
	if s == "" {
		return "unknown"
	}
	return s
}
