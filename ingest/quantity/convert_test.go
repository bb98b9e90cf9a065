package quantity

import (
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"
)

func TestConvert(t *testing.T) {
	const dayLong = 24 * time.Hour
	for _, c := range []struct {
		q      Quantity
		value  float64
		unit   string
		span   time.Duration
		want   float64
		within float64 // relative; 0 is to the bit
		source string
	}{
		// RFC 8798 section 3, table of secondary units.
		{Precipitation, 1e-5, "m/s", time.Hour, 36, 1e-15, "check value senml-mmh: 36 mm/h is 1e-5 m/s"},
		{Precipitation, 36, "mm/h", time.Hour, 36, 0, "check value senml-mmh"},
		{VapourPressureDeficit, 12, "hPa", 0, 1.2, 0, "RFC 8798: hPa is 100 Pa"},
		{Precipitation, 0.0127, "m", 0, 12.7, 0, "RFC 8798: mm is 1/1000 m"},
		{WindSpeed, 36, "km/h", 0, 10, 0, "RFC 8798: km/h is 1/3.6 m/s"},
		{SolarRadiation, 500, "Wh/m2", 2 * time.Hour, 250, 0, "RFC 8798: Wh is 3600 J"},
		{LAI, 3.5, "/", 0, 3.5, 0, "RFC 8428 section 12.1: / is a ratio"},
		{RelativeHumidity, 55.3, "%RH", 0, 55.3, 0, "RFC 8428 section 12.1"},
		{AirTemperature, 23.1, "Cel", 0, 23.1, 0, "RFC 8428 section 5.1.1"},
		{SoilWaterContent, 31, "/100", 0, 0.31, 0, "check value senml-units: /100 is 0.01"},
		{Delta18OXylem, -7.25, "/1000", 0, -7.25, 0, "check value senml-units: /1000 is 0.001"},
		// NIST SP 811 (2008), appendix B.8, to the digits printed.
		{Precipitation, 1, "in", 0, 25.4, 0, "inch 2.54 E-02 m"},
		{StemWaterPotential, -1000, "psi", 0, -6.894757, 1e-7, "psi 6.894757 E+03 Pa"},
		{PredawnWaterPotential, -15, "bar", 0, -1.5, 0, "bar 1.0 E+05 Pa"},
		{WindSpeed, 10, "kn", 0, 5.144444, 1e-6, "knot 5.144444 E-01 m/s"},
		{WaterTableDepth, 10, "ft", 0, 3.048, 0, "foot 3.048 E-01 m"},
		{AirTemperature, 212, "degF", 0, 100, 0, "water boils (Fahrenheit's scale by definition)"},
		{AirTemperature, -40, "[degF]", 0, -40, 0, "where both scales meet"},
		{AirTemperature, 273.16, "K", 0, 0.01, 1e-11, "triple point of water, SI Brochure"},
		// FAO-56 (Allen et al. 1998), table 3.
		{SolarRadiation, 0.0864, "MJ/m2", dayLong, 1, 1e-15, "1 W m-2 is 0.0864 MJ m-2 day-1"},
		{SolarRadiation, 0.0864, "MJ m-2 d-1", 0, 1, 1e-15, "1 W m-2 is 0.0864 MJ m-2 day-1"},
		{SolarRadiation, 8.64, "J/cm2", dayLong, 1, 1e-15, "1 J cm-2 day-1 is 0.01 MJ m-2 day-1"},
		{ReferenceEvapotranspiration, 4.5, "mm/d", dayLong, 4.5, 0, "mm day-1"},
		// A rate means its total over the time it speaks for.
		{Precipitation, 2.5, "mm/h", 30 * time.Minute, 1.25, 0, "half an hour at 2.5 mm/h"},
		{ActualEvapotranspiration, 1e-5, "kg m-2 s-1", dayLong, 0.864, 1e-15, "86400 s"},
		// As written, though neither 0.29 * 100 nor 1.005 / 1000 is in binary.
		{RelativeHumidity, 0.29, "1", 0, 29, 0, "decimal point"},
		{StemWaterPotential, -1.2e6, "Pa", 0, -1.2, 0, "decimal point"},
		{StemWaterPotential, -1234567.8, "Pa", 0, -1.2345678, 0, "decimal point"},
		{SoilWaterPotential, -33, "kPa", 0, -0.033, 0, "decimal point"},
		{StemRadius, 0.0123, "mm", 0, 12.3, 0, "decimal point"},
		{SapFluxDensity, 100, "g m-2 s-1", 0, 36, 0, "0.01 g cm-2 s-1, 3600 s"},
		{SapFluxDensity, 123, "mm/h", 0, 12.3, 0, "decimal point"},
	} {
		got, err := Convert(c.q, c.value, c.unit, c.span)
		if err != nil {
			t.Errorf("%s %g %s: %v", c.q, c.value, c.unit, err)
			continue
		}
		if d := math.Abs(got - c.want); d > c.within*math.Abs(c.want) {
			t.Errorf("%s %v %s over %s = %v, want %v (%s)", c.q, c.value, c.unit, c.span, got, c.want, c.source)
		}
	}
}

