// Package quantity names what can be measured about a forest stand and its
// weather, and gives each unit a type, so that millimetres and megapascals
// cannot be mixed up. It is a leaf: it imports no other room.
//
// Use it wherever a number has a unit. Do not use it for formats (ingest/wire)
// or for judging whether a number is plausible in its series (ingest/quality).
package quantity

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
)

// Depths and amounts of water, potentials, temperatures and the like, each in
// its canonical unit (design 5.5).
type (
	Millimetres     float64 // depth of water, mm (= kg m-2)
	Megapascals     float64 // water potential, MPa, <= 0 in a living tree
	Celsius         float64 // temperature, degC
	Kilopascals     float64 // vapour pressure, kPa
	MetresPerSecond float64 // wind speed, m s-1
	Megajoules      float64 // radiation over a day, MJ m-2 d-1
	Watts           float64 // radiation, W m-2
	Percent         float64 // 0..100
	Index           float64 // dimensionless: vegetation index, fraction
	Metres          float64 // height, distance, m
	Degrees         float64 // latitude, longitude, degrees
)

func (v Millimetres) String() string { return format(float64(v), 1, "mm") }
func (v Megapascals) String() string { return format(float64(v), 2, "MPa") }
func (v Celsius) String() string     { return format(float64(v), 1, "degC") }
func (v Metres) String() string      { return format(float64(v), 0, "m") }

func format(v float64, digits int, unit string) string {
	if v != v {
		return "unknown"
	}
	return strconv.FormatFloat(v, 'f', digits, 64) + " " + unit
}

// Quantity is the canonical name of something measured, as in design 5.5,
// with its depth in centimetres behind a colon where depth matters
// ("soil_water_content:30").
type Quantity string

// The quantities of design 5.5.
const (
	Precipitation               Quantity = "precipitation"
	Throughfall                 Quantity = "throughfall"
	Irrigation                  Quantity = "irrigation"
	SnowWaterEquivalent         Quantity = "snow_water_equivalent"
	SnowCover                   Quantity = "snow_cover"
	AirTemperature              Quantity = "air_temperature"
	AirTemperatureMin           Quantity = "air_temperature_min"
	AirTemperatureMax           Quantity = "air_temperature_max"
	RelativeHumidity            Quantity = "relative_humidity"
	RelativeHumidityMin         Quantity = "relative_humidity_min"
	RelativeHumidityMax         Quantity = "relative_humidity_max"
	VapourPressureDeficit       Quantity = "vapour_pressure_deficit"
	WindSpeed                   Quantity = "wind_speed"
	SolarRadiation              Quantity = "solar_radiation"
	NetRadiation                Quantity = "net_radiation"
	ReferenceEvapotranspiration Quantity = "reference_evapotranspiration"
	ActualEvapotranspiration    Quantity = "actual_evapotranspiration"
	Transpiration               Quantity = "transpiration"
	NDVI                        Quantity = "ndvi"
	EVI                         Quantity = "evi"
	EVI2                        Quantity = "evi2"
	NDMI                        Quantity = "ndmi"
	FAPAR                       Quantity = "fapar"
	LAI                         Quantity = "lai"
	Red                         Quantity = "red"
	NIR                         Quantity = "nir"
	Blue                        Quantity = "blue"
	SWIR                        Quantity = "swir"
	SoilWaterContent            Quantity = "soil_water_content"
	SoilWaterPotential          Quantity = "soil_water_potential"
	StemWaterPotential          Quantity = "stem_water_potential"
	PredawnWaterPotential       Quantity = "predawn_water_potential"
	MiddayWaterPotential        Quantity = "midday_water_potential"
	SapFluxDensity              Quantity = "sap_flux_density"
	StemRadius                  Quantity = "stem_radius"
	Delta18OXylem               Quantity = "delta_18o_xylem"
	Delta18OShallow             Quantity = "delta_18o_shallow"
	Delta18ODeep                Quantity = "delta_18o_deep"
	Delta2HXylem                Quantity = "delta_2h_xylem"
	Delta2HShallow              Quantity = "delta_2h_shallow"
	Delta2HDeep                 Quantity = "delta_2h_deep"
	WaterTableDepth             Quantity = "water_table_depth"
	Discharge                   Quantity = "discharge"
	LiveFuelMoisture            Quantity = "live_fuel_moisture"
)

// Fold says how readings within a day become the day's value (design 5.3: a
// quantity in mm is the total over its interval, any other the mean).
type Fold uint8

const (
	Mean    Fold = iota // mean over the day
	Total               // total over the day
	Minimum             // smallest of the day
	Maximum             // largest of the day
)

// Info says what a quantity is.
type Info struct {
	Unit     string  // canonical unit as written to the operator ("mm", "MPa")
	Fold     Fold    // how a day is made of readings
	Lo, Hi   float64 // gross range of one reading in the canonical unit, ends included
	HasDepth bool    // may carry a depth in cm
}

// Base returns the name without its depth.
func (q Quantity) Base() Quantity {
	if i := strings.IndexByte(string(q), ':'); i >= 0 {
		return q[:i]
	}
	return q
}

// Info returns what is known of q; ok is false for a name that is not in the
// list of design 5.5.
func (q Quantity) Info() (info Info, ok bool) {
	info, ok = table[q.Base()]
	return info, ok
}

// Parse reads a quantity's name, optionally with a depth in whole centimetres
// ("soil_water_content:30"). The error names the nearest known name.
func Parse(s string) (Quantity, error) {
	base, depth, hasDepth := strings.Cut(s, ":")
	info, ok := table[Quantity(base)]
	if !ok {
		return "", fmt.Errorf("unknown quantity %q%s", s, suggest(base))
	}
	if !hasDepth {
		return Quantity(base), nil
	}
	if !info.HasDepth {
		return "", fmt.Errorf("quantity %q takes no depth (got %q)", base, depth)
	}
	cm, err := strconv.ParseUint(depth, 10, 16)
	if err != nil || cm > 10000 {
		return "", fmt.Errorf("depth %q of %q: want whole centimetres, 0 to 10000", depth, base)
	}
	return Quantity(base + ":" + strconv.FormatUint(cm, 10)), nil
}

// Names returns every base name, sorted.
func Names() []Quantity {
	names := make([]Quantity, 0, len(table))
	for q := range table {
		names = append(names, q)
	}
	slices.Sort(names)
	return names
}
