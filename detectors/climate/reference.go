package climate

import (
	"math"

	"saprolite/ingest/quantity"
)

// Site is where a stand is, as far as its weather goes.
type Site struct {
	Latitude  quantity.Degrees // north positive
	Elevation quantity.Metres  // above the sea; NaN when unknown, then Penman-Monteith is not used
	// Monthly is reference evapotranspiration from the register, mm in each
	// month from January on; nil when there is none. The last resort.
	Monthly *[12]quantity.Millimetres
}

// Weather is one day's weather at the stand's height. NaN is missing, and so
// is a value below its physical zero (wind, radiation, humidity). Start from
// Unknown and set what is known.
type Weather struct {
	Day quantity.Day
	// TMean is the measured mean. FAO-56 takes the mean of the extremes
	// instead (equation 9), so Reference does not use it: a mean alone says
	// nothing about the day's range.
	TMin, TMax, TMean    quantity.Celsius
	RHMin, RHMax, RHMean quantity.Percent // above 100 counts as 100
	VPD                  quantity.Kilopascals
	Wind2m               quantity.MetresPerSecond // at 2 m, see WindAt2m
	Solar                quantity.Megajoules      // Rs
	Given                quantity.Millimetres     // reference evapotranspiration somebody else computed
}

// Unknown returns a day of which nothing is known.
func Unknown() Weather {
	nan := math.NaN()
	return Weather{
		Day:  quantity.NoDay,
		TMin: quantity.Celsius(nan), TMax: quantity.Celsius(nan), TMean: quantity.Celsius(nan),
		RHMin: quantity.Percent(nan), RHMax: quantity.Percent(nan), RHMean: quantity.Percent(nan),
		VPD:    quantity.Kilopascals(nan),
		Wind2m: quantity.MetresPerSecond(nan),
		Solar:  quantity.Megajoules(nan),
		Given:  quantity.Millimetres(nan),
	}
}

// Basis is the method a reference evapotranspiration came from.
type Basis uint8

// The numbers are kept in books: new ones go at the end.
const (
	None                       Basis = iota // not known
	Given                                   // as received
	ByPenmanMonteith                        // everything measured
	ByPenmanMonteithNoWind                  // wind taken as 2 m/s
	ByPenmanMonteithNoHumidity              // humidity from the minimum temperature
	ByPenmanMonteithNoSolar                 // radiation from the temperature range
	ByHargreaves                            // from temperatures alone
	ByMonthly                               // from the register's twelve values
)

// String is the token of a basis, as in the daily file.
func (b Basis) String() string {
	switch b {
	case None:
		return "none"
	case Given:
		return "given"
	case ByPenmanMonteith:
		return "penman-monteith"
	case ByPenmanMonteithNoWind:
		return "penman-monteith:no-wind"
	case ByPenmanMonteithNoHumidity:
		return "penman-monteith:no-humidity"
	case ByPenmanMonteithNoSolar:
		return "penman-monteith:no-solar"
	case ByHargreaves:
		return "hargreaves"
	case ByMonthly:
		return "monthly"
	}
	return "unknown-basis"
}

// assumedWind is what FAO-56 takes where wind was not measured: the mean of
// over 2000 stations (chapter 3, "Missing climatic data").
const assumedWind quantity.MetresPerSecond = 2

// Reference returns the day's reference evapotranspiration (short grass, FAO-56),
// mm, never below 0, and the method, the first of these that the day allows:
//
//  1. as given;
//  2. Penman-Monteith, when temperatures and the site's height are known and
//     at most one of radiation, humidity and wind is missing;
//  3. Hargreaves, from temperatures alone: with two missing it is nearer than
//     Penman-Monteith on assumptions (mean bias 0.28 against 0.75 mm a day at
//     a humid site: Fisher and Pringle 2013);
//  4. the register's monthly value, spread evenly over the month's days;
//  5. NaN and None.
//
// A maximum below the minimum counts as no temperatures.
func Reference(site *Site, w *Weather) (quantity.Millimetres, Basis) {
	if known(float64(w.Given)) {
		return max(0, w.Given), Given
	}
	if w.TMax >= w.TMin { // false when either is NaN
		et, basis := fromTemperatures(site, w)
		if known(float64(et)) {
			return max(0, et), basis
		}
	}
	if site.Monthly != nil {
		year, month, _ := w.Day.Date()
		next := quantity.DateOf(year, month+1, 1) // a 13th month is the next year's first
		days := next - quantity.DateOf(year, month, 1)
		if total := site.Monthly[month-1]; total >= 0 {
			return total / quantity.Millimetres(days), ByMonthly
		}
	}
	return quantity.Millimetres(math.NaN()), None
}

func fromTemperatures(site *Site, w *Weather) (quantity.Millimetres, Basis) {
	ra := ExtraterrestrialRadiation(site.Latitude, w.Day.YearDay())
	ea := vapourPressure(w)
	rs, wind := w.Solar, w.Wind2m
	missing, basis := 0, ByPenmanMonteith
	if !(rs >= 0) {
		missing, basis = missing+1, ByPenmanMonteithNoSolar
		rs = min(SolarFromTemperatureRange(ra, w.TMin, w.TMax, inland), ClearSkyRadiation(ra, site.Elevation))
	}
	if !(ea >= 0) {
		missing, basis = missing+1, ByPenmanMonteithNoHumidity
		ea = VapourPressureFromMinimum(w.TMin)
	}
	if !(wind >= 0) {
		missing, basis = missing+1, ByPenmanMonteithNoWind
		wind = assumedWind
	}
	if missing > 1 || math.IsNaN(float64(site.Elevation)) {
		return HargreavesSamani(w.TMin, w.TMax, ra), ByHargreaves
	}
	mean := (w.TMin + w.TMax) / 2
	return PenmanMonteith(Terms{
		TMean:         mean,
		NetRadiation:  NetShortwave(rs) - NetLongwave(w.TMin, w.TMax, ea, rs, ClearSkyRadiation(ra, site.Elevation)),
		Wind2m:        wind,
		VPD:           MeanSaturationVapourPressure(w.TMin, w.TMax) - ea,
		Slope:         SaturationSlope(mean),
		Psychrometric: PsychrometricConstant(Pressure(site.Elevation)),
	}), basis
}

// vapourPressure returns the day's actual vapour pressure from the best
// humidity there is, in the order of FAO-56 (chapter 3): the extremes, the
// mean, then a vapour pressure deficit; NaN when there is none. It lies
// between 0 and saturation.
func vapourPressure(w *Weather) quantity.Kilopascals {
	es := MeanSaturationVapourPressure(w.TMin, w.TMax)
	switch {
	case w.RHMin >= 0 && w.RHMax >= w.RHMin:
		return VapourPressureFromExtremes(w.TMin, w.TMax, min(100, w.RHMin), min(100, w.RHMax))
	case w.RHMean >= 0:
		return VapourPressureFromMean(w.TMin, w.TMax, min(100, w.RHMean))
	case w.VPD >= 0:
		return max(0, es-w.VPD)
	}
	return quantity.Kilopascals(math.NaN())
}

func known(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }
