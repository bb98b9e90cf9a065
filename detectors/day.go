package detectors

import (
	"math"

	"saprolite/detectors/climate"
	"saprolite/detectors/ledger"
	"saprolite/ingest/quantity"
)

// Inputs is what is known of one stand-day. What is not known is NaN.
type Inputs struct {
	Weather       climate.Weather
	Precipitation quantity.Millimetres
	ActualET      quantity.Millimetres // measured, all of it
	Greenness     quantity.Index       // seen on this day

	// From says in words which source each came from, "" for none: rain,
	// measured evapotranspiration, and what a reference is made of.
	From From
}

// From says in words where a day's numbers came from.
type From struct {
	_ struct{} `cbor:",toarray"`

	Rain, ET, Air string
}

// NoInputs returns a day of which nothing is known.
func NoInputs(d quantity.Day) Inputs {
	nan := math.NaN()
	w := climate.Unknown()
	w.Day = d
	return Inputs{Weather: w, Precipitation: quantity.Millimetres(nan), ActualET: quantity.Millimetres(nan), Greenness: quantity.Index(nan)}
}

// Set puts a day value where it belongs and keeps in words where it came from.
// It tells whether a stand has a use for the quantity; v is in the canonical
// unit (design 5.5).
func (in *Inputs) Set(q quantity.Quantity, v float64, from string) bool {
	w := &in.Weather
	switch q {
	case quantity.Precipitation:
		in.Precipitation, in.From.Rain = quantity.Millimetres(v), from
	case quantity.ActualEvapotranspiration:
		in.ActualET, in.From.ET = quantity.Millimetres(v), from
	case quantity.ReferenceEvapotranspiration:
		w.Given, in.From.Air = quantity.Millimetres(v), from
	case quantity.AirTemperatureMin:
		w.TMin = quantity.Celsius(v)
	case quantity.AirTemperatureMax:
		w.TMax = quantity.Celsius(v)
		if math.IsNaN(float64(w.Given)) {
			in.From.Air = from
		}
	case quantity.RelativeHumidity:
		w.RHMean = quantity.Percent(v)
	case quantity.RelativeHumidityMin:
		w.RHMin = quantity.Percent(v)
	case quantity.RelativeHumidityMax:
		w.RHMax = quantity.Percent(v)
	case quantity.VapourPressureDeficit:
		w.VPD = quantity.Kilopascals(v)
	case quantity.WindSpeed:
		w.Wind2m = quantity.MetresPerSecond(v)
	case quantity.SolarRadiation:
		w.Solar = quantity.Megajoules(v * megajoulesPerWattDay)
	case quantity.EVI, quantity.EVI2, quantity.NDVI, quantity.NDMI, quantity.FAPAR, quantity.LAI:
		in.Greenness = quantity.Index(v)
	default:
		return false
	}
	return true
}

// A mean of 1 W m-2 over a day is 86400 J m-2 (exact).
const megajoulesPerWattDay = 0.0864

// Draws are the quantities a stand draws on, vegetation indices apart: of
// those a stand has one (VegetationIndices).
var Draws = [...]quantity.Quantity{
	quantity.Precipitation,
	quantity.ActualEvapotranspiration,
	quantity.ReferenceEvapotranspiration,
	quantity.AirTemperatureMin,
	quantity.AirTemperatureMax,
	quantity.RelativeHumidity,
	quantity.RelativeHumidityMin,
	quantity.RelativeHumidityMax,
	quantity.VapourPressureDeficit,
	quantity.WindSpeed,
	quantity.SolarRadiation,
}

// VegetationIndices are the indices that can stand for greenness, in the
// order in which one is taken when the register names none.
var VegetationIndices = [...]quantity.Quantity{
	quantity.EVI, quantity.EVI2, quantity.NDVI, quantity.NDMI, quantity.FAPAR, quantity.LAI,
}

// ETBasis says where a day's actual evapotranspiration came from.
type ETBasis struct {
	_ struct{} `cbor:",toarray"`

	Measured bool
	// Usual: nothing to make it of has come, and the stand's own mean stands
	// in, so that rain that is known is not lost (habit).
	Usual     bool
	Reference climate.Basis // otherwise
}

// String is the token of the daily file's et_basis column; "" when unknown.
func (b ETBasis) String() string {
	switch {
	case b.Measured:
		return "measured"
	case b.Usual:
		return "own-mean"
	case b.Reference == climate.None:
		return ""
	}
	return b.Reference.String()
}

// Account is one settled stand-day.
type Account struct {
	_ struct{} `cbor:",toarray"`

	Day           quantity.Day
	Precipitation quantity.Millimetres // NaN: not known
	ReferenceET   quantity.Millimetres // NaN: not known
	Flux          ledger.Flux          // NaN where the account stood still
	Basis         ETBasis
	Coefficient   float64 // reference x this = demand; NaN when measured
	Deficit       quantity.Millimetres
	Greenness     quantity.Index // last accepted, NaN: none
	From          From
	Still         bool // rain unknown, or nothing to make evapotranspiration of: the account stood still
}
