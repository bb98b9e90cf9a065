package config

import (
	"fmt"
	"math"
	"slices"
	"time"

	"saprolite/ingest/quantity"
)

var nan = math.NaN()

// Outer bounds of what an operator may write. They are there to catch a wrong
// unit or a slipped digit, not to judge a forest: common practice, no source,
// except where one is named.
const (
	lowestGround, highestGround = -500, 9000 // m; Dead Sea shore -430, Everest 8849
	tallestMast                 = 500        // m
	largestStand                = 1e7        // ha
	deepestStore                = 10_000     // mm
	largestCanopyStore          = 50         // mm
	largestMonthlyET            = 600        // mm, 20 mm a day
	largestETCoefficient        = 3          // FAO-56 table 12 stays below 1.3
	firstYear, lastYear         = 1000, 2200
	longestInterval             = 366 * 24 * time.Hour
	westernmost, easternmost    = -12, 14 // hours; the offsets in use (tz database, from memory)
)

// unplaced is a source of which only the id and the day are known.
func unplaced(id string, offset time.Duration) Source {
	return Source{
		ID: id, UTCOffset: offset,
		Latitude: quantity.Degrees(nan), Longitude: quantity.Degrees(nan),
		Elevation: quantity.Metres(nan), Height: quantity.Metres(nan),
	}
}

// utcOffset reads the fixed offset of a day: as given, else mean local solar
// time rounded to the hour (design 5.2).
func utcOffset(p *section, longitude float64) time.Duration {
	hours := p.number("utc_offset_hours", math.Round(longitude/15), between(westernmost, easternmost, "hours", "write hours east of Greenwich: 5.5, -8"))
	return time.Duration(math.Round(hours*3600)) * time.Second
}

func elevation(p *section) quantity.Metres {
	return quantity.Metres(p.number("elevation_m", nan, between(lowestGround, highestGround, "m", "write metres above the sea")))
}

func (r *reading) stand(f, p *section, id string) Stand {
	g, placed := f.geometry("Polygon", "MultiPolygon", "Point")
	s := Stand{ID: id, Line: f.node.at.line, Geometry: g, Hectares: nan}
	var longitude, latitude float64
	if placed {
		longitude, latitude = g.centre()
		s.Hectares = g.hectares()
	}
	s.Longitude, s.Latitude = quantity.Degrees(longitude), quantity.Degrees(latitude)

	if properties := f.node.get("properties"); properties != nil {
		p.required("name", `write "name": what people call the stand`)
	} else {
		f.required("properties", `write "properties": {"name": what people call the stand}`)
	}
	s.Name = p.text("name", id, oneLine)
	s.Elevation = elevation(p)
	s.UTCOffset = utcOffset(p, longitude)
	s.Hectares = p.number("hectares", s.Hectares, above(0, "leave it out to take it from the polygon"), between(0, largestStand, "ha", "a hectare is 10 000 m2: convert it"))
	s.Established = p.whole("established", 0, between(firstYear, lastYear, "", "write the year, such as 1987"))
	s.CanopyCover = p.number("canopy_cover", nan, share)
	s.Groups = p.texts("groups", oneLine)
	s.Priority = p.whole("priority", 0, between(1, 5, "", "write 1 to 5"))
	s.StorageLimit = quantity.Millimetres(p.number("storage_limit_mm", nan, above(0, "leave it out if it was not measured"), between(0, deepestStore, "mm", "write millimetres of water")))
	s.InterceptionStore = quantity.Millimetres(p.number("interception_store_mm", nan, between(0, largestCanopyStore, "mm", "write millimetres of water the wet canopy holds")))
	s.InterceptionShare = p.number("interception_share", nan, share)
	s.ETCoefficient = p.number("et_coefficient", nan, above(0, "leave it out if it is not known"), between(0, largestETCoefficient, "", "write actual over reference evapotranspiration, such as 0.85"))
	s.TurgorLoss = quantity.Megapascals(p.number("turgor_loss_mpa", nan, potential))
	s.P50 = quantity.Megapascals(p.number("p50_mpa", nan, potential))
	s.P88 = quantity.Megapascals(p.number("p88_mpa", nan, potential))
	if s.P88 >= s.P50 {
		p.complainAt("p88_mpa", fmt.Sprintf("p88_mpa %v is not below p50_mpa %v", float64(s.P88), float64(s.P50)), "88 % of conductance is lost at a lower (more negative) potential than 50 %: swap or correct them")
	}
	s.MonthlyReferenceET = monthly(p)
	s.ExtraWater = p.text("extra_water", "none", oneOf("none", "suspected", "known"))
	s.Species = species(p)
	s.Sources = r.sources(p)
	other(p, "stand", `of a source; write "source": true if this is one`, "height_m", "feed", "interval", "latency", "unit", "quantities")
	return s
}

