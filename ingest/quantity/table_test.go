package quantity

import (
	"strings"
	"testing"
)

// Design 5.5, quantity by quantity, in its order and spelling.
const design55 = `
precipitation mm | throughfall mm | irrigation mm | snow_water_equivalent mm | snow_cover 1
air_temperature degC | air_temperature_min degC | air_temperature_max degC
relative_humidity % | relative_humidity_min % | relative_humidity_max %
vapour_pressure_deficit kPa | wind_speed m/s | solar_radiation W/m2 | net_radiation W/m2
reference_evapotranspiration mm | actual_evapotranspiration mm | transpiration mm
ndvi 1 | evi 1 | evi2 1 | ndmi 1 | fapar 1 | lai 1 | red 1 | nir 1 | blue 1 | swir 1
soil_water_content m3/m3 | soil_water_potential MPa | stem_water_potential MPa
predawn_water_potential MPa | midday_water_potential MPa
sap_flux_density cm3 cm-2 h-1 | stem_radius um
delta_18o_xylem permil | delta_18o_shallow permil | delta_18o_deep permil
delta_2h_xylem permil | delta_2h_shallow permil | delta_2h_deep permil
water_table_depth m | discharge mm | live_fuel_moisture %`

func TestTableIsDesign55(t *testing.T) {
	n := 0
	for _, entry := range strings.FieldsFunc(design55, func(r rune) bool { return r == '|' || r == '\n' }) {
		name, unit, _ := strings.Cut(strings.TrimSpace(entry), " ")
		q, err := Parse(name)
		if err != nil {
			t.Errorf("Parse(%q): %v", name, err)
			continue
		}
		if q.Unit() != unit {
			t.Errorf("%s: unit %q, want %q", q, q.Unit(), unit)
		}
		n++
	}
	if n != len(table) {
		t.Errorf("design 5.5 has %d quantities, the table %d", n, len(table))
	}
}

func TestFold(t *testing.T) {
	for q, info := range table {
		want := Mean
		switch {
		case strings.HasSuffix(string(q), "_min"):
			want = Minimum
		case strings.HasSuffix(string(q), "_max"):
			want = Maximum
		case info.Unit == "mm" && q != SnowWaterEquivalent: // design 5.3; snow is a store
			want = Total
		}
		if info.Fold != want {
			t.Errorf("%s: fold %d, want %d", q, info.Fold, want)
		}
		if !(info.Lo < info.Hi) {
			t.Errorf("%s: gross range %g..%g is empty", q, info.Lo, info.Hi)
		}
		if len(groups[info.Unit]) == 0 || groups[info.Unit][0].name != info.Unit {
			t.Errorf("%s: its canonical unit %q does not head its group", q, info.Unit)
		}
	}
}

// What nature really does must pass, what no instrument can see must not.
func TestGrossRange(t *testing.T) {
	for _, c := range []struct {
		q      Quantity
		v      float64
		inside bool
	}{
		{PredawnWaterPotential, -5, true}, // a tree near death is the reading that matters most
		{Precipitation, 236, true},        // a day of a tropical storm
		{ActualEvapotranspiration, -0.3, true},
		{RelativeHumidity, 102, true},
		{AirTemperature, -80, true}, // ends included
		{PredawnWaterPotential, 1.2, false},
		{StemWaterPotential, -15, false},
		{Precipitation, -0.1, false},
		{AirTemperature, 295, false}, // kelvin
		{SoilWaterContent, 31, false},
		{NDVI, 7300, false}, // scaled by 10000
	} {
		info, _ := c.q.Info()
		if got := c.v >= info.Lo && c.v <= info.Hi; got != c.inside {
			t.Errorf("%s %g in %g..%g: %v, want %v", c.q, c.v, info.Lo, info.Hi, got, c.inside)
		}
	}
}

func TestParse(t *testing.T) {
	for _, c := range []struct{ in, want, wrong string }{
		{in: "precipitation", want: "precipitation"},
		{in: "soil_water_content:30", want: "soil_water_content:30"},
		{in: "soil_water_content:030", want: "soil_water_content:30"},
		{in: "soil_water_potential:0", want: "soil_water_potential:0"},
		{in: "rain", wrong: `unknown quantity "rain" (did you mean "precipitation"?)`},
		{in: "Rainfall", wrong: `(did you mean "precipitation"?)`},
		{in: "precipitaton", wrong: `(did you mean "precipitation"?)`},
		{in: "air-temperature", wrong: `(did you mean "air_temperature"?)`},
		{in: "temp", wrong: `(did you mean "air_temperature"?)`},
		{in: "et0", wrong: `(did you mean "reference_evapotranspiration"?)`},
		{in: "psi", wrong: `(did you mean "stem_water_potential"?)`},
		{in: "ndiv", wrong: `(did you mean "ndvi"?)`},
		{in: "soil_moisture:10", wrong: `(did you mean "soil_water_content"?)`},
		{in: "barometer", wrong: `unknown quantity "barometer"`},
		{in: "", wrong: `unknown quantity ""`},
		{in: "precipitation:30", wrong: `takes no depth`},
		{in: "soil_water_content:", wrong: "whole centimetres"},
		{in: "soil_water_content:-5", wrong: "whole centimetres"},
		{in: "soil_water_content:10001", wrong: "0 to 10000"},
		{in: "soil_water_content:1.5", wrong: "whole centimetres"},
	} {
		got, err := Parse(c.in)
		if c.wrong == "" && (err != nil || string(got) != c.want) {
			t.Errorf("Parse(%q) = %q, %v; want %q", c.in, got, err, c.want)
		}
		if c.wrong != "" && (err == nil || !strings.Contains(err.Error(), c.wrong)) {
			t.Errorf("Parse(%q) = %q, %v; want an error with %q", c.in, got, err, c.wrong)
		}
	}
	if _, err := Parse("barometer"); strings.Contains(err.Error(), "did you mean") {
		t.Errorf("nothing is near %v", err)
	}
}

func TestSynonymsAreNoNames(t *testing.T) {
	for s, q := range synonyms {
		if _, ok := table[Quantity(s)]; ok {
			t.Errorf("%q is a quantity itself", s)
		}
		if _, ok := table[q]; !ok {
			t.Errorf("%q stands for %q, which is no quantity", s, q)
		}
	}
}
