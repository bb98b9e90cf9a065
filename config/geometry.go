package config

import (
	"fmt"
	"math"
	"strings"
)

// Position is longitude and latitude in degrees, WGS 84, in GeoJSON's order. A
// height behind them is passed over: it is above the ellipsoid, not above the
// sea (RFC 7946 section 3.1.1); a stand's height is elevation_m.
type Position [2]float64

// Geometry is where a stand is, as it was written. A Point has one position
// and no polygons.
type Geometry struct {
	Type     string         // Point, Polygon or MultiPolygon
	Point    Position       // of a Point
	Polygons [][][]Position // polygon, ring (the first is the outer one), position; rings are closed
}

// hectares returns the area on the sphere, holes taken out; NaN for a point.
// Which way a ring winds does not matter.
func (g Geometry) hectares() float64 {
	if g.Type == "Point" {
		return math.NaN()
	}
	var km2 float64
	for _, rings := range g.Polygons {
		for i, ring := range rings {
			a := math.Abs(ringArea(ring))
			if i > 0 {
				a = -a
			}
			km2 += a
		}
	}
	return km2 * hectaresPerSquareK
}

// centre returns the centroid, weighted by planar area in degrees, holes taken
// out: over the kilometres of a stand that is within metres of the one on the
// sphere. It may lie outside a crooked stand; it serves for weather and sun.
func (g Geometry) centre() (longitude, latitude float64) {
	if g.Type == "Point" {
		return g.Point[0], g.Point[1]
	}
	var area, x, y float64
	for _, rings := range g.Polygons {
		for i, ring := range rings {
			a, lon, lat := planarRing(ring)
			a = math.Abs(a)
			if i > 0 {
				a = -a
			}
			area, x, y = area+a, x+a*lon, y+a*lat
		}
	}
	return x / area, y / area
}

// geometry reads the geometry of a feature. types says which are wanted. ok is
// false when something is wrong, and has been complained of.
func (s *section) geometry(types ...string) (g Geometry, ok bool) {
	before := len(s.problems)
	n := s.take("geometry")
	if s.required("geometry", `give it a place: {"type": "Point", "coordinates": [longitude, latitude]}`) == nil {
		return g, false
	}
	sec := s.section(n, s.field("geometry"))
	if n.kind != object {
		return g, false
	}
	sec.required("type", "write one of: "+strings.Join(types, ", "))
	g.Type = sec.text("type", "", oneOf(types...))
	sec.required("coordinates", "write [longitude, latitude], or rings of them")
	coordinates := sec.of("coordinates", list, "write [longitude, latitude], or rings of them")
	sec.take("bbox")
	sec.done()
	if coordinates == nil {
		return g, false
	}
	path := sec.field("coordinates")
	switch g.Type {
	case "Point":
		g.Point, _ = s.position(coordinates, path)
	case "Polygon":
		g.Polygons = [][][]Position{s.polygon(coordinates, path)}
	case "MultiPolygon":
		polygons := coordinates.list()
		if len(polygons) == 0 {
			s.complain(coordinates.at, path, "empty", "draw the stand, or give its middle as a Point")
		}
		for i := range polygons {
			g.Polygons = append(g.Polygons, s.polygon(&polygons[i], path))
		}
	}
	if len(s.problems) == before && g.hectares() <= 0 {
		s.complain(coordinates.at, path, "the holes take out more than the outer rings enclose", "a polygon is one outer ring, then its holes: give each part of a stand its own polygon in a MultiPolygon")
	}
	return g, len(s.problems) == before
}

func (s *sheet) polygon(n *node, path string) (rings [][]Position) {
	items := n.list()
	if n.kind != list || len(items) == 0 {
		s.complain(n.at, path, "want a list of rings, got "+n.noun(), "a polygon is [[[longitude, latitude], ...]]: one outer ring, then its holes")
		return nil
	}
	if first := &items[0]; first.numbers != nil {
		s.complain(first.at, path, "want a ring (a list of positions), got a position", "a polygon is [[[longitude, latitude], ...]]: mind the three brackets")
		return nil
	}
	for i := range items {
		rings = append(rings, s.ring(&items[i], path))
	}
	return rings
}

func (s *sheet) ring(n *node, path string) []Position {
	if n.kind != list {
		s.complain(n.at, path, "want a ring (a list of positions), got "+n.noun(), "a polygon is [[[longitude, latitude], ...]]: mind the three brackets")
		return nil
	}
	items := n.list()
	ring := make([]Position, 0, len(items))
	for i := range items {
		p, ok := s.position(&items[i], path)
		if !ok {
			return nil // one wrong position of a ring is enough; the rest is likely wrong alike
		}
		ring = append(ring, p)
	}
	if len(ring) > 0 && ring[0] != ring[len(ring)-1] {
		s.complain(n.at, path, "the ring is not closed", "repeat its first position at the end (RFC 7946 section 3.1.6)")
		return nil
	}
	if len(ring) < 4 {
		s.complain(n.at, path, fmt.Sprintf("the ring has %d positions, want at least 4, the first repeated at the end", len(ring)), "a stand has at least three corners; for a spot use a Point")
		return nil
	}
	west, east := ring[0][0], ring[0][0]
	for _, p := range ring {
		west, east = min(west, p[0]), max(east, p[0])
	}
	if east-west > 180 {
		s.complain(n.at, path, fmt.Sprintf("the ring spans %.0f degrees of longitude", east-west), "if it crosses the 180th meridian, cut it there into two polygons (RFC 7946 section 3.1.9)")
		return nil
	}
	if a, _, _ := planarRing(ring); a == 0 {
		s.complain(n.at, path, "the ring encloses no area", "draw it again, or use a Point")
		return nil
	}
	return ring
}

func (s *sheet) position(n *node, path string) (p Position, ok bool) {
	if n.kind != list {
		s.complain(n.at, path, "want a position, got "+n.noun(), "write [longitude, latitude]")
		return p, false
	}
	numbers, other := n.bare()
	if other != nil {
		s.complain(other.at, path, "a position holds numbers, got "+other.noun(), "write [longitude, latitude]; mind the number of brackets")
		return p, false
	}
	if len(numbers) != 2 && len(numbers) != 3 {
		s.complain(n.at, path, fmt.Sprintf("a position has 2 numbers, or 3 with a height, got %d", len(numbers)), "write [longitude, latitude]")
		return p, false
	}
	longitude, latitude := numbers[0], numbers[1]
	if math.Abs(longitude) <= 180 && math.Abs(latitude) <= 90 {
		return Position{longitude, latitude}, true
	}
	cure := "want longitude -180 to 180 and latitude -90 to 90 (WGS 84)"
	switch {
	case math.Abs(longitude) <= 90 && math.Abs(latitude) <= 180:
		cure = fmt.Sprintf("GeoJSON has longitude first: swap them to [%v, %v]", latitude, longitude)
	case math.Abs(longitude) > 360 || math.Abs(latitude) > 360:
		cure = "these look like metres of a projection: export as WGS 84 (EPSG:4326), degrees"
	}
	s.complain(n.at, path, fmt.Sprintf("longitude %v, latitude %v is out of range", longitude, latitude), cure)
	return p, false
}
