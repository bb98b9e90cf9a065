package climate

import (
	"math"

	"saprolite/ingest/quantity"
)

const (
	latentHeat = 2.45  // MJ kg-1, heat of vaporisation at 20 degC (FAO-56, chapter 1)
	waterPerMJ = 0.408 // mm of water that 1 MJ m-2 evaporates, 1/2.45 as FAO-56 rounds it (equation 20)
)

// Terms are what the combination equations combine, for one day (or the mean
// day of a month).
type Terms struct {
	TMean         quantity.Celsius         // mean of the day's extremes (equation 9)
	NetRadiation  quantity.Megajoules      // Rn = Rns - Rnl (equation 40)
	SoilHeat      quantity.Megajoules      // G; 0 for a day (equation 42)
	Wind2m        quantity.MetresPerSecond // at 2 m
	VPD           quantity.Kilopascals     // es - ea
	Slope         float64                  // SaturationSlope, kPa per degC
	Psychrometric float64                  // PsychrometricConstant, kPa per degC
}

// PenmanMonteith returns the evapotranspiration of well-watered short grass,
// mm a day (equation 6). It can be below 0 on a day of dew.
func PenmanMonteith(t Terms) quantity.Millimetres {
	energy := waterPerMJ * t.Slope * float64(t.NetRadiation-t.SoilHeat)
	air := t.Psychrometric * 900 / (float64(t.TMean) + 273) * float64(t.Wind2m) * float64(t.VPD)
	return quantity.Millimetres((energy + air) / (t.Slope + t.Psychrometric*(1+0.34*float64(t.Wind2m))))
}

// HargreavesSamani returns reference evapotranspiration from a day's extremes
// of temperature and Ra alone, mm a day (equation 52). It is below 0 where the
// mean is under -17.8 degC.
func HargreavesSamani(low, high quantity.Celsius, ra quantity.Megajoules) quantity.Millimetres {
	mean := (float64(low) + float64(high)) / 2
	return quantity.Millimetres(0.0023 * (mean + 17.8) * math.Sqrt(float64(high-low)) * waterPerMJ * float64(ra))
}

// PriestleyTaylor returns the evapotranspiration of a wide wet surface from
// radiation alone, mm a day: 1.26 Slope/(Slope+Psychrometric) (Rn-G)/lambda
// (Priestley and Taylor 1972, Monthly Weather Review 100:81-92; as McMahon et
// al. 2013 write it, Hydrology and Earth System Sciences 17:1331-1363,
// supplement, equation S19.109). Wind and VPD are not used.
func PriestleyTaylor(t Terms) quantity.Millimetres {
	return quantity.Millimetres(1.26 * t.Slope / (t.Slope + t.Psychrometric) * float64(t.NetRadiation-t.SoilHeat) / latentHeat)
}
