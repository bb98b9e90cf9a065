package detectors

import (
	"math"

	"saprolite/detectors/climate"
	"saprolite/detectors/ledger"
	"saprolite/ingest/quantity"
)

// Stand is the account of one stand. Settle its days in order with Step; ask
// for what holds with Findings. Not safe for concurrent use.
type Stand struct {
	State State
	Today Account // of the last settled day

	opts     Options
	first    quantity.Day
	limit    ledger.Limit
	peaks    [weeks]uint16 // of the running year
	years    []Year        // closed
	episodes []Episode     // closed
	past     *checkpoints
}

// New returns a stand whose account begins on first, the first day with rain
// data, at drained full. That beginning is an assumption until the store has
// been seen full (State.Anchored).
func New(opts Options, first quantity.Day) *Stand {
	s := &Stand{opts: opts, first: first, past: newCheckpoints()}
	s.State = State{
		Day: first - 1, Low: noEpisode, Silent: noEpisode,
		Year:      YearSoFar{Start: first, Whole: beginsYear(first, opts.YearStart), MaxDay: quantity.NoDay},
		Greenness: quantity.Index(math.NaN()), GreennessDay: quantity.NoDay, FullGreen: quantity.Index(math.NaN()),
	}
	s.State.Green95.Init(greenFull)
	s.Today = Account{Day: first - 1, Still: true}
	s.refreshLimit()
	return s
}

// greenFull is the quantile of greenness that stands for the full canopy
// (methods A.2).
const greenFull = 0.95

// greenFor is how many days a greenness value may be carried (methods A.2).
const greenFor = 40

// First returns the first day of the account.
func (s *Stand) First() quantity.Day { return s.first }

// Options returns what the stand was made with.
func (s *Stand) Options() *Options { return &s.opts }

// Limit returns the storage limit in force, or why it is unknown.
func (s *Stand) Limit() ledger.Limit { return s.limit }

// Years returns the closed hydrological years.
func (s *Stand) Years() []Year { return s.years }

// Running returns the hydrological year that is going on.
func (s *Stand) Running() Year { return Year{YearSoFar: s.State.Year, Peaks: s.peaks} }

// Left returns the share of the store that is left, 1 full, 0 at the limit;
// negative when a measured deficit has passed it; NaN when the limit is unknown.
func (s *Stand) Left() float64 { return 1 - float64(s.Today.Deficit/s.limit.Value) }

// Step settles the day after the last one; in must be of that day. It
// allocates nothing but when a year or an episode closes.
func (s *Stand) Step(in *Inputs) {
	st := &s.State
	st.Day++
	a := Account{Day: st.Day, Precipitation: in.Precipitation, Coefficient: math.NaN(), Flux: ledger.UnknownFlux(), From: in.From}
	s.seeGreenness(in)
	a.Greenness = st.Greenness
	a.ReferenceET, a.Basis.Reference = climate.Reference(&s.opts.Site, &in.Weather)
	a.Basis.Measured = known(in.ActualET)
	hasRain, hasET := known(in.Precipitation), a.Basis.Measured || known(a.ReferenceET)
	_, calendarMonth, _ := st.Day.Date()
	month := int(calendarMonth)
	usual, ok := st.Usual.of(month)
	a.Basis.Usual = !hasET && ok
	a.Still = !hasRain || !hasET && !a.Basis.Usual
	if !hasRain {
		s.miss()
	}
	if !a.Still {
		input := ledger.Input{Rain: in.Precipitation, ReferenceET: a.ReferenceET, GivenET: in.ActualET}
		switch {
		case a.Basis.Usual && st.Usual.Measured:
			input.GivenET = usual
		case a.Basis.Usual:
			input.ReferenceET, input.Coefficient = usual, 1
		case a.Basis.Measured:
			st.Usual.remember(month, in.ActualET, true)
		default:
			a.Coefficient = s.opts.coefficient() * s.greenFactor()
			input.Coefficient = a.Coefficient
			st.Usual.remember(month, quantity.Millimetres(a.Coefficient*float64(a.ReferenceET)), false)
		}
		params := ledger.Params{CanopyStore: s.opts.canopyStore(), Capacity: s.stressCapacity(), StressAt: ledger.DefaultStressAt}
		a.Flux = st.Store.Day(input, &params)
		if a.Flux.Overflow > 0 {
			st.Anchored, st.Unseen = true, 0
		}
	}
	a.Deficit = st.Store.Deficit
	s.Today = a

	y := s.Running()
	y.settle(&s.Today, st.Anchored)
	st.Year, s.peaks = y.YearSoFar, y.Peaks
	s.judgeSilence(hasRain, hasET)
	s.judgeStore()
	yearEnds := beginsYear(st.Day+1, s.opts.YearStart)
	if yearEnds {
		s.closeYear(y)
	}
	s.past.keep(st, yearEnds)
}

// miss counts a day whose rain the account does not know. After too many in a
// row the store must be seen full again before its deficit counts for the
// years; what is missing here and there the year's completeness judges.
func (s *Stand) miss() {
	st := &s.State
	if st.Unseen < math.MaxInt16 {
		st.Unseen++
	}
	if int(st.NoRain)+1 > s.opts.FeedSilent.BlindDays { // NoRain counts this day later
		st.Anchored = false
	}
}

// closeYear learns what is learned once a year: the storage limit and the
// full canopy's greenness (methods, decisions: "Order").
func (s *Stand) closeYear(y Year) {
	s.years = append(s.years, y)
	st := &s.State
	st.Years = len(s.years)
	st.Year = YearSoFar{Start: st.Day + 1, Whole: true, MaxDay: quantity.NoDay}
	s.peaks = [weeks]uint16{}
	if v, ok := st.Green95.Value(); ok {
		st.FullGreen = quantity.Index(v)
	}
	s.refreshLimit()
}

// stressCapacity is the capacity that holds the trees back: a configured
// limit, and nothing else (see Options.configuredLimit).
func (s *Stand) stressCapacity() quantity.Millimetres {
	if s.opts.configuredLimit() {
		return s.opts.StorageLimit
	}
	return quantity.Millimetres(math.NaN())
}

func (s *Stand) seeGreenness(in *Inputs) {
	if math.IsNaN(float64(in.Greenness)) {
		return
	}
	st := &s.State
	st.Greenness, st.GreennessDay = in.Greenness, st.Day
	st.Green95.Add(float64(in.Greenness))
}

// greenFactor scales demand by greenness where there is any; 1 otherwise.
func (s *Stand) greenFactor() float64 {
	st := &s.State
	if math.IsNaN(float64(st.FullGreen)) || st.GreennessDay == quantity.NoDay || st.Day-st.GreennessDay > greenFor {
		return 1
	}
	return ledger.GreennessFactor(st.Greenness, st.FullGreen)
}

func known(v quantity.Millimetres) bool { return !math.IsNaN(float64(v)) }
