package climate

import (
	"math"

	"saprolite/ingest/quantity"
)

// SaturationVapourPressure returns the vapour pressure of air at temperature t
// that can hold no more water (equation 11).
func SaturationVapourPressure(t quantity.Celsius) quantity.Kilopascals {
	return quantity.Kilopascals(0.6108 * math.Exp(17.27*float64(t)/(float64(t)+237.3)))
}

// MeanSaturationVapourPressure returns a day's saturation vapour pressure, the
// mean of that at both extremes (equation 12). That of the mean temperature
// would be too low, because the curve bends upwards.
func MeanSaturationVapourPressure(low, high quantity.Celsius) quantity.Kilopascals {
	return (SaturationVapourPressure(low) + SaturationVapourPressure(high)) / 2
}

// SaturationSlope returns the slope of the saturation vapour pressure curve at
// temperature t, in kPa per degC (equation 13).
func SaturationSlope(t quantity.Celsius) float64 {
	k := float64(t) + 237.3
	return 4098 * float64(SaturationVapourPressure(t)) / (k * k)
}

// Pressure returns the mean pressure of the air at a height above the sea
// (equation 7).
func Pressure(height quantity.Metres) quantity.Kilopascals {
	return quantity.Kilopascals(101.3 * math.Pow((293-0.0065*float64(height))/293, 5.26))
}

// PsychrometricConstant returns gamma at air pressure p, in kPa per degC
// (equation 8).
func PsychrometricConstant(p quantity.Kilopascals) float64 {
	return 0.665e-3 * float64(p)
}

// VapourPressureFromWetBulb returns the actual vapour pressure from a
// psychrometer's dry and wet bulb (equation 15). The instrument's coefficient
// is in 1/degC: 0.000662 when ventilated at 5 m/s, 0.0008 when the air moves
// by itself at 1 m/s (equation 16).
func VapourPressureFromWetBulb(dry, wet quantity.Celsius, coefficient float64, p quantity.Kilopascals) quantity.Kilopascals {
	return SaturationVapourPressure(wet) - quantity.Kilopascals(coefficient*float64(p)*float64(dry-wet))
}

// VapourPressureFromExtremes returns the actual vapour pressure from a day's
// extremes of temperature and relative humidity (equation 17). The air is
// most humid when it is coldest.
func VapourPressureFromExtremes(low, high quantity.Celsius, driest, dampest quantity.Percent) quantity.Kilopascals {
	return (SaturationVapourPressure(low)*quantity.Kilopascals(dampest) +
		SaturationVapourPressure(high)*quantity.Kilopascals(driest)) / (2 * 100)
}

// VapourPressureFromMean returns the actual vapour pressure from a day's mean
// relative humidity (equation 19).
func VapourPressureFromMean(low, high quantity.Celsius, mean quantity.Percent) quantity.Kilopascals {
	return MeanSaturationVapourPressure(low, high) * quantity.Kilopascals(mean) / 100
}

// VapourPressureFromMinimum returns the actual vapour pressure when humidity
// was not measured: dew is taken to form at the night's minimum temperature
// (equation 48). In dry lands that is too humid.
func VapourPressureFromMinimum(low quantity.Celsius) quantity.Kilopascals {
	return SaturationVapourPressure(low)
}

// WindAt2m moves a wind speed measured at a height above short grass to 2 m
// (equation 47). The height must be above 0.1 m.
func WindAt2m(u quantity.MetresPerSecond, height quantity.Metres) quantity.MetresPerSecond {
	return u * quantity.MetresPerSecond(4.87/math.Log(67.8*float64(height)-5.42))
}

// LapseRate is the change of air temperature with height, degC per km, in the
// lower 11 km of the standard atmosphere (ICAO Doc 7488, Manual of the ICAO
// Standard Atmosphere, 3rd edition 1993; the same as ISO 2533:1975).
const LapseRate = -6.5

// LapseOffset returns what to add to an air temperature measured at one height
// to have it at another.
func LapseOffset(from, to quantity.Metres) quantity.Celsius {
	return quantity.Celsius(LapseRate / 1000 * float64(to-from))
}
