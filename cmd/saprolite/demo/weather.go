package demo

import (
	"math"
	"math/rand/v2"

	"saprolite/detectors/climate"
	"saprolite/ingest/quantity"
)

// The weather below is our own small generator: a wet and a dry state, wet
// spells of exponential showers, a year of temperature, everything else made
// to fit. Its numbers were chosen to look like an island with dry summers and
// have no source.

// day is one day's weather on the island, at the height of the mast.
type day struct {
	rain             quantity.Millimetres // at the valley gauge
	low, high        quantity.Celsius
	humidity         quantity.Percent
	wind             quantity.MetresPerSecond // at 10 m
	solar            quantity.Megajoules
	sky              float64 // 0 overcast .. 1 clear
	noise, greenness float64
}

// weather makes days one after the other; the same seed makes the same days.
type weather struct {
	random *rand.Rand
	today  quantity.Day
	wet    bool
	warmth float64 // departure from the season, degC
	season float64 // this wet season's rain relative to the usual
}

func newWeather(first quantity.Day) *weather {
	return &weather{random: rand.New(rand.NewPCG(36, 41)), today: first - 1, season: 1}
}

// failed tells whether a day lies in the wet season that fails in the demo:
// the one between its two live years.
func failed(d quantity.Day) bool { return d >= failsFrom && d < failsTo }

func (w *weather) next() day {
	w.today++
	r := w.random
	_, month, date := w.today.Date()
	if month == 9 && date == 1 {
		w.season = math.Exp(0.22*r.NormFloat64() - 0.02)
	}
	angle := 2 * math.Pi * (float64(w.today.YearDay()) - 20) / 365
	winter := math.Cos(angle) // 1 in late January, -1 in late July

	chance := 0.26 + 0.22*winter
	if w.wet {
		chance = 0.45 + 0.25*winter
	}
	season := w.season
	if failed(w.today) {
		season = 0.3
	}
	w.wet = r.Float64() < chance*math.Min(1, math.Sqrt(season)+0.1)
	var d day
	amount := r.ExpFloat64()
	if w.wet {
		d.rain = quantity.Millimetres(math.Round(10*(0.4+amount*(7.5+3.5*winter)*season)) / 10)
	}
	w.warmth = 0.75*w.warmth + 1.6*r.NormFloat64()
	d.sky = math.Max(0.1, math.Min(1, 0.86-0.12*winter+0.1*r.NormFloat64()))
	if w.wet {
		d.sky *= 0.5
	}
	mean := 14.5 - 5.5*math.Cos(angle-0.3) + 0.7*w.warmth
	span := 3 + 5*d.sky
	d.low, d.high = degrees(mean-span/2), degrees(mean+span/2)
	d.humidity = quantity.Percent(math.Round(math.Max(25, math.Min(98, 74+8*winter-18*(d.sky-0.6)+5*r.NormFloat64()))))
	d.wind = quantity.MetresPerSecond(math.Round(10*(1.5+2.2*r.ExpFloat64()*0.6)) / 10)
	top := climate.ClearSkyRadiation(climate.ExtraterrestrialRadiation(latitude, w.today.YearDay()), mastElevation)
	d.solar = quantity.Megajoules(math.Round(100*float64(top)*(0.25+0.75*d.sky)) / 100)
	d.noise = r.NormFloat64()
	d.greenness = r.NormFloat64()
	return d
}

func degrees(v float64) quantity.Celsius { return quantity.Celsius(math.Round(v*10) / 10) }
