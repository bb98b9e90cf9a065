package detectors

import (
	"math"
	"sort"

	"saprolite/ingest/quantity"
)

// YearSoFar is a hydrological year without the record of when its deficits
// were reached.
type YearSoFar struct {
	_ struct{} `cbor:",toarray"`

	Start    quantity.Day
	Whole    bool  // began on the first day of a hydrological year
	Days     int16 // days so far
	Known    int16 // of these, days with rain and evapotranspiration
	Measured int16 // of these, days of measured evapotranspiration
	Max      quantity.Millimetres
	MaxDay   quantity.Day
	// Anchored says that the store had been seen full before the maximum:
	// only then is the deficit's zero not an assumption.
	Anchored bool
}

// Year is one hydrological year of a stand: what the storage limit and the
// question "is this unusual here?" are made of.
type Year struct {
	_ struct{} `cbor:",toarray"`

	YearSoFar
	// Peaks is the largest deficit since the year began at the end of each
	// seven days, in 0.1 mm: when a deficit was first reached, to the week.
	Peaks [weeks]uint16
}

const weeks = 53

// enoughKnown is the share of days a year must have to count (methods B.1).
const enoughKnown = 0.90

// Complete tells whether a closed year may enter the statistics.
func (y *Year) Complete() bool {
	return y.Whole && y.Anchored && float64(y.Known) >= enoughKnown*float64(y.Days)
}

// firstReached returns the earliest day of the year, counted from 0, on which
// the deficit can have reached d, and false if it never did. It is exact to
// the week and never late.
func (y *Year) firstReached(d quantity.Millimetres) (int, bool) {
	filled := y.Peaks[:min((int(y.Days)+6)/7, weeks)] // never falls within a year
	w := sort.Search(len(filled), func(i int) bool { return quantity.Millimetres(filled[i])/10 >= d })
	return w * 7, w < len(filled)
}

// settle takes one day of the account into the year.
func (y *Year) settle(a *Account, anchored bool) {
	y.Days++
	if !a.Still && !a.Basis.Usual {
		y.Known++
		if a.Basis.Measured {
			y.Measured++
		}
	}
	if a.Deficit > y.Max {
		y.Max, y.MaxDay, y.Anchored = a.Deficit, a.Day, anchored
	}
	w := min(int(a.Day-y.Start)/7, weeks-1)
	y.Peaks[w] = y.peak()
}

// rewind takes the record of deficits reached back to the end of day d, when
// the largest deficit so far was y.Max.
func (y *Year) rewind(d quantity.Day) {
	if d < y.Start {
		y.Peaks = [weeks]uint16{}
		return
	}
	w := min(int(d-y.Start)/7, weeks-1)
	y.Peaks[w] = y.peak()
	clear(y.Peaks[w+1:])
}

func (y *Year) peak() uint16 {
	return uint16(math.Min(math.Round(float64(y.Max)*10), math.MaxUint16))
}

// yearDay is the day of the year from 1 to 365; 29 February counts as 1 March
// (methods 0).
func yearDay(d quantity.Day) int {
	year, month, _ := d.Date()
	n := d.YearDay()
	leap := year%4 == 0 && (year%100 != 0 || year%400 == 0)
	if leap && month > 2 {
		n--
	}
	return n
}

// beginsYear tells whether a hydrological year that starts on day start of
// the year begins on d.
func beginsYear(d quantity.Day, start int) bool {
	_, month, day := d.Date()
	return yearDay(d) == start && !(month == 2 && day == 29)
}
