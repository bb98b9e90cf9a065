package detectors

import "saprolite/ingest/quantity"

// habit is what a stand has used of late and in each month of the year. It
// stands in on days on which nothing has come to make evapotranspiration of:
// rain that is known would be lost otherwise, and a deficit once too large
// stays so until the store is full.
type habit struct {
	_ struct{} `cbor:",toarray"`

	Recent   float64     // mean of the last days, mm a day
	Month    [12]float32 // mean of each month, mm a day
	Days     [12]uint8   // days in Month, as far as they count
	Measured bool        // the last day was measured: a short store's restraint is in it
}

const (
	recentDays   = 10 // time constant of Recent, days; common practice of the trade, no source
	monthCounts  = 60 // days that make up Month: two years of it; common practice of the trade, no source
	monthIsKnown = 20 // days before Month is used (methods A.1, weight of the monthly ratio)
)

// remember takes in a known day of a month, 1 to 12: measured
// evapotranspiration, or coefficient x reference, mm a day.
func (h *habit) remember(month int, v quantity.Millimetres, measured bool) {
	x, n := float64(max(0, v)), &h.Days[month-1]
	if h.Days == ([12]uint8{}) {
		h.Recent = x
	}
	h.Recent += (x - h.Recent) / recentDays
	*n = min(*n+1, monthCounts)
	mean := &h.Month[month-1]
	*mean += float32((x - float64(*mean)) / float64(*n))
	h.Measured = measured
}

// of is what the stand usually uses on a day of the month: its mean once it
// is known, before that the mean of the last days. False before any day.
func (h *habit) of(month int) (quantity.Millimetres, bool) {
	if h.Days[month-1] >= monthIsKnown {
		return quantity.Millimetres(h.Month[month-1]), true
	}
	return quantity.Millimetres(h.Recent), h.Days != [12]uint8{}
}
