package quantity

import (
	"fmt"
	"strings"
)

// synonyms are names that people use for what design 5.5 calls otherwise. They
// are only ever offered, never accepted: nothing is guessed.
var synonyms = map[string]Quantity{
	"rain": Precipitation, "rainfall": Precipitation, "precip": Precipitation, "prcp": Precipitation, "pr": Precipitation, "p": Precipitation,
	"snow": SnowWaterEquivalent, "swe": SnowWaterEquivalent,
	"temp": AirTemperature, "temperature": AirTemperature, "tair": AirTemperature, "ta": AirTemperature, "tmean": AirTemperature, "t2m": AirTemperature,
	"tmin": AirTemperatureMin, "temp_min": AirTemperatureMin, "tn": AirTemperatureMin,
	"tmax": AirTemperatureMax, "temp_max": AirTemperatureMax, "tx": AirTemperatureMax,
	"rh": RelativeHumidity, "humidity": RelativeHumidity, "rhmin": RelativeHumidityMin, "rhmax": RelativeHumidityMax,
	"vpd": VapourPressureDeficit, "vapor_pressure_deficit": VapourPressureDeficit,
	"wind": WindSpeed, "ws": WindSpeed, "u2": WindSpeed,
	"rs": SolarRadiation, "srad": SolarRadiation, "radiation": SolarRadiation, "global_radiation": SolarRadiation, "sw_in": SolarRadiation,
	"rn": NetRadiation, "netrad": NetRadiation,
	"et0": ReferenceEvapotranspiration, "eto": ReferenceEvapotranspiration, "pet": ReferenceEvapotranspiration,
	"et": ActualEvapotranspiration, "eta": ActualEvapotranspiration, "evapotranspiration": ActualEvapotranspiration,
	"sm": SoilWaterContent, "swc": SoilWaterContent, "vwc": SoilWaterContent, "soil_moisture": SoilWaterContent,
	"swp": SoilWaterPotential, "matric_potential": SoilWaterPotential,
	"psi": StemWaterPotential, "water_potential": StemWaterPotential, "psi_stem": StemWaterPotential,
	"psi_pd": PredawnWaterPotential, "predawn": PredawnWaterPotential, "psi_md": MiddayWaterPotential, "midday": MiddayWaterPotential,
	"sapflow": SapFluxDensity, "sap_flow": SapFluxDensity, "js": SapFluxDensity,
	"dendrometer": StemRadius, "water_table": WaterTableDepth, "groundwater": WaterTableDepth,
	"runoff": Discharge, "streamflow": Discharge, "q": Discharge, "lfmc": LiveFuelMoisture, "fuel_moisture": LiveFuelMoisture,
}

// suggest returns ` (did you mean "precipitation"?)` for a name that means, or
// is nearly spelled like, one of design 5.5, and "" when nothing is near.
func suggest(base string) string {
	const longest = 40 // no name is longer; a hostile one is not worth the time
	if len(base) > longest {
		return ""
	}
	s := strings.NewReplacer("-", "_", " ", "_").Replace(strings.ToLower(strings.TrimSpace(base)))
	best, ok := synonyms[s]
	if !ok {
		limit := min(2, len(s)/3) // of misprints; common practice, no source
		for _, q := range Names() {
			if d := distance(s, string(q)); d <= limit {
				best, limit, ok = q, d-1, true
			}
		}
	}
	if !ok {
		return ""
	}
	return fmt.Sprintf(" (did you mean %q?)", best)
}

// distance is the number of bytes to insert, delete, replace or swap with
// their neighbour that turns a into b (optimal string alignment).
func distance(a, b string) int {
	var before, above []int
	row := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := 1; i <= len(a); i++ {
		before, above, row = above, row, make([]int, len(b)+1)
		row[0] = i
		for j := 1; j <= len(b); j++ {
			replace := above[j-1]
			if a[i-1] != b[j-1] {
				replace++
			}
			row[j] = min(replace, above[j]+1, row[j-1]+1)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				row[j] = min(row[j], before[j-2]+1)
			}
		}
	}
	return row[len(b)]
}
