package climate

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"saprolite/ingest/quantity"
)

// fullDay is a day on which everything is known: the FAO-56 example 18.
func fullDay() Weather {
	w := Unknown()
	w.Day = quantity.DateOf(2015, 7, 6)
	w.TMin, w.TMax, w.TMean = 12.3, 21.5, 16.9
	w.RHMin, w.RHMax, w.RHMean = 63, 84, 70.5
	w.VPD, w.Wind2m, w.Solar = 0.589, 2.078, 22.07
	return w
}

var nan = math.NaN()

func TestReferenceTakesTheBestMethodTheDayAllows(t *testing.T) {
	monthly := [12]quantity.Millimetres{31, 29, 31, 30, 31, 30, 124, 31, 30, 31, 30, 31} // July: 4 mm a day
	noHumidity := func(w *Weather) {
		w.RHMin, w.RHMax, w.RHMean, w.VPD = quantity.Percent(nan), quantity.Percent(nan), quantity.Percent(nan), quantity.Kilopascals(nan)
	}
	noWind := func(w *Weather) { w.Wind2m = quantity.MetresPerSecond(nan) }
	noSolar := func(w *Weather) { w.Solar = quantity.Megajoules(nan) }
	noMax := func(w *Weather) { w.TMax = quantity.Celsius(nan) }
	for _, c := range []struct {
		name   string
		change []func(*Weather)
		basis  Basis
		token  string
	}{
		{"all known", nil, ByPenmanMonteith, "penman-monteith"},
		{"given", []func(*Weather){func(w *Weather) { w.Given = 7 }}, Given, "given"},
		{"no wind", []func(*Weather){noWind}, ByPenmanMonteithNoWind, "penman-monteith:no-wind"},
		{"no humidity", []func(*Weather){noHumidity}, ByPenmanMonteithNoHumidity, "penman-monteith:no-humidity"},
		{"no radiation", []func(*Weather){noSolar}, ByPenmanMonteithNoSolar, "penman-monteith:no-solar"},
		{"no wind, no radiation", []func(*Weather){noWind, noSolar}, ByHargreaves, "hargreaves"},
		{"no wind, no humidity", []func(*Weather){noWind, noHumidity}, ByHargreaves, "hargreaves"},
		{"no humidity, no radiation", []func(*Weather){noHumidity, noSolar}, ByHargreaves, "hargreaves"},
		{"temperatures only", []func(*Weather){noWind, noHumidity, noSolar}, ByHargreaves, "hargreaves"},
		{"no maximum: a mean alone is no range", []func(*Weather){noMax}, ByMonthly, "monthly"},
		{"extremes the wrong way round", []func(*Weather){func(w *Weather) { w.TMin, w.TMax = w.TMax, w.TMin }}, ByMonthly, "monthly"},
		{"negative wind is no wind", []func(*Weather){func(w *Weather) { w.Wind2m = -1 }}, ByPenmanMonteithNoWind, "penman-monteith:no-wind"},
	} {
		w := fullDay()
		for _, f := range c.change {
			f(&w)
		}
		et, basis := Reference(&Site{Latitude: 50.8, Elevation: 100, Monthly: &monthly}, &w)
		if basis != c.basis || basis.String() != c.token {
			t.Errorf("%s: basis %v (%d), want %s", c.name, basis, basis, c.token)
		}
		if basis == ByMonthly && et != 4 {
			t.Errorf("%s: %v a day, want 124 mm over July's 31 days", c.name, et)
		}
		if basis == Given && et != 7 {
			t.Errorf("%s: %v, want the given 7 mm", c.name, et)
		}
	}
}

