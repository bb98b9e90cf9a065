package config

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"saprolite/ingest/quantity"
)

// Can says whether something can be answered for a stand.
type Can string

const (
	Yes    Can = "yes"
	IfSent Can = "if the stand's own feed sends it"
	NotYet Can = "not yet"
	No     Can = "no"
)

// Coverage is what can be answered for a stand with the sources the register
// gives it, and what one more would add. It knows what is written, not what
// arrives.
type Coverage struct {
	Stand, Name string
	Answers     []Answer
	OneMore     []string // the most useful first
}

// Answer is one question, whether it can be answered, and by what.
type Answer struct {
	Question string // "rain", "account", "storage limit", "greenness", "water potential"
	Can      Can
	Says     string
}

// String writes the coverage as an indented paragraph for a terminal.
func (c Coverage) String() string {
	var b strings.Builder
	b.WriteString("stand " + c.Stand)
	if c.Name != c.Stand {
		fmt.Fprintf(&b, " (%s)", c.Name)
	}
	b.WriteString("\n")
	for _, a := range c.Answers {
		fmt.Fprintf(&b, "  %s: %s", a.Question, a.Can)
		if a.Says != "" {
			b.WriteString(", " + a.Says)
		}
		b.WriteString("\n")
	}
	for _, more := range c.OneMore {
		b.WriteString("  one more: " + more + "\n")
	}
	return b.String()
}

// What coverage reckons with.
const (
	// A rain factor less certain than this asks for a nearer gauge: 10 km or
	// 120 m of height (common practice, no source).
	poorRain = 0.11
	// Complete years before a limit is estimated (methods.md section K: below
	// five the interval is wider than the value).
	yearsForLimit = 5
)

var vegetationIndices = []quantity.Quantity{quantity.EVI, quantity.EVI2, quantity.NDVI, quantity.NDMI, quantity.FAPAR, quantity.LAI}

// Coverage says what can be answered for a stand.
func (r *Register) Coverage(stand *Stand) Coverage {
	v := viewer{r, stand}
	c := Coverage{Stand: stand.ID, Name: stand.Name}
	more := func(text string) { c.OneMore = append(c.OneMore, text) }

	rain := v.rain(more)
	account := v.account(more)
	if account.Can == Yes && rain.Can != Yes {
		account.Can, account.Says = rain.Can, "rain must come in; water use "+account.Says
	}
	c.Answers = []Answer{rain, account, v.limit(), v.greenness(more), v.potential(more)}
	return c
}

// viewer looks at one stand.
type viewer struct {
	*Register
	stand *Stand
}

// source returns the first source of q that is written: named, or near by. ok
// is false when only the stand's own feed may send it.
func (v viewer) source(q quantity.Quantity) (d Draw, ok bool) {
	for _, d := range v.Draws(v.stand, q) {
		if d.Why != whyOwn {
			return d, true
		}
	}
	return Draw{}, false
}

// first returns the first quantity of a list that has a written source.
func (v viewer) first(qs ...quantity.Quantity) (q quantity.Quantity, d Draw, ok bool) {
	for _, q := range qs {
		if d, ok := v.source(q); ok {
			return q, d, true
		}
	}
	return "", Draw{}, false
}

func (v viewer) rain(more func(string)) Answer {
	d, ok := v.source(quantity.Precipitation)
	if !ok {
		more("a rain gauge within 10 km that lists precipitation: the account would not hang on the stand's own feed alone")
		return Answer{"rain", IfSent, "no other source lists precipitation within " + fmt.Sprint(reachKM) + " km"}
	}
	says := fmt.Sprintf("precipitation of %v, its factor uncertain by %.0f %%", d, 100*d.RainError())
	if d.Source == v.stand.ID {
		says = "the stand's own gauge"
	} else if d.RainError() > poorRain {
		more("a rain gauge nearer, or nearer in height: the rain of " + d.Source + " says less the further it is")
	}
	return Answer{"rain", Yes, says}
}

// account says where water use comes from, in the account's order of
// preference: measured, reference as given, Penman-Monteith, Hargreaves,
// monthly values (methods.md A.1, A.2 and decisions).
func (v viewer) account(more func(string)) Answer {
	const measured = "measured evapotranspiration (a flux tower or a satellite product): water use seen, not modelled, which also makes a storage limit firmer"
	if d, ok := v.source(quantity.ActualEvapotranspiration); ok {
		return Answer{"account", Yes, "by measured evapotranspiration of " + d.String()}
	}
	defer more(measured) // after what the weather asks for
	if d, ok := v.source(quantity.ReferenceEvapotranspiration); ok {
		return Answer{"account", Yes, "by the reference evapotranspiration given by " + d.String()}
	}
	low, lowOK := v.source(quantity.AirTemperatureMin)
	high, highOK := v.source(quantity.AirTemperatureMax)
	if lowOK && highOK {
		return Answer{"account", Yes, v.fromTemperatures(low, high, more)}
	}
	more("a thermometer that lists air_temperature_min and air_temperature_max (a daily mean alone is not enough): water use by Hargreaves")
	if v.stand.MonthlyReferenceET != nil {
		return Answer{"account", Yes, "by the 12 monthly values of the register, the last resort, with a wide interval"}
	}
	return Answer{"account", IfSent, "as precipitation with actual_evapotranspiration, or with air_temperature_min and _max; without these give monthly_reference_et_mm"}
}

