package climate

import (
	"math"

	"saprolite/ingest/quantity"
)

const (
	solarConstant = 0.0820            // MJ m-2 min-1 (equation 21)
	albedo        = 0.23              // of the grass reference (equation 38)
	boltzmannDay  = 4.903e-9          // Stefan-Boltzmann constant, MJ K-4 m-2 d-1 (equation 39)
	minutesPerDay = 24 * 60           // exact
	halfTurn      = 180.              // degrees, exact
	kelvinOffset  = 273.16            // as FAO-56 rounds it (equation 39)
	inland        = 0.16              // kRs away from a coast (equation 50)
	meanOvercast  = 0.5               // Rs/Rso where there is no daylight to tell; see NetLongwave
	angstromA     = 0.25              // a_s, share of Ra under full cloud (equation 35)
	angstromB     = 0.50              // b_s, further share under clear sky (equation 35)
	clearRise     = 2e-5              // further share per metre of height (equation 37)
	clearSeaLevel = 0.75              // a_s + b_s (equation 37)
	yearAngle     = 2 * math.Pi / 365 // per day of the year (equations 23, 24)
)

// InverseDistance returns the square of the inverse relative distance between
// Earth and Sun on a day of the year (equation 23).
func InverseDistance(yearDay int) float64 {
	return 1 + 0.033*math.Cos(yearAngle*float64(yearDay))
}

// Declination returns the sun's declination in radians (equation 24).
func Declination(yearDay int) float64 {
	return 0.409 * math.Sin(yearAngle*float64(yearDay)-1.39)
}

// SunsetHourAngle returns the hour angle of sunset in radians (equation 25):
// 0 where the sun does not rise, pi where it does not set.
func SunsetHourAngle(latitude quantity.Degrees, yearDay int) float64 {
	c := -math.Tan(radians(latitude)) * math.Tan(Declination(yearDay))
	return math.Acos(max(-1, min(1, c)))
}

// ExtraterrestrialRadiation returns Ra, the day's sunlight on a level surface
// above the atmosphere (equation 21); 0 in the polar night.
func ExtraterrestrialRadiation(latitude quantity.Degrees, yearDay int) quantity.Megajoules {
	phi, delta, sunset := radians(latitude), Declination(yearDay), SunsetHourAngle(latitude, yearDay)
	ra := minutesPerDay / math.Pi * solarConstant * InverseDistance(yearDay) *
		(sunset*math.Sin(phi)*math.Sin(delta) + math.Cos(phi)*math.Cos(delta)*math.Sin(sunset))
	return quantity.Megajoules(max(0, ra)) // rounding can leave a hair below 0 at the edge of the polar night
}

// DaylightHours returns N, the hours between sunrise and sunset (equation 34).
func DaylightHours(latitude quantity.Degrees, yearDay int) float64 {
	return 24 / math.Pi * SunsetHourAngle(latitude, yearDay)
}

// SolarFromSunshine returns Rs from the hours of bright sunshine out of the
// hours of daylight (equation 35, a_s 0.25, b_s 0.50).
func SolarFromSunshine(ra quantity.Megajoules, bright, daylight float64) quantity.Megajoules {
	return quantity.Megajoules(angstromA+angstromB*bright/daylight) * ra
}

// SolarFromTemperatureRange returns Rs from the difference of a day's extremes
// (equation 50). The coefficient kRs is 0.16 inland and 0.19 near a coast.
func SolarFromTemperatureRange(ra quantity.Megajoules, low, high quantity.Celsius, coefficient float64) quantity.Megajoules {
	return quantity.Megajoules(coefficient*math.Sqrt(float64(high-low))) * ra
}

// ClearSkyRadiation returns Rso, what reaches the ground of Ra without clouds,
// at a height above the sea (equation 37).
func ClearSkyRadiation(ra quantity.Megajoules, height quantity.Metres) quantity.Megajoules {
	return quantity.Megajoules(clearSeaLevel+clearRise*float64(height)) * ra
}

// ClearSkyRadiationFromAngstrom returns Rso near sea level from the Angstrom
// values of a place (equation 36).
func ClearSkyRadiationFromAngstrom(ra quantity.Megajoules, a, b float64) quantity.Megajoules {
	return quantity.Megajoules(a+b) * ra
}

// NetShortwave returns Rns, what grass keeps of Rs (equation 38, albedo 0.23).
func NetShortwave(rs quantity.Megajoules) quantity.Megajoules { return (1 - albedo) * rs }

// NetLongwave returns Rnl, what the ground radiates away (equation 39): ea is
// the actual vapour pressure, rs over rso (at most 1) tells how clear the sky
// is. In the polar night nothing tells: 0.5 is taken then, in the middle of
// the 0.4 to 0.6 that FAO-56 gives for nights in humid climates (chapter 4,
// hourly steps).
func NetLongwave(low, high quantity.Celsius, ea quantity.Kilopascals, rs, rso quantity.Megajoules) quantity.Megajoules {
	clearness := meanOvercast
	if rso != 0 {
		clearness = min(1, float64(rs/rso))
	}
	return quantity.Megajoules(boltzmannDay * (fourthPower(low) + fourthPower(high)) / 2 *
		(0.34 - 0.14*math.Sqrt(float64(ea))) * (1.35*clearness - 0.35))
}

// MonthlySoilHeat returns G, the heat going into the ground in a month, per
// day, from the mean temperatures of the month before and the month after
// (equation 43). For single days FAO-56 takes G as 0 (equation 42).
func MonthlySoilHeat(before, after quantity.Celsius) quantity.Megajoules {
	return 0.07 * quantity.Megajoules(after-before)
}

// MonthlySoilHeatSoFar is MonthlySoilHeat when the month after is not known
// yet (equation 44).
func MonthlySoilHeatSoFar(before, month quantity.Celsius) quantity.Megajoules {
	return 0.14 * quantity.Megajoules(month-before)
}

func radians(d quantity.Degrees) float64 { return float64(d) * math.Pi / halfTurn }

func fourthPower(t quantity.Celsius) float64 {
	k := float64(t) + kelvinOffset
	return k * k * k * k
}
