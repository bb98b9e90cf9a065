package demo

import (
	"fmt"
	"math"
	"time"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// Island makes the invented observations, day after day from FirstPast on.
type Island struct {
	weather *weather
	deficit float64                   // of an invented stand that drives the tower and greenness, mm
	kept    []observation.Observation // in the logger while its line was down
}

// NewIsland returns the island on the eve of FirstPast.
func NewIsland() *Island { return &Island{weather: newWeather(FirstPast)} }

// Day is what one source reports of one day.
type Day struct {
	Source       string
	Observations []observation.Observation
}

// gauges: rain relative to the valley's. The high ground is wetter.
var gauges = []struct {
	id    string
	share float64
}{{"gauge-north", 1.08}, {"gauge-valley", 0.94}, {"gauge-high", 1.35}}

// green stands report a greenness every fifth day.
var green = []struct {
	id       string
	full, dp float64 // canopy when well watered, and what an empty store takes
}{{"benna-hollow", 0.46, 0.05}, {"dunmarl", 0.52, 0.16}, {"gorse-shelf", 0.43, 0.06}}

// SilentFrom and SilentTo bound the days, in the second live year, on which
// the high gauge sends nothing: a fox has been at the cable. ReadOut is the
// day on which somebody reads out what the logger kept.
var (
	SilentFrom = quantity.DateOf(2056, time.May, 3)
	SilentTo   = quantity.DateOf(2056, time.May, 20)
	ReadOut    = quantity.DateOf(2056, time.May, 24)
)

// Next returns what all sources report of the next day.
func (i *Island) Next() []Day {
	d := i.weather.next()
	on := i.weather.today
	var out []Day
	for k, g := range gauges {
		rain := float64(d.rain) * g.share
		if rain > 0 {
			rain *= 1 + 0.08*math.Sin(float64(int(on)*(k+3)))
		}
		o := value(g.id, quantity.Precipitation, on, round(rain, 1))
		if g.id == "gauge-high" && on >= SilentFrom && on <= SilentTo {
			i.kept = append(i.kept, o)
			continue
		}
		out = append(out, Day{g.id, []observation.Observation{o}})
	}
	if on == ReadOut {
		for _, o := range i.kept {
			out = append(out, Day{o.Source, []observation.Observation{o}})
		}
	}
	out = append(out, Day{"mast", []observation.Observation{
		value("mast", quantity.AirTemperatureMin, on, float64(d.low)),
		value("mast", quantity.AirTemperatureMax, on, float64(d.high)),
		value("mast", quantity.RelativeHumidity, on, float64(d.humidity)),
		value("mast", quantity.WindSpeed, on, float64(d.wind)),
		value("mast", quantity.SolarRadiation, on, round(float64(d.solar)/0.0864, 1)),
	}})
	out = append(out, i.tower(d, on))
	if on%5 == 0 {
		for _, g := range green {
			dry := math.Max(0, i.deficit-90) / 160
			v := g.full - g.dp*math.Min(1, dry) + 0.012*d.greenness
			out = append(out, Day{g.id, []observation.Observation{value(g.id, quantity.EVI, on, round(v, 3))}})
		}
	}
	return out
}

// tower makes the evapotranspiration that the flux tower would see over a
// store of 240 mm, with noise.
func (i *Island) tower(d day, on quantity.Day) Day {
	const store = 240
	demand := 0.75 * 0.0135 * float64(d.solar) / 2.45 * ((float64(d.low)+float64(d.high))/2 + 17.8) // after Turc's kind of formula, invented constants
	stress := math.Min(1, (1-i.deficit/store)/0.5)
	et := math.Max(0, demand*math.Max(0, stress))
	i.deficit = math.Max(0, i.deficit+et-float64(d.rain))
	return Day{"mossgate-tower", []observation.Observation{
		value("mossgate-tower", quantity.ActualEvapotranspiration, on, round(et*(1+0.08*d.noise), 2)),
	}}
}

// value is one day's value of a source, from local midnight to local midnight.
func value(source string, q quantity.Quantity, on quantity.Day, v float64) observation.Observation {
	return observation.Observation{
		Source: source, Quantity: q, Start: on.Start(Offset), End: on.End(Offset),
		Value: v, SD: math.NaN(), Flag: observation.NotEvaluated,
	}
}

func round(v float64, digits int) float64 {
	p := math.Pow10(digits)
	return math.Round(v*p) / p
}

// Settings is the invented forest's saprolite.yaml: mail to a server at
// address smtp, a webhook to url hook, everything else on free ports.
func Settings(smtp, hook string) []byte {
	return fmt.Appendf(nil, `# Written by saprolite demo. Everything here is invented.
place: %q
data: data
stands: stands.geojson
broker:
  embedded:
    listen: 127.0.0.1:0
    max_store: 1GiB
    durability: relaxed   # the demo's data are worth nothing
feeds:
  - name: stations
    kind: nats
http:
  listen: 127.0.0.1:0
destinations:
  - name: foresters
    mail:
      server: %s
      from: saprolite@corrow.example
      to: [forester@corrow.example]
      tls: none
  - name: dashboard
    webhook:
      url: %s
`, Place, smtp, hook)
}