// fromTemperatures tells Penman-Monteith, which wants the stand's height and
// at least two of radiation, humidity and wind, from Hargreaves.
func (v viewer) fromTemperatures(low, high Draw, more func(string)) string {
	temperatures := distinct(low, high)
	weather := []Draw{low, high}
	var lack []string
	for _, need := range []struct {
		word string
		by   [][]quantity.Quantity // any of these, each whole
	}{
		{"solar_radiation", [][]quantity.Quantity{{quantity.SolarRadiation}}},
		{"relative_humidity", [][]quantity.Quantity{{quantity.RelativeHumidityMin, quantity.RelativeHumidityMax}, {quantity.RelativeHumidity}, {quantity.VapourPressureDeficit}}},
		{"wind_speed", [][]quantity.Quantity{{quantity.WindSpeed}}},
	} {
		if draws := v.whole(need.by); draws != nil {
			weather = append(weather, draws...)
		} else {
			lack = append(lack, need.word)
		}
	}
	by, taken := "by Penman-Monteith from the weather of "+distinct(weather...), v.windHeight()
	height := !math.IsNaN(float64(v.stand.Elevation))
	switch {
	case len(lack) > 1:
		what := strings.Join(lack, " or ")
		if len(lack) == 3 {
			what = "two of " + strings.Join(lack, ", ")
		}
		if !height {
			what += ", with elevation_m of the stand"
		}
		more(what + ": water use by Penman-Monteith")
	case !height:
		more("elevation_m of the stand: water use by Penman-Monteith")
	case len(lack) == 1:
		more(lack[0] + ": Penman-Monteith without an assumption")
		return by + ", " + lack[0] + " assumed" + taken
	default:
		return by + taken
	}
	return "by Hargreaves from temperatures of " + temperatures
}

// windHeight says which height an anemometer is taken to have that does not say:
// the one for which Penman-Monteith is written (FAO-56 equation 6).
func (v viewer) windHeight() string {
	d, ok := v.source(quantity.WindSpeed)
	if !ok || !math.IsNaN(float64(v.Source(d.Source).Height)) {
		return ""
	}
	return "; wind of " + d.Source + " taken as 2 m above the ground, as it has no height_m"
}

// whole returns the sources of the first set of quantities of which each has a
// written one.
func (v viewer) whole(sets [][]quantity.Quantity) []Draw {
	for _, set := range sets {
		var draws []Draw
		for _, q := range set {
			if d, ok := v.source(q); ok {
				draws = append(draws, d)
			}
		}
		if len(draws) == len(set) {
			return draws
		}
	}
	return nil
}

// distinct names each source once.
func distinct(draws ...Draw) string {
	var names []string
	for _, d := range draws {
		if name := d.String(); !slices.Contains(names, name) {
			names = append(names, name)
		}
	}
	return strings.Join(names, " and ")
}

// limit says what is known of the storage limit (methods.md, decisions: "No
// circle", "Extra water", "Change of the stand").
func (v viewer) limit() Answer {
	s := v.stand
	switch {
	case s.ExtraWater != "none":
		return Answer{"storage limit", No, "withheld: extra_water is " + s.ExtraWater + ", so the account shows what rain alone explains"}
	case !math.IsNaN(float64(s.StorageLimit)):
		return Answer{"storage limit", Yes, fmt.Sprintf("%v, as configured", s.StorageLimit)}
	}
	says := fmt.Sprintf("unknown until %d complete years; give storage_limit_mm if it was measured", yearsForLimit)
	if s.Established > 0 {
		says += fmt.Sprintf("; years before %d do not count, the roots still deepened", s.Established+10)
	}
	return Answer{"storage limit", NotYet, says}
}

func (v viewer) greenness(more func(string)) Answer {
	q, d, ok := v.first(vegetationIndices...)
	if !ok {
		more("a vegetation index (evi, evi2, ndvi ...) of the stand: water use follows its canopy")
		return Answer{"greenness", IfSent, "as evi, evi2, ndvi, ndmi, fapar or lai"}
	}
	return Answer{"greenness", Yes, string(q) + " of " + d.String()}
}

func (v viewer) potential(more func(string)) Answer {
	q, d, ok := v.first(quantity.StemWaterPotential, quantity.PredawnWaterPotential, quantity.MiddayWaterPotential)
	if !ok {
		more("predawn_water_potential, by pressure chamber or by a sensor in the stem: how near the trees are to damage")
		return Answer{"water potential", IfSent, "kept; not judged in this version yet"}
	}
	return Answer{"water potential", Yes, string(q) + " of " + d.String() + ", kept; not judged in this version yet"}
}