func (r *reading) source(f, p *section, id string) Source {
	g, placed := f.geometry("Point")
	s := unplaced(id, 0)
	s.Line = f.node.at.line
	if placed {
		s.Longitude, s.Latitude = quantity.Degrees(g.Point[0]), quantity.Degrees(g.Point[1])
	}
	s.Elevation = elevation(p)
	s.Height = quantity.Metres(p.number("height_m", nan, between(0, tallestMast, "m", "write metres above the ground")))
	s.UTCOffset = utcOffset(p, g.Point[0])
	s.Feed = p.text("feed", "", isFeed)
	s.Interval = p.duration("interval", 0, time.Second, longestInterval)
	s.Latency = p.duration("latency", 0, 0, longestInterval)
	s.Unit = p.text("unit", "", oneLine)
	s.Quantities = parseQuantities(p.texts("quantities", knownQuantity))
	for _, q := range s.Quantities {
		if s.Unit == "" {
			break
		}
		if _, err := quantity.ConverterFor(q, s.Unit); err != nil {
			p.complainAt("unit", err.Error(), "unit is for every quantity of the source that comes without one: give the source its own id per unit, or let the unit travel with the value")
		}
	}
	other(p, "source", "of a stand", "name", "species", "hectares", "established", "canopy_cover", "groups", "priority", "storage_limit_mm",
		"turgor_loss_mpa", "p50_mpa", "p88_mpa", "interception_store_mm", "interception_share", "et_coefficient",
		"monthly_reference_et_mm", "extra_water", "sources")
	return s
}

// other complains of properties that belong to the other sort of feature, then
// of unknown ones.
func other(p *section, word, whose string, names ...string) {
	for _, f := range p.node.fields {
		if slices.Contains(names, f.name) {
			p.complain(f.at, p.field(f.name), "this is a property "+whose, "remove it from the "+word)
			p.known = append(p.known, f.name)
		}
	}
	p.done()
}

func monthly(p *section) *[12]quantity.Millimetres {
	const name = "monthly_reference_et_mm"
	n := p.of(name, list, "write 12 numbers, January to December")
	if n == nil {
		return nil
	}
	var out [12]quantity.Millimetres
	items := n.list()
	if len(items) != len(out) {
		p.complain(n.at, p.field(name), fmt.Sprintf("want 12 numbers, got %d", len(items)), "write the month's total of reference evapotranspiration, January to December, in mm")
		return nil
	}
	for i, item := range items {
		switch {
		case item.kind != number:
			p.complain(item.at, p.field(name), "want a number, got "+item.noun(), "write the month's total in mm")
		case !(item.number >= 0 && item.number <= largestMonthlyET):
			p.complain(item.at, p.field(name), fmt.Sprintf("%v in %v is out of range, want 0 to %d mm a month", item.number, time.Month(i+1), largestMonthlyET), "write the month's total in mm")
		}
		out[i] = quantity.Millimetres(item.number)
	}
	return &out
}

// species reads a list of names, or an object of names and shares of basal
// area.
func species(p *section) []Share {
	n := p.take("species")
	if n == nil {
		return nil
	}
	path := p.field("species")
	var out []Share
	if n.kind != object {
		for _, name := range p.textsOf(n, path, oneLine) {
			out = append(out, Share{name, nan})
		}
		return out
	}
	shares, sum := p.section(n, path), 0.0
	for _, f := range n.fields {
		fraction := shares.number(f.name, nan, share)
		if wrong, cure := oneLine(f.name); wrong != "" {
			shares.complain(f.at, shares.field(f.name), "the name is "+wrong, cure)
		}
		if !math.IsNaN(fraction) {
			sum += fraction
		}
		out = append(out, Share{f.name, fraction})
	}
	if sum > 1.0001 { // rounding to four digits is no mistake
		p.complain(n.at, path, fmt.Sprintf("the shares sum to %.4g, want at most 1", sum), "write shares of basal area; what is missing to 1 counts as unknown")
	}
	return out
}

// sources reads quantity -> source id, or list of them.
func (r *reading) sources(p *section) map[quantity.Quantity][]string {
	sec, given := p.open("sources")
	if !given {
		return nil
	}
	out := map[quantity.Quantity][]string{}
	for i := range sec.node.fields {
		f := &sec.node.fields[i]
		if wrong, cure := knownQuantity(f.name); wrong != "" {
			sec.complain(f.at, sec.field(f.name), wrong, cure)
			continue
		}
		ids := sec.texts(f.name, isID)
		if f.value.kind == list && len(f.value.list()) == 0 {
			sec.complain(f.value.at, sec.field(f.name), "an empty list", "name a source, or remove the line to take the nearest")
		}
		if len(ids) == 0 {
			continue
		}
		q, _ := quantity.Parse(f.name) // known, see above
		out[q] = ids
		for _, item := range append([]node{f.value}, f.value.list()...) {
			if item.kind == text {
				r.named = append(r.named, naming{item.at, sec.field(f.name), q, item.text})
			}
		}
	}
	return out
}

// naming is one place where a stand names a source for a quantity.
type naming struct {
	at       place
	field    string
	quantity quantity.Quantity
	source   string
}

// crossCheck finds what only shows when all features are read: a stand that
// names a source for a quantity which that source does not declare.
func (r *reading) crossCheck() {
	lists := map[string]Source{}
	for _, src := range r.Positioned {
		if len(src.Quantities) > 0 {
			lists[src.ID] = src
		}
	}
	for _, n := range r.named {
		if src, ok := lists[n.source]; ok && !declares(src.Quantities, n.quantity) {
			r.complain(n.at, n.field,
				fmt.Sprintf("source %s (line %d) does not list %s among its quantities", src.ID, src.Line, n.quantity),
				"add it there, or name another source")
		}
	}
}

// declares tells whether a source that lists quantities measures q.
func declares(listed []quantity.Quantity, q quantity.Quantity) bool {
	return slices.ContainsFunc(listed, func(l quantity.Quantity) bool { return matches(l, q) })
}

// matches tells whether a listed quantity serves for q. A depth not said on
// either side matches any.
func matches(listed, q quantity.Quantity) bool {
	return listed == q || listed.Base() == q.Base() && (listed == listed.Base() || q == q.Base())
}
