package detectors

import (
	"math"

	"saprolite/detectors/climate"
	"saprolite/detectors/ledger"
	"saprolite/ingest/quantity"
)

// Options is what does not change from day to day: the stand and its settings.
// A changed Options means that the stand settles again from its first day.
type Options struct {
	ID   string
	Site climate.Site

	Coefficient  float64              // crop coefficient kc; NaN: ledger.DefaultCoefficient
	CanopyStore  quantity.Millimetres // NaN: ledger.DefaultCanopyStore
	StorageLimit quantity.Millimetres // configured; NaN: to be estimated
	Established  int                  // year of planting, 0: unknown
	ExtraWater   string               // none, suspected, known (design 5.2)
	// YearStart is the day of the year the hydrological year begins, 1..365.
	YearStart int

	StoreLow   StoreLow
	FeedSilent FeedSilent

	// RainFrom and AirFrom say in words where rain and air data should come
	// from, in order of preference.
	RainFrom, AirFrom string
}

// StoreLow are the settings of the alert of that name.
type StoreLow struct {
	// Left is the share of the store left, 0 to 1, below which each level
	// holds, from drawing down to spent.
	Left      [4]float64
	EnterDays int // days in a row that a level must hold to be entered
	LeaveDays int // days in a row that it must not hold to be left
}

// FeedSilent are the settings of the alert of that name.
type FeedSilent struct {
	Days      int // days without a value before a source counts as silent
	BlindDays int // days without rain, or without data on evapotranspiration, before the account cannot be judged
}

// DefaultYearStart returns the day of the year the hydrological year begins
// until it is found from the stand's own data (methods A.6, "regional s"): a
// season in which stores are usually full. Common practice of the trade, no
// source: January and July in the temperate zones, after the rains between
// the tropics.
func DefaultYearStart(latitude quantity.Degrees) int {
	const tropic = 23.44 // degrees, obliquity of the ecliptic (IAU 2006, rounded)
	switch {
	case latitude > tropic:
		return 1 // 1 January
	case latitude >= 0:
		return 274 // 1 October
	case latitude > -tropic:
		return 91 // 1 April
	default:
		return 182 // 1 July
	}
}

func (o *Options) coefficient() float64 {
	if math.IsNaN(o.Coefficient) {
		return ledger.DefaultCoefficient
	}
	return o.Coefficient
}

func (o *Options) canopyStore() quantity.Millimetres {
	if math.IsNaN(float64(o.CanopyStore)) {
		return ledger.DefaultCanopyStore
	}
	return o.CanopyStore
}

// configuredLimit tells whether the register gives a storage limit that may
// be used. Only then does the store's emptiness hold the trees back (stress):
// an estimated limit is made of demand without stress and must not feed back
// on itself (methods, decisions: "No circle").
func (o *Options) configuredLimit() bool {
	return !math.IsNaN(float64(o.StorageLimit)) && !o.extraWater()
}

func (o *Options) extraWater() bool { return o.ExtraWater == "suspected" || o.ExtraWater == "known" }
