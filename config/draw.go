package config

import (
	"fmt"
	"math"
	"slices"

	"saprolite/ingest/quantity"
)

// How far a stand reaches for a source nobody named.
const (
	// heightAsKM is the distance in km that costs as much as 1 m of height. The
	// rain factor of a neighbouring gauge is uncertain by 0.03 per 5 km and 0.05
	// per 100 m of height (methods.md, "Neighbouring gauges": common practice,
	// no source), so 100 m weigh as 8.3 km.
	heightAsKM = (rainErrorPer100M / 100) / (rainErrorPer5KM / 5)

	rainErrorHere    = 0.05 // of a gauge in the stand, one standard deviation of the factor
	rainErrorPer5KM  = 0.03
	rainErrorPer100M = 0.05

	// reachKM is where a source stops saying anything of a stand, and mostDrawn
	// how many are kept in reserve: common practice of the trade, no source.
	reachKM   = 100
	mostDrawn = 3
)

// Draw is one source a stand takes a quantity from.
type Draw struct {
	Source     string
	DistanceKM float64 // great circle, to the stand's centre; NaN when unknown
	HeightM    float64 // stand minus source; NaN when unknown
	Why        string  // in words, one of three: below
}

const (
	whyNamed = "named by the stand"
	whyOwn   = "the stand's own"
	whyNear  = "near by"
)

// weather is what neighbours share. Only of these is the nearest source taken:
// how much a stand evaporates, how green it is and at what potential its water
// stands are its own, and another stand's would be wrong at any distance.
var weather = []quantity.Quantity{
	quantity.Precipitation, quantity.AirTemperature, quantity.AirTemperatureMin, quantity.AirTemperatureMax,
	quantity.RelativeHumidity, quantity.RelativeHumidityMin, quantity.RelativeHumidityMax, quantity.VapourPressureDeficit,
	quantity.WindSpeed, quantity.SolarRadiation, quantity.ReferenceEvapotranspiration,
	quantity.SnowWaterEquivalent, quantity.SnowCover,
}

// Draws says where a stand takes q from, in order of preference. A list in the
// stand's `sources` is taken exactly as written. Otherwise the stand's own id
// comes first, then, for weather, up to three positioned sources within 100 km
// that list q among their quantities, by distance plus 8.3 km for each 100 m of
// height between them and the stand (where both heights are known).
func (r *Register) Draws(stand *Stand, q quantity.Quantity) []Draw {
	ids, named := stand.Sources[q]
	if !named {
		ids, named = stand.Sources[q.Base()]
	}
	if named {
		draws := make([]Draw, len(ids))
		for i, id := range ids {
			draws[i] = r.draw(stand, id, whyNamed)
		}
		return draws
	}
	draws := append(make([]Draw, 0, 1+mostDrawn), Draw{Source: stand.ID, Why: whyOwn})
	for _, id := range r.nearest(stand, q) {
		draws = append(draws, r.draw(stand, id, whyNear))
	}
	return draws
}

func (r *Register) draw(stand *Stand, id, why string) Draw {
	if id == stand.ID {
		return Draw{Source: id, Why: why}
	}
	src := r.Source(id)
	return Draw{
		Source:     id,
		DistanceKM: distanceKM(directionOf(float64(stand.Latitude), float64(stand.Longitude)), directionOf(float64(src.Latitude), float64(src.Longitude))),
		HeightM:    float64(stand.Elevation - src.Elevation),
		Why:        why,
	}
}

// RainError is one standard deviation of the factor between the rain at the
// stand and at this source (methods.md, "Neighbouring gauges"); a height or
// distance that is unknown adds nothing, which is too kind.
func (d Draw) RainError() float64 {
	sd := rainErrorHere
	if !math.IsNaN(d.DistanceKM) {
		sd += rainErrorPer5KM * d.DistanceKM / 5
	}
	if !math.IsNaN(d.HeightM) {
		sd += rainErrorPer100M * math.Abs(d.HeightM) / 100
	}
	return sd
}

// String names the source and where it is: "gauge-2 (6.1 km, 120 m lower)".
func (d Draw) String() string {
	if d.DistanceKM == 0 && d.HeightM == 0 {
		return d.Source
	}
	if math.IsNaN(d.DistanceKM) && math.IsNaN(d.HeightM) {
		return d.Source + " (place unknown)"
	}
	where := "distance unknown"
	if !math.IsNaN(d.DistanceKM) {
		where = fmt.Sprintf("%.1f km", d.DistanceKM)
	}
	switch {
	case math.IsNaN(d.HeightM):
		where += ", height unknown"
	case d.HeightM >= 0.5:
		where += fmt.Sprintf(", %.0f m lower", d.HeightM)
	case d.HeightM <= -0.5:
		where += fmt.Sprintf(", %.0f m higher", -d.HeightM)
	}
	return d.Source + " (" + where + ")"
}

// candidate is a positioned source that lists a quantity.
type candidate struct {
	id        string
	listed    quantity.Quantity
	direction direction
	elevation float64
}

func (r *Register) indexNearby() {
	r.nearby = map[quantity.Quantity][]candidate{}
	for _, s := range r.Positioned {
		d := directionOf(float64(s.Latitude), float64(s.Longitude))
		for _, q := range s.Quantities {
			if !slices.Contains(weather, q.Base()) {
				continue
			}
			r.nearby[q.Base()] = append(r.nearby[q.Base()], candidate{s.ID, q, d, float64(s.Elevation)})
		}
	}
}

// nearest returns the best few sources of q for a stand, best first. Every
// candidate is looked at, but a straight line, which is never longer than the
// great circle, tells most of them off before any trigonometry.
func (r *Register) nearest(stand *Stand, q quantity.Quantity) []string {
	here := directionOf(float64(stand.Latitude), float64(stand.Longitude))
	var ids [mostDrawn]string
	var scores [mostDrawn]float64
	n, limit := 0, chord2Of(reachKM)
	base := q.Base()
	candidates := r.nearby[base]
	for i := range candidates {
		c := &candidates[i]
		if chord2(here, c.direction) > limit || c.id == stand.ID || q != base && !matches(c.listed, q) {
			continue
		}
		km := distanceKM(here, c.direction)
		if km > reachKM {
			continue
		}
		score := km
		if up := math.Abs(float64(stand.Elevation) - c.elevation); !math.IsNaN(up) {
			score += heightAsKM * up
		}
		seen := false
		for i := range n {
			seen = seen || ids[i] == c.id // listed at two depths
		}
		if seen || n == mostDrawn && !before(score, c.id, scores[n-1], ids[n-1]) {
			continue
		}
		if n < mostDrawn {
			n++
		}
		i := n - 1
		for ; i > 0 && before(score, c.id, scores[i-1], ids[i-1]); i-- {
			scores[i], ids[i] = scores[i-1], ids[i-1]
		}
		scores[i], ids[i] = score, c.id
		if n == mostDrawn {
			limit = math.Min(limit, chord2Of(scores[n-1]))
		}
	}
	return append([]string(nil), ids[:n]...)
}

// before orders by score, and by id where scores tie, so that the order of the
// file does not matter.
func before(score float64, id string, than float64, thanID string) bool {
	return score < than || score == than && id < thanID
}