func TestSpellings(t *testing.T) {
	for q, list := range map[Quantity][]string{
		Precipitation:  {"mm", "kg/m2", "kg.m-2", "kg m-2", "kg m^-2", "kg m⁻²", "kg*m**-2", "l/m2", "L/m2", "l.m-2", "l/m²"},
		Transpiration:  {"mm/d", "mm/day", "mm d-1", "mm.d-1", "kg m-2 day-1"},
		WindSpeed:      {"m/s", "m.s-1", "m s-1", "m·s⁻¹", "m/sec"},
		AirTemperature: {"degC", "Cel", "°C", "℃", "C"},
		SolarRadiation: {"W/m2", "W.m-2", "W m-2", "W/m^2", "W m−2"},
		SapFluxDensity: {"cm3 cm-2 h-1", "cm3.cm-2.h-1", "cm3/cm2/h", "cm3/(cm2.h)", "cm3/(cm2 h)", "cm³ cm⁻² h⁻¹", "cm/h"},
		StemRadius:     {"um", "µm", "μm"},
		Delta2HDeep:    {"permil", "‰", "/1000"},
		NDVI:           {"1", "/"},
	} {
		for _, unit := range list {
			const v = -0.3 // any
			if got, err := Convert(q, v, unit, 24*time.Hour); err != nil || got != v {
				t.Errorf("%s in %q: %v, %v; want it unchanged", q, unit, got, err)
			}
		}
	}
}

func TestRefusedUnits(t *testing.T) {
	for _, c := range []struct {
		q    Quantity
		unit string
		span time.Duration
		is   error
		says string
	}{
		{Precipitation, "", 0, ErrUnit, "unit missing: want mm, cm, m, kg/m2"},
		{Precipitation, "degC", 0, ErrUnit, `unit "degC" does not fit precipitation: want one of mm, cm, m, kg/m2`},
		{StemWaterPotential, "mPa", 0, ErrUnit, "want one of MPa, Pa, hPa, kPa"}, // case matters: a millionfold
		{AirTemperature, "F", 0, ErrUnit, "want one of degC, K, degF"},           // a farad
		{SnowWaterEquivalent, "mm/h", time.Hour, ErrUnit, "want one of mm, cm"},
		{Precipitation, "kg/m2.s", time.Second, ErrUnit, "does not fit"}, // UCUM: kg m-2 s
		{Precipitation, "mm/h", 0, ErrSpan, "mm/h needs the time"},
		{Precipitation, "mm/h", -time.Hour, ErrSpan, "mm/h needs the time"},
		{SolarRadiation, "MJ/m2", 0, ErrSpan, "MJ/m2 needs the time"},
		{Quantity("rain"), "mm", 0, ErrUnit, `unknown quantity "rain"`},
		{Precipitation, strings.Repeat("m", 1<<16), 0, ErrUnit, `mmm"... does not fit`},
	} {
		_, err := Convert(c.q, 1, c.unit, c.span)
		if !errors.Is(err, c.is) || !strings.Contains(err.Error(), c.says) || len(err.Error()) > 300 {
			t.Errorf("%s in %q: %v; want %v with %q", c.q, c.unit, err, c.is, c.says)
		}
	}
	for _, list := range groups {
		for _, u := range list {
			for _, name := range []string{u.name + "x", u.name + "/", "/" + u.name + "(", u.name + "0"} {
				if _, ok := index[list[0].name][normal(name)]; ok {
					t.Errorf("%q is taken for a unit", name)
				}
			}
		}
	}
}

// anyUnit draws a quantity, one of its units and a span.
func anyUnit(t *rapid.T) (Quantity, string, Converter, time.Duration) {
	q := rapid.SampledFrom(Names()).Draw(t, "quantity")
	info, _ := q.Info()
	u := rapid.SampledFrom(groups[info.Unit]).Filter(func(u unit) bool { return u.per == 0 || info.Fold == Total }).Draw(t, "unit")
	span := time.Duration(rapid.Int64Range(1, 48*3600).Draw(t, "seconds")) * time.Second
	c, err := ConverterFor(q, u.name)
	if err != nil {
		t.Fatal(err)
	}
	return q, u.name, c, span
}