// Every way of giving the same humidity must lead to the same evaporation: the
// day's VPD is that of its relative humidities (FAO-56 example 18).
func TestReferenceFromEachKindOfHumidity(t *testing.T) {
	site := Site{Latitude: 50.8, Elevation: 100}
	w := fullDay()
	extremes, _ := Reference(&site, &w)
	w.RHMin = quantity.Percent(nan)
	mean, _ := Reference(&site, &w) // RHMean
	w.RHMean = quantity.Percent(nan)
	vpd, _ := Reference(&site, &w)
	// 0.589 is printed to three digits: 0.0005 kPa are 0.0005 x gamma 900/290 x
	// 2.078 / 0.24 = 0.001 mm.
	if math.Abs(float64(extremes-vpd)) > 0.001 {
		t.Errorf("from humidity's extremes %v, from VPD %v", float64(extremes), float64(vpd))
	}
	// 70.5 % of 1.997 kPa is 1.408 against 1.409 kPa from the extremes.
	if math.Abs(float64(extremes-mean)) > 0.003 {
		t.Errorf("from mean humidity %v, from its extremes %v", float64(mean), float64(extremes))
	}
	w.RHMin, w.RHMax, w.VPD = 90, 60, quantity.Kilopascals(nan)
	if _, basis := Reference(&site, &w); basis != ByPenmanMonteithNoHumidity {
		t.Errorf("a least humidity above the greatest was used: %v", basis)
	}
}

// Air can hold no more than saturation and no less than nothing: sensors that
// read 105 % in fog, and deficits from a warmer place, stay within.
func TestHumidityStaysWithinItsBounds(t *testing.T) {
	site := Site{Latitude: 50.8, Elevation: 100}
	with := func(change func(*Weather)) quantity.Millimetres {
		w := fullDay()
		w.RHMin, w.RHMax, w.RHMean, w.VPD = quantity.Percent(nan), quantity.Percent(nan), quantity.Percent(nan), quantity.Kilopascals(nan)
		change(&w)
		et, basis := Reference(&site, &w)
		if basis != ByPenmanMonteith {
			t.Errorf("basis %v", basis)
		}
		return et
	}
	fog := with(func(w *Weather) { w.RHMean = 100 })
	if et := with(func(w *Weather) { w.RHMean = 105 }); et != fog {
		t.Errorf("at 105 %% mean %v, at 100 %% %v", float64(et), float64(fog))
	}
	if et := with(func(w *Weather) { w.RHMin, w.RHMax = 102, 105 }); et != fog {
		t.Errorf("at 102 to 105 %% %v, at 100 %% %v", float64(et), float64(fog))
	}
	if dry, et := with(func(w *Weather) { w.RHMean = 0 }), with(func(w *Weather) { w.VPD = 9 }); et != dry {
		t.Errorf("at a deficit beyond saturation %v, in dry air %v", float64(et), float64(dry))
	}
}

// Without a pyranometer, radiation is that of equation 50, but never more than
// a clear sky lets through.
func TestRadiationFromTheTemperatureRange(t *testing.T) {
	site := Site{Latitude: 50.8, Elevation: 100}
	ra := ExtraterrestrialRadiation(50.8, 187)
	for _, c := range []struct {
		high quantity.Celsius
		rs   quantity.Megajoules
	}{
		{21.5, SolarFromTemperatureRange(ra, 12.3, 21.5, 0.16)},
		{42.3, ClearSkyRadiation(ra, 100)}, // a range of 30 degC: 0.88 Ra by equation 50
	} {
		w := fullDay()
		w.TMax, w.Solar = c.high, quantity.Megajoules(nan)
		without, basis := Reference(&site, &w)
		w.Solar = c.rs
		if with, _ := Reference(&site, &w); basis != ByPenmanMonteithNoSolar || with != without {
			t.Errorf("up to %v: %v by %v, with that radiation measured %v", c.high, float64(without), basis, float64(with))
		}
	}
}

// The polar night has no clearness to measure, and a bright day is no clearer
// than clear.
func TestClearnessAtItsEnds(t *testing.T) {
	if got, want := NetLongwave(-30, -20, 0.05, 0, 0), NetLongwave(-30, -20, 0.05, 0.5, 1); got != want {
		t.Errorf("polar night %v, want %v as under half clearness", float64(got), float64(want))
	}
	if got, want := NetLongwave(10, 20, 1, 25, 20), NetLongwave(10, 20, 1, 20, 20); got != want {
		t.Errorf("brighter than clear %v, want %v as under a clear sky", float64(got), float64(want))
	}
	w := fullDay()
	w.Day, w.TMin, w.TMax, w.Solar = quantity.DateOf(2015, 12, 21), -30, -20, 0
	if et, basis := Reference(&Site{Latitude: 80, Elevation: 100}, &w); basis != ByPenmanMonteith || !(et >= 0) {
		t.Errorf("polar night: %v by %v", float64(et), basis)
	}
}

func TestReferenceOfMonthsAndLeapYears(t *testing.T) {
	site := Site{Monthly: &[12]quantity.Millimetres{31, 58, 31, 30, 31, 30, 31, 31, 30, 31, 30, 62}}
	w := Unknown()
	for _, c := range []struct {
		day  quantity.Day
		want float64
	}{
		{quantity.DateOf(2015, 2, 28), 58. / 28}, {quantity.DateOf(2016, 2, 29), 2},
		{quantity.DateOf(2015, 12, 31), 2}, {quantity.DateOf(2015, 1, 1), 1},
	} {
		w.Day = c.day
		if et, basis := Reference(&site, &w); float64(et) != c.want || basis != ByMonthly {
			t.Errorf("%v: %v by %v, want %v mm", c.day, float64(et), basis, c.want)
		}
	}
}

func TestReferenceUnknown(t *testing.T) {
	w := Unknown()
	w.Day = quantity.DateOf(2015, 7, 6)
	if et, basis := Reference(&Site{Latitude: 50, Elevation: 100}, &w); !math.IsNaN(float64(et)) || basis != None || basis.String() != "none" {
		t.Errorf("nothing known: %v by %v", et, basis)
	}
	w = fullDay()
	if et, basis := Reference(&Site{Latitude: 50.8, Elevation: quantity.Metres(nan)}, &w); basis != ByHargreaves || !(et > 0) {
		t.Errorf("height unknown: %v by %v, want Hargreaves, which needs none", et, basis)
	}
	frost := Unknown()
	frost.Day, frost.TMin, frost.TMax = quantity.DateOf(2015, 1, 6), -30, -20 // mean under Hargreaves' -17.8
	if et, basis := Reference(&Site{Latitude: 50.8}, &frost); et != 0 || basis != ByHargreaves {
		t.Errorf("hard frost: %v by %v, want 0", et, basis)
	}
	w.Given = -0.2
	if et, basis := Reference(&Site{}, &w); et != 0 || basis != Given {
		t.Errorf("given below zero: %v by %v, want 0", et, basis)
	}
}

// drawWeather draws a day that this planet could have, each value known or
// missing by itself.
func drawWeather(t *rapid.T) (Site, Weather) {
	value := func(lo, hi float64, name string) float64 {
		if rapid.IntRange(0, 3).Draw(t, name+" missing") == 0 {
			return nan
		}
		return rapid.Float64Range(lo, hi).Draw(t, name)
	}
	w := Unknown()
	w.Day = quantity.Day(rapid.IntRange(-20000, 40000).Draw(t, "day"))
	low := rapid.Float64Range(-60, 40).Draw(t, "low")
	w.TMin, w.TMax = quantity.Celsius(low), quantity.Celsius(low+rapid.Float64Range(0, 35).Draw(t, "range"))
	w.RHMin, w.RHMax = quantity.Percent(value(0, 105, "rhmin")), quantity.Percent(value(0, 105, "rhmax"))
	w.RHMean, w.VPD = quantity.Percent(value(0, 105, "rhmean")), quantity.Kilopascals(value(0, 12, "vpd"))
	w.Wind2m, w.Solar = quantity.MetresPerSecond(value(0, 30, "wind")), quantity.Megajoules(value(0, 40, "solar"))
	return Site{
		Latitude:  quantity.Degrees(rapid.Float64Range(-90, 90).Draw(t, "latitude")),
		Elevation: quantity.Metres(rapid.Float64Range(-400, 4500).Draw(t, "height")),
	}, w
}