func TestCanonicalIsBitIdentical(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		q := rapid.SampledFrom(Names()).Draw(t, "quantity")
		v := math.Float64frombits(rapid.Uint64().Draw(t, "bits"))
		got, err := Convert(q, v, q.Unit(), 0)
		if err != nil || math.Float64bits(got) != math.Float64bits(v) {
			t.Fatalf("%s: %x became %x (%v)", q, math.Float64bits(v), math.Float64bits(got), err)
		}
	})
}

func TestDecimalPointMoves(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		digits := rapid.Int64Range(-999_999_999_999_999, 999_999_999_999_999).Draw(t, "digits") // 15 survive a float64 (IEEE 754)
		exp := rapid.IntRange(-20, 8).Draw(t, "exponent")
		places := rapid.IntRange(-6, 6).Draw(t, "places")
		v := number(t, fmt.Sprintf("%de%d", digits, exp))
		want := number(t, fmt.Sprintf("%de%d", digits, exp+places))
		got := shift(v, places)
		if got != want {
			t.Fatalf("%v by %d places: %v, want %v", v, places, got, want)
		}
		if back := shift(got, -places); back != v {
			t.Fatalf("%v by %d places and back: %v", v, places, back)
		}
	})
}

func number(t *rapid.T, s string) float64 {
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

func TestThereAndBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		_, _, c, span := anyUnit(t)
		v := rapid.Float64Range(-1e7, 1e7).Draw(t, "value")
		there, err1 := c.Value(v, span)
		back, err2 := c.Back(there, span)
		// Ten roundings at most, each half a unit in the last place (2^-53)
		// of a number no larger than v and the zero of the scale together.
		if bound := 10 * 0x1p-53 * (math.Abs(v) + 500); err1 != nil || err2 != nil || math.Abs(back-v) > bound {
			t.Fatalf("%v -> %v -> %v (%v, %v)", v, there, back, err1, err2)
		}
	})
}

func TestMonotone(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		_, unit, c, span := anyUnit(t)
		a := rapid.Float64Range(-1e7, 1e7).Draw(t, "a")
		b := rapid.OneOf(rapid.Float64Range(-1e7, 1e7), rapid.Just(math.Nextafter(a, 1e9))).Draw(t, "b")
		a, b = min(a, b), max(a, b)
		ca, err1 := c.Value(a, span)
		cb, err2 := c.Value(b, span)
		if err1 != nil || err2 != nil || ca > cb {
			t.Fatalf("%s: %v <= %v, but %v > %v (%v, %v)", unit, a, b, ca, cb, err1, err2)
		}
	})
}

func TestSDIsADifference(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		_, unit, c, span := anyUnit(t)
		v := rapid.Float64Range(-1e3, 1e3).Draw(t, "value")
		sd := rapid.Float64Range(0, 1e3).Draw(t, "sd")
		lo, _ := c.Value(v, span)
		hi, _ := c.Value(v+sd, span)
		got, err := c.SD(sd, span)
		if bound := 1e-13 * (math.Abs(lo) + math.Abs(hi) + math.Abs(got) + 500); err != nil || math.Abs(hi-lo-got) > bound {
			t.Fatalf("%s: sd %v became %v, but %v..%v became %v..%v (%v)", unit, sd, got, v, v+sd, lo, hi, err)
		}
	})
}

func FuzzNormal(f *testing.F) {
	for _, s := range []string{"", "/", "kg/m2", "cm3/(cm2.h)", "[in_i]", "[", "]", "((", "m-", "m10", "10*-4", "µm", "a/b/c", "m--2", ")", "%vol", "\xc2\xc2^\xb9\xc2\xc2\xe4"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		once := normal(s)
		if len(once) <= 40 && once != s && normal(once) != once {
			t.Errorf("normal(%q) = %q, and again %q", s, once, normal(once))
		}
	})
}

func BenchmarkConvert(b *testing.B) {
	for _, c := range []struct {
		q    Quantity
		unit string
	}{{Precipitation, "mm"}, {AirTemperature, "K"}, {StemWaterPotential, "Pa"}, {SapFluxDensity, "cm3/(cm2 h)"}} {
		b.Run(c.unit, func(b *testing.B) {
			for b.Loop() {
				if _, err := Convert(c.q, -1.25, c.unit, time.Hour); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