func TestReferenceIsFiniteAndNotNegative(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		site, w := drawWeather(t)
		et, basis := Reference(&site, &w)
		if !(et >= 0) || math.IsInf(float64(et), 0) || basis == None {
			t.Fatalf("%v by %v", et, basis)
		}
	})
}

func TestExtraterrestrialRadiationBounds(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		latitude := quantity.Degrees(rapid.Float64Range(-90, 90).Draw(t, "latitude"))
		j := rapid.IntRange(1, 366).Draw(t, "day of the year")
		ra, n := ExtraterrestrialRadiation(latitude, j), DaylightHours(latitude, j)
		// A surface that faces the sun all day gets 1440 x 0.0820 x 1.033 MJ.
		if !(ra >= 0 && ra <= 1440*0.0820*1.033) {
			t.Fatalf("Ra %v", ra)
		}
		if !(n >= 0 && n <= 24) {
			t.Fatalf("daylight %v h", n)
		}
		if south := DaylightHours(-latitude, j); math.Abs(n+south-24) > 1e-9 {
			t.Fatalf("daylight north %v h and south %v h do not make a day", n, south)
		}
	})
	if ra := ExtraterrestrialRadiation(80, 355); ra != 0 {
		t.Errorf("polar night: Ra %v", float64(ra))
	}
	if n := DaylightHours(80, 172); n != 24 {
		t.Errorf("midnight sun: %v h", n)
	}
}

func TestDrierAirEvaporatesMore(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		terms := Terms{
			TMean:         quantity.Celsius(rapid.Float64Range(-20, 40).Draw(t, "mean")),
			NetRadiation:  quantity.Megajoules(rapid.Float64Range(-5, 25).Draw(t, "radiation")),
			Wind2m:        quantity.MetresPerSecond(rapid.Float64Range(0.1, 15).Draw(t, "wind")),
			VPD:           quantity.Kilopascals(rapid.Float64Range(0, 5).Draw(t, "vpd")),
			Psychrometric: PsychrometricConstant(Pressure(quantity.Metres(rapid.Float64Range(0, 3000).Draw(t, "height")))),
		}
		terms.Slope = SaturationSlope(terms.TMean)
		drier := terms
		drier.VPD += quantity.Kilopascals(rapid.Float64Range(0.01, 3).Draw(t, "drier by"))
		if a, b := PenmanMonteith(terms), PenmanMonteith(drier); !(b > a) {
			t.Fatalf("%v at VPD %v, %v at %v", float64(a), float64(terms.VPD), float64(b), float64(drier.VPD))
		}
	})
}

// The slope (13) is the derivative of the curve (11).
func TestSlopeIsTheDerivative(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		c := quantity.Celsius(rapid.Float64Range(-40, 50).Draw(t, "degC"))
		const h = 1e-3
		numeric := float64(SaturationVapourPressure(c+h)-SaturationVapourPressure(c-h)) / (2 * h)
		// 4098 is 17.27 x 237.3 = 4098.171 rounded: 4.2e-5 of the slope.
		if got := SaturationSlope(c); math.Abs(got-numeric) > 5e-5*numeric {
			t.Fatalf("at %v: %v, by differences %v", c, got, numeric)
		}
	})
}

func TestReferenceDoesNotAllocate(t *testing.T) {
	monthly := [12]quantity.Millimetres{}
	site := Site{Latitude: 50.8, Elevation: 100, Monthly: &monthly}
	full, cold := fullDay(), Unknown()
	cold.Day = full.Day
	if n := testing.AllocsPerRun(100, func() {
		Reference(&site, &full)
		Reference(&site, &cold)
	}); n != 0 {
		t.Errorf("%v allocations a day", n)
	}
}

func BenchmarkReference(b *testing.B) {
	site, w := Site{Latitude: 50.8, Elevation: 100}, fullDay()
	b.ReportAllocs()
	for b.Loop() {
		Reference(&site, &w)
	}
}
